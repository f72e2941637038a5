"""Covariance functions of the latent activity process, in closed form with all derivatives.

Every kernel is stationary with unit variance: ``k(lag)``. A joint model also needs the process'
time derivative, hence ``k'`` and ``k''`` with respect to the lag, and the gradient of all three
with respect to the logarithms of the hyper-parameters. The derivative process is scaled to unit
variance by ``q = 1 / sqrt(-k''(0))``, so that amplitudes of both carry the series' own unit.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from scipy.linalg import blas

from screener.core import Array

__all__ = [
    "KERNELS",
    "Blocks",
    "Kernel",
    "Lags",
    "Matern52",
    "QuasiPeriodic",
    "QuasiPeriodicCosine",
]


@dataclass(frozen=True, eq=False)
class Lags:
    """Lags of all pairs of ``n`` times, computed once per data set."""

    time: Array
    lag: Array
    lag_squared: Array

    @classmethod
    def of(cls, time: Array) -> Lags:
        centred = time - time.mean()
        lag = centred[:, None] - centred[None, :]
        return cls(centred, lag, lag * lag)


@dataclass(frozen=True, eq=False)
class Blocks:
    """Covariances of the process and its scaled derivative, each of shape (n, n).

    ``gg`` = cov(G, G), ``dg`` = cov(G', G), ``dd`` = cov(G', G'); ``dg`` is antisymmetric. The
    last two are None where no derivative was asked for.
    """

    gg: Array
    dg: Array | None
    dd: Array | None
    cache: tuple[Any, ...]


class Kernel(Protocol):
    """What the likelihood asks of a kernel."""

    @property
    def names(self) -> tuple[str, ...]:
        """The hyper-parameters, in order."""
        ...

    def blocks(self, lags: Lags, log_parameters: Array, derivative: bool) -> Blocks:
        """Covariance blocks."""
        ...

    def contract(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, weights: tuple[Array, ...]
    ) -> Array:
        """Sum over all pairs of ``weights`` times the derivatives of the blocks.

        ``weights`` = (w_gg,) or (w_gg, w_dg, w_dd): the gradient of a scalar with respect to
        each block, with w_dg counting both cov(G', G) and its transpose. Returns one number per
        log hyper-parameter.
        """
        ...


def _total(a: Array, b: Array) -> float:
    return float(np.vdot(a, b))


class QuasiPeriodic:
    """exp(-lag^2 / (2 decay^2) - sin^2(pi lag / period) / (2 shape^2)).

    Haywood et al. (2014, MNRAS 443, 2517); derivative process after Rajpaul et al. (2015, MNRAS
    452, 2269). Everything periodic in the lag is a product of matrices of two or three columns,
    cosines and sines of single times, so that one exponential per pair remains.
    """

    names = ("period", "decay", "shape")

    def blocks(self, lags: Lags, log_parameters: Array, derivative: bool) -> Blocks:
        period, decay, shape = np.exp(log_parameters).tolist()
        omega = 2 * math.pi / period
        angle = omega * lags.time
        c1, s1 = np.cos(angle), np.sin(angle)
        ones = np.ones_like(c1)
        shape_term = 1 / (4 * shape**2)
        # ln k = -lag^2 / (2 decay^2) + shape_term (cos - 1)
        k = lags.lag_squared * (-0.5 / decay**2)
        left, right = np.stack([c1, s1, ones]), np.stack([c1, s1, -ones])
        _add_product(k, shape_term, left, right)
        np.exp(k, out=k)
        if not derivative:
            return Blocks(k, None, None, (c1, s1))
        q2 = 1 / (1 / decay**2 + omega**2 * shape_term)
        q = math.sqrt(q2)
        # slope = q k' / k, bend = -q^2 k'' / k
        slope = lags.lag * (-q / decay**2)
        _add_product(slope, q * omega * shape_term, np.stack([s1, -c1]), np.stack([-c1, -s1]))
        bend = slope * slope
        right[2] = 1 / (decay**2 * omega**2 * shape_term)
        _add_product(bend, q2 * omega**2 * shape_term, left, right, keep=-1.0)
        return Blocks(k, k * slope, k * bend, (c1, s1, slope, bend, q2))

    def contract(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, weights: tuple[Array, ...]
    ) -> Array:
        period, decay, shape = np.exp(log_parameters).tolist()
        omega = 2 * math.pi / period
        shape_term = 1 / (4 * shape**2)
        k = blocks.gg
        if blocks.dg is None or blocks.dd is None:
            c1, s1 = blocks.cache
            f = weights[0] * k
            cos, _, _, lag_sin = _harmonic_sums(f, lags.time, c1, s1)
            return np.array(
                [
                    omega * shape_term * lag_sin,
                    _total(f, lags.lag_squared) / decay**2,
                    2 * shape_term * (float(f.sum()) - cos),
                ]
            )
        w_gg, w_dg, w_dd = weights
        c1, s1, slope, bend, q2 = blocks.cache
        q = math.sqrt(q2)
        # f multiplies d(ln k), x1 d(k' / k) and x2 d(k'' / k) less the square of the former
        x1 = w_dg * k
        x2 = w_dd * k
        t_dg, t_dd = _total(x1, slope), _total(x2, bend)
        f = w_gg * k
        scratch = x1 * slope
        f += scratch
        f += np.multiply(x2, bend, out=scratch)
        np.multiply(x2, slope, out=scratch)
        scratch *= 2
        x1 -= scratch
        f_cos, _, _, f_lag_sin = _harmonic_sums(f, lags.time, c1, s1)
        x1_cos_sums = _harmonic_sums(x1, lags.time, c1, s1)
        x1_sin, x1_lag_cos = q * x1_cos_sums[1], q * x1_cos_sums[2]
        x2_cos, _, _, x2_lag_sin = (-q2 * v for v in _harmonic_sums(x2, lags.time, c1, s1))
        f_sum, x2_sum = float(f.sum()), -q2 * float(x2.sum())
        x1_lag = q * _total(x1, lags.lag)
        # the scale q of the derivative depends on the parameters as well
        d_q = 0.5 * t_dg + t_dd
        rate = omega**2 * shape_term
        d_period = (
            omega * shape_term * (f_lag_sin + x1_sin + omega * x1_lag_cos)
            + rate * (2 * x2_cos - omega * x2_lag_sin)
            + d_q * q2 * 2 * rate
        )
        d_decay = (_total(f, lags.lag_squared) + 2 * x1_lag + 2 * x2_sum + d_q * q2 * 2) / decay**2
        d_shape = (
            2 * shape_term * (f_sum - f_cos)
            + 2 * omega * shape_term * x1_sin
            + 2 * rate * x2_cos
            + d_q * q2 * 2 * rate
        )
        return np.array([d_period, d_decay, d_shape])


def _add_product(out: Array, factor: float, left: Array, right: Array, keep: float = 1.0) -> None:
    """out = keep out + factor left^T right in place; left, right (few, n); out C order."""
    # BLAS sees the transpose of a C-ordered matrix
    blas.dgemm(factor, right, left, keep, out.T, trans_a=1, overwrite_c=1)


def _harmonic_sums(f: Array, time: Array, c1: Array, s1: Array) -> tuple[float, ...]:
    """Sums over pairs of f times cos, sin, lag cos and lag sin of the pair's angle."""
    tc, ts = time * c1, time * s1
    fc, fs, ftc, fts = (f @ np.stack([c1, s1, tc, ts], axis=1)).T
    return (
        float(c1 @ fc + s1 @ fs),
        float(s1 @ fc - c1 @ fs),
        float(tc @ fc + ts @ fs - c1 @ ftc - s1 @ fts),
        float(ts @ fc - tc @ fs - s1 @ ftc + c1 @ fts),
    )


class QuasiPeriodicCosine:
    """A quasi-periodic kernel plus a decaying cosine at half the period, weights 1 - m and m.

    Perger et al. (2021, A&A 645, A58). m = logistic(``mix``), the only parameter that is not a
    logarithm.
    """

    names = ("period", "decay", "shape", "mix")

    def __init__(self) -> None:
        self._main = QuasiPeriodic()

    def blocks(self, lags: Lags, log_parameters: Array, derivative: bool) -> Blocks:
        main = self._main.blocks(lags, log_parameters[:3], derivative)
        mix = 1 / (1 + math.exp(-log_parameters[3]))
        period, decay = np.exp(log_parameters[:2])
        omega = 4 * math.pi / period
        c1, s1 = np.cos(omega * lags.time), np.sin(omega * lags.time)
        cos = np.outer(c1, c1) + np.outer(s1, s1)
        envelope = np.exp(lags.lag_squared * (-0.5 / decay**2))
        second = envelope * cos
        gg = (1 - mix) * main.gg + mix * second
        if not derivative or main.dg is None or main.dd is None:
            return Blocks(gg, None, None, (main, cos, envelope, (c1, s1), mix))
        sin = np.outer(s1, c1) - np.outer(c1, s1)
        u = -lags.lag / decay**2
        first = envelope * (u * cos - omega * sin)
        curve = envelope * ((u * u - 1 / decay**2 - omega**2) * cos - 2 * omega * u * sin)
        q2_main = float(main.cache[4])
        raw_dg = (1 - mix) * main.dg / math.sqrt(q2_main) + mix * first
        raw_dd = (1 - mix) * main.dd / q2_main - mix * curve
        rate = (1 - mix) / q2_main + mix * (1 / decay**2 + omega**2)
        cache = (main, cos, envelope, sin, mix, first, curve, raw_dg, raw_dd, rate, u)
        return Blocks(gg, raw_dg / math.sqrt(rate), raw_dd / rate, cache)

    def contract(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, weights: tuple[Array, ...]
    ) -> Array:
        period, decay = np.exp(log_parameters[:2])
        omega = 4 * math.pi / period
        if blocks.dg is None:
            main, cos, envelope, (c1, s1), mix = blocks.cache
            sin = np.outer(s1, c1) - np.outer(c1, s1)
            gradient = np.zeros(4)
            gradient[:3] = (1 - mix) * self._main.contract(lags, log_parameters[:3], main, weights)
            w = weights[0] * envelope
            gradient[0] += mix * omega * _total(w, lags.lag * sin)
            gradient[1] += mix * _total(w * cos, lags.lag_squared) / decay**2
            gradient[3] = mix * (1 - mix) * _total(weights[0], envelope * cos - main.gg)
            return gradient
        main, cos, envelope, sin, mix, first, curve, raw_dg, raw_dd, rate, u = blocks.cache
        w_gg, w_dg, w_dd = weights
        v_dg, v_dd = w_dg / math.sqrt(rate), w_dd / rate
        d_log_rate = -0.5 * _total(v_dg, raw_dg) - _total(v_dd, raw_dd)
        q2 = float(main.cache[4])
        gradient = np.zeros(4)
        # main part: its own blocks are scaled by q, so undo that scale and its gradient
        weights_main = (w_gg, v_dg / math.sqrt(q2), v_dd / q2)
        shape = math.exp(log_parameters[2])
        main_rate_gradient = _quasi_periodic_rate_gradient(period, decay, shape)
        scale = 0.5 * _total(weights_main[1], main.dg) + _total(weights_main[2], main.dd)
        gradient[:3] = (1 - mix) * (
            self._main.contract(lags, log_parameters[:3], main, weights_main)
            + scale * q2 * main_rate_gradient
        )
        # cosine part
        lag, lag2, inv2 = lags.lag, lags.lag_squared, 1 / decay**2
        c_sin, c_cos = envelope * sin, envelope * cos
        d_gg = omega * lag * c_sin
        d_dg = omega * (u * lag * c_sin + c_sin + omega * lag * c_cos)
        d_dd = -(
            omega * lag * (u * u - inv2 - omega**2) * c_sin
            + 2 * omega**2 * c_cos
            + 2 * omega * u * c_sin
            + 2 * omega**2 * u * lag * c_cos
        )
        gradient[0] += mix * (_total(w_gg, d_gg) + _total(v_dg, d_dg) + _total(v_dd, d_dd))
        e_gg = lag2 * inv2 * c_cos
        e_dg = lag2 * inv2 * first - 2 * u * c_cos
        e_dd = -(lag2 * inv2 * curve + (2 * inv2 - 4 * u * u) * c_cos + 4 * omega * u * c_sin)
        gradient[1] += mix * (_total(w_gg, e_gg) + _total(v_dg, e_dg) + _total(v_dd, e_dd))
        slope = mix * (1 - mix)
        gradient[3] = slope * (
            _total(w_gg, c_cos - main.gg)
            + _total(v_dg, first - main.dg / math.sqrt(q2))
            + _total(v_dd, -curve - main.dd / q2)
        )
        rate_gradient = np.zeros(4)
        rate_gradient[:3] = (1 - mix) * main_rate_gradient
        rate_gradient[0] -= mix * 2 * omega**2
        rate_gradient[1] -= mix * 2 * inv2
        rate_gradient[3] = slope * (inv2 + omega**2 - 1 / q2)
        return np.asarray(gradient + d_log_rate / rate * rate_gradient)


def _quasi_periodic_rate_gradient(period: float, decay: float, shape: float) -> Array:
    """Gradient of -k''(0) of the quasi-periodic kernel in (ln period, ln decay, ln shape)."""
    bump = (2 * math.pi / period) ** 2 / (4 * shape**2)
    return np.array([-2 * bump, -2 / decay**2, -2 * bump])


class Matern52:
    """Matern 5/2 in the lag, for stars without visible rotation; once differentiable.

    Rasmussen & Williams (2006), eq. 4.17.
    """

    names = ("decay",)

    def blocks(self, lags: Lags, log_parameters: Array, derivative: bool) -> Blocks:
        rate = math.sqrt(5) / math.exp(log_parameters[0])
        x = rate * np.abs(lags.lag)
        decayed = np.exp(-x)
        gg = (1 + x + x * x / 3) * decayed
        if not derivative:
            return Blocks(gg, None, None, (x, decayed))
        # k' = -rate^2 lag (1 + x) exp(-x) / 3; q = sqrt(3) / rate
        dg = (-rate / math.sqrt(3)) * lags.lag * (1 + x) * decayed
        dd = (1 + x - x * x) * decayed
        return Blocks(gg, dg, dd, (x, decayed))

    def contract(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, weights: tuple[Array, ...]
    ) -> Array:
        rate = math.sqrt(5) / math.exp(log_parameters[0])
        x, decayed = blocks.cache
        assert isinstance(x, np.ndarray) and isinstance(decayed, np.ndarray)
        # d/d(ln decay) = -x d/dx at fixed lag
        total = _total(weights[0], x * x * (1 + x) / 3 * decayed)
        if blocks.dg is not None:
            d_dg = (rate / math.sqrt(3)) * lags.lag * (1 + x - x * x) * decayed
            d_dd = x * x * (3 - x) * decayed
            total += _total(weights[1], d_dg) + _total(weights[2], d_dd)
        return np.array([total])


KERNELS: Mapping[str, Kernel] = {
    "quasi-periodic": QuasiPeriodic(),
    "quasi-periodic with cosine": QuasiPeriodicCosine(),
    "matern 5/2": Matern52(),
}
