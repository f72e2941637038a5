"""Which stars a run is about: from a folder, a list of tables, or one table of many stars."""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from screener.core import InputFault

__all__ = ["RESERVED", "TABLE_ENDINGS", "StarInput", "find_stars", "safe_name"]

TABLE_ENDINGS = frozenset(
    f".{ending}"
    for ending in (
        *("csv", "ecsv", "fits", "fit", "vot", "votable", "xml", "rdb", "tsv", "tbl"),
        *("ipac", "mrt", "cds", "txt", "dat", "vels"),
    )
)
# papers that lie about in folders of tables
_PAPERS = ("readme", "license", "licence", "changes", "changelog", "notes", "citation")
_PHOTOMETRY = ".phot.csv"

# what the run and the decisions about it write into its folder
RESERVED = frozenset(
    {
        "catalogue.sqlite",
        "catalogue.sqlite-wal",
        "catalogue.sqlite-shm",
        "catalogue.sqlite-journal",
        "index.html",
        "run.log",
        "workers.log",
        # the record of decisions and what is exported from it
        "ledger.jsonl",
        "ledger.head.json",
        "ledger.torn.jsonl",
        "decisions.ecsv",
        "decisions.csv",
        "decisions.html",
        "decisions.md",
    }
)
_MAX_LIST_BYTES = 50_000_000
_MAX_NAME_BYTES = 180


@dataclass(frozen=True, eq=False)
class StarInput:
    """One star to be screened.

    Attributes
    ----------
    name : str
        Name within the run, and of its folder: the table's file name without its ending, made
        safe where a folder could not bear it.
    table : Path
        The table, absolute.
    sidecar, photometry : Path or None
        What lies beside it.
    rows : object or None
        The star's rows where ``table`` holds many stars.
    """

    name: str
    table: Path
    sidecar: Path | None = None
    photometry: Path | None = None
    rows: Any | None = None


def safe_name(name: str) -> str:
    """``name`` if it can name a folder inside the run's folder, else something close and unique.

    Quotes, markup, unicode and leading signs stay. Separators, control characters and bytes that
    are no UTF-8 become underscores; hidden, reserved and overlong names are changed as well; a
    changed name ends in eight digits of the original's SHA-256.
    """
    safe = "".join("_" if _bad(c) else c for c in name).strip()
    if not safe or safe.startswith(".") or safe.lower() in RESERVED:
        safe = "_" + safe.lstrip(".")
    while len(safe.encode()) > _MAX_NAME_BYTES:
        safe = safe[:-1]
    if safe == name:
        return safe
    digest = hashlib.sha256(name.encode("utf-8", "surrogateescape")).hexdigest()
    return f"{safe}-{digest[:8]}"


def _bad(character: str) -> bool:
    code = ord(character)
    return character == "/" or code < 32 or 0x7F <= code < 0xA0 or 0xD800 <= code <= 0xDFFF


def find_stars(source: Path) -> list[StarInput]:
    """The stars of a folder, of a list with one table per line, or of a table with a star column.

    A folder's tables are the files with an ending in ``TABLE_ENDINGS``, not those in folders
    below; ``*.phot.csv`` is photometry; hidden files and files named like README are passed over.
    In a list, relative paths start from the list's folder, lines that start with # are comments.

    Raises
    ------
    InputFault, InputFaults
        If the source does not exist, holds no star, or cannot be read.
    """
    name = str(source)
    try:
        status = source.stat()
    except OSError as error:
        cure = "Give a folder of tables, a list of tables, or one table with a star column"
        raise InputFault(name, f"cannot be opened ({error.strerror})", cure) from None
    if stat.S_ISDIR(status.st_mode):
        stars = _from_tables(_folder_tables(source))
        if not stars:
            cure = "Tables end in " + ", ".join(sorted(TABLE_ENDINGS))
            raise InputFault(name, "the folder holds no table", cure)
        return stars
    if not stat.S_ISREG(status.st_mode):
        raise InputFault(name, "is neither a folder nor a regular file", "Give a folder or a list")
    if status.st_size == 0:
        raise InputFault(name, "the file is empty", "Give a folder of tables or a list of tables")
    listed = _listed_tables(source) if status.st_size <= _MAX_LIST_BYTES else None
    if listed:
        return _from_tables(listed)
    return _from_big_table(source, listed is not None)


def _folder_tables(folder: Path) -> list[Path]:
    try:
        names = sorted(path.name for path in folder.iterdir())
    except OSError as error:
        raise InputFault(
            str(folder), f"cannot be listed ({error.strerror})", "Check its permissions"
        ) from None
    tables = []
    for name in names:
        path = folder / name
        lower = name.lower()
        if name.startswith(".") or lower.endswith(_PHOTOMETRY):
            continue
        if path.suffix.lower() not in TABLE_ENDINGS or lower.startswith(_PAPERS):
            continue
        try:
            is_folder = path.is_dir()
        except OSError:
            is_folder = False  # a loop of links: the star will say so
        if not is_folder:
            tables.append(path)
    return tables


def _listed_tables(source: Path) -> list[Path] | None:
    """The tables that a list names, or None if the file is no list."""
    try:
        lines = source.read_text(encoding="utf-8-sig", errors="surrogateescape").splitlines()
    except OSError as error:
        raise InputFault(
            str(source), f"cannot be read ({error.strerror})", "Check its permissions"
        ) from None
    entries = [line.strip() for line in lines]
    entries = [entry for entry in entries if entry and not entry.startswith("#")]
    if any("\0" in entry or len(entry) > 4096 for entry in entries[:1000]):
        return None
    folder = source.absolute().parent
    paths = [folder / entry for entry in entries]
    # a list may name a table that is gone, but a file in which no line names one is no list
    return paths if any(_exists(path) for path in paths) else None


def _exists(path: Path) -> bool:
    try:
        return os.path.lexists(path)
    except (OSError, ValueError):
        return False


def _from_tables(tables: Iterable[Path]) -> list[StarInput]:
    stars: dict[str, StarInput] = {}
    seen: set[Path] = set()
    for path in tables:
        table = Path(os.path.normpath(path.absolute()))  # keeps links, unlike resolve()
        if table in seen:
            continue
        seen.add(table)
        name = safe_name(table.stem)
        if name in stars:
            # a second table of that name: it keeps its ending, or else gets part of a hash
            name = safe_name(table.name)
        if name in stars:
            name = f"{name}-{hashlib.sha256(os.fsencode(table)).hexdigest()[:8]}"
        sidecar, light = table.with_suffix(".toml"), table.with_name(table.stem + _PHOTOMETRY)
        stars[name] = StarInput(
            name,
            table,
            sidecar=sidecar if _exists(sidecar) else None,
            photometry=light if _exists(light) else None,
        )
    return list(stars.values())


def _from_big_table(source: Path, may_be_list: bool) -> list[StarInput]:
    from screener.intake import is_catalogue_table, read_catalogue_table

    table = source.absolute()
    if may_be_list and not is_catalogue_table(table):
        raise InputFault(
            str(source),
            "is neither a list (no line names a file) nor a table with a column for the star",
            "Give one path per line, relative to the list's folder; one star's table goes to "
            "'screener candidate'",
        )
    sidecar = table.with_suffix(".toml")
    stars: dict[str, StarInput] = {}
    for name, rows in read_catalogue_table(table).items():
        safe = safe_name(name)
        stars[safe] = StarInput(
            safe,
            table,
            sidecar=sidecar if _exists(sidecar) else None,
            photometry=rows.source.photometry,
            rows=rows,
        )
    return list(stars.values())
