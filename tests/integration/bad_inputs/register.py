"""What the collections of bad inputs share: a register, and sound tables with one thing wrong."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from astropy.table import Table

from tests.tables import columns, write_csv

__all__ = ["CASES", "as_table", "case", "edited", "with_cell", "with_sidecar", "with_text"]

Maker = Callable[[Path], Path]
CASES: dict[str, tuple[Maker, str]] = {}


def case(pattern: str) -> Callable[[Maker], Maker]:
    """Register a bad input and what its message must hold: place, fault and cure."""

    def register(maker: Maker) -> Maker:
        CASES[maker.__name__] = (maker, pattern)
        return maker

    return register


def edited(folder: Path, **changes: Any) -> Path:
    """A sound table with some columns replaced; None removes a column."""
    table = columns()
    for name, value in changes.items():
        if value is None:
            del table[name]
        else:
            table[name] = value
    return write_csv(folder / "star.csv", table)


def as_table() -> Table:
    """The sound table for astropy's writers."""
    return Table({k: v.astype(str) if v.dtype == object else v for k, v in columns().items()})


def with_cell(name: str, row: int, value: Any) -> Any:
    """That column of the sound table with one cell (0-based row) replaced."""
    cells = columns()[name].astype(object)
    cells[row] = value
    return cells


def with_sidecar(folder: Path, text: str) -> Path:
    (folder / "star.toml").write_text(text, encoding="utf-8")
    return edited(folder)


def with_text(folder: Path, text: str, name: str = "star.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path
