"""The rotation period from indicators and from photometry: candidates and their densities."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, TimeSeries
from screener.models.rotation.channels import (
    ABSENT,
    Channels,
    indicator_channels,
    photometry_channel,
)
from screener.models.rotation.density import PERIOD_GRID, PeriodDensity
from screener.models.rotation.quasiperiodic import (
    lag_autocorrelation,
    lag_spectrum,
    period_likelihood,
)

__all__ = ["PeriodicSource", "autocorrelation_period", "from_indicators", "from_photometry"]

_SHORTEST, _LONGEST = 1.2, 180.0  # d; nightly sampling ends the one, seasons the other
# The noise is not quite of the assumed kind, so likelihoods count a little less; and a channel may
# show no rotation at all. Both tuned on simulated stars.
_TEMPER = 0.7
_CHANNEL_MUTE = 0.3
_AMBIGUOUS = 0.08
_FLOOR = 0.1


@dataclass(frozen=True, eq=False)
class PeriodicSource:
    """What series of measurements say about the rotation period.

    ``candidates`` holds (period in days, weight), the best first, weights adding up to at most
    one; ``significance`` is the log-likelihood of the best period over "no rotation seen".
    """

    name: str
    density: PeriodDensity
    candidates: tuple[tuple[float, float], ...]
    significance: float
    cross_check: float | None  # autocorrelation period, d


def _peaks(values: Array, n: int) -> list[int]:
    """Indices of the n highest local maxima."""
    inner = np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] > values[2:])) + 1
    return [int(k) for k in inner[np.argsort(values[inner])[::-1][:n]]]


def _independent(channels: Channels) -> float:
    """Effective number of independent channels over their number, between 1/n and 1.

    Channels see the same spots: with correlations r of the cleaned values, n^2 / sum(r^2) of n
    channels are worth as much as independent ones.
    """
    known = channels.variance < ABSENT
    value = np.where(known, channels.value, 0.0)
    n = len(channels.names)
    r = np.ones((n, n))
    for i in range(n):
        for j in range(i):
            both = known[i] & known[j]
            size = float(np.sum(value[i, both] ** 2) * np.sum(value[j, both] ** 2))
            cross = float(np.sum(value[i, both] * value[j, both]))
            r[i, j] = r[j, i] = cross / np.sqrt(size) if size > 0.0 else 0.0
    return float(n / np.sum(r**2))


def _pooled(likelihood: Array, independent: float) -> Array:
    """Channels together: each says something, or with some chance nothing."""
    spoken = np.log(1.0 - _CHANNEL_MUTE) + _TEMPER * likelihood
    total = np.sum(np.logaddexp(spoken, np.log(_CHANNEL_MUTE)), axis=1)
    return np.asarray(independent * total)


def autocorrelation_period(channels: Channels) -> float | None:
    """Period (d) of the first high maximum of the autocorrelation; None where there is none.

    A maximum counts when the one at twice its lag does not contradict it and it stands at least
    0.1 above the neighbouring minimum.
    """
    step = 1.0 if float(np.median(np.diff(channels.time))) > 0.5 else 0.25
    span = min(_LONGEST, 0.6 * float(channels.time[-1] - channels.time[0]))
    raw = lag_autocorrelation(channels, span, step)[1:]
    known = np.isfinite(raw)
    if np.count_nonzero(known) < 12:
        return None
    lag = step * np.arange(1, raw.size + 1)
    filled = np.interp(lag, lag[known], raw[known])
    # smoothing over a tenth of the lag, as the peaks broaden with lag
    width = np.maximum(0.08 * lag, 0.6 * step)
    kernel = np.exp(-0.5 * ((lag[None, :] - lag[:, None]) / width[:, None]) ** 2)
    smooth = (kernel @ filled) / np.sum(kernel, axis=1)
    for k in sorted(_peaks(smooth, 8)):
        before = float(np.min(smooth[: k + 1]))
        higher = [p for p in _peaks(smooth, 4) if smooth[p] > smooth[k] + 0.1 and p > k]
        if smooth[k] > 0.05 and smooth[k] - before > 0.1 and not higher:
            return float(lag[k])
    return None


def _periodic(channels: Channels, name: str, block_size: int, most_blocks: int) -> PeriodicSource:
    # periods beyond the span are tested as well: the data hardly tell them apart from a slow
    # drift, and the density must say so
    coarse: Array = np.geomspace(_SHORTEST, _LONGEST, 72)
    independent = _independent(channels)
    rough = period_likelihood(
        channels, coarse, fine=False, block_size=block_size, most_blocks=most_blocks
    )
    total = _pooled(rough, independent)
    frequency = np.arange(1.0 / _LONGEST, 1.0 / _SHORTEST, 1.0 / 1500.0)
    tops = [float(coarse[k]) for k in _peaks(total, 4)] + [float(coarse[int(np.argmax(total))])]
    for coherence in (40.0, 150.0):
        power = lag_spectrum(channels, frequency, coherence)
        tops += [float(1.0 / frequency[k]) for k in _peaks(power, 3)]
    near = np.array([0.97, 0.985, 1.0, 1.015, 1.03])
    fine: Array = np.unique(np.round(np.outer(tops, near).ravel(), 4))
    fine = fine[(fine > _SHORTEST) & (fine < _LONGEST)]
    second = period_likelihood(channels, fine, block_size=block_size, most_blocks=most_blocks)
    # a coarse point that has fine ones beside it gives way to them
    lonely = np.min(np.abs(np.log(coarse[:, None] / fine[None, :])), axis=1) > 0.02
    periods = np.append(coarse[lonely], fine)
    values = np.append(total[lonely], _pooled(second, independent))
    order = np.argsort(periods)
    periods, values = periods[order], values[order]
    log_density = np.interp(
        np.log(PERIOD_GRID), np.log(periods), values, left=min(0.0, float(values[0]))
    )
    density = PeriodDensity.from_log(log_density)
    chosen: list[tuple[float, float]] = []
    for k in np.argsort(values)[::-1]:
        period = float(periods[k])
        if all(abs(np.log(period / other)) > 0.12 for other, _ in chosen):
            chosen.append((period, density.chance(0.9 * period, 1.1 * period)))
        if len(chosen) == 5:
            break
    return PeriodicSource(
        name,
        density.with_ambiguity(_AMBIGUOUS).with_floor(_FLOOR),
        tuple(sorted(chosen, key=lambda item: -item[1])),
        float(np.max(values)),
        autocorrelation_period(channels),
    )


def from_indicators(series: TimeSeries) -> PeriodicSource | None:
    """All indicators jointly; None with fewer than 20 nights of each."""
    channels = indicator_channels(series)
    return None if channels is None else _periodic(channels, "indicators", 80, 4)


def from_photometry(series: TimeSeries) -> PeriodicSource | None:
    """The photometry; None with fewer than 20 points."""
    channels = photometry_channel(series)
    return None if channels is None else _periodic(channels, "photometry", 100, 2)
