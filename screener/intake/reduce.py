"""From exposures to the series that is fitted: binned, outliers left out, every step said."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, Indicator, IntArray, Outlier, TimeSeries
from screener.intake.binning import assign_bins, bin_series
from screener.intake.outliers import far_indicator_values, isolated_velocities, odd_exposures

__all__ = ["MIN_BINS", "reduce_exposures"]

# an instrument brings a zero point and a jitter of its own: two bins cannot pay for them
MIN_BINS = 3


def reduce_exposures(
    exposures: TimeSeries, messages: list[str]
) -> tuple[TimeSeries, tuple[Outlier, ...], float]:
    """Bin, and leave outliers and nearly empty instruments out.

    Returns the series, the outliers, and the span of the widest bin in days (0 if nothing was
    binned).
    """
    outliers: list[Outlier] = []
    bins = assign_bins(exposures.time, exposures.instrument)
    marked, deviation = _per_instrument(exposures, bins)
    outliers += _listed(exposures, marked, "rv", exposures.rv, deviation)
    bins = np.where(marked, -1, bins)
    series, span = bin_series(_clean_indicators(exposures, bins, outliers), bins)
    marked, deviation, kept = isolated_velocities(
        series.time, series.rv, series.rv_err, series.instrument
    )
    outliers += _listed(series, marked, "rv", series.rv, deviation)
    if kept:
        messages.append(
            f"{kept} velocities lie far from the rest but not alone, as near the periastron of an "
            "eccentric orbit; they were kept."
        )
    series, span = series.select(~marked), span[~marked]
    series = replace(series, indicators=tuple(_far(series, i, outliers) for i in series.indicators))
    series, span = _drop_thin(series, span, messages)
    return series, tuple(outliers), float(np.max(span, initial=0.0))


def _per_instrument(exposures: TimeSeries, bins: IntArray) -> tuple[NDArray[np.bool_], Array]:
    marked = np.zeros(exposures.n_obs, dtype=bool)
    deviation = np.full(exposures.n_obs, np.nan)
    for k in range(len(exposures.instruments)):
        mine = np.flatnonzero(exposures.instrument == k)
        marked[mine], deviation[mine] = odd_exposures(
            exposures.rv[mine], exposures.rv_err[mine], bins[mine]
        )
    return marked, deviation


def _clean_indicators(exposures: TimeSeries, bins: IntArray, outliers: list[Outlier]) -> TimeSeries:
    """The same exposures without indicator values that disagree with the rest of their bin."""
    cleaned = []
    for item in exposures.indicators:
        gone = np.zeros(exposures.n_obs, dtype=bool)
        deviation = np.full(exposures.n_obs, np.nan)
        for k in range(len(exposures.instruments)):
            mine = np.flatnonzero((exposures.instrument == k) & (bins >= 0))
            gone[mine], deviation[mine] = odd_exposures(
                item.value[mine], item.error[mine], bins[mine]
            )
        outliers += _listed(exposures, gone, item.name, item.value, deviation)
        cleaned.append(_without(item, gone))
    return replace(exposures, indicators=tuple(cleaned))


def _far(series: TimeSeries, item: Indicator, outliers: list[Outlier]) -> Indicator:
    marked, deviation = far_indicator_values(item.value, item.error, series.instrument)
    outliers += _listed(series, marked, item.name, item.value, deviation)
    return _without(item, marked)


def _without(item: Indicator, gone: NDArray[np.bool_]) -> Indicator:
    return replace(
        item,
        value=np.where(gone, np.nan, item.value),
        error=np.where(gone, np.nan, item.error),
    )


def _listed(
    series: TimeSeries, marked: NDArray[np.bool_], column: str, value: Array, deviation: Array
) -> Sequence[Outlier]:
    return [
        Outlier(
            time=float(series.time[i]),
            instrument=series.instruments[series.instrument[i]],
            column=column,
            value=float(value[i]),
            deviation=float(deviation[i]),
        )
        for i in np.flatnonzero(marked)
    ]


def _drop_thin(series: TimeSeries, span: Array, messages: list[str]) -> tuple[TimeSeries, Array]:
    counts = np.bincount(series.instrument, minlength=len(series.instruments))
    thin = [k for k, n in enumerate(counts) if n < MIN_BINS]
    if not thin or len(thin) == len(counts):
        return series, span
    for k in thin:
        messages.append(
            f"Instrument '{series.instruments[k]}' has {counts[k]} bins, fewer than {MIN_BINS}, "
            "and was left out: they cannot fix its zero point."
        )
    kept = [k for k in range(len(counts)) if k not in thin]
    rows = np.isin(series.instrument, kept)
    renumber = np.full(len(counts), -1, dtype=np.intp)
    renumber[kept] = np.arange(len(kept))
    slim = series.select(rows)
    slim = replace(
        slim,
        instrument=renumber[slim.instrument],
        instruments=tuple(series.instruments[k] for k in kept),
    )
    measured = tuple(i for i in slim.indicators if np.any(np.isfinite(i.value)))
    return replace(slim, indicators=measured), span[rows]
