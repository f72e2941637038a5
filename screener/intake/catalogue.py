"""Tables of many stars, as archives hand them out: one row per exposure, a column for the star."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from screener.core import InputFaults, Observations
from screener.intake.columns import locate
from screener.intake.files import FaultList
from screener.intake.raw import RawTable
from screener.intake.sidecar import Sidecar
from screener.intake.star import Source, observe, open_table

__all__ = ["SEPARATOR", "StarRows", "is_catalogue_table", "read_catalogue_table", "read_star"]

SEPARATOR = "::"


@dataclass(frozen=True, eq=False)
class StarRows:
    """The rows of one star of a larger table; :func:`read_star` accepts it like a path."""

    name: str
    source: Source


def read_star(table: Path | StarRows, sidecar: Path | None = None) -> Observations:
    """Read one star.

    Parameters
    ----------
    table : Path or StarRows
        A table with one row per exposure, or one star out of :func:`read_catalogue_table`.
        ``big_table.csv::STAR`` names one star of a table of many.
    sidecar : Path or None
        The sidecar; by default STAR.toml beside the table if it is there. Photometry is read from
        STAR.phot.csv beside the table if it is there.

    Raises
    ------
    InputFaults
        All faults of table, sidecar and photometry in one go.
    """
    if isinstance(table, StarRows):
        return observe(table.source, FaultList(table.source.name))
    table = Path(table)
    path, star = _split(table)
    faults = FaultList(str(path))
    if star is not None:
        stars = read_catalogue_table(path, sidecar)
        if star not in stars:
            listing = ", ".join(list(stars)[:8])
            faults.add(f"there is no star '{star}' in the table", f"It holds: {listing} ...")
            faults.check()
        return read_star(stars[star])
    source = open_table(path, sidecar, faults)
    if source is None:
        faults.check()
        raise AssertionError("open_table fails with faults only")
    names = _star_names(source.raw, source.sidecar)
    if names is not None and len(set(names)) > 1:
        several = sorted(set(names))
        faults.add(
            f"the table holds {len(several)} stars ({', '.join(several[:4])} ...)",
            "Screen it with 'screener catalogue', or name one star as "
            f"{table}{SEPARATOR}{several[0]}.",
        )
        faults.check()
    return observe(source, faults)


def read_catalogue_table(table: Path, sidecar: Path | None = None) -> dict[str, StarRows]:
    """Split a table of many stars, sorted by name; each value goes to :func:`read_star`.

    The column that names the star is ``star``, or what ``[columns] star`` says in the sidecar
    beside the table; ``[stars."NAME"]`` there describes one star.

    Raises
    ------
    InputFaults
        The table or the sidecar cannot be read, or there is no star column. Faults in the data of
        a star come out when that star is read.
    """
    table = Path(table)
    faults = FaultList(str(table))
    source = open_table(table, sidecar, faults)
    names = _star_names(source.raw, source.sidecar) if source is not None else None
    if source is not None and names is None:
        faults.add(
            "there is no column that names the star",
            'Name it in the sidecar: [columns] star = "...". The table has: '
            + ", ".join(source.raw.names[:12])
            + ".",
        )
    faults.check()
    assert source is not None and names is not None
    return dict(_stars(source, names))


def is_catalogue_table(table: Path, sidecar: Path | None = None) -> bool:
    """Whether a file is a table that holds more than one star; False for what cannot be read."""
    try:
        source = open_table(Path(table), sidecar, FaultList(str(table)))
    except InputFaults:
        return False
    if source is None:
        return False
    names = _star_names(source.raw, source.sidecar)
    return names is not None and len(set(names)) > 1


def _split(table: Path) -> tuple[Path, str | None]:
    if SEPARATOR in table.name:
        try:
            there = table.exists()
        except (OSError, ValueError):
            there = True
        if not there:
            name, star = table.name.split(SEPARATOR, 1)
            return table.with_name(name), star
    return table, None


def _star_names(raw: RawTable, sidecar: Sidecar) -> Any | None:
    """The star of each row, "" where the cell is blank; None without a star column."""
    index = locate(raw, sidecar.columns.get("star", "star"))
    if index is None:
        return None
    cells = raw.columns[index]
    if cells.dtype == np.float64:
        return np.array(["" if np.isnan(v) else f"{v:.15g}" for v in cells], dtype=object)
    return np.array([re.sub(r"\s+", " ", c).strip() for c in cells], dtype=object)


def _stars(source: Source, names: Any) -> Iterator[tuple[str, StarRows]]:
    order = np.argsort(names, kind="stable")
    cuts = np.flatnonzero(names[order][1:] != names[order][:-1]) + 1
    for rows in np.split(order, cuts):
        name = str(names[rows[0]])
        if not name:
            continue
        light = Path(source.name).with_name(f"{name}.phot.csv") if "/" not in name else None
        mine = replace(
            source,
            name=f"{source.name}{SEPARATOR}{name}",
            raw=source.raw.select(np.sort(rows)),
            sidecar=source.sidecar.for_star(name),
            photometry=light if light is not None and light.exists() else None,
            default_star=name,
        )
        yield name, StarRows(name, mine)
