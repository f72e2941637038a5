"""From a time series to the padded, scaled arrays of the joint model."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, Indicator, IntArray, TimeSeries
from screener.models.joint import JointData

__all__ = ["Scaled", "choose_indicators", "long_term_part", "robust_sd", "scaled_data"]

# Bisector-like series follow the latent process and its derivative; widths and chromospheric
# indices follow the process itself (Rajpaul et al. 2015).
_ON_DERIVATIVE = frozenset({"bis", "crx"})
# One of each kind is enough: within a kind the series repeat each other.
_KINDS = (
    ("fwhm", "dlw", "contrast"),
    ("s_index", "log_rhk", "halpha", "nad"),
    ("bis",),
    ("halpha", "nad"),
)
_WIDE = 1e3  # prior of a zero point, in units of the series' scatter


@dataclass(frozen=True, eq=False)
class Scaled:
    """Joint data with what is needed to go back to physical units.

    ``scale`` holds the unit of each series: multiply model values by it. ``names`` are the
    series, the velocities first.
    """

    data: JointData
    scale: Array
    centre: Array
    names: tuple[str, ...]
    derivative: tuple[bool, ...]
    cycle_columns: int
    jitter_names: tuple[tuple[str, str], ...]
    slow: (
        Array  # (n_series, n_obs), the indicators' slow parts in their own units; 0 for velocities
    )


def robust_sd(values: Array) -> float:
    """1.4826 times the median absolute deviation; the plain deviation where that is zero."""
    centre = np.median(values)
    spread = 1.4826 * float(np.median(np.abs(values - centre)))
    return spread if spread > 0 else float(np.std(values))


def choose_indicators(series: TimeSeries, most: int) -> tuple[Indicator, ...]:
    """At most ``most`` indicators, one of each kind, the best measured first.

    An indicator must cover a third of the velocities and at least twelve of them, and vary.
    """

    def merit(item: Indicator) -> float:
        good = np.isfinite(item.value)
        if good.sum() < max(12, series.n_obs / 3):
            return -1.0
        values = _less_zero_points(item.value, series.instrument)[good]
        spread = float(np.std(values))
        if not spread > 0:
            return -1.0
        error = float(np.median(item.error[good]))
        return float(good.mean() * min(spread / max(error, 1e-12 * spread), 30.0))

    chosen: list[Indicator] = []
    for kind in _KINDS:
        of_kind = [i for i in series.indicators if i.name in kind and i not in chosen]
        ranked = sorted(of_kind, key=merit, reverse=True)
        if ranked and merit(ranked[0]) > 0:
            chosen.append(ranked[0])
    known = {name for kind in _KINDS for name in kind} | {"crx"}
    others = [i for i in series.indicators if i.name not in known and merit(i) > 0]
    chosen.extend(sorted(others, key=merit, reverse=True))
    return tuple(chosen[:most])


def _less_zero_points(values: Array, instrument: IntArray) -> Array:
    out = values.copy()
    for k in np.unique(instrument):
        rows = instrument == k
        good = rows & np.isfinite(values)
        if good.any():
            out[rows] -= np.median(values[good])
    return out


def long_term_part(time: Array, value: Array, instrument: IntArray, shortest: float) -> Array:
    """The slow part (cycle) of an indicator at ``time``, zero where it is not significant.

    Sines and cosines of up to three per baseline and of periods above ``shortest``, with a slope
    and a zero point per instrument, by least squares with a weak ridge; kept when an F-like gain
    exceeds what as many free coefficients of noise would reach at one in a thousand.
    """
    good = np.isfinite(value)
    span = float(np.ptp(time[good])) if good.sum() > 1 else 0.0
    harmonics = int(min(6, np.floor(2 * span / shortest)))
    if harmonics < 1 or good.sum() < 4 * harmonics + 12:
        return np.zeros(time.size)
    phase = (time - time[good].min()) / span
    columns = [phase - 0.5]
    for k in range(1, harmonics + 1):
        columns += [np.cos(np.pi * k * phase), np.sin(np.pi * k * phase)]
    labels = np.unique(instrument[good])
    zero = np.stack([(instrument == k).astype(float) for k in labels], axis=1)
    basis = np.stack(columns, axis=1)
    design = np.concatenate([zero, basis], axis=1)
    ridge = np.concatenate([np.zeros(labels.size), np.full(basis.shape[1], 0.05 * good.sum() / 10)])
    a, y = design[good], value[good]
    coefficients = np.linalg.solve(a.T @ a + np.diag(ridge + 1e-9), a.T @ y)
    without = y - zero[good] @ np.linalg.lstsq(zero[good], y, rcond=None)[0]
    rest = y - a @ coefficients
    n_free = good.sum() - design.shape[1]
    chi2_without, chi2 = float(without @ without), float(rest @ rest)
    # neighbouring nights share activity: count a third of them as independent
    gain = 0.5 * n_free / 3 * np.log(chi2_without / chi2) if chi2 > 0 else 0.0
    needed = 0.5 * (basis.shape[1] + 3.1 * np.sqrt(2 * basis.shape[1]) + 3)
    if gain < needed:
        return np.zeros(time.size)
    slow = basis @ coefficients[labels.size :]
    return np.asarray(slow - slow.mean())


def scaled_data(
    series: TimeSeries, indicators: tuple[Indicator, ...], cycle_shortest: float
) -> Scaled:
    """Pad, centre and scale velocities and indicators.

    ``cycle_shortest`` (d): variations of indicators slower than this are taken out of them and
    given to the velocities as linear terms (at most two, the principal ones), so that a magnetic
    cycle is neither stretched into the rotation process nor announced as a planet.
    """
    n = series.n_obs
    values, errors, names = [series.rv], [series.rv_err], ["rv"]
    slow, parts = [], [np.zeros(n)]
    for item in indicators:
        part = long_term_part(series.time, item.value, series.instrument, cycle_shortest)
        parts.append(part)
        if np.any(part):
            slow.append(part / np.std(part))
        values.append(item.value - part)
        errors.append(item.error)
        names.append(item.name)
    cycle = _principal(slow, n)
    value, error = np.array(values), np.array(errors)
    mask = np.isfinite(value) & np.isfinite(error) & (error > 0)
    n_instruments = len(series.instruments)
    jitter = np.zeros(value.shape, dtype=np.intp)
    jitter_names: list[tuple[str, str]] = []
    zero_points, scale, centre = [], np.ones(len(names)), np.zeros(len(names))
    for s, name in enumerate(names):
        good = mask[s]
        centre[s] = np.median(value[s][good])
        scale[s] = robust_sd(_less_zero_points(value[s], series.instrument)[good]) or 1.0
        for k in range(n_instruments):
            rows = good & (series.instrument == k)
            if not rows.any():
                continue
            jitter[s, series.instrument == k] = len(jitter_names)
            jitter_names.append((name, series.instruments[k]))
            zero_points.append((s, rows))
    n_linear = len(zero_points) + 1 + cycle.shape[1]
    columns = np.zeros((len(names), n, n_linear))
    for c, (s, rows) in enumerate(zero_points):
        columns[s, rows, c] = 1
    mid, span = 0.5 * (series.time[0] + series.time[-1]), max(series.baseline, 1.0)
    columns[0, :, len(zero_points)] = 2 * (series.time - mid) / span
    columns[0, :, len(zero_points) + 1 :] = cycle
    column_sd = np.full(n_linear, _WIDE)
    column_sd[len(zero_points) :] = 100.0
    column_sd[len(zero_points) + 1 :] = 3.0
    value = np.where(mask, (value - centre[:, None]) / scale[:, None], 0.0)
    variance = np.where(mask, (np.where(mask, error, 1.0) / scale[:, None]) ** 2, 1.0)
    data = JointData(
        series.time, value, variance, mask, jitter, len(jitter_names), columns, column_sd
    )
    derivative = tuple(name == "rv" or name in _ON_DERIVATIVE for name in names)
    return Scaled(
        data,
        scale,
        centre,
        tuple(names),
        derivative,
        cycle.shape[1],
        tuple(jitter_names),
        np.array(parts),
    )


def _principal(slow: list[Array], n: int) -> Array:
    """At most two principal components of the slow parts, unit variance, shape (n, 0..2)."""
    if not slow:
        return np.zeros((n, 0))
    matrix = np.stack(slow, axis=1)
    u, s, _ = np.linalg.svd(matrix - matrix.mean(axis=0), full_matrices=False)
    keep = min(2, int(np.sum(s > 0.3 * s[0])))
    return np.asarray(u[:, :keep] * np.sqrt(n))
