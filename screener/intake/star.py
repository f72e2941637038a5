"""One star: table, sidecar and photometry in, :class:`~screener.core.Observations` out."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import (
    Band,
    DataNotes,
    InputRecord,
    Observations,
    Photometry,
    Star,
    TimeSeries,
)
from screener.intake.checks import (
    check_errors,
    check_time,
    check_velocities,
    count_nights,
    duplicates,
)
from screener.intake.columns import Columns, extract
from screener.intake.files import FaultList, digest, guarded, read_bytes
from screener.intake.indicators import CleanIndicator, clean_indicator, with_errors
from screener.intake.photometry import read_photometry
from screener.intake.raw import RawTable
from screener.intake.reduce import MIN_BINS, reduce_exposures
from screener.intake.sidecar import Sidecar
from screener.intake.sidecar_reader import read_sidecar
from screener.intake.tables import read_table

__all__ = ["MAX_ROWS", "Source", "observe", "open_table", "star_sidecar"]

MAX_ROWS = 200_000


@dataclass(frozen=True, eq=False)
class Source:
    """A table that was opened: its rows, its hash, and what its sidecar says."""

    name: str  # as the user named it, for messages and the record
    raw: RawTable
    sha256: str
    sidecar: Sidecar
    photometry: Path | None
    default_star: str


def star_sidecar(table: Path, sidecar: Path | None) -> Path | None:
    """The sidecar to use: the one given, or STAR.toml beside the table if it is there."""
    if sidecar is not None:
        return sidecar
    beside = table.with_suffix(".toml")
    return beside if beside != table and beside.exists() else None


def open_table(table: Path, sidecar: Path | None, faults: FaultList) -> Source | None:
    """Open a table with its sidecar; None with faults where that fails."""
    path = star_sidecar(table, sidecar)
    extra = Sidecar() if path is None else read_sidecar(path, faults)
    opened: list[Source] = []

    def work() -> None:
        content = read_bytes(table)
        raw = read_table(table, content, extra.wanted(), extra.table_format)
        light = table.with_name(table.stem + ".phot.csv")
        opened.append(
            Source(
                str(table),
                raw,
                digest(content),
                extra,
                light if light != table and light.exists() else None,
                table.stem,
            )
        )

    guarded(faults, work)
    return opened[0] if opened else None


def observe(source: Source, faults: FaultList) -> Observations:
    """Check, clean, sort and bin one star.

    Raises
    ------
    InputFaults
        Everything that is wrong with table, sidecar and photometry, in one go.
    """
    raw, sidecar = source.raw, source.sidecar
    messages: list[str] = []
    if raw.n_rows > MAX_ROWS:
        faults.add(
            f"{raw.n_rows:,} rows for one star, more than {MAX_ROWS:,}",
            "Average the exposures first, or keep those of interest; if this is a table of many "
            "stars, it needs a column 'star'.",
        )
        faults.check()
    columns = extract(raw, sidecar, faults)
    messages += columns.messages
    time = check_time(columns, sidecar, faults, messages)
    check_velocities(columns, faults, messages)
    check_errors(columns.rv_err, columns.rv, columns, faults)
    for value, error, _ in columns.bands:
        check_errors(error, value, columns, faults)
    cleaned = [
        clean_indicator(value, error, columns.rows, faults, messages)
        for value, error in columns.indicators
    ]
    light = None
    if source.photometry is not None:
        light = read_photometry(source.photometry, sidecar.photometry_offset, faults, messages)
    faults.check()
    assert time is not None and columns.rv is not None and columns.rv_err is not None
    keep = np.isfinite(time) & np.isfinite(columns.rv.values)
    index = np.flatnonzero(keep)
    unique = duplicates(
        time[index],
        columns.labels[index],
        columns.rv.values[index],
        columns.rv_err.values[index],
        columns.rows[index],
        faults,
        messages,
    )
    index = index[unique]
    _enough_nights(time, index, columns, sidecar, faults)
    faults.check()
    exposures = _exposures(
        time, columns, [c for c in cleaned if c], index, light[0] if light else None, messages
    )
    series, outliers, width = reduce_exposures(exposures, messages)
    if np.bincount(series.instrument).max(initial=0) < MIN_BINS:
        faults.add(
            f"column 'instrument', data row {columns.rows[index[0]]}: none of the "
            f"{len(exposures.instruments)} instruments has {MIN_BINS} usable bins",
            "Each label has a zero point of its own; give one label to rows of one instrument.",
        )
        faults.check()
    nights = count_nights(series.time)
    if nights < sidecar.min_nights:
        faults.add(
            f"column 'time', data row {columns.rows[index[0]]}: only {nights} usable nights are "
            f"left after binning and outliers, fewer than {sidecar.min_nights}",
            _NIGHTS_CURE,
        )
        faults.check()
    notes = DataNotes(exposures.n_obs, series.n_obs, width, outliers, tuple(messages))
    star = _star(source, exposures, messages)
    return Observations(
        star=star,
        series=series,
        exposures=exposures,
        known_planets=tuple(p for _, p in sidecar.known_planets),
        notes=replace(notes, messages=tuple(messages)),
        record=InputRecord(
            file=_absolute(source.name),
            sha256=source.sha256,
            sidecar=_absolute(sidecar.path) if sidecar.path else None,
            sidecar_sha256=sidecar.sha256,
            photometry=_absolute(source.photometry) if light and source.photometry else None,
            photometry_sha256=light[1] if light else None,
        ),
    )


def _absolute(path: Path | str) -> str:
    # the record outlives the folder that the command was given in
    return str(Path(path).absolute())


_NIGHTS_CURE = (
    "Add observations; so few say nothing about a period. If you want to see them screened all "
    "the same, lower [limits] min_nights in the sidecar (5 at the least)."
)


def _enough_nights(
    time: NDArray[Any],
    index: NDArray[np.intp],
    columns: Columns,
    sidecar: Sidecar,
    faults: FaultList,
) -> None:
    nights = count_nights(time[index])
    if nights < sidecar.min_nights:
        row = columns.rows[index[0]] if index.size else columns.rows[0]
        faults.add(
            f"column 'time', data row {row}: {index.size} usable rows in {nights} nights, fewer "
            f"than {sidecar.min_nights}",
            _NIGHTS_CURE,
        )


def _exposures(
    time: NDArray[Any],
    columns: Columns,
    cleaned: list[CleanIndicator],
    index: NDArray[np.intp],
    light: Photometry | None,
    messages: list[str],
) -> TimeSeries:
    """Every usable exposure, sorted by time; instruments in the order of their first exposure."""
    assert columns.rv is not None and columns.rv_err is not None
    rv, err, labels = columns.rv.values, columns.rv_err.values, columns.labels
    # velocities break ties, so that neither the order of rows nor a label's spelling matters
    index = index[np.lexsort((err[index], rv[index], time[index]))]
    names: list[str] = list(dict.fromkeys(str(label) for label in labels[index]))
    number = {name: k for k, name in enumerate(names)}
    instrument = np.array([number[str(label)] for label in labels[index]], dtype=np.intp)
    index = index[np.lexsort((instrument, time[index]))]
    instrument = np.array([number[str(label)] for label in labels[index]], dtype=np.intp)
    t = np.ascontiguousarray(time[index], dtype=np.float64)
    indicators = []
    for item in cleaned:
        mine = CleanIndicator(item.name, item.value[index], item.error[index])
        indicator = with_errors(mine, t, instrument, messages)
        if indicator is not None:
            indicators.append(indicator)
    bands = tuple(
        Band(v.name, v.values[index], e.values[index], wavelength)
        for v, e, wavelength in columns.bands
    )
    return TimeSeries(
        time=t,
        rv=rv[index],
        rv_err=err[index],
        instrument=instrument,
        instruments=tuple(names),
        indicators=tuple(indicators),
        bands=bands,
        photometry=light,
    )


def _star(source: Source, exposures: TimeSeries, messages: list[str]) -> Star:
    known = dict(source.sidecar.star)
    known.setdefault("name", source.default_star)
    if "log_rhk" not in known and any(i.name == "log_rhk" for i in exposures.indicators):
        values = exposures.indicator("log_rhk").value
        known["log_rhk"] = float(np.nanmedian(values))
        messages.append(
            f"The star's log R'HK is the median of its column, {known['log_rhk']:.2f}; "
            "the sidecar gives none."
        )
    return Star(**known)
