"""Binning of exposures that one instrument takes close together.

Choices, and why:

- A bin spans at most :data:`MAX_SPAN` = 0.06 d, and its exposures follow each other within
  :data:`MAX_GAP` = 0.03 d. A sinusoid of 0.55 d averaged over 0.06 d keeps
  sinc(pi 0.06 / 0.55) = 98 % of its amplitude; exposures two hours apart are never joined.
- A bin is the inverse-variance mean. Its error is the largest of the formal error, the error that
  the scatter inside the bin implies, and a floor.
- The floor stands for noise that exposures of one night share (granulation, calibration), which
  no number of exposures averages away: all bins that an instrument takes in one night together
  weigh at most as much as four independent exposures, but a bin's error is never raised above
  that of a single exposure by this. Half the error of a single exposure is a rule of thumb
  (common practice, no source); what is shared beyond it is left to the fitted jitter.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, Band, Indicator, IntArray, TimeSeries

__all__ = ["FLOOR", "MAX_GAP", "MAX_SPAN", "assign_bins", "bin_series", "night_of"]

MAX_GAP = 0.03  # d
MAX_SPAN = 0.06  # d
FLOOR = 0.5  # of the error of a single exposure


def night_of(time: Array) -> IntArray:
    """Number of the night of each of the sorted times; a night spans at most 0.6 d."""
    night = np.zeros(time.size, dtype=np.intp)
    start, current = -np.inf, -1
    for i, t in enumerate(time):
        if t - start > 0.6:
            start, current = t, current + 1
        night[i] = current
    return night


def assign_bins(time: Array, instrument: IntArray) -> IntArray:
    """Bin number of each exposure, shape (n_obs,); ``time`` is sorted.

    Runs of exposures without a gap above :data:`MAX_GAP` are cut into equal pieces of at most
    :data:`MAX_SPAN`. Bins are numbered by the time of their first exposure.
    """
    label = np.empty(time.size, dtype=np.intp)
    count = 0
    for k in np.unique(instrument):
        index = np.flatnonzero(instrument == k)
        runs = np.split(index, np.flatnonzero(np.diff(time[index]) > MAX_GAP) + 1)
        for run in runs:
            t = time[run] - time[run[0]]
            pieces = max(1, int(np.ceil(t[-1] / MAX_SPAN - 1e-9)))
            part = np.minimum((t / max(t[-1], 1e-12) * pieces).astype(np.intp), pieces - 1)
            for p in np.unique(part):
                label[run[part == p]] = count
                count += 1
    _, first = np.unique(label, return_index=True)
    rank = np.empty(count, dtype=np.intp)
    rank[np.argsort(first, kind="stable")] = np.arange(count)
    return rank[label]


def _combine(value: Array, error: Array, share: float) -> tuple[float, float]:
    """Mean and error of one bin; ``share`` is the floor in units of a single exposure's error."""
    good = np.isfinite(value) & np.isfinite(error)
    n = int(good.sum())
    if n == 0:
        return float("nan"), float("nan")
    v, e = value[good], error[good]
    if n == 1:
        return float(v[0]), float(e[0])
    weight = e**-2.0
    total = float(weight.sum())
    mean = float(np.sum(weight * v) / total)
    formal = total**-0.5
    scatter = float(np.sqrt(np.sum(weight * (v - mean) ** 2) / ((n - 1) * total)))
    return mean, max(formal, scatter, share * float(np.median(e)))


def bin_series(series: TimeSeries, bins: IntArray) -> tuple[TimeSeries, Array]:
    """Bin exposures; returns the binned series and the span of each bin, d.

    Parameters
    ----------
    bins : IntArray
        Bin number of each exposure, as :func:`assign_bins` gives it; negative: leave out.
    """
    members = [np.flatnonzero(bins == b) for b in np.unique(bins[bins >= 0])]
    n = len(members)
    time, span = np.empty(n), np.empty(n)
    instrument = np.array([series.instrument[m[0]] for m in members], dtype=np.intp)
    for i, m in enumerate(members):
        weight = series.rv_err[m] ** -2.0
        start = series.time[m[0]]
        time[i] = start + np.sum(weight * (series.time[m] - start)) / weight.sum()
        span[i] = series.time[m[-1]] - start
    order = np.lexsort((instrument, time))
    members = [members[i] for i in order]
    time, span, instrument = time[order], span[order], instrument[order]
    share = _shares(time, instrument)

    def fold(value: Array, error: Array) -> tuple[Array, Array]:
        pairs = [_combine(value[m], error[m], s) for m, s in zip(members, share, strict=True)]
        table = np.array(pairs, dtype=np.float64).reshape(n, 2)
        return table[:, 0].copy(), table[:, 1].copy()

    rv, rv_err = fold(series.rv, series.rv_err)
    indicators = []
    for item in series.indicators:
        value, error = fold(item.value, item.error)
        if item.error_estimated:
            # estimated from nights, so it holds for a night's mean as it stands
            error = np.array([_middle(item.error[m]) for m in members])
        indicators.append(Indicator(item.name, value, error, item.error_estimated))
    bands = [Band(b.name, *fold(b.rv, b.rv_err), b.wavelength) for b in series.bands]
    binned = TimeSeries(
        time=time,
        rv=rv,
        rv_err=rv_err,
        instrument=instrument,
        instruments=series.instruments,
        indicators=tuple(indicators),
        bands=tuple(bands),
        photometry=series.photometry,
    )
    return binned, span


def _middle(values: Array) -> float:
    finite = values[np.isfinite(values)]
    return float(np.median(finite)) if finite.size else float("nan")


def _shares(time: Array, instrument: IntArray) -> NDArray[np.float64]:
    """Floor of each bin, in units of the error of a single exposure."""
    share = np.empty(time.size)
    for k in np.unique(instrument):
        mine = np.flatnonzero(instrument == k)
        night = night_of(time[mine])
        in_night = np.bincount(night)[night]
        share[mine] = np.minimum(1.0, FLOOR * np.sqrt(in_night))
    return share
