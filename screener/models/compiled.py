"""The quasi-periodic likelihood in compiled loops: one pass forward, one pass back.

Needs numba (extra ``fast``); imported only where it is asked for. The numpy form is the reference,
and the formulas are those of ``kernels.QuasiPeriodic`` and ``latent.NumpyEngine``.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numba
import numpy as np
from scipy.linalg import blas

from screener.core import Array
from screener.models.kernels import Blocks, Lags

__all__ = ["CompiledQuasiPeriodic"]

_SHIFT = np.int64(52)  # bits of a double's mantissa
_BIAS = np.int64(1023)
_LOG2_E = 1 / math.log(2)
_LN2_HIGH = 0.693147180369123816490  # Cody & Waite (1980): ln 2 in two parts
_LN2_LOW = 1.90821492927058770002e-10


def _compile(fast: set[str]) -> Callable[[Any], Any]:
    def decorate(function: Any) -> Any:
        try:
            return numba.njit(cache=True, fastmath=fast, error_model="numpy")(function)
        except RuntimeError:  # nowhere to keep the compiled code
            return numba.njit(fastmath=fast, error_model="numpy")(function)

    return decorate


_CAREFUL = {"contract", "nsz"}
_SUMS = {"contract", "nsz", "reassoc", "arcp"}  # sums in any order, so that they are vectorised


@_compile(_CAREFUL)
def _exponential(x: Array, out: Array, power: Array, bits: Array, count: int) -> None:
    """exp of x <= 0, to 1e-15 relative; ``bits`` is ``power`` seen as integers.

    Written out because the compiler cannot vectorise calls of the library's exp.
    """
    for j in range(count):
        v = max(x[j], -700.0)
        whole = np.floor(v * _LOG2_E + 0.5)
        v = (v - whole * _LN2_HIGH) - whole * _LN2_LOW
        p = 1.0 / 6227020800.0
        p = p * v + 1.0 / 479001600.0
        p = p * v + 1.0 / 39916800.0
        p = p * v + 1.0 / 3628800.0
        p = p * v + 1.0 / 362880.0
        p = p * v + 1.0 / 40320.0
        p = p * v + 1.0 / 5040.0
        p = p * v + 1.0 / 720.0
        p = p * v + 1.0 / 120.0
        p = p * v + 1.0 / 24.0
        p = p * v + 1.0 / 6.0
        p = p * v + 0.5
        p = p * v + 1.0
        out[j] = p * v + 1.0
        bits[j] = (np.int64(whole) + _BIAS) << _SHIFT
    for j in range(count):
        out[j] *= power[j]


@_compile(_CAREFUL)
def _fill_one(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, r: Array, gg: Array, b: Array
) -> None:
    """Upper triangles of the kernel and of B, row by row."""
    n = time.size
    exponent, power = np.empty(n), np.empty(n)
    bits = power.view(np.int64)
    rate = -0.5 / decay**2
    for i in range(n):
        ti, ci, si, ri = time[i], c[i], s[i], r[i]
        for j in range(i, n):
            lag = ti - time[j]
            exponent[j] = rate * lag * lag + shape_term * (ci * c[j] + si * s[j] - 1.0)
        _exponential(exponent[i:], gg[i, i:], power[i:], bits[i:], n - i)
        for j in range(i, n):
            b[i, j] = gg[i, j] * ri * r[j]
        b[i, i] += 1.0


@_compile(_CAREFUL)
def _fill_two(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, omega: float, r: Array,
    gg: Array, dg: Array, dd: Array, b: Array,
) -> None:  # fmt: skip
    """All of the kernel's blocks and the upper triangle of B."""
    n = time.size
    exponent, power = np.empty(n), np.empty(n)
    bits = power.view(np.int64)
    inverse = 1 / decay**2
    bump = omega * omega * shape_term
    q2 = 1 / (inverse + bump)
    q = math.sqrt(q2)
    r11, r12, r22 = r[0], r[1], r[2]
    for i in range(n):
        ti, ci, si = time[i], c[i], s[i]
        r11i, r12i, r22i = r11[i], r12[i], r22[i]
        for j in range(n):
            lag = ti - time[j]
            exponent[j] = -0.5 * inverse * lag * lag + shape_term * (ci * c[j] + si * s[j] - 1.0)
        _exponential(exponent, gg[i], power, bits, n)
        for j in range(n):
            k = gg[i, j]
            slope = -q * (inverse * (ti - time[j]) + omega * shape_term * (si * c[j] - ci * s[j]))
            bend = q2 * (bump * (ci * c[j] + si * s[j]) + inverse) - slope * slope
            dg[i, j] = k * slope
            dd[i, j] = k * bend
            b[i, n + j] = (r12i * dd[i, j] - r11i * dg[i, j]) * r22[j]
        for j in range(i, n):
            row_g = r11i * gg[i, j] + r12i * dg[i, j]
            row_d = r12i * dd[i, j] - r11i * dg[i, j]
            b[i, j] = row_g * r11[j] + row_d * r12[j]
            b[n + i, n + j] = r22i * dd[i, j] * r22[j]
        b[i, i] += 1.0
        b[n + i, n + i] += 1.0


@_compile(_SUMS)
def _back_one(
    time: Array, c: Array, s: Array, r: Array, gg: Array, weights: Array, by_r: Array
) -> tuple[float, float, float, float]:
    """Sums of f, f lag^2, f cos, f lag sin over the upper triangle; the gradient in r."""
    n = time.size
    total = total_lag2 = total_cos = total_lag_sin = 0.0
    for i in range(n):
        ti, ci, si, ri = time[i], c[i], s[i], r[i]
        row = 0.0
        for j in range(i, n):
            g = weights[i, j] * gg[i, j]
            by_r[j] += g * ri
            y = g * r[j]
            row += y
            f = y * ri
            lag = ti - time[j]
            total_lag2 += f * lag * lag
            total_cos += f * (ci * c[j] + si * s[j])
            total_lag_sin += f * lag * (si * c[j] - ci * s[j])
        by_r[i] += row
        total += row * ri
    return total, total_lag2, total_cos, total_lag_sin


@_compile(_SUMS)
def _back_two(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, omega: float, r: Array,
    gg: Array, dg: Array, dd: Array, weights: Array, by_r: Array,
) -> tuple[float, float, float]:  # fmt: skip
    """Gradients in the kernel's log parameters and in R; see ``NumpyEngine.backward``."""
    n = time.size
    inverse = 1 / decay**2
    rate = omega * omega * shape_term
    q2 = 1 / (inverse + rate)
    q = math.sqrt(q2)
    r11, r12, r22 = r[0], r[1], r[2]
    on00, on01, on10, on11 = by_r[0, 0], by_r[0, 1], by_r[1, 0], by_r[1, 1]
    f_sum = f_lag2 = f_cos = f_lag_sin = 0.0
    x1_lag = x1_sin = x1_lag_cos = 0.0
    x2_sum = x2_cos = x2_lag_sin = d_q = 0.0
    for i in range(n):
        ti, ci, si = time[i], c[i], s[i]
        r11i, r12i, r22i = r11[i], r12[i], r22[i]
        row00 = row01 = row10 = row11 = 0.0
        for j in range(n):
            u00, u01, u11 = weights[i, j], weights[i, n + j], weights[n + i, n + j]
            k, kd, kdd = gg[i, j], dg[i, j], dd[i, j]
            on00[j] += u00 * (r11i * k + r12i * kd)
            on01[j] += u00 * (r12i * kdd - r11i * kd)
            on10[j] += u01 * (r11i * k + r12i * kd) + u11 * r22i * kd
            on11[j] += u01 * (r12i * kdd - r11i * kd) + u11 * r22i * kdd
            y00 = u00 * r11[j]
            y01 = u00 * r12[j] + u01 * r22[j]
            y11 = u11 * r22[j]
            row00 += y00 * k - y01 * kd
            row01 += y00 * kd + y01 * kdd
            row10 -= y11 * kd
            row11 += y11 * kdd
            w_dg = r12i * y00 - r11i * y01
            w_dd = r12i * y01 + r22i * y11
            lag = ti - time[j]
            cos = ci * c[j] + si * s[j]
            sin = si * c[j] - ci * s[j]
            slope = -q * (inverse * lag + omega * shape_term * sin)
            f = r11i * y00 * k + w_dg * kd + w_dd * kdd
            x2 = w_dd * k
            x1 = w_dg * k - 2.0 * x2 * slope
            d_q += 0.5 * w_dg * kd + w_dd * kdd
            f_sum += f
            f_lag2 += f * lag * lag
            f_cos += f * cos
            f_lag_sin += f * lag * sin
            x1_lag += x1 * lag
            x1_sin += x1 * sin
            x1_lag_cos += x1 * lag * cos
            x2_sum += x2
            x2_cos += x2 * cos
            x2_lag_sin += x2 * lag * sin
        on00[i] += row00
        on01[i] += row01
        on10[i] += row10
        on11[i] += row11
    common = 2.0 * rate * q2 * (d_q - x2_cos)
    d_period = (
        omega * shape_term * (f_lag_sin + q * (x1_sin + omega * x1_lag_cos))
        + rate * q2 * omega * x2_lag_sin
        + common
    )
    d_decay = (f_lag2 + 2.0 * q * x1_lag + 2.0 * q2 * (d_q - x2_sum)) * inverse
    d_shape = 2.0 * shape_term * (f_sum - f_cos) + 2.0 * omega * shape_term * q * x1_sin + common
    return d_period, d_decay, d_shape


class CompiledQuasiPeriodic:
    """The engine of a quasi-periodic kernel."""

    def forward(self, lags: Lags, log_parameters: Array, r: Array) -> tuple[Blocks, Array]:
        period, decay, shape = np.exp(log_parameters).tolist()
        omega = 2 * math.pi / period
        angle = omega * lags.time
        c, s = np.cos(angle), np.sin(angle)
        shape_term = 1 / (4 * shape**2)
        n = c.size
        gg = np.empty((n, n))
        if r.shape[0] == 1:
            b = np.empty((n, n))
            _fill_one(lags.time, c, s, decay, shape_term, r[0], gg, b)
            return Blocks(gg, None, None, (c, s)), b.T
        b = np.empty((2 * n, 2 * n))
        dg, dd = np.empty((n, n)), np.empty((n, n))
        _fill_two(lags.time, c, s, decay, shape_term, omega, r, gg, dg, dd, b)
        return Blocks(gg, dg, dd, (c, s)), b.T

    def backward(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, r: Array, weights: Array
    ) -> tuple[Array, Array]:
        period, decay, shape = np.exp(log_parameters).tolist()
        omega = 2 * math.pi / period
        shape_term = 1 / (4 * shape**2)
        c, s = blocks.cache
        rank = 1 if blocks.dg is None else 2
        by_r = np.zeros((rank, rank, c.size))
        if blocks.dg is None or blocks.dd is None:
            total, lag2, cos, lag_sin = _back_one(
                lags.time, c, s, r[0], blocks.gg, weights, by_r[0, 0]
            )
            by_kernel = [omega * lag_sin, lag2 / decay**2 / shape_term, 2 * (total - cos)]
            return shape_term * np.array(by_kernel), by_r
        by_kernel = _back_two(
            lags.time, c, s, decay, shape_term, omega, r, blocks.gg, blocks.dg, blocks.dd,
            weights, by_r,
        )  # fmt: skip
        return np.array(by_kernel), by_r

    def apply(self, blocks: Blocks, r: Array, columns: Array) -> tuple[Array, ...]:
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
        if dg is None or dd is None:
            # only the upper triangle is there: the lower one for BLAS
            return (np.asarray(blas.dsymm(1.0, gg.T, r[0][:, None] * columns, lower=1)),)
        n = gg.shape[0]
        r11, r12, r22 = r[:, :, None]
        on_g = r11 * columns[:n]
        on_d = r12 * columns[:n] + r22 * columns[n:]
        return gg @ on_g - dg @ on_d, dg @ on_g + dd @ on_d
