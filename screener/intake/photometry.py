"""Photometry beside a table of velocities: ``STAR.phot.csv``."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from screener.core import Array, Photometry
from screener.intake.checks import check_errors, check_time
from screener.intake.columns import Column, Columns, number_column
from screener.intake.files import FaultList, digest, guarded, read_bytes, suggest
from screener.intake.raw import RawTable
from screener.intake.sidecar import Sidecar
from screener.intake.tables import read_table

__all__ = ["read_photometry"]

MAX_ROWS = 2_000_000


def read_photometry(
    path: Path, offset: float, faults: FaultList, messages: list[str]
) -> tuple[Photometry, str] | None:
    """Relative flux and its SHA-256; None with faults where it cannot be read.

    ``offset`` is added to its time column.
    """
    mine = FaultList(str(path))
    found: list[tuple[Photometry, str]] = []

    def work() -> None:
        content = read_bytes(path)
        raw = read_table(path, content, frozenset({"time", "flux", "flux_err"}))
        light = _photometry(raw, offset, mine, messages)
        if light is not None:
            found.append((light, digest(content)))

    guarded(mine, work)
    faults.extend(mine)
    return found[0] if found and not mine else None


def _photometry(
    raw: RawTable, offset: float, faults: FaultList, messages: list[str]
) -> Photometry | None:
    if raw.n_rows > MAX_ROWS:
        faults.add(
            f"the photometry has {raw.n_rows:,} rows, more than {MAX_ROWS:,}",
            "Bin it, to ten minutes say.",
        )
        return None
    taken: dict[str, Column] = {}
    for name in ("time", "flux", "flux_err"):
        if name not in raw.names:
            if name != "flux_err":
                faults.add(
                    f"there is no column '{name}'",
                    "Photometry needs the columns time, flux and, if known, flux_err."
                    + suggest(name, list(raw.names)),
                )
            continue
        numbers = number_column(raw, raw.names.index(name), name, faults)
        if numbers is not None:
            taken[name] = Column(name, name, numbers, numbers, "default", "")
    if faults:
        return None
    columns = Columns(
        rows=raw.rows,
        labels=np.full(raw.n_rows, "photometry", dtype=object),
        time=taken["time"],
        rv=taken["flux"],
        rv_err=taken.get("flux_err"),
    )
    own: list[str] = []
    time = check_time(columns, Sidecar(time_offset=offset), faults, own)
    if "flux_err" in taken:
        check_errors(taken["flux_err"], taken["flux"], columns, faults)
    flux = taken["flux"].values
    good = np.isfinite(flux)
    level = float(np.median(flux[good])) if np.any(good) else float("nan")
    if not 0.2 < level < 5.0:
        faults.add(
            f"column 'flux': the median is {level:g}, but relative flux lies near 1",
            "Divide by the median flux; turn magnitudes into flux first (10**(-0.4 m)).",
        )
    if faults or time is None:
        return None
    good &= np.isfinite(time)
    if not np.all(good):
        messages.append(f"Photometry: {int((~good).sum())} rows without a flux left out.")
    order = np.flatnonzero(good)[np.argsort(time[good], kind="stable")]
    errors = _errors(taken.get("flux_err"), flux, order, messages)
    return Photometry(time[order], flux[order].copy(), errors)


def _errors(column: Column | None, flux: Array, order: np.ndarray, messages: list[str]) -> Array:
    if column is not None:
        return np.array(column.values[order], dtype=np.float64)
    steps = np.diff(flux[order])
    scatter = 1.4826 * float(np.median(np.abs(steps))) / np.sqrt(2.0) if steps.size else 1e-3
    messages.append(
        f"Photometry has no errors; {scatter:.3g} was estimated from its point-to-point scatter."
    )
    return np.full(order.size, max(scatter, 1e-9))
