"""Checks of times, velocities and errors: nothing about units or dates is guessed silently."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import Array
from screener.intake.columns import Column, Columns
from screener.intake.files import FaultList
from screener.intake.sidecar import Sidecar

__all__ = [
    "check_errors",
    "check_time",
    "check_velocities",
    "count_nights",
    "duplicates",
    "is_nines",
    "robust_scatter",
]

# years 1900 to 2100: no radial velocity with a useful error is older
EARLIEST, LATEST = 2_415_020.0, 2_488_070.0
# a few rows given twice are set aside and said; more than this share is a mistake in the table
DUPLICATE_SHARE = 0.05
# m/s; smaller medians belong to no spectrograph of today and are km/s taken for m/s
# (rule of thumb: the best published single-exposure errors are near 0.1 m/s)
TINY_ERROR, TINY_SCATTER = 0.05, 0.3


def robust_scatter(values: Array) -> float:
    """1.4826 times the median absolute deviation; NaN for no values."""
    finite = values[np.isfinite(values)]
    if finite.size == 0:
        return float("nan")
    return float(1.4826 * np.median(np.abs(finite - np.median(finite))))


def is_nines(value: float) -> bool:
    """Whether a number is written with nines only, as fill values are (-999, 99.99, -9999999)."""
    digits = f"{abs(value):.10g}".replace(".", "")
    return len(digits) >= 2 and set(digits) == {"9"}


def _rows(columns: Columns, mask: NDArray[np.bool_]) -> tuple[int, int]:
    """First bad data row and the number of bad rows."""
    return int(columns.rows[np.flatnonzero(mask)[0]]), int(mask.sum())


def _several(count: int) -> str:
    return f"{count} row" + ("s" if count != 1 else "")


def check_time(
    columns: Columns, sidecar: Sidecar, faults: FaultList, messages: list[str]
) -> Array | None:
    """Times in BJD, or None with a fault why they cannot be."""
    column = columns.time
    if column is None:
        return None
    measured = np.isfinite(columns.rv.values) if columns.rv is not None else None
    blank = np.isnan(column.raw)
    if measured is not None and np.any(blank & measured):
        row, count = _rows(columns, blank & measured)
        faults.add(
            f"{column.where(row)}: no time but a velocity ({_several(count)})",
            "Fill in the mid-exposure time or remove the row.",
        )
        return None
    if np.any(np.isinf(column.raw)):
        row, _ = _rows(columns, np.isinf(column.raw))
        faults.add(f"{column.where(row)}: the time is infinite", "Correct or remove the row.")
        return None
    times = column.values + sidecar.time_offset
    usable = times[~blank]
    if usable.size == 0:
        faults.add(f"{column.where()} holds no times", "Point [columns] time to the time column.")
        return None
    outside = ~blank & ((times < EARLIEST) | (times > LATEST))
    if np.any(outside):
        row, count = _rows(columns, outside)
        value = column.raw[np.flatnonzero(outside)[0]]
        faults.add(
            f"{column.where(row)}: {value:.10g} cannot be a Julian date as it stands"
            + (
                f" (nor after adding offset_d = {sidecar.time_offset:.10g})"
                if sidecar.time_offset
                else ""
            )
            + f" ({_several(count)})",
            "It is one without: remove [time] offset_d from the sidecar."
            if sidecar.time_offset and EARLIEST <= value <= LATEST
            else _time_cure(column, float(value), count, int(usable.size)),
        )
        return None
    if np.ptp(usable) == 0.0:
        faults.add(
            f"{column.where(int(columns.rows[0]))}: all {usable.size} times are the same",
            "Point [columns] time to the mid-exposure times.",
        )
        return None
    if np.all(usable == np.round(usable)):
        messages.append(
            "All times are whole days: exposures of one night cannot be told apart, and periods "
            "near or below two days are not to be trusted."
        )
    return np.asarray(times)


def _time_cure(column: Column, value: float, count: int, total: int) -> str:
    if count < 0.5 * total:
        return "The other rows are Julian dates: correct or remove this one."
    if 14_000.0 <= value <= 90_000.0:
        return (
            "If it is a modified Julian date (MJD) write [time] offset_d = 2400000.5 in the "
            "sidecar; if it is a Julian date less 2400000 (RJD), offset_d = 2400000."
        )
    if 1900.0 <= value <= 2100.0 and column.unit_from == "default":
        return (
            "If these are decimal years, convert them to BJD; if it is BJD less a constant, write "
            "that constant as [time] offset_d (2450000 or 2457000, say) in the sidecar."
        )
    if -10_000.0 <= value < 14_000.0 or 90_000.0 < value < EARLIEST:
        return (
            "If it is BJD less a constant, write that constant as [time] offset_d in the sidecar, "
            "for example 2450000, 2454833 or 2457000."
        )
    if 1e8 <= value <= 5e9 and column.unit_from == "default":
        return (
            'If these are seconds since 1970, write [units] time = "s" and [time] '
            "offset_d = 2440587.5 in the sidecar."
        )
    if 2.0e11 <= value <= 2.2e11 and column.unit_from == "default":
        return 'If it is a Julian date in seconds, write [units] time = "s" in the sidecar.'
    return "Give mid-exposure times in BJD (TDB), in days; [time] offset_d is added to the column."


def check_errors(
    column: Column | None, reference: Column | None, columns: Columns, faults: FaultList
) -> None:
    """Every measured velocity needs a positive, finite error."""
    if column is None or reference is None:
        return
    measured = np.isfinite(reference.values)
    positive = column.raw[measured & (column.raw > 0.0)]
    typical = float(np.median(positive)) if positive.size else 0.0
    tests = (
        (measured & np.isnan(column.raw), "is missing although the velocity is there"),
        (measured & np.isinf(column.raw), "is infinite"),
        (measured & (column.raw <= 0.0), "is not positive"),
        (
            measured & (column.raw > 0.0) & (column.raw < 1e-3 * typical),
            "is a thousand times smaller than the others: it would outweigh them all",
        ),
    )
    for bad, what in tests:
        if not np.any(bad):
            continue
        row, count = _rows(columns, bad)
        value = column.raw[np.flatnonzero(bad)[0]]
        shown = "" if np.isnan(value) else f" ({value:g})"
        faults.add(
            f"{column.where(row)}: the error{shown} {what} ({_several(count)})",
            "Give the 1-sigma error, or empty the velocity too where the measurement is no good.",
        )


def check_velocities(columns: Columns, faults: FaultList, messages: list[str]) -> None:
    """Finite, not all one value, in the unit they claim to be in."""
    rv, err = columns.rv, columns.rv_err
    if rv is None:
        return
    measured = np.isfinite(rv.values)
    if np.any(np.isinf(rv.raw)):
        row, count = _rows(columns, np.isinf(rv.raw))
        faults.add(
            f"{rv.where(row)}: the velocity is infinite ({_several(count)})",
            "Correct it, or leave the cell empty where nothing was measured.",
        )
    if not np.any(measured):
        faults.add(f"{rv.where()} holds no numbers", "Point [columns] rv to the velocities.")
        return
    values = rv.values[measured]
    if values.size > 2 and np.ptp(values) == 0.0:
        faults.add(
            f"{rv.where(int(columns.rows[np.flatnonzero(measured)[0]]))}: all velocities are "
            f"{values[0]:g}",
            "Point [columns] rv to the velocities; this column holds a constant.",
        )
        return
    if _sentinel_velocity(rv, columns, measured, faults):
        return
    blank = ~measured & ~np.isinf(rv.raw)
    if np.any(blank):
        row, count = _rows(columns, blank)
        messages.append(f"{_several(count)} without a velocity left out (first: data row {row}).")
    if np.any(np.abs(values) > 2e6):
        far = measured & (np.abs(rv.values) > 2e6)
        row, _ = _rows(columns, far)
        faults.add(
            f"{rv.where(row)}: {rv.values[far][0] / 1000:g} km/s is faster than any star",
            "Check the unit of the velocities ([units] rv) and the cell itself.",
        )
        return
    if err is not None:
        _plausible_unit(rv, err, columns, measured, faults)


def _sentinel_velocity(
    rv: Column, columns: Columns, measured: NDArray[np.bool_], faults: FaultList
) -> bool:
    others = rv.raw[measured]
    centre, scatter = float(np.median(others)), robust_scatter(others)
    bad = np.zeros(measured.size, dtype=bool)
    for i in np.flatnonzero(measured):
        value = rv.raw[i]
        far = abs(value - centre) > 20.0 * max(scatter, 1e-12)
        bad[i] = far and abs(value) >= 99.0 and is_nines(float(value))
    if not np.any(bad):
        return False
    row, count = _rows(columns, bad)
    value = rv.raw[np.flatnonzero(bad)[0]]
    faults.add(
        f"{rv.where(row)}: {value:.10g} stands for 'not measured' ({_several(count)})",
        f"Leave such cells empty, or write [missing] rv = {value:.10g} in the sidecar.",
    )
    return True


def _plausible_unit(
    rv: Column, err: Column, columns: Columns, measured: NDArray[np.bool_], faults: FaultList
) -> None:
    good = measured & (err.values > 0.0) & np.isfinite(err.values)
    if np.count_nonzero(good) < 3:
        return
    error = float(np.median(err.values[good]))
    groups = [rv.values[good & (columns.labels == label)] for label in set(columns.labels[good])]
    centred = np.concatenate([g - np.median(g) for g in groups])
    scatter = float(np.std(centred))
    row = int(columns.rows[np.flatnonzero(good)[0]])
    if scatter < 0.02 * error and scatter < 1.0:
        faults.add(
            f"{rv.where(row)}: the velocities scatter by {scatter:.3g} m/s but their errors are "
            f"{error:.3g} m/s; one of the two is probably in km/s",
            'Say both units in the sidecar, for example [units] rv = "km/s", rv_err = "m/s".',
        )
    elif rv.unit_from == "default" and (error < TINY_ERROR or scatter < TINY_SCATTER):
        faults.add(
            f"{rv.where(row)}: the velocities look like km/s (typical error {error:.3g}, "
            f"scatter {scatter:.3g}) but no unit is given and m/s is the default",
            'Write [units] rv = "km/s" in the sidecar, or rv = "m/s" if they are truly m/s.',
        )
    elif rv.unit_from != "default" and error > 20_000.0:
        faults.add(
            f"{err.where(row)}: a typical error of {error / 1000:.3g} km/s is implausible for the "
            f"unit {err.unit or 'm/s'}",
            'Correct the units: [units] rv = "m/s" in the sidecar, or those in the table.',
        )


def count_nights(time: Array) -> int:
    """Nights of an unknown site: spans of at most 0.6 d, counted one after the other."""
    nights, start = 0, -np.inf
    for t in np.sort(time):
        if t - start > 0.6:
            nights, start = nights + 1, t
    return nights


def duplicates(
    time: Array,
    labels: Sequence[Any] | NDArray[Any],
    rv: Array,
    err: Array,
    rows: NDArray[np.intp],
    faults: FaultList,
    messages: list[str],
) -> NDArray[np.bool_]:
    """Mask of rows to keep: of rows that repeat another word for word, only the first stays.

    A few repetitions, and a few exposures of one instrument whose times coincide because they
    were rounded, are said; many of them, or one time with velocities that contradict each other,
    are a fault. Rows of two instruments that agree in time, velocity and error are one
    measurement listed under two names.
    """
    keep = np.ones(time.size, dtype=bool)
    first_of: dict[tuple[Any, ...], int] = {}
    at_time: dict[tuple[Any, float], int] = {}
    anywhere: dict[tuple[float, float, float], int] = {}
    same: list[tuple[int, int]] = []
    close: list[tuple[int, int]] = []
    clash: list[tuple[int, int]] = []
    twice: list[tuple[int, int]] = []
    for i in np.argsort(rows, kind="stable"):
        key = (labels[i], time[i], rv[i], err[i])
        here = (labels[i], float(time[i]))
        content = (float(time[i]), float(rv[i]), float(err[i]))
        if key in first_of:
            keep[i] = False
            same.append((i, first_of[key]))
            continue
        first_of[key] = i
        if here in at_time:
            j = at_time[here]
            # 10 sigma: two exposures within the rounding of the time may differ by oscillations
            target = clash if abs(rv[i] - rv[j]) > 10.0 * np.hypot(err[i], err[j]) else close
            target.append((i, j))
        elif content in anywhere:
            twice.append((i, anywhere[content]))
        at_time.setdefault(here, i)
        anywhere.setdefault(content, i)
    limit = max(1.0, DUPLICATE_SHARE * time.size)
    cure = "Remove the repeated rows; the table may have been joined to itself."
    _report(
        same,
        "repeats",
        "repeat another row word for word",
        rows,
        limit,
        cure,
        faults,
        messages,
        "They were left out.",
    )
    _report(
        close,
        "has the same time and instrument as",
        "share time and instrument with another",
        rows,
        limit,
        "Give the times to 0.00001 d, so that exposures differ.",
        faults,
        messages,
        "They were kept as exposures whose times were rounded.",
    )
    _report(
        twice,
        "equals, under another instrument label,",
        "equal a row of another instrument",
        rows,
        limit,
        "List each measurement under one label only.",
        faults,
        messages,
        "They were kept; one measurement may be counted twice.",
    )
    if clash:
        i, j = clash[0]
        faults.add(
            f"column 'time', data row {rows[i]}: same time and instrument as data row {rows[j]}, "
            f"but the velocities {rv[j]:.6g} and {rv[i]:.6g} m/s contradict each other "
            f"({_several(len(clash))})",
            "Keep the right one, or give the two their own instrument labels.",
        )
    return keep


def _report(
    pairs: list[tuple[int, int]],
    one: str,
    many: str,
    rows: NDArray[np.intp],
    limit: float,
    cure: str,
    faults: FaultList,
    messages: list[str],
    done: str,
) -> None:
    if not pairs:
        return
    i, j = pairs[0]
    if len(pairs) > limit:
        faults.add(
            f"column 'time', data row {rows[i]}: {one} data row {rows[j]} "
            f"(duplicated times; {_several(len(pairs))} in all)",
            cure,
        )
    else:
        messages.append(
            f"{_several(len(pairs))} {many} (first: data row {rows[i]}, as data row {rows[j]}). "
            + done
        )
