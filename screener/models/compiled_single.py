"""Likelihood and gradient of one series alone, in three compiled passes around LAPACK.

A single series whose covariance is a^2 K + noise spends more time in small array operations than
in its factorisation; here all of them, the orbits among them, run in loops. With one series the
space of the loadings is the whole space, so that the projections of the general form fall away:
whitened residuals are B^-1 times the data, and the derivative in each log variance is the diagonal
of half (u u^T + V V^T - B^-1). ``JointModel`` in numpy is the reference.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import blas

from screener.core import Array, NumericalError
from screener.models.compiled import back_one, compile_with, fill_one
from screener.models.linear_algebra import (
    TOGETHER,
    cholesky,
    gram_of_inverse,
    inverse_triangle,
)

if TYPE_CHECKING:
    from screener.models.joint import JointModel

__all__ = ["CompiledSingle"]

_LOG_2PI = math.log(2 * math.pi)
_MARKLEY_C1 = 3.0 * math.pi**2 / (math.pi**2 - 6.0)
_MARKLEY_C2 = 1.6 * math.pi / (math.pi**2 - 6.0)
_EXACT = {"contract", "nsz"}


@compile_with(_EXACT)
def _eccentric_anomaly(anomaly: float, ecc: float) -> float:
    """``kepler.solve_kepler`` of one value (Markley 1995, CeMDA 63, 101)."""
    turns = 2 * math.pi * np.round(anomaly / (2 * math.pi))
    reduced = anomaly - turns
    m = abs(reduced)
    alpha = _MARKLEY_C1 + _MARKLEY_C2 * (math.pi - m) / (1 + ecc)
    d = 3 * (1 - ecc) + alpha * ecc
    alpha_d = alpha * d
    r = (3 * alpha_d * (d - 1 + ecc) + m * m) * m
    q = 2 * alpha_d * (1 - ecc) - m * m
    w = np.cbrt(abs(r) + math.sqrt(q * q * q + r * r)) ** 2
    start = (2 * r * w / (w * w + w * q + q * q) + m) / d
    sin_e, cos_e = math.sin(start), math.cos(start)
    f0 = start - ecc * sin_e - m
    f1 = 1 - ecc * cos_e
    f2 = ecc * sin_e
    f3 = 1 - f1
    d3 = -f0 / (f1 - 0.5 * f0 * f2 / f1)
    d4 = -f0 / (f1 + 0.5 * d3 * f2 + d3 * d3 * f3 / 6)
    d5 = -f0 / (f1 + 0.5 * d4 * f2 + d4 * d4 * f3 / 6 - d4 * d4 * d4 * f2 / 24)
    return float(math.copysign(start + d5, reduced) + turns)


@compile_with(_EXACT)
def _circular(lever: Array, span: float, frequency: float, columns: Array, slopes: Array) -> None:
    """The two columns of a circular orbit and their derivatives, as ``orbit_columns``."""
    rate = 2 * math.pi * frequency
    for i in range(lever.size):
        angle = rate * lever[i]
        cos, sin = math.cos(angle), math.sin(angle)
        columns[0, i], columns[1, i] = cos, -sin
        along = lever[i] / span
        slopes[0, 0, i], slopes[0, 1, i] = -sin * along, -cos * along


@compile_with(_EXACT)
def _eccentric(
    lever: Array, span: float, frequency: float, x: float, y: float, columns: Array, slopes: Array
) -> None:
    """The same of an eccentric orbit."""
    size2 = x * x + y * y
    size = math.sqrt(size2) + 1e-12
    ecc = size / math.sqrt(1 + size2)
    phase = math.atan2(y, x)
    rate = 2 * math.pi * frequency
    minor = math.sqrt(1 - ecc * ecc)
    d_size = (1 + size2) ** -1.5
    x_size, y_size = d_size * x / size, d_size * y / size
    x_mean, y_mean = (y / size2, -x / size2) if size2 > 0 else (0.0, 0.0)
    for i in range(lever.size):
        e_anomaly = _eccentric_anomaly(rate * lever[i] - phase, ecc)
        cos_e, sin_e = math.cos(e_anomaly), math.sin(e_anomaly)
        shrink = 1 - ecc * cos_e
        cos, sin = (cos_e - ecc) / shrink, minor * sin_e / shrink
        columns[0, i], columns[1, i] = cos + ecc, -sin
        by_mean = (1 + ecc * cos) ** 2 / minor**3
        by_ecc = sin * (2 + ecc * cos) / (minor * minor)
        along = lever[i] / span
        mean_0, mean_1 = -sin * by_mean, -cos * by_mean
        ecc_0, ecc_1 = 1 - sin * by_ecc, -cos * by_ecc
        slopes[0, 0, i], slopes[0, 1, i] = mean_0 * along, mean_1 * along
        slopes[1, 0, i] = ecc_0 * x_size + mean_0 * x_mean
        slopes[1, 1, i] = ecc_1 * x_size + mean_1 * x_mean
        slopes[2, 0, i] = ecc_0 * y_size + mean_0 * y_mean
        slopes[2, 1, i] = ecc_1 * y_size + mean_1 * y_mean


@compile_with(_EXACT)
def _ahead(
    time: Array, lever: Array, span: float, stacked: Array, variance: Array, jitter: Array,
    n_jitter: int, frequency: Array, sizes: Array, parameters: Array,
) -> tuple[Array, Array, Array, Array, Array, Array, Array, Array, float]:  # fmt: skip
    """Everything before the factorisation of B.

    ``stacked`` (1 + n_linear, n): data and linear terms; ``sizes``: parameters of each orbit.
    """
    n, given = time.size, stacked.shape[0]
    design = np.empty((given + 2 * sizes.size, n))
    slopes = np.empty((sizes.sum(), 2, n))
    at, row, start = 4 + n_jitter, given, 0
    for k in range(sizes.size):
        own = frequency[k] + parameters[at] / (2 * math.pi * span)
        columns, own_slopes = design[row : row + 2], slopes[start : start + sizes[k]]
        if sizes[k] == 1:
            _circular(lever, span, own, columns, own_slopes)
        else:
            _eccentric(
                lever, span, own, parameters[at + 1], parameters[at + 2], columns, own_slopes
            )
        at, row, start = at + sizes[k], row + 2, start + sizes[k]
    amplitude = parameters[3]
    sign = 1.0 if amplitude > 0 else (-1.0 if amplitude < 0 else 0.0)
    # by weight: sqrt(1 / variance) with the sign of the loading; share of jitter in the variance
    weight, share, r = np.empty(n), np.empty(n), np.empty(n)
    log_variance = 0.0
    for i in range(n):
        added = math.exp(2 * parameters[4 + jitter[i]])
        total = variance[i] + added
        weight[i] = sign / math.sqrt(total)
        share[i] = added / total
        r[i] = amplitude * weight[i]
        log_variance += math.log(total)
    for j in range(given):
        for i in range(n):
            design[j, i] = stacked[j, i] * weight[i]
    for j in range(given, design.shape[0]):
        for i in range(n):
            design[j, i] *= weight[i]
    omega = 2 * math.pi / math.exp(parameters[0])
    c, s = np.empty(n), np.empty(n)
    for i in range(n):
        c[i], s[i] = math.cos(omega * time[i]), math.sin(omega * time[i])
    gg, b = np.empty((n, n)), np.empty((n, n))
    fill_one(time, c, s, math.exp(parameters[1]), 0.25 * math.exp(-2 * parameters[2]), r, gg, b)
    return design, slopes, weight, share, c, s, gg, b, log_variance


@compile_with(_EXACT)
def _between(
    half: Array, factor: Array, precision: Array, marginal: bool
) -> tuple[float, float, Array, Array]:
    """Linear terms: chi^2, log determinants, mixture and mixed rows; ``half`` (1 + p, n).

    Not a number where the normal matrix has no Cholesky factor.
    """
    p, n = half.shape[0] - 1, half.shape[1]
    gram = np.zeros((p + 1, p + 1))
    for i in range(p + 1):
        for j in range(i + 1):
            total = 0.0
            for k in range(n):
                total += half[i, k] * half[j, k]
            gram[i, j] = total
    lower = np.zeros((p, p))
    log_small = 0.0
    for i in range(p):
        for j in range(i + 1):
            total = gram[i + 1, j + 1]
            if i == j:
                total += precision[i]
            for k in range(j):
                total -= lower[i, k] * lower[j, k]
            lower[i, j] = math.sqrt(total) if i == j else total / lower[j, j]
        log_small += math.log(lower[i, i])
    inverse = np.zeros((p, p))
    for j in range(p):
        inverse[j, j] = 1 / lower[j, j]
        for i in range(j + 1, p):
            total = 0.0
            for k in range(j, i):
                total -= lower[i, k] * inverse[k, j]
            inverse[i, j] = total / lower[i, i]
    mix = np.zeros((1 + p if marginal else 1, 1 + p))  # transposed against the general form
    mix[0, 0] = 1.0
    chi2 = gram[0, 0]
    for i in range(p):
        along = 0.0
        for j in range(i + 1):
            along += inverse[i, j] * gram[j + 1, 0]
        chi2 -= along * along
        for j in range(i + 1):
            mix[0, 1 + j] -= inverse[i, j] * along
            if marginal:
                mix[1 + i, 1 + j] = inverse[i, j]
    mixed = np.zeros((mix.shape[0], n))
    for i in range(mix.shape[0]):
        for j in range(p + 1):
            if mix[i, j] != 0.0:
                for k in range(n):
                    mixed[i, k] += mix[i, j] * half[j, k]
    log_det = 0.0
    for k in range(n):
        log_det += math.log(factor[k, k])
    return chi2 + 2 * log_det, log_small, mix, mixed


@compile_with(_EXACT)
def _behind(
    time: Array, parameters: Array, jitter: Array, n_jitter: int, slopes: Array, sizes: Array,
    weight: Array, share: Array, c: Array, s: Array, gg: Array, weights: Array, st: Array,
    mix: Array, given: int,
) -> Array:  # fmt: skip
    """The gradient; ``weights`` (overwritten on its diagonal) is twice that in B."""
    n = time.size
    out = np.zeros(parameters.size)
    for i in range(n):
        out[4 + jitter[i]] += weights[i, i] * share[i]
        weights[i, i] *= 0.5
    by_r, r = np.zeros(n), parameters[3] * weight
    total, lag2, cos, lag_sin = back_one(time, c, s, r, gg, weights, by_r)
    shape_term = 0.25 * math.exp(-2 * parameters[2])
    out[0] = 2 * math.pi / math.exp(parameters[0]) * shape_term * lag_sin
    out[1] = lag2 * math.exp(-2 * parameters[1])
    out[2] = 2 * shape_term * (total - cos)
    for i in range(n):
        out[3] += by_r[i] * weight[i]
    at, column, start = 4 + n_jitter, given, 0
    along = np.empty((2, n))
    for k in range(sizes.size):
        for j in range(2):
            for i in range(n):
                along[j, i] = 0.0
            for m in range(mix.shape[0]):
                part = -mix[m, column + j]
                for i in range(n):
                    along[j, i] += part * st[m, i]
            for i in range(n):
                along[j, i] *= weight[i]
        for m in range(sizes[k]):
            total = 0.0
            for j in range(2):
                for i in range(n):
                    total += slopes[start + m, j, i] * along[j, i]
            out[at + m] = total
        at, column, start = at + sizes[k], column + 2, start + sizes[k]
    return out


class CompiledSingle:
    """Value and gradient of a ``JointModel`` of one fully measured series, no derivative."""

    def __init__(self, model: JointModel) -> None:
        data = model.data
        self._time = data.lags.time
        self._lever = data.time - data.mid_time
        self._span = data.span
        self._stacked = np.ascontiguousarray(data.stacked[0].T)
        self._variance = np.ascontiguousarray(data.variance[0])
        self._jitter, self._n_jitter = data.label, data.n_jitter
        self._frequency = np.array([1 / o.period for o in model.orbits])
        self._sizes = np.array([o.n_parameters for o in model.orbits], dtype=np.intp)
        self._precision = 1 / model.column_sd**2
        self._marginal = not model.profile
        self._constant = data.n_values * _LOG_2PI
        self._log_column_sd = float(np.log(model.column_sd).sum())

    def value_and_gradient(self, parameters: Array) -> tuple[float, Array]:
        """As ``JointModel.value_and_gradient``.

        Raises
        ------
        NumericalError
            Where a factorisation fails.
        """
        design, slopes, weight, share, c, s, gg, b, log_variance = _ahead(
            self._time, self._lever, self._span, self._stacked, self._variance, self._jitter,
            self._n_jitter, self._frequency, self._sizes, parameters,
        )  # fmt: skip
        factor = cholesky(b.T, "the activity model")
        triangle = inverse_triangle(factor)
        small = triangle.shape[0] <= TOGETHER  # as in ``linear_algebra.multiply``
        half = design @ triangle.T if small else blas.dtrmm(1.0, triangle, design.T, lower=1).T
        fixed, log_small, mix, mixed = _between(half, factor.T, self._precision, self._marginal)
        st = mixed @ triangle if small else blas.dtrmm(1.0, triangle, mixed.T, lower=1, trans_a=1).T
        value = -0.5 * (fixed + log_variance + self._constant)
        if self._marginal:
            value -= log_small + self._log_column_sd
        if not math.isfinite(value):
            raise NumericalError(f"the log-likelihood is {value} (chi2 and log det {fixed})")
        weights = gram_of_inverse(triangle, st.T)
        gradient = _behind(
            self._time, parameters, self._jitter, self._n_jitter, slopes, self._sizes, weight,
            share, c, s, gg, weights.T, st, mix, self._stacked.shape[0],
        )  # fmt: skip
        return float(value), gradient
