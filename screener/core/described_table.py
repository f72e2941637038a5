"""Rows as a table whose columns carry units and meanings, and text that does no harm in it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

__all__ = ["Columns", "described_table", "harmless"]

# name -> (kind: "int", "float" or "str"; unit; meaning)
Columns = Mapping[str, tuple[str, str | None, str]]

_STARTS_A_FORMULA = ("=", "+", "-", "@")


def harmless(text: str) -> str:
    """Text of which no spreadsheet makes a formula: what would start one gets an apostrophe."""
    return f"'{text}" if text.lstrip().startswith(_STARTS_A_FORMULA) else text


def described_table(
    columns: Columns,
    rows: Sequence[Mapping[str, Any]],
    text: Callable[[str], str] = str,
) -> Any:
    """A masked astropy table with units and descriptions.

    Parameters
    ----------
    columns : mapping
        Kind, unit and meaning of each column, in order.
    rows : sequence of mappings
        Each with a value, or None, under every column's name.
    text : callable
        What is done to text before it goes in; unknown text becomes empty.

    Returns
    -------
    astropy.table.Table
    """
    import numpy as np
    from astropy.table import MaskedColumn, Table

    kinds: dict[str, Any] = {"int": np.int64, "float": np.float64}
    table = Table(masked=True)
    for name, (kind, unit, meaning) in columns.items():
        values = [row[name] for row in rows]
        if kind == "str":
            words = ["" if v is None else text(str(v)) for v in values]
            column = MaskedColumn(np.array(words, dtype=str if words else "U1"))
        else:
            numbers = np.array([0 if v is None else v for v in values], dtype=kinds[kind])
            column = MaskedColumn(numbers, mask=[v is None for v in values])
        column.name, column.description, column.unit = name, meaning, unit
        table[name] = column
    return table
