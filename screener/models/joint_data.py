"""What a joint model is given and what it gives back: series, orbits, solutions."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from screener.core import Array, IntArray
from screener.models.kepler import solve_kepler
from screener.models.kernels import Lags

__all__ = ["JointData", "OrbitTerm", "Solution", "orbit_columns"]


@dataclass(frozen=True, eq=False)
class JointData:
    """Series on common times, padded: shapes (n_series, n_obs) unless said otherwise.

    The velocities are series 0. Where ``mask`` is False a value was not measured. ``jitter`` holds
    for each value the index of its jitter parameter, ``columns`` (n_series, n_obs, n_linear) the
    linear terms and ``column_sd`` (n_linear,) the standard deviations of their priors.
    """

    time: Array
    value: Array
    variance: Array
    mask: np.ndarray[tuple[int, ...], np.dtype[np.bool_]]
    jitter: IntArray
    n_jitter: int
    columns: Array
    column_sd: Array

    @cached_property
    def stacked(self) -> Array:
        """Values and linear terms side by side, zero where not measured: (.., 1 + n_linear)."""
        both = np.concatenate([self.value[:, :, None], self.columns], axis=2)
        return np.where(self.mask[:, :, None], both, 0.0)

    @cached_property
    def label(self) -> IntArray:
        """``jitter`` in one row."""
        return np.ascontiguousarray(self.jitter.ravel())

    @cached_property
    def n_values(self) -> int:
        return int(self.mask.sum())

    @cached_property
    def unmeasured(self) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]] | None:
        """Where nothing was measured; None if everything was."""
        return None if self.mask.all() else ~self.mask

    @cached_property
    def lags(self) -> Lags:
        return Lags.of(self.time)

    @property
    def n_series(self) -> int:
        return int(self.value.shape[0])

    @property
    def n_obs(self) -> int:
        return int(self.time.size)

    @cached_property
    def mid_time(self) -> float:
        return float(0.5 * (self.time[0] + self.time[-1]))

    @cached_property
    def span(self) -> float:
        return float(np.ptp(self.time))


@dataclass(frozen=True)
class OrbitTerm:
    """An orbit in the model, around a first guess of its frequency.

    Free parameters: the frequency offset times 2 pi times the baseline and, if ``eccentric``, a
    vector p with e = |p| / sqrt(1 + |p|^2) and the mean anomaly at mid-time -arg(p).
    """

    period: float
    amplitude_sd: float
    eccentric: bool = False

    @property
    def n_parameters(self) -> int:
        return 3 if self.eccentric else 1


@dataclass(frozen=True, eq=False)
class Solution:
    """The model at one point of its parameters, with what searches and predictions need.

    ``rv_precision`` (n_obs, n_obs) and ``rv_weighted`` (n_obs,) are the velocity rows of the
    inverse covariance (linear terms marginalised) and of its product with the data, so that the
    gain of any further column x is 0.5 (x . rv_weighted)^2 / (x . rv_precision . x).
    """

    log_likelihood: float
    linear_mean: Array
    linear_covariance: Array
    rv_precision: Array
    rv_weighted: Array
    activity_mean: Array  # velocity part of the latent process at the data, scaled units

    def velocity_block(self, rows: IntArray) -> Array:
        """Rows and columns ``rows`` of ``rv_precision``."""
        return self.rv_precision[np.ix_(rows, rows)]


def orbit_columns(
    term: OrbitTerm, parameters: Array, data: JointData, gradient: bool
) -> tuple[Array, list[Array]]:
    """Columns (n_obs, 2) and their derivatives with respect to each parameter."""
    frequency = 1 / term.period + parameters[0] / (2 * math.pi * data.span)
    lever = data.time - data.mid_time
    anomaly = 2 * math.pi * frequency * lever
    if not term.eccentric:
        cos, sin = np.cos(anomaly), np.sin(anomaly)
        columns = np.empty((cos.size, 2))
        columns[:, 0] = cos
        np.negative(sin, out=columns[:, 1])
        if not gradient:
            return columns, []
        rate = lever / -data.span
        by_frequency = np.empty((cos.size, 2))
        np.multiply(sin, rate, out=by_frequency[:, 0])
        np.multiply(cos, rate, out=by_frequency[:, 1])
        return columns, [by_frequency]
    x, y = parameters[1], parameters[2]
    size2 = x * x + y * y
    size = math.sqrt(size2) + 1e-12
    ecc = size / math.sqrt(1 + size2)
    phase = math.atan2(y, x)
    e_anomaly = solve_kepler(anomaly - phase, ecc)
    cos_e = np.cos(e_anomaly)
    shrink = 1 - ecc * cos_e
    cos = (cos_e - ecc) / shrink
    sin = math.sqrt(1 - ecc * ecc) * np.sin(e_anomaly) / shrink
    columns = np.stack([cos + ecc, -sin], axis=1)
    if not gradient:
        return columns, []
    by_mean = (1 + ecc * cos) ** 2 / (1 - ecc * ecc) ** 1.5
    by_ecc = sin * (2 + ecc * cos) / (1 - ecc * ecc)
    d_mean = np.stack([-sin * by_mean, -cos * by_mean], axis=1)
    d_ecc = np.stack([1 - sin * by_ecc, -cos * by_ecc], axis=1)
    d_size = (1 + size2) ** -1.5
    d_frequency = d_mean * (lever / data.span)[:, None]
    d_x = d_ecc * (d_size * x / size) + d_mean * (y / size2 if size2 > 0 else 0.0)
    d_y = d_ecc * (d_size * y / size) - d_mean * (x / size2 if size2 > 0 else 0.0)
    return columns, [d_frequency, d_x, d_y]
