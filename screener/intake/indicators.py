"""Cleaning of indicator columns: fill values, impossible values, errors that are not given."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, Indicator, IntArray
from screener.intake.checks import is_nines, robust_scatter
from screener.intake.columns import Column
from screener.intake.files import FaultList

__all__ = ["CleanIndicator", "clean_indicator", "night_scatter", "with_errors"]

# A few bad cells are set aside and said; a column that is mostly bad is a fault.
MOSTLY = 0.5
# values that no measurement of that quantity can have
_IMPOSSIBLE: dict[str, Callable[[Array], NDArray[np.bool_]]] = {
    "fwhm": lambda v: v <= 0.0,
    "contrast": lambda v: v <= 0.0,
    "s_index": lambda v: v <= 0.0,
    "nad": lambda v: v <= 0.0,
    "log_rhk": lambda v: (v >= -1.5) | (v < -9.0),
}


@dataclass(frozen=True, eq=False)
class CleanIndicator:
    """An indicator row by row as in the file; NaN where it is not measured or its error unknown."""

    name: str
    value: Array
    error: Array


def clean_indicator(
    value: Column,
    error: Column | None,
    rows: IntArray,
    faults: FaultList,
    messages: list[str],
) -> CleanIndicator | None:
    """Set fill values and impossible values aside; None (and a message) if nothing is left.

    A column that mostly holds fill values, or a constant that looks like one, is a fault: whether
    its other values mean anything is for the user to say, with ``[missing]`` in the sidecar.
    """
    raw, values = value.raw.copy(), value.values.copy()
    measured = np.isfinite(raw)
    n_measured = int(measured.sum())
    if np.any(np.isinf(raw)):
        bad = np.isinf(raw)
        row, count = int(rows[np.flatnonzero(bad)[0]]), int(bad.sum())
        values[bad] = np.nan
        messages.append(
            f"{_upper(value.where(row))}: infinite; {count} such values read as not measured."
        )
    if n_measured == 0:
        messages.append(f"{_upper(value.where())} is empty and was left out.")
        return None
    fill = _fill_values(raw, measured)
    impossible = measured & ~fill & _impossible(value.name, values)
    if _wrong_kind(value, rows, measured & ~fill, impossible, faults):
        return None
    bad = measured & (fill | impossible)
    if np.any(bad):
        first = int(np.flatnonzero(bad)[0])
        row, count = int(rows[first]), int(bad.sum())
        what = f"{value.where(row)}: {raw[first]:.10g} stands for 'not measured' or cannot be"
        if count > MOSTLY * n_measured:
            faults.add(
                f"{what}; {count} of {n_measured} values are like that",
                f"Leave such cells empty, or write [missing] {value.name} = {raw[first]:.10g} in "
                "the sidecar, or remove the column.",
            )
            return None
        messages.append(
            f"{_upper(what)}; {count} of {n_measured} values were read as not measured."
        )
        values[bad] = np.nan
    left = values[np.isfinite(values)]
    if left.size and np.ptp(left) == 0.0 and left.size > 2:
        messages.append(
            f"{_upper(value.where())} holds {left[0]:g} in every row and was left out: "
            "a constant says nothing."
        )
        return None
    errors = _clean_errors(error, values, rows, faults, messages)
    return CleanIndicator(value.name, values, errors)


def _wrong_kind(
    value: Column,
    rows: IntArray,
    measured: NDArray[np.bool_],
    impossible: NDArray[np.bool_],
    faults: FaultList,
) -> bool:
    """Faults for a column that holds something else: differences from a mean, or km/s."""
    count = int(impossible.sum())
    if count > 0.05 * measured.sum() and np.unique(value.raw[impossible]).size > 3:
        first = int(np.flatnonzero(impossible)[0])
        faults.add(
            f"{value.where(int(rows[first]))}: {value.raw[first]:g} cannot be a {value.name}; "
            f"{count} rows are like that",
            "If these are differences from a mean, or another quantity, name the column in "
            "[indicators] under a name of its own.",
        )
        return True
    inside = value.values[measured & np.isfinite(value.values)]
    if value.unit_from != "default" or inside.size < 3 or np.ptp(inside) == 0.0:
        return False
    # no star's lines are narrower than 1 km/s, no bisector is steady to 0.1 m/s (rules of thumb)
    if (value.name == "fwhm" and np.median(inside) < 200.0) or (
        value.name == "bis" and np.std(inside) < 0.1
    ):
        faults.add(
            f"{value.where(int(rows[0]))}: the values look like km/s (median "
            f"{np.median(inside):.3g}, scatter {np.std(inside):.2g}) but no unit is given and m/s "
            "is the default",
            f'Write [units] {value.name} = "km/s" in the sidecar (or "m/s" if they are).',
        )
        return True
    return False


def _clean_errors(
    error: Column | None, values: Array, rows: IntArray, faults: FaultList, messages: list[str]
) -> Array:
    if error is None:
        return np.full(values.size, np.nan)
    errors = error.values.copy()
    measured = np.isfinite(values)
    with np.errstate(invalid="ignore"):
        given = errors[measured & (errors > 0.0)]
        typical = float(np.median(given)) if given.size else 0.0
        bad = measured & ~np.isnan(errors) & ((errors <= 1e-3 * typical) | np.isinf(errors))
    nines = np.array([np.isfinite(v) and abs(v) >= 99.0 and is_nines(v) for v in error.raw])
    bad |= measured & nines & (errors > 50.0 * typical)
    if np.any(bad):
        first = int(np.flatnonzero(bad)[0])
        row, count, total = int(rows[first]), int(bad.sum()), int(measured.sum())
        if count > MOSTLY * total:
            faults.add(
                f"{error.where(row)}: the error ({error.raw[first]:g}) is not positive; "
                f"{count} of {total} are like that",
                "Give 1-sigma errors, or remove the column: errors are then estimated.",
            )
        else:
            messages.append(
                f"{_upper(error.where(row))}: the error {error.raw[first]:g} is no error; "
                f"{count} of {total} were estimated instead."
            )
        errors[bad] = np.nan
    errors[~measured] = np.nan
    return errors


def _fill_values(raw: Array, measured: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Where a column holds a number that stands for "not measured".

    Candidates are numbers made of nines (-999, 99.99, -9999999), -1 and 0 if they occur more than
    once, and numbers beyond 1e15. One is taken for a fill value only if it fills the whole column
    or lies more than ten robust scatters away from all the rest.
    """
    found = np.zeros(raw.size, dtype=bool)
    numbers, counts = np.unique(raw[measured], return_counts=True)
    for number, count in zip(numbers, counts, strict=True):
        nines = is_nines(float(number)) and abs(number) >= 9.0
        short = number in (-1.0, 0.0, -9.0) and count > 1
        if not (nines or short or abs(number) > 1e15):
            continue
        here = measured & (raw == number)
        others = raw[measured & ~here]
        if others.size == 0:
            found |= here
            continue
        scatter = max(robust_scatter(others), 0.1 * float(np.std(others)), 1e-12)
        if others.size >= 3 and abs(number - np.median(others)) > 10.0 * scatter:
            found |= here
    return found


def _impossible(name: str, values: Array) -> NDArray[np.bool_]:
    test = _IMPOSSIBLE.get(name)
    if test is None:
        return np.zeros(values.size, dtype=bool)
    with np.errstate(invalid="ignore"):
        return test(values)


def night_scatter(time: Array, values: Array) -> float | None:
    """Error of one value from night-to-night scatter; None if there are fewer than four nights.

    The median absolute difference of the medians of consecutive nights, at most ten days apart
    where there are enough of them, times 1.4826 / sqrt(2): slow variation drops out, and what the
    star does from one night to the next counts as error, which makes the estimate a cautious one.
    """
    good = np.isfinite(values)
    if np.count_nonzero(good) < 4:
        return None
    t, v = time[good], values[good]
    order = np.argsort(t, kind="stable")
    t, v = t[order], v[order]
    night = np.concatenate([[0], np.cumsum(np.diff(t) > 0.4)])
    medians = np.array([np.median(v[night == k]) for k in range(int(night[-1]) + 1)])
    times = np.array([np.median(t[night == k]) for k in range(int(night[-1]) + 1)])
    if medians.size < 4:
        return None
    steps = np.diff(medians)
    near = np.diff(times) <= 10.0
    if np.count_nonzero(near) >= 5:
        steps = steps[near]
    scatter = 1.4826 * float(np.median(np.abs(steps))) / np.sqrt(2.0)
    if scatter == 0.0:  # values rounded to a few steps
        scatter = float(np.std(steps)) / np.sqrt(2.0)
    return scatter if scatter > 0.0 else None


def with_errors(
    item: CleanIndicator,
    time: Array,
    instrument: IntArray,
    messages: list[str],
) -> Indicator | None:
    """Fill in the errors that are not given, per instrument, from night-to-night scatter.

    None, with a message, where the indicator is measured in too few nights for that.
    """
    value, error = item.value.copy(), item.error.copy()
    open_ = np.isfinite(value) & ~np.isfinite(error)
    n_measured = int(np.isfinite(value).sum())
    if n_measured == 0:
        return None
    if not np.any(open_):
        return Indicator(item.name, value, error)
    centred = value.copy()
    for k in np.unique(instrument):
        mine = (instrument == k) & np.isfinite(value)
        if np.any(mine):
            centred[mine] -= np.median(value[mine])
    pooled = night_scatter(time, centred)
    n_open = int(open_.sum())
    for k in np.unique(instrument[open_]):
        mine = instrument == k
        estimate = night_scatter(time[mine], value[mine]) or pooled
        if estimate is None:
            messages.append(
                f"Indicator '{item.name}' has no errors and too few nights to estimate them; "
                "it was left out."
            )
            return None
        given = error[mine & np.isfinite(error)]
        floor = float(np.median(given)) if given.size else 0.0
        error[mine & open_] = max(estimate, floor)
    whole = n_open > MOSTLY * n_measured
    messages.append(
        f"Indicator '{item.name}': {'the' if n_open == n_measured else f'{n_open} of the'} errors "
        "are not given and were estimated from the night-to-night scatter (typically "
        f"{np.median(error[open_]):.3g})."
    )
    return Indicator(item.name, value, error, error_estimated=whole)


def _upper(text: str) -> str:
    return text[:1].upper() + text[1:]
