"""From a raw table to numbers in the package's units, column by column."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import Array
from screener.intake.files import FaultList, guarded, suggest
from screener.intake.raw import RawTable
from screener.intake.sidecar import CONTRACT_INDICATORS, ColumnKey, Sidecar
from screener.intake.units import TARGETS, scale_to

__all__ = ["Column", "Columns", "extract", "find_column", "locate", "number_column"]

# what people write into a cell that holds nothing
BLANKS = {"", "nan", "na", "n/a", "null", "none", "--", "-", "...", "."}
_DATE = re.compile(r"\d{4}[-/]\d\d?[-/]\d\d?([T ].*)?")
_COMMA = re.compile(r"[+-]?\d+,\d+")
_HINTS = {
    "time": re.compile(r"jd|time|date|epoch|^t$", re.IGNORECASE),
    "rv_err": re.compile(r"^(e|s|d|err|sig|sigma|unc)_?(rv|vrad|vel|rad)|rv.*(err|unc|sig)", re.I),
    "rv": re.compile(r"^(rv|vrad|vel|radial)", re.IGNORECASE),
}


@dataclass(frozen=True, eq=False)
class Column:
    """One numeric column.

    ``raw`` are the numbers as they stand in the file and ``values`` the same in the package's
    unit, both of shape (n_rows,), NaN for blanks. ``unit_from`` says where the unit came from:
    "file", "sidecar" or "default".
    """

    name: str
    label: str
    raw: Array
    values: Array
    unit_from: str
    unit: str

    def where(self, row: int | None = None) -> str:
        """ "column 'rv' ('RV' in the table), data row 7"."""
        text = f"column '{self.name}'"
        if self.label != self.name:
            text += f" ('{self.label}' in the table)"
        return text + (f", data row {row}" if row is not None else "")

    def at(self, keep: NDArray[Any]) -> Column:
        return replace(self, raw=self.raw[keep], values=self.values[keep])


@dataclass(frozen=True, eq=False)
class Columns:
    """Everything taken out of a table, row by row as in the file."""

    rows: NDArray[np.intp]
    labels: NDArray[Any]  # instrument label per row
    time: Column | None
    rv: Column | None
    rv_err: Column | None
    indicators: tuple[tuple[Column, Column | None], ...] = ()
    bands: tuple[tuple[Column, Column, float | None], ...] = ()
    messages: tuple[str, ...] = ()


def locate(raw: RawTable, key: ColumnKey) -> int | None:
    """Index of a column by position or name (exact, or the only one but for capitals)."""
    if isinstance(key, int):
        return key if key < len(raw.names) else None
    if not raw.has_header:
        return None
    if key in raw.names:
        return raw.names.index(key)
    loose = [i for i, n in enumerate(raw.names) if n.lower() == key.lower()]
    return loose[0] if len(loose) == 1 else None


def find_column(
    raw: RawTable,
    sidecar: Sidecar,
    name: str,
    required: bool,
    faults: FaultList,
    messages: list[str],
) -> int | None:
    """Index of the column for one of our names; a fault if it is required or named but absent."""
    named = sidecar.columns.get(name)
    index = locate(raw, name if named is None else named)
    if index is None and named is not None:
        _absent(raw, name, named, faults)
    elif index is None and required:
        _lacking(raw, name, faults)
    elif index is not None and named is None and raw.names[index] != name:
        messages.append(f"Column '{raw.names[index]}' was read as '{name}'.")
    return index


def _absent(raw: RawTable, name: str, key: ColumnKey, faults: FaultList) -> None:
    if isinstance(key, int):
        problem = f"the sidecar puts '{name}' at position {key}"
        problem += f", but the table has positions 0 to {len(raw.names) - 1}"
        faults.add(problem, "Correct the position; it counts from 0.")
    elif not raw.has_header:
        faults.add(
            f"the sidecar names column '{key}' for '{name}', but the table has no header",
            f"Give 0-based positions in [columns]; there are {len(raw.names)} columns.",
        )
    else:
        faults.add(
            f"the sidecar names column '{key}' for '{name}', which the table does not have",
            f"Correct [columns].{suggest(key, list(raw.names))} The table has: {_listing(raw)}.",
        )


def _lacking(raw: RawTable, name: str, faults: FaultList) -> None:
    if not raw.has_header:
        faults.add(
            f"the table has no header, so column '{name}' is not known",
            "Give 0-based positions in the sidecar, for example [columns] time = 0, rv = 1, "
            f"rv_err = 2; there are {len(raw.names)} columns.",
        )
        return
    hint = next((n for n in raw.names if name in _HINTS and _HINTS[name].search(n)), None)
    example = hint or "THE TABLE'S NAME"
    faults.add(
        f"there is no column '{name}'",
        f'Name it in the sidecar: [columns] {name} = "{example}". The table has: {_listing(raw)}.',
    )


def _listing(raw: RawTable) -> str:
    shown = ", ".join(raw.names[:12])
    return shown + (f" and {len(raw.names) - 12} more" if len(raw.names) > 12 else "")


def number_column(raw: RawTable, index: int, name: str, faults: FaultList) -> Array | None:
    """The numbers of a column, NaN for blanks; a fault if a cell is something else."""
    label = raw.names[index]
    shown = f"column '{name}'" + (f" ('{label}' in the table)" if label != name else "")
    if label in raw.odd:
        faults.add(f"{shown} holds several values or objects per cell", "Give one number per row.")
        return None
    cells = raw.columns[index]
    if cells.dtype == np.float64:
        return _bounded(cells)
    values = np.full(cells.size, np.nan)
    for i, cell in enumerate(cells):
        if cell.lower() in BLANKS:
            continue
        try:
            values[i] = float(cell)
        except ValueError:
            bad = sum(not _readable(c) for c in cells)
            faults.add(
                f"{shown}, data row {raw.rows[i]}: '{cell[:40]}' is not a number "
                f"({bad} such cell{'s' if bad > 1 else ''})",
                _cure_for(cell, name),
            )
            return None
    return _bounded(values)


def _bounded(values: NDArray[Any]) -> Array:
    """Numbers that would overflow when squared count as infinite."""
    out = np.array(values, dtype=np.float64)
    huge = np.abs(out) > 1e100
    out[huge] = np.copysign(np.inf, out[huge])
    return out


def _readable(cell: str) -> bool:
    if cell.lower() in BLANKS:
        return True
    try:
        float(cell)
    except ValueError:
        return False
    return True


def _cure_for(cell: str, name: str) -> str:
    if _DATE.fullmatch(cell):
        return "Convert calendar dates to barycentric Julian dates (TDB, in days)."
    if _COMMA.fullmatch(cell):
        return "Write decimal points, not commas."
    if re.search(r"\d+:\d+", cell):
        return "Write one decimal number instead of hours and minutes."
    return "Correct the cell, or leave it empty where nothing was measured."


def extract(raw: RawTable, sidecar: Sidecar, faults: FaultList) -> Columns:
    """Take the named columns out of a table, in the package's units.

    Every fault (absent columns, cells that are no numbers, units that do not fit) joins the list.
    """
    messages = list(raw.remarks)

    def take(name: str, required: bool, parent: Column | None = None) -> Column | None:
        index = find_column(raw, sidecar, name, required, faults, messages)
        return (
            None if index is None else _column(raw, sidecar, name, index, faults, messages, parent)
        )

    time = take("time", True)
    rv = take("rv", True)
    rv_err = take("rv_err", True, rv)
    if time is not None and time.label in raw.coarse:
        faults.add(
            f"{time.where()} is stored in single precision, which cannot hold a Julian date "
            "better than 0.25 d",
            "Export the time column in double precision.",
        )
    indicators = _indicators(raw, sidecar, faults, messages, take)
    bands = []
    for name, band in sidecar.bands.items():
        value = _further(raw, sidecar, name, band.column, faults, messages, "m/s", "bands", rv)
        error = _further(
            raw, sidecar, f"{name}_err", band.err, faults, messages, "m/s", "bands", value
        )
        if value is not None and error is not None:
            bands.append((value, error, band.wavelength))
    return Columns(
        rows=raw.rows,
        labels=_labels(raw, sidecar, faults, messages),
        time=time,
        rv=rv,
        rv_err=rv_err,
        indicators=tuple(indicators),
        bands=tuple(bands),
        messages=tuple(messages),
    )


def _indicators(
    raw: RawTable, sidecar: Sidecar, faults: FaultList, messages: list[str], take: Any
) -> list[tuple[Column, Column | None]]:
    found = []
    for name in CONTRACT_INDICATORS:
        if name in sidecar.indicators:
            continue
        value = take(name, False)
        if value is not None:
            found.append((value, take(f"{name}_err", False, value)))
        elif f"{name}_err" in sidecar.columns:
            faults.add(
                f"the sidecar names a column for '{name}_err' but there is no '{name}'",
                f"Name the column of '{name}' too, or remove '{name}_err'.",
            )
    for name, entry in sidecar.indicators.items():
        target = TARGETS.get(name)
        value = _further(raw, sidecar, name, entry.column, faults, messages, target, "indicators")
        error = None
        if entry.err is not None:
            error = _further(
                raw,
                sidecar,
                f"{name}_err",
                entry.err,
                faults,
                messages,
                target,
                "indicators",
                value,
            )
        if value is not None:
            found.append((value, error))
    return found


def _further(
    raw: RawTable,
    sidecar: Sidecar,
    name: str,
    key: ColumnKey,
    faults: FaultList,
    messages: list[str],
    target: str | None,
    section: str,
    parent: Column | None = None,
) -> Column | None:
    index = locate(raw, key)
    if index is None:
        faults.add(
            f"[{section}] points '{name}' to column {key!r}, which the table does not have",
            f"Correct the sidecar. The table has: {_listing(raw)}.",
        )
        return None
    return _column(raw, sidecar, name, index, faults, messages, parent, target, True)


def _column(
    raw: RawTable,
    sidecar: Sidecar,
    name: str,
    index: int,
    faults: FaultList,
    messages: list[str],
    parent: Column | None,
    target: str | None = None,
    own_target: bool = False,
) -> Column | None:
    numbers = number_column(raw, index, name, faults)
    if numbers is None:
        return None
    for gone in sidecar.missing.get(name, ()):
        numbers = np.where(numbers == gone, np.nan, numbers)
    base = name.removesuffix("_err") if name not in TARGETS else name
    if not own_target:
        target = TARGETS.get(base)
    unit, origin = _unit(raw, sidecar, name, index, parent, messages)
    factor = 1.0
    if target is not None and unit:
        scale: list[float] = []
        label, file = raw.names[index], faults.file
        source = f"from the {origin}"
        guarded(faults, lambda: scale.append(scale_to(name, unit, target, file, label, source)))
        factor = scale[0] if scale else float("nan")
        if not scale:
            return None
    return Column(name, raw.names[index], numbers, numbers * factor, origin, unit)


def _unit(
    raw: RawTable,
    sidecar: Sidecar,
    name: str,
    index: int,
    parent: Column | None,
    messages: list[str],
) -> tuple[str, str]:
    """The unit of a column and where it comes from; the file's word wins over the sidecar's."""
    in_file = raw.units[index].strip()
    if in_file.lower() in {"-", "--", "---", "none"}:
        in_file = ""
    said = sidecar.units.get(name, "")
    if in_file:
        if said and said.replace(" ", "") != in_file.replace(" ", ""):
            messages.append(
                f"Column '{name}': the table gives the unit {in_file}, so the sidecar's "
                f"{said} was not used."
            )
        return in_file, "file"
    if said:
        return said, "sidecar"
    if parent is not None and parent.unit:
        messages.append(
            f"Column '{name}' has no unit of its own and was read in that of '{parent.name}' "
            f"({parent.unit})."
        )
        return parent.unit, parent.unit_from
    return "", "default"


def _labels(
    raw: RawTable, sidecar: Sidecar, faults: FaultList, messages: list[str]
) -> NDArray[Any]:
    """Instrument label of each row; "unlabelled" for blanks, one label when there is no column."""
    index = find_column(raw, sidecar, "instrument", False, faults, messages)
    if index is None:
        return np.full(raw.n_rows, "instrument", dtype=object)
    cells = raw.columns[index]
    if cells.dtype == np.float64:
        texts = ["" if np.isnan(v) else f"{v:.10g}" for v in cells]
    else:
        texts = [" ".join(c.split()) for c in cells]
    blank = [i for i, t in enumerate(texts) if not t]
    if blank:
        messages.append(
            f"{len(blank)} rows without an instrument label (first: data row "
            f"{raw.rows[blank[0]]}) were read as one instrument 'unlabelled'."
        )
    labels = np.array([t or "unlabelled" for t in texts], dtype=object)
    distinct = sorted(set(labels))
    folded: dict[str, str] = {}
    for label in distinct:
        other = folded.setdefault(label.lower(), label)
        if other != label:
            messages.append(
                f"Instruments '{other}' and '{label}' differ only in capitals; they were kept "
                "apart, each with a zero point of its own."
            )
    if len(distinct) > max(20, 0.5 * len(labels)):
        faults.add(
            f"column 'instrument' has {len(distinct)} different labels in {len(labels)} rows",
            "Point [columns] instrument to the column that names the spectrograph.",
        )
    return labels
