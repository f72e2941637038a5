"""A table as it came: columns by name, text or numbers, with the units the file gives."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import IntArray

__all__ = ["RawTable", "from_astropy"]


@dataclass(frozen=True, eq=False)
class RawTable:
    """Columns of shape (n_rows,): float64 with NaN for blanks, or objects (text, "" for blanks).

    ``units`` holds what the file says, "" where it says nothing. ``rows`` are 1-based data rows of
    the file. ``coarse`` names columns in single precision, ``odd`` those with several values per
    cell.
    """

    file: str
    layout: str
    names: tuple[str, ...]
    columns: tuple[NDArray[Any], ...]
    units: tuple[str, ...]
    rows: IntArray
    has_header: bool = True
    coarse: frozenset[str] = frozenset()
    odd: frozenset[str] = frozenset()
    remarks: tuple[str, ...] = field(default=())

    @property
    def n_rows(self) -> int:
        return int(self.rows.size)

    def select(self, keep: NDArray[Any]) -> RawTable:
        """The same table with only some rows; row numbers stay those of the file."""
        return replace(self, columns=tuple(c[keep] for c in self.columns), rows=self.rows[keep])


def from_astropy(
    table: Any, file: str, layout: str, units: dict[str, str] | None = None, has_header: bool = True
) -> RawTable:
    """Turn an astropy table into a :class:`RawTable`; rows that are wholly blank go."""
    columns: list[NDArray[Any]] = []
    unit_texts: list[str] = []
    coarse, odd, remarks = set(), set(), []
    for name in table.colnames:
        column = table[name]
        unit = (units or {}).get(name, "")
        if hasattr(column, "tdb"):  # an astropy Time column: a date already
            remarks.append(f"column '{name}' holds dates; read as Julian dates in TDB")
            column, unit = np.asarray(column.tdb.jd, dtype=float), "d"
        elif not unit and getattr(column, "unit", None) is not None:
            unit = str(column.unit)
        values, is_odd = _plain(column, len(table))
        if is_odd:
            odd.add(name)
        dtype = getattr(column, "dtype", None)  # of either byte order
        if dtype is not None and dtype.kind == "f" and dtype.itemsize < 8:
            coarse.add(name)
        columns.append(values)
        unit_texts.append(unit)
    blank = np.ones(len(table), dtype=bool)
    for values in columns:
        blank &= np.isnan(values) if values.dtype == float else values == ""
    keep = ~blank
    return RawTable(
        file=file,
        layout=layout,
        names=tuple(str(n) for n in table.colnames),
        columns=tuple(c[keep] for c in columns),
        units=tuple(unit_texts),
        rows=np.arange(1, int(keep.sum()) + 1, dtype=np.intp),
        has_header=has_header,
        coarse=frozenset(coarse),
        odd=frozenset(odd),
        remarks=tuple(remarks),
    )


def _plain(column: Any, n_rows: int) -> tuple[NDArray[Any], bool]:
    values = getattr(column, "value", column)  # quantities
    data = np.ma.getdata(np.ma.asanyarray(values))
    masked = np.ma.getmaskarray(np.ma.asanyarray(values))
    if data.shape != (n_rows,):
        return np.full(n_rows, "", dtype=object), True
    if data.dtype.kind in "iufb":
        numbers = data.astype(np.float64)
        numbers[masked] = np.nan
        return numbers, False
    if data.dtype.kind in "USO":
        text = np.array([_text(v) for v in data], dtype=object)
        text[masked] = ""
        return text, False
    return np.full(n_rows, "", dtype=object), True


def _text(value: Any) -> str:
    if value is None or value is np.ma.masked:
        return ""
    if isinstance(value, bytes):
        return value.decode("utf-8", errors="replace").strip()
    return str(value).strip()
