"""Series made ready for the rotation search: nightly means, zero points and slow trends taken off.

A channel is one indicator, or the photometry; channels of one star share their nights, so that
kernels are computed once for all of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from screener.core import Array, IntArray, TimeSeries

__all__ = ["ABSENT", "Channels", "indicator_channels", "photometry_channel"]

_TREND_LENGTH = 120.0  # d; slower changes are the cycle, faster ones may be rotation
_MIN_POINTS = 20
#: Variance (in units of the channel's) of a value that was not measured.
ABSENT = 1e4


@dataclass(frozen=True, eq=False)
class Channels:
    """Cleaned series on common nights, each scaled to unit variance.

    Attributes
    ----------
    names : tuple of str
        One per channel.
    time : Array
        Nights, shape (n_nights,), days, sorted.
    value, variance : Array
        Shape (n_channels, n_nights): values and their measurement variance; where a channel has
        no value it is 0 with a variance of ``ABSENT``.
    signal : Array
        Shape (n_channels,): variance not explained by the errors, between 0.05 and 1.
    """

    names: tuple[str, ...]
    time: Array
    value: Array
    variance: Array
    signal: Array


def _robust_sd(values: Array) -> float:
    centre = np.median(values)
    return float(1.4826 * np.median(np.abs(values - centre)))


def _clean(
    time: Array, value: Array, error: Array, label: IntArray, trend_length: float
) -> tuple[Array, Array, float] | None:
    """Zero points per label and a slow trend off, unit variance: (value, variance, signal).

    Rows that are not finite, or outliers, come back as absent. None where too little is left.
    """
    good = np.isfinite(value) & np.isfinite(error) & (error > 0.0)
    rest, variance = value, 0.0
    for _ in range(2):
        if np.count_nonzero(good) < _MIN_POINTS:
            return None
        t, v, e = time[good], value[good], error[good]
        columns = np.eye(int(label.max()) + 1)[label[good]]
        columns = columns[:, columns.sum(axis=0) > 0]
        scale = _robust_sd(v - columns @ np.linalg.lstsq(columns, v, rcond=None)[0])
        if not scale > 0.0:
            return None
        # the trend by Gaussian-process regression; rotation itself counts as noise here
        trend = np.exp(-0.5 * ((t[:, None] - t[None, :]) / trend_length) ** 2)
        slow = scale**2 * (trend + 1e4 * columns @ columns.T)
        centred = v - np.median(v)
        weight = cho_solve(cho_factor(slow + np.diag(scale**2 + e**2)), centred)
        rest = centred - slow @ weight
        variance = float(np.var(rest))
        kept = np.abs(rest) < 4.5 * max(_robust_sd(rest), 1e-300)
        if bool(np.all(kept)):
            break
        good[np.flatnonzero(good)[~kept]] = False
        rest = rest[kept]
        variance = float(np.var(rest))
    if not variance > 0.0 or np.count_nonzero(good) < _MIN_POINTS:
        return None
    values, measured = np.zeros(time.size), np.full(time.size, ABSENT)
    values[good] = rest / np.sqrt(variance)
    measured[good] = np.minimum(error[good] ** 2 / variance, ABSENT)
    signal = float(np.clip(1.0 - np.mean(np.minimum(measured[good], 1.0)), 0.05, 1.0))
    return values, measured, signal


def _nights(series: TimeSeries, width: float) -> tuple[IntArray, IntArray]:
    """Group of each row (night and instrument), and the first row of each group."""
    cell = np.floor(series.time / width).astype(np.intp)
    key = cell * len(series.instruments) + series.instrument
    _, first, group = np.unique(key, return_index=True, return_inverse=True)
    return group.astype(np.intp), first.astype(np.intp)


def indicator_channels(series: TimeSeries) -> Channels | None:
    """All indicators with at least 20 nights; None where there is none.

    Velocities are never looked at, because they hold the planets. Rows are nights (not
    exposures), each instrument with its own zero point; above 400 nights neighbouring nights are
    binned.
    """
    if not series.indicators or series.n_obs < _MIN_POINTS:
        return None
    width = 1.0
    group, first = _nights(series, width)
    while first.size > 400:
        width += 1.0
        group, first = _nights(series, width)
    time = np.bincount(group, series.time) / np.bincount(group)
    label = series.instrument[first].astype(np.intp)
    order = np.argsort(time, kind="stable")
    names, values, variances, signals = [], [], [], []
    for item in series.indicators:
        good = np.isfinite(item.value) & np.isfinite(item.error) & (item.error > 0.0)
        weight = np.zeros(series.n_obs)
        weight[good] = 1.0 / item.error[good] ** 2
        total = np.bincount(group, weight, first.size)
        with np.errstate(invalid="ignore", divide="ignore"):
            value = np.bincount(group, weight * np.where(good, item.value, 0.0)) / total
            error = 1.0 / np.sqrt(total)
        cleaned = _clean(time[order], value[order], error[order], label[order], _TREND_LENGTH)
        if cleaned is not None:
            names.append(item.name)
            values.append(cleaned[0])
            variances.append(cleaned[1])
            signals.append(cleaned[2])
    if not names:
        return None
    return Channels(
        tuple(names), time[order], np.array(values), np.array(variances), np.array(signals)
    )


def photometry_channel(series: TimeSeries) -> Channels | None:
    """The photometry, binned to at most 256 points; None with fewer than 20."""
    phot = series.photometry
    if phot is None:
        return None
    good = np.isfinite(phot.time) & np.isfinite(phot.flux)
    good &= np.isfinite(phot.flux_err) & (phot.flux_err > 0.0)
    if np.count_nonzero(good) < _MIN_POINTS:
        return None
    time, flux, error = phot.time[good], phot.flux[good], phot.flux_err[good]
    width = 0.125
    while np.unique(np.floor(time / width)).size > 256:
        width *= 1.25
    _, group = np.unique(np.floor(time / width), return_inverse=True)
    weight = 1.0 / error**2
    total = np.bincount(group, weight)
    binned = np.bincount(group, weight * time) / total
    value = np.bincount(group, weight * flux) / total
    label = np.zeros(binned.size, dtype=np.intp)
    cleaned = _clean(binned, value, 1.0 / np.sqrt(total), label, 2.0 * _TREND_LENGTH)
    if cleaned is None:
        return None
    return Channels(
        ("photometry",), binned, cleaned[0][None], cleaned[1][None], np.array([cleaned[2]])
    )
