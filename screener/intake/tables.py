"""One door for every table format: bytes in, :class:`RawTable` out, read by astropy."""

from __future__ import annotations

import io
import re
import warnings
from pathlib import Path
from typing import Any

from screener.core import InputFault
from screener.intake.files import decode
from screener.intake.layout import TextLayout, find_layout, split
from screener.intake.raw import RawTable, from_astropy

__all__ = ["FORMATS", "read_table"]

# what [table] format in a sidecar may say
FORMATS = ("text", "headerless", "ecsv", "fits", "votable", "ipac", "mrt", "cds")


def read_table(
    path: Path, content: bytes, wanted: frozenset[str], table_format: str | None = None
) -> RawTable:
    """Read a table in whatever format it is.

    Parameters
    ----------
    wanted : frozenset of str
        Lower-case names of the columns looked for; used to pick one of several tables in a file
        and the header among comment lines.
    table_format : str or None
        One of :data:`FORMATS`; None lets the content decide.

    Raises
    ------
    InputFault
        The content is no table, or one that its format's reader refuses.
    """
    file = str(path)
    if table_format == "fits" or content.startswith(b"SIMPLE  ="):
        return _fits(file, content, wanted)
    text = decode(path, content)
    kind = table_format or _kind(text)
    if kind == "votable":
        return _votable(file, content, wanted)
    if kind == "ecsv":
        return _ascii(file, text, "ECSV", ("ascii.ecsv",))
    if kind == "ipac":
        return _ascii(file, text, "IPAC", ("ascii.ipac",))
    if kind in ("mrt", "cds"):
        order = ("ascii.mrt", "ascii.cds") if kind == "mrt" else ("ascii.cds", "ascii.mrt")
        return _ascii(file, text, "MRT/CDS", order)
    layout = find_layout(text, file, wanted, force_no_header=kind == "headerless")
    return _text(file, layout)


def _kind(text: str) -> str:
    head = text[:4000].lstrip()
    if head.startswith("# %ECSV"):
        return "ecsv"
    if head.startswith("<?xml") or "<VOTABLE" in head:
        return "votable"
    if head.startswith(("\\", "|")) and re.search(r"(?m)^\|.*\|\s*$", text[:200_000]):
        return "ipac"
    if "Byte-by-byte Description of file" in text[:200_000]:
        return "mrt"
    return "text"


def _quietly(reader: Any, source: Any, **options: Any) -> Any:
    with warnings.catch_warnings():
        # unit spellings and the like; what matters is checked column by column afterwards
        warnings.simplefilter("ignore")
        return reader(source, **options)


def _first_line(error: BaseException) -> str:
    text = " ".join(str(error).split())
    return text[:240] or type(error).__name__


def _refused(file: str, kind: str, error: BaseException) -> InputFault:
    return InputFault(
        file,
        f"the {kind} table cannot be read ({_first_line(error)})",
        "Download it again or export it as CSV; if it is in another format, say so in the sidecar "
        "([table] format = one of " + ", ".join(FORMATS) + ").",
    )


def _ascii(file: str, text: str, kind: str, formats: tuple[str, ...]) -> RawTable:
    from astropy.table import Table

    first: Exception | None = None
    for name in formats:
        try:
            table = _quietly(Table.read, text, format=name)
        except Exception as error:  # every reader has exceptions of its own
            first = first or error
            continue
        if len(table) == 0:
            raise InputFault(file, "the table has no rows", "Download the table again.")
        return from_astropy(table, file, kind)
    assert first is not None
    raise _refused(file, kind, first) from None


def _best(tables: list[Any], wanted: frozenset[str]) -> Any:
    return max(tables, key=lambda t: sum(n.lower() in wanted for n in t.colnames))


def _fits(file: str, content: bytes, wanted: frozenset[str]) -> RawTable:
    from astropy.io import fits
    from astropy.table import Table

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with fits.open(io.BytesIO(content), memmap=False) as hdus:
                kinds = (fits.BinTableHDU, fits.TableHDU)
                tables = [Table.read(h, format="fits") for h in hdus if isinstance(h, kinds)]
    except Exception as error:
        raise _refused(file, "FITS", error) from None
    tables = [t for t in tables if len(t)]
    if not tables:
        raise InputFault(
            file, "the FITS file holds no table with rows", "Give the file that holds the table."
        )
    return from_astropy(_best(tables, wanted), file, "FITS")


def _votable(file: str, content: bytes, wanted: frozenset[str]) -> RawTable:
    from astropy.io.votable import parse

    try:
        document = _quietly(parse, io.BytesIO(content), verify="ignore")
        tables = [t.to_table(use_names_over_ids=True) for t in document.iter_tables()]
    except Exception as error:
        raise _refused(file, "VOTable", error) from None
    tables = [t for t in tables if len(t)]
    if not tables:
        raise InputFault(
            file,
            "the VOTable holds no rows",
            "The archive's answer may hold an error message; repeat the query.",
        )
    return from_astropy(_best(tables, wanted), file, "VOTable")


def _text(file: str, layout: TextLayout) -> RawTable:
    from astropy.table import Table

    width = len(split(layout.lines[0], layout.delimiter))
    if layout.names is not None and layout.delimiter and width == len(layout.names) + 1:
        width = len(layout.names)  # let the check below name the row
    expected = len(layout.names) if layout.names is not None else width
    for row, (line, number) in enumerate(
        zip(layout.lines, layout.line_numbers, strict=True), start=1
    ):
        cells = len(split(line, layout.delimiter))
        if cells != expected:
            raise InputFault(
                file,
                f"data row {row} (line {number}) has {cells} cells where {expected} are expected",
                "Complete or remove the row (a cut-off download ends like this); "
                "quote text that contains the delimiter or blanks.",
            )
    names = _names(layout, expected)
    options: dict[str, Any] = {
        "format": "ascii.no_header",
        "names": names,
        "delimiter": layout.delimiter or r"\s",
        "guess": False,
        "fill_values": [("", "0")],
        "comment": None,
    }
    try:
        table = _quietly(Table.read, list(layout.lines), **options)
    except Exception as error:
        raise _refused(file, "text", error) from None
    units = dict(zip(names, layout.units, strict=True)) if layout.units else None
    kind = {"\t": "TSV", ",": "CSV", "": "white space"}.get(layout.delimiter, "text")
    return from_astropy(table, file, kind, units, has_header=layout.names is not None)


def _names(layout: TextLayout, expected: int) -> list[str]:
    given = list(layout.names or [""] * expected)
    return [name or f"column {i}" for i, name in enumerate(given)]
