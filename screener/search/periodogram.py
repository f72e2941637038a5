"""Likelihood periodograms: the gain of one more sinusoid at each frequency.

Every linear term of the model (zero points, slope, amplitudes of orbits accepted so far) is
re-fitted at each frequency: their projection is part of the precision matrix. In white noise this
is the generalised Lomb-Scargle periodogram with nuisance terms (Zechmeister & Kurster 2009, A&A
496, 577; Baluev 2009); on top of an activity covariance it is the same, whitened (Delisle, Hara
& Segransan 2020, A&A 635, A83).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array

__all__ = ["SHORTEST_PERIOD", "Peak", "Precision", "frequency_grid", "peaks", "power", "window"]

SHORTEST_PERIOD = 0.55  # d; planets at 0.74 d and 0.85 d exist
_CHUNK = 2048


@dataclass(frozen=True, eq=False)
class Precision:
    """Inverse covariance of the velocities with the linear terms projected out.

    Either dense (``matrix``), or diag(``weight``) - ``low_rank`` ``low_rank``^T, which costs
    N instead of N^2 per frequency. ``weighted`` is the inverse covariance times the data.
    """

    weighted: Array
    matrix: Array | None = None
    weight: Array | None = None
    low_rank: Array | None = None

    def products(self, cos: Array, sin: Array) -> tuple[Array, Array, Array]:
        """cos.P.cos, cos.P.sin and sin.P.sin for columns of shape (n_obs, m)."""
        if self.matrix is not None:
            p_cos, p_sin = self.matrix @ cos, self.matrix @ sin
            return (
                np.einsum("ij,ij->j", cos, p_cos),
                np.einsum("ij,ij->j", sin, p_cos),
                np.einsum("ij,ij->j", sin, p_sin),
            )
        assert self.weight is not None and self.low_rank is not None
        l_cos, l_sin = self.low_rank.T @ cos, self.low_rank.T @ sin
        return (
            self.weight @ (cos * cos) - np.einsum("ij,ij->j", l_cos, l_cos),
            self.weight @ (cos * sin) - np.einsum("ij,ij->j", l_cos, l_sin),
            self.weight @ (sin * sin) - np.einsum("ij,ij->j", l_sin, l_sin),
        )


@dataclass(frozen=True)
class Peak:
    """A local maximum of a periodogram."""

    frequency: float
    power: float


def frequency_grid(
    baseline: float, oversampling: float = 5.0, shortest_period: float = SHORTEST_PERIOD
) -> Array:
    """Regular grid in 1/d, from 2.5 baselines down to the shortest period."""
    step = 1 / (oversampling * baseline)
    return np.arange(0.4 / baseline, 1 / shortest_period + step, step)


def power(time: Array, precision: Precision, frequency: Array) -> Array:
    """Log-likelihood gain of a sinusoid of free amplitude and phase, shape of ``frequency``.

    The noise is taken as known. ``time`` has shape (n_obs,), in d; ``frequency`` is in 1/d.
    """
    centred = time - time.mean()
    out = np.empty(frequency.size)
    for start in range(0, frequency.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        angle = 2 * np.pi * np.outer(centred, frequency[part])
        cos, sin = np.cos(angle), np.sin(angle)
        cc, cs, ss = precision.products(cos, sin)
        c, s = precision.weighted @ cos, precision.weighted @ sin
        # a sampling that cannot tell the sinusoid from the linear terms gives no gain
        determinant = cc * ss - cs * cs
        safe = determinant > 1e-6 * (cc + ss) ** 2
        gain = 0.5 * (c * c * ss - 2 * c * s * cs + s * s * cc)
        out[part] = np.where(safe, gain / np.where(safe, determinant, 1.0), 0.0)
    return out


def window(time: Array, frequency: Array) -> Array:
    """Amplitude of the spectral window |sum exp(2 pi i f t)| / n (Deeming 1975, ApSS 36, 137)."""
    out = np.empty(frequency.size)
    centred = time - time.mean()
    for start in range(0, frequency.size, _CHUNK):
        part = slice(start, start + _CHUNK)
        angle = 2 * np.pi * np.outer(centred, frequency[part])
        out[part] = np.hypot(np.cos(angle).sum(axis=0), np.sin(angle).sum(axis=0))
    return out / time.size


def peaks(frequency: Array, gain: Array, count: int, baseline: float) -> list[Peak]:
    """The highest local maxima, at least one resolution element (1 / baseline) apart."""
    inner = np.flatnonzero((gain[1:-1] >= gain[:-2]) & (gain[1:-1] > gain[2:])) + 1
    if gain[0] > gain[1]:  # power that still rises at the long end is a trend, kept as a peak
        inner = np.append(inner, 0)
    order = inner[np.argsort(gain[inner])[::-1]]
    chosen: list[Peak] = []
    for index in order:
        if all(abs(frequency[index] - p.frequency) > 1 / baseline for p in chosen):
            chosen.append(Peak(float(frequency[index]), float(gain[index])))
        if len(chosen) == count:
            break
    return chosen
