"""Finding out how a plain-text table is laid out: delimiter, header, units row."""

from __future__ import annotations

import csv
import re
from collections import Counter
from dataclasses import dataclass

from screener.core import InputFault
from screener.intake.units import is_unit

__all__ = ["TextLayout", "find_layout", "is_number"]

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eEdD][+-]?\d+)?|[+-]?(nan|inf)", re.IGNORECASE)
_DASHES = re.compile(r"-+")
_RDB_TYPE = re.compile(r"\d*[NSns]")


def is_number(token: str) -> bool:
    """Whether a cell is a plain number."""
    return _NUMBER.fullmatch(token.strip()) is not None


@dataclass(frozen=True)
class TextLayout:
    """How a text table is built; ``lines`` are the data lines only."""

    delimiter: str  # "" is any white space
    names: tuple[str, ...] | None
    units: tuple[str, ...] | None
    lines: tuple[str, ...]
    line_numbers: tuple[int, ...]


def split(line: str, delimiter: str) -> list[str]:
    """Cells of one line, stripped."""
    if not delimiter:
        return line.split()
    return [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter))]


def find_layout(text: str, file: str, wanted: frozenset[str], force_no_header: bool) -> TextLayout:
    """Lay out a delimited table.

    Parameters
    ----------
    wanted : frozenset of str
        Lower-case column names that are looked for; they settle which comment line is the header.
    force_no_header : bool
        The sidecar says that there is no header.

    Raises
    ------
    InputFault
        No data, a web page instead of a table, or two columns of one name.
    """
    head = text[:400].lstrip().lower()
    if head.startswith(("<!doctype html", "<html")):
        raise InputFault(
            file,
            "this is a web page, not a table",
            "The archive probably answered with an error page; download the table again.",
        )
    if head.startswith(("{", "[{")):
        raise InputFault(file, "this looks like JSON, not a table", "Export a CSV or ECSV table.")
    body: list[tuple[int, str]] = []
    comments: list[str] = []
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.strip():
            continue
        if line.lstrip().startswith("#"):
            if len(body) <= 1:
                comments.append(line.lstrip()[1:])
            continue
        body.append((number, line))
    if not body:
        raise InputFault(file, "there are no data rows", "Download or export the table again.")
    delimiter = _delimiter([line for _, line in body[:40]])
    names, units, start = _header(body, comments, delimiter, wanted, force_no_header)
    if names is not None:
        _no_twins(names, file, wanted)
    data = body[start:]
    if not data:
        raise InputFault(
            file, "there is a header but there are no data rows", "Download the table again."
        )
    return TextLayout(
        delimiter,
        names,
        units,
        tuple(line for _, line in data),
        tuple(number for number, _ in data),
    )


def _delimiter(lines: list[str]) -> str:
    for candidate in ("\t", ",", ";", "|"):
        counts = [len(split(line, candidate)) - 1 for line in lines]
        if counts[0] == 0:
            continue
        usual, times = Counter(counts).most_common(1)[0]
        if usual == counts[0] and times >= 0.6 * len(lines):
            return candidate
    return ""


def _header(
    body: list[tuple[int, str]],
    comments: list[str],
    delimiter: str,
    wanted: frozenset[str],
    force_no_header: bool,
) -> tuple[tuple[str, ...] | None, tuple[str, ...] | None, int]:
    first = split(body[0][1], delimiter)
    numeric = [is_number(token) for token in first]
    looks_like_data = sum(numeric) >= 2 or (len(first) <= 2 and any(numeric))
    if force_no_header:
        return None, None, 0
    if looks_like_data:
        return *_comment_header(comments, len(first), delimiter, wanted), 0
    names = tuple(first)
    units: tuple[str, ...] | None = None
    start = 1
    while start < len(body) and start <= 3:
        cells = split(body[start][1], delimiter)
        filled = [c for c in cells if c]
        if all(_DASHES.fullmatch(c) or _RDB_TYPE.fullmatch(c) for c in filled) and (
            len(filled) > 1 or len(names) == 1
        ):
            start += 1
        elif units is None and _is_units_row(cells, len(names)):
            units = tuple(cells)
            start += 1
        else:
            break
    return names, units, start


def _is_units_row(cells: list[str], n_columns: int) -> bool:
    if len(cells) != n_columns:
        return False
    filled = [c for c in cells if c]
    # "2458000,5" and "12:30" are no plain numbers, yet astropy would take some for units
    if not filled or any(c.lstrip("+-.")[:1].isdigit() for c in filled):
        return False
    return sum(is_unit(c) for c in filled) > 0.5 * len(filled)


def _comment_header(
    comments: list[str], n_columns: int, delimiter: str, wanted: frozenset[str]
) -> tuple[tuple[str, ...] | None, tuple[str, ...] | None]:
    """The comment line that names the columns: as many words as columns, most of them wanted."""
    best: tuple[int, int] | None = None
    rows = [split(line, delimiter) for line in comments]
    for index, cells in enumerate(rows):
        if len(cells) != n_columns or any(is_number(c) for c in cells):
            continue
        known = sum(c.lower() in wanted for c in cells)
        if best is None or known > best[0]:
            best = (known, index)
    if best is None:
        return None, None
    index = best[1]
    units = None
    if index + 1 < len(rows) and _is_units_row(rows[index + 1], n_columns):
        units = tuple(rows[index + 1])
    return tuple(rows[index]), units


def _no_twins(names: tuple[str, ...], file: str, wanted: frozenset[str]) -> None:
    twins = [name for name, n in Counter(names).items() if n > 1 and name]
    if twins:
        positions = [i for i, name in enumerate(names) if name == twins[0]]
        raise InputFault(
            file,
            f"the column name '{twins[0]}' occurs {len(positions)} times "
            f"(positions {', '.join(map(str, positions))}, counted from 0)",
            "Rename one of them so that every column name is unique.",
        )
