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

__all__ = ["CompiledQuasiPeriodic", "back_one", "compile_with", "fill_one"]

_SHIFT = np.int64(52)  # bits of a double's mantissa
_BIAS = np.int64(1023)
_LOG2_E = 1 / math.log(2)
_LN2_HIGH = 0.693147180369123816490  # Cody & Waite (1980): ln 2 in two parts
_LN2_LOW = 1.90821492927058770002e-10


def compile_with(fast: set[str]) -> Callable[[Any], Any]:
    def decorate(function: Any) -> Any:
        try:
            return numba.njit(cache=True, fastmath=fast, error_model="numpy")(function)
        except RuntimeError:  # nowhere to keep the compiled code
            return numba.njit(fastmath=fast, error_model="numpy")(function)

    return decorate


_CAREFUL = {"contract", "nsz"}
_SUMS = {"contract", "nsz", "reassoc", "arcp"}  # sums in any order, so that they are vectorised


# The loops below write to one array each and run over slices from zero: else the compiler cannot
# tell that arrays do not overlap, or indices wrap, and does not vectorise.


@compile_with(_CAREFUL)
def _exponential(x: Array, out: Array, power: Array, bits: Array) -> None:
    """exp of x <= 0, to 1e-15 relative; ``bits`` is ``power`` seen as integers.

    Written out because the compiler cannot vectorise calls of the library's exp.
    """
    for j in range(x.size):
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
    for j in range(x.size):
        out[j] *= power[j]


@compile_with(_CAREFUL)
def fill_one(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, r: Array, gg: Array, b: Array
) -> None:
    """Upper triangles of the kernel and of B, row by row."""
    n = time.size
    exponent, power = np.empty(n), np.empty(n)
    bits = power.view(np.int64)
    rate = -0.5 / decay**2
    for i in range(n):
        ti, ci, si, ri = time[i], shape_term * c[i], shape_term * s[i], r[i]
        tj, cj, sj, rj, x = time[i:], c[i:], s[i:], r[i:], exponent[i:]
        k, row = gg[i, i:], b[i, i:]
        for j in range(n - i):
            lag = ti - tj[j]
            x[j] = rate * lag * lag + (ci * cj[j] + si * sj[j] - shape_term)
        _exponential(x, k, power[i:], bits[i:])
        for j in range(n - i):
            row[j] = k[j] * ri * rj[j]
        row[0] += 1.0


@compile_with(_CAREFUL)
def _fill_two(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, omega: float, r: Array,
    gg: Array, dg: Array, dd: Array, b: Array,
) -> None:  # fmt: skip
    """All of the kernel's blocks and the upper triangle of B."""
    n = time.size
    exponent, power, slope = np.empty(n), np.empty(n), np.empty(n)
    bits = power.view(np.int64)
    inverse = 1 / decay**2
    bump = omega * omega * shape_term
    q2 = 1 / (inverse + bump)
    q = math.sqrt(q2)
    q_inverse, q_bump = q * inverse, q * omega * shape_term
    r11, r12, r22 = r[0], r[1], r[2]
    for i in range(n):
        ti, ci, si = time[i], c[i], s[i]
        r11i, r12i, r22i = r11[i], r12[i], r22[i]
        k, kd, kdd = gg[i], dg[i], dd[i]
        for j in range(n):
            lag = ti - time[j]
            exponent[j] = -0.5 * inverse * lag * lag + shape_term * (ci * c[j] + si * s[j] - 1.0)
        _exponential(exponent, k, power, bits)
        for j in range(n):
            slope[j] = q_bump * (ci * s[j] - si * c[j]) - q_inverse * (ti - time[j])
        for j in range(n):
            bend = q2 * (bump * (ci * c[j] + si * s[j]) + inverse) - slope[j] * slope[j]
            kdd[j] = k[j] * bend
        for j in range(n):
            kd[j] = k[j] * slope[j]
        row = b[i, n:]
        for j in range(n):
            row[j] = (r12i * kdd[j] - r11i * kd[j]) * r22[j]
        k, kd, kdd = gg[i, i:], dg[i, i:], dd[i, i:]
        r11j, r12j, r22j = r11[i:], r12[i:], r22[i:]
        row, last = b[i, i:], b[n + i, n + i :]
        for j in range(n - i):
            row[j] = (r11i * k[j] + r12i * kd[j]) * r11j[j]
        for j in range(n - i):
            row[j] += (r12i * kdd[j] - r11i * kd[j]) * r12j[j]
        for j in range(n - i):
            last[j] = r22i * kdd[j] * r22j[j]
        row[0] += 1.0
        last[0] += 1.0


@compile_with(_SUMS)
def back_one(
    time: Array, c: Array, s: Array, r: Array, gg: Array, weights: Array, by_r: Array
) -> tuple[float, float, float, float]:
    """Sums of f, f lag^2, f cos, f lag sin over the upper triangle; the gradient in r."""
    n = time.size
    total = total_lag2 = total_cos = total_lag_sin = 0.0
    scratch = np.empty(n)
    for i in range(n):
        ti, ci, si, ri = time[i], c[i], s[i], r[i]
        tj, cj, sj, rj = time[i:], c[i:], s[i:], r[i:]
        w, k, g, on = weights[i, i:], gg[i, i:], scratch[i:], by_r[i:]
        row = row_lag2 = row_cos = row_lag_sin = 0.0
        for j in range(n - i):
            g[j] = w[j] * k[j]
        for j in range(n - i):
            on[j] += g[j] * ri
        for j in range(n - i):
            y = g[j] * rj[j]
            lag = ti - tj[j]
            row += y
            row_lag2 += y * lag * lag
            row_cos += y * (ci * cj[j] + si * sj[j])
            row_lag_sin += y * lag * (si * cj[j] - ci * sj[j])
        by_r[i] += row
        total += row * ri
        total_lag2 += row_lag2 * ri
        total_cos += row_cos * ri
        total_lag_sin += row_lag_sin * ri
    return total, total_lag2, total_cos, total_lag_sin


@compile_with(_SUMS)
def _back_to_r(r: Array, gg: Array, dg: Array, dd: Array, weights: Array, by_r: Array) -> None:
    """The gradient in R; see ``NumpyEngine.backward``."""
    n = r.shape[1]
    r11, r12, r22 = r[0], r[1], r[2]
    on00, on01, on10, on11 = by_r[0, 0], by_r[0, 1], by_r[1, 0], by_r[1, 1]
    for i in range(n):
        r11i, r12i, r22i = r11[i], r12[i], r22[i]
        k, kd, kdd = gg[i], dg[i], dd[i]
        u00, u01, u11 = weights[i, :n], weights[i, n:], weights[n + i, n:]
        for j in range(n):
            on00[j] += u00[j] * (r11i * k[j] + r12i * kd[j])
        for j in range(n):
            on01[j] += u00[j] * (r12i * kdd[j] - r11i * kd[j])
        for j in range(n):
            on10[j] += u01[j] * (r11i * k[j] + r12i * kd[j]) + u11[j] * r22i * kd[j]
        for j in range(n):
            on11[j] += u01[j] * (r12i * kdd[j] - r11i * kd[j]) + u11[j] * r22i * kdd[j]
        row00 = row01 = row10 = row11 = 0.0
        for j in range(n):
            y00 = u00[j] * r11[j]
            y01 = u00[j] * r12[j] + u01[j] * r22[j]
            y11 = u11[j] * r22[j]
            row00 += y00 * k[j] - y01 * kd[j]
            row01 += y00 * kd[j] + y01 * kdd[j]
            row10 -= y11 * kd[j]
            row11 += y11 * kdd[j]
        on00[i] += row00
        on01[i] += row01
        on10[i] += row10
        on11[i] += row11


@compile_with(_SUMS)
def _back_to_kernel(
    time: Array, c: Array, s: Array, decay: float, shape_term: float, omega: float, r: Array,
    gg: Array, dg: Array, dd: Array, weights: Array,
) -> tuple[float, float, float]:  # fmt: skip
    """Gradient in the kernel's log parameters; see ``QuasiPeriodic.contract``."""
    n = time.size
    inverse = 1 / decay**2
    rate = omega * omega * shape_term
    q2 = 1 / (inverse + rate)
    q = math.sqrt(q2)
    q_inverse, q_bump = q * inverse, q * omega * shape_term
    r11, r12, r22 = r[0], r[1], r[2]
    f_sum = f_lag2 = f_cos = f_lag_sin = 0.0
    x1_lag = x1_sin = x1_lag_cos = 0.0
    x2_sum = x2_cos = x2_lag_sin = d_q = 0.0
    for i in range(n):
        ti, ci, si = time[i], c[i], s[i]
        r11i, r12i, r22i = r11[i], r12[i], r22[i]
        gg_i, dg_i, dd_i = gg[i], dg[i], dd[i]
        u00, u01, u11 = weights[i, :n], weights[i, n:], weights[n + i, n:]
        for j in range(n):
            k, kd, kdd = gg_i[j], dg_i[j], dd_i[j]
            y00 = u00[j] * r11[j]
            y01 = u00[j] * r12[j] + u01[j] * r22[j]
            w_dg = r12i * y00 - r11i * y01
            w_dd = r12i * y01 + r22i * u11[j] * r22[j]
            lag = ti - time[j]
            cos = ci * c[j] + si * s[j]
            sin = si * c[j] - ci * s[j]
            slope = -q_inverse * lag - q_bump * sin
            from_dg, from_dd = w_dg * kd, w_dd * kdd
            f = r11i * y00 * k + from_dg + from_dd
            x2 = w_dd * k
            x1 = w_dg * k - 2.0 * x2 * slope
            d_q += 0.5 * from_dg + from_dd
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
            fill_one(lags.time, c, s, decay, shape_term, r[0], gg, b)
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
            total, lag2, cos, lag_sin = back_one(
                lags.time, c, s, r[0], blocks.gg, weights, by_r[0, 0]
            )
            by_kernel = [omega * lag_sin, lag2 / decay**2 / shape_term, 2 * (total - cos)]
            return shape_term * np.array(by_kernel), by_r
        three = (blocks.gg, blocks.dg, blocks.dd)
        _back_to_r(r, *three, weights, by_r)
        by_kernel = _back_to_kernel(lags.time, c, s, decay, shape_term, omega, r, *three, weights)
        return np.array(by_kernel), by_r

    def apply(self, blocks: Blocks, r: Array, columns: Array) -> tuple[Array, ...]:
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd
        if dg is None or dd is None:
            # only the upper triangle is there, the lower one for BLAS; its product of a symmetric
            # matrix with many columns is slow for few
            each = [blas.dsymv(1.0, gg.T, column, lower=1) for column in r[0] * columns.T]
            return (np.stack(each, axis=1),)
        n = gg.shape[0]
        r11, r12, r22 = r[:, :, None]
        on_g = r11 * columns[:n]
        on_d = r12 * columns[:n] + r22 * columns[n:]
        return gg @ on_g - dg @ on_d, dg @ on_g + dd @ on_d
