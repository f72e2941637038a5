"""The arrays behind the figures, from a star's portrait."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from screener.core import Array, Fold, Indicator, PeriodogramTrace, Products, Signal, TimeSeries
from screener.models.kepler import orbit_velocity
from screener.models.portrait import Portrait
from screener.search.false_alarm import level
from screener.search.periodogram import Precision, power, window

__all__ = ["products"]

_MOST_POINTS = 1500


def products(
    series: TimeSeries, portrait: Portrait, signals: Sequence[Signal], known: Sequence[Signal]
) -> Products:
    """Periodograms, folds and model curves of one star."""
    white, activity = portrait.white, portrait.activity
    grid = white.frequency
    one_percent = level(0.01, white.bandwidth, white.baseline)
    traces = [
        PeriodogramTrace("velocities", grid, white.gains[0], one_percent),
        PeriodogramTrace("residuals", grid, white.gains[-1], one_percent),
        PeriodogramTrace("activity model", activity.frequency, activity.gains[0], one_percent),
    ]
    traces += [_indicator_trace(series, item, grid, one_percent) for item in series.indicators]
    traces.append(PeriodogramTrace("window", grid, window(series.time, grid)))
    folds = tuple(
        Fold(
            signal.id,
            series.time,
            portrait.residual + orbit_velocity(sighting.assessment.white_orbit, series.time),
            portrait.white_sd,
            series.instrument,
        )
        for signal, sighting in zip(signals, portrait.sightings, strict=True)
    )
    model_time = _model_times(series.time)
    noise, result = portrait.noise, activity.fit
    mean, sd = result.model.predict_activity(result.parameters, model_time)
    orbits = np.zeros(model_time.size)
    for signal in (*signals, *known):
        inside = signal.known or "activity model" in signal.found_by
        if inside:
            orbits += orbit_velocity(signal.orbit, model_time)
    at_data = result.model.solve(result.parameters).activity_mean
    return Products(
        series,
        portrait.offsets,
        portrait.jitter,
        tuple(traces),
        folds,
        model_time,
        mean * noise.scale,
        sd * noise.scale,
        orbits,
        at_data * noise.scale,
    )


def _model_times(time: Array) -> Array:
    """Half-day steps near the data, none in the gaps; thinned to a bounded number."""
    grid = np.arange(time[0] - 2, time[-1] + 2, 0.5)
    after = np.searchsorted(time, grid)
    gap = np.minimum(
        np.abs(grid - time[np.clip(after, 0, time.size - 1)]),
        np.abs(grid - time[np.clip(after - 1, 0, time.size - 1)]),
    )
    near = grid[gap < 5]
    return near[:: max(1, near.size // _MOST_POINTS)]


def _indicator_trace(
    series: TimeSeries, item: Indicator, grid: Array, one_percent: float
) -> PeriodogramTrace:
    """Likelihood periodogram of an indicator with zero points and a slope re-fitted."""
    good = np.isfinite(item.value) & np.isfinite(item.error)
    if good.sum() < 8:
        return PeriodogramTrace(item.name, grid, np.zeros(grid.size), one_percent)
    time, value, label = series.time[good], item.value[good], series.instrument[good]
    columns = [(label == k).astype(float) for k in np.unique(label)] + [time - time.mean()]
    design = np.stack(columns, axis=1)
    basis, _ = np.linalg.qr(design)
    rest = value - basis @ (basis.T @ value)
    n_free = max(int(good.sum()) - design.shape[1], 2)
    variance = float(rest @ rest) / n_free or 1.0
    weight = np.full(time.size, 1 / variance)
    precision = Precision(rest / variance, None, weight, basis / np.sqrt(variance))
    gain = power(time, precision, grid)
    free = -0.5 * n_free * np.log(np.maximum(1 - 2 * gain / n_free, 1e-12))
    return PeriodogramTrace(item.name, grid, free, one_percent)
