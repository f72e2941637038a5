"""The joint activity model: one latent process and its derivative under all series.

Velocities and indicators share a Gaussian process G(t) (Rajpaul et al. 2015, MNRAS 452, 2269;
Aigrain, Pont & Zucker 2012, MNRAS 419, 3147):

    series_s(t) = a_s G(t) + b_s G'(t) + linear terms + white noise,

with zero points, slopes and orbital amplitudes (K cos omega, K sin omega) as linear terms under
Gaussian priors, marginalised in closed form.

At each time all series are combinations of the two numbers (G, G'). After whitening by the white
noise the loadings of one time form a matrix (series x 2); with its QR decomposition the full
covariance becomes Q (I + R C R^T) Q^T + (I - Q Q^T), so that only B = I + R C R^T of size 2n
(n without derivative) is factorised, whatever the number of series. This is exact.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.linalg import lapack

from screener.core import Array, IntArray, NumericalError
from screener.core.memory import keep_freed_memory
from screener.models.joint_data import JointData, OrbitTerm, Solution
from screener.models.joint_data import orbit_columns as _orbit_columns
from screener.models.joint_gradient import Work, combinations, joint_gradient, residuals
from screener.models.kernels import Kernel, Lags
from screener.models.latent import Engine, Single, engine, single
from screener.models.linear_algebra import (
    cholesky,
    factor_and_inverse,
    gram_of_inverse,
    half_solve,
    multiply,
)

__all__ = ["JointData", "JointModel", "OrbitTerm", "Solution"]

_LOG_2PI = math.log(2 * math.pi)

keep_freed_memory()


@dataclass(frozen=True, eq=False)
class JointModel:
    """A likelihood over kernel, loadings, jitters and orbits.

    Parameters, in this order: logarithms of the kernel's hyper-parameters; ``a`` of every series;
    ``b`` of each series flagged in ``derivative``; ln jitter of each jitter group; parameters of
    each orbit. With no kernel the series are independent white noise.

    With ``profile`` the linear terms stand at their most probable values instead of being
    marginalised (variable projection; Golub & Pereyra 1973, SIAM J. Numer. Anal. 10, 413): its
    optimum is that of all parameters at once. ``compiled`` asks for the numba form of kernels that
    have one; None leaves it to the environment (SCREENER_NUMBA=1).
    """

    data: JointData
    kernel: Kernel | None
    derivative: tuple[bool, ...]
    orbits: tuple[OrbitTerm, ...] = ()
    profile: bool = False
    compiled: bool | None = None

    @cached_property
    def rank(self) -> int:
        return 0 if self.kernel is None else (2 if any(self.derivative) else 1)

    @cached_property
    def slices(self) -> dict[str, slice]:
        sizes = {
            "kernel": len(self.kernel.names) if self.kernel else 0,
            "a": self.data.n_series if self.kernel else 0,
            "b": sum(self.derivative) if self.kernel else 0,
            "jitter": self.data.n_jitter,
            "orbits": sum(o.n_parameters for o in self.orbits),
        }
        out, start = {}, 0
        for name, size in sizes.items():
            out[name] = slice(start, start + size)
            start += size
        return out

    @property
    def n_parameters(self) -> int:
        return int(self.slices["orbits"].stop)

    @cached_property
    def column_sd(self) -> Array:
        extra = [o.amplitude_sd for o in self.orbits for _ in range(2)]
        return np.concatenate([self.data.column_sd, extra])

    @cached_property
    def _column_precision(self) -> Array:
        return np.diag(np.concatenate([[0.0], 1 / self.column_sd**2]))

    @cached_property
    def _log_column_sd(self) -> float:
        return float(np.log(self.column_sd).sum())

    @cached_property
    def derivative_rows(self) -> IntArray:
        """Series that follow the derivative."""
        return np.flatnonzero(self.derivative)

    @cached_property
    def _engine(self) -> Engine | None:
        return None if self.kernel is None else engine(self.kernel, self.compiled)

    @cached_property
    def _reference_engine(self) -> Engine | None:
        return None if self.kernel is None else engine(self.kernel, False)

    @cached_property
    def _single(self) -> Single | None:
        return single(self, self._engine)

    def orbit_parameters(self, parameters: Array) -> list[Array]:
        """The parameters of each orbit."""
        start, out = self.slices["orbits"].start, []
        for term in self.orbits:
            out.append(parameters[start : start + term.n_parameters])
            start += term.n_parameters
        return out

    def log_likelihood(self, parameters: Array) -> float:
        """Marginal log-likelihood (linear terms integrated out).

        Raises
        ------
        NumericalError
            Where a factorisation fails.
        """
        return self._work(parameters, gradient=False)[0].log_likelihood

    def value_and_gradient(self, parameters: Array) -> tuple[float, Array]:
        """Marginal log-likelihood and its exact gradient, shape (n_parameters,)."""
        if self._single is not None:
            return self._single.value_and_gradient(parameters)
        work, orbit_gradients = self._work(parameters, gradient=True)
        return work.log_likelihood, self._gradient(parameters, work, orbit_gradients)

    def gradient_and_linear_mean(self, parameters: Array) -> tuple[Array, Array]:
        """The gradient, and the linear terms' conditional mean."""
        work, orbit_gradients = self._work(parameters, gradient=True)
        return self._gradient(parameters, work, orbit_gradients), work.beta

    def linear_terms(self, parameters: Array) -> tuple[float, Array, Array]:
        """Log-likelihood, linear terms' mean, and the lower factor of their inverse covariance."""
        work, _ = self._work(parameters, gradient=False)
        return work.log_likelihood, work.beta, work.small_factor

    def _gradient(self, parameters: Array, work: Work, orbit_gradients: list[list[Array]]) -> Array:
        return joint_gradient(self, parameters, work, orbit_gradients, self._engine)

    # ---- forward ----------------------------------------------------------------------------

    def _loadings(self, parameters: Array) -> Array:
        loading = np.zeros((self.data.n_series, max(self.rank, 1)))
        if self.kernel is not None:
            loading[:, 0] = parameters[self.slices["a"]]
            if self.rank == 2:
                loading[self.derivative_rows, 1] = parameters[self.slices["b"]]
        return loading

    def _stacked(self, parameters: Array, gradient: bool) -> tuple[Array, list[list[Array]]]:
        """Data and linear terms side by side, and the derivatives of the orbits' columns."""
        stacked = self.data.stacked
        if not self.orbits:
            return stacked, []
        start = stacked.shape[2]
        full = np.zeros((*stacked.shape[:2], start + 2 * len(self.orbits)))
        full[:, :, :start] = stacked
        derivatives = []
        for term, values in zip(self.orbits, self.orbit_parameters(parameters), strict=True):
            columns, by_parameter = _orbit_columns(term, values, self.data, gradient)
            full[0, :, start : start + 2] = columns
            derivatives.append(by_parameter)
            start += 2
        return full, derivatives

    def _work(
        self, parameters: Array, gradient: bool, reference: bool = False
    ) -> tuple[Work, list[list[Array]]]:
        data, rank = self.data, self.rank
        how = self._reference_engine if reference else self._engine
        n = data.n_obs
        jitter2 = np.exp(2 * parameters[self.slices["jitter"]])[data.jitter]
        variance = data.variance + jitter2
        weight = 1 / np.sqrt(variance)
        log_variance = np.log(variance)
        if data.unmeasured is not None:
            weight[data.unmeasured] = 0
            log_variance[data.unmeasured] = 0
        stacked, orbit_gradients = self._stacked(parameters, gradient)
        stacked = stacked * weight[:, :, None]
        flat = stacked.reshape(-1, stacked.shape[2])
        gram = flat.T @ flat
        gram += self._column_precision
        blocks, log_det, triangle = None, 0.0, None
        factor = stacked_q = half = np.zeros((0, flat.shape[1]))
        q, r = np.zeros((0, *weight.shape)), np.zeros((0, n))
        if how is not None:
            q, r = _thin_qr(self._loadings(parameters)[:, None, :] * weight[:, :, None], rank)
            stacked_q = _project(q, stacked)
            blocks, capacitance = how.forward(data.lags, parameters[self.slices["kernel"]], r)
            if gradient:  # the gradient needs the inverse anyway, and products are faster
                pivots, triangle = factor_and_inverse(capacitance, "the activity model")
                half = multiply(triangle, stacked_q)
            else:
                factor = cholesky(capacitance, "the activity model")
                half = half_solve(factor, stacked_q)
                pivots = np.diagonal(factor)
            log_det = 2 * float(np.log(pivots).sum())
            gram += half.T @ half
            gram -= stacked_q.T @ stacked_q
        small = cholesky(gram[1:, 1:].copy(order="F"), "the linear terms")
        beta, _ = lapack.dpotrs(small, gram[1:, 0], lower=1)
        chi2 = float(gram[0, 0] - gram[1:, 0] @ beta)
        log_likelihood = -0.5 * (
            chi2 + log_det + float(log_variance.sum()) + data.n_values * _LOG_2PI
        )
        if not self.profile:
            log_likelihood -= float(np.log(np.diagonal(small)).sum()) + self._log_column_sd
        if not math.isfinite(log_likelihood):
            raise NumericalError(f"the log-likelihood is {log_likelihood} (chi2 {chi2})")
        work = Work(
            weight, q, r, blocks, factor, triangle, stacked, stacked_q, half, small,
            np.asarray(beta), log_likelihood, variance, jitter2,
        )  # fmt: skip
        return work, orbit_gradients

    # ---- results ----------------------------------------------------------------------------

    def solve(self, parameters: Array, velocities: bool = True) -> Solution:
        """Everything a search or a prediction needs at these parameters.

        Without ``velocities`` the linear terms only: ``rv_precision`` and the others are empty.
        """
        work, _ = self._work(parameters, gradient=True, reference=True)
        n = self.data.n_obs
        mix, inverse_small = combinations(work, profile=False)
        if not velocities:
            covariance, none = inverse_small.T @ inverse_small, np.zeros(0)
            return Solution(work.log_likelihood, work.beta, covariance, none[:, None], none, none)
        uv, st = residuals(work, mix)
        weight = work.weight[0]
        precision = -(uv[0, :, 1:] @ uv[0, :, 1:].T)
        diagonal = np.ones(n)
        activity = np.zeros(n)
        if work.triangle is not None:
            lower = gram_of_inverse(work.triangle)
            inverse = lower + np.tril(lower, -1).T
            for i in range(self.rank):
                for j in range(self.rank):
                    block = inverse[i * n : (i + 1) * n, j * n : (j + 1) * n]
                    precision += work.q[i][0][:, None] * block * work.q[j][0][None, :]
                diagonal -= work.q[i][0] ** 2
            activity = self._latent_at(work, parameters, st[:, 0])[0]
        precision[np.diag_indices(n)] += diagonal
        return Solution(
            work.log_likelihood,
            work.beta,
            inverse_small.T @ inverse_small,
            precision * weight[:, None] * weight[None, :],
            uv[0, :, 0] * weight,
            activity,
        )

    def _latent_at(self, work: Work, parameters: Array, s: Array) -> Array:
        """Posterior mean of a_s G + b_s G' at the data, shape (n_series, n_obs)."""
        n, r, blocks = self.data.n_obs, work.r, work.blocks
        assert blocks is not None
        loading = self._loadings(parameters)
        if blocks.dg is None or blocks.dd is None:
            return np.outer(loading[:, 0], blocks.gg @ (r[0] * s))
        on_g, on_d = r[0] * s[:n], r[1] * s[:n] + r[2] * s[n:]
        g = blocks.gg @ on_g - blocks.dg @ on_d
        d = blocks.dg @ on_g + blocks.dd @ on_d
        return np.outer(loading[:, 0], g) + np.outer(loading[:, 1], d)

    def predict_activity(self, parameters: Array, time: Array) -> tuple[Array, Array]:
        """Mean and standard deviation of the velocities' activity at other times (scaled units)."""
        if self.kernel is None:
            return np.zeros(time.size), np.zeros(time.size)
        work, _ = self._work(parameters, gradient=False, reference=True)
        n, m, r = self.data.n_obs, time.size, work.r
        half_s = work.half[:, 0] - work.half[:, 1:] @ work.beta
        both = Lags.of(np.concatenate([self.data.time, time]))
        blocks = self.kernel.blocks(both, parameters[self.slices["kernel"]], self.rank == 2)
        a, b = [*self._loadings(parameters)[0], 0.0][:2]
        cross_g = blocks.gg[n:, :n]
        if self.rank == 1 or blocks.dg is None or blocks.dd is None:
            cross = a * cross_g * r[0]
            prior = np.full(m, a * a)
        else:
            # cov(a G* + b G'*, G_j) and (.., G'_j), then through R
            with_g = a * cross_g + b * blocks.dg[n:, :n]
            with_d = -a * blocks.dg[n:, :n] + b * blocks.dd[n:, :n]
            cross = np.concatenate([with_g * r[0] + with_d * r[1], with_d * r[2]], axis=1)
            prior = np.full(m, a * a + b * b)
        half = half_solve(work.factor, cross.T)
        return half_s @ half, np.sqrt(np.maximum(prior - np.einsum("ij,ij->j", half, half), 0))

    def draw(self, parameters: Array, rng: np.random.Generator, orbits: bool = False) -> Array:
        """One draw of all series at the data's times, shape (n_series, n_obs), scaled units.

        Activity and white noise; orbits and the other linear terms at their posterior mean only
        where asked for.
        """
        data = self.data
        variance = data.variance + np.exp(2 * parameters[self.slices["jitter"]])[data.jitter]
        sd = np.sqrt(variance)
        out = rng.standard_normal(data.value.shape) * sd
        if self.kernel is not None:
            blocks = self.kernel.blocks(
                data.lags, parameters[self.slices["kernel"]], self.rank == 2
            )
            covariance = blocks.gg
            if blocks.dg is not None and blocks.dd is not None:
                covariance = np.block([[blocks.gg, blocks.dg.T], [blocks.dg, blocks.dd]])
            covariance = np.asfortranarray(covariance + 1e-8 * np.eye(covariance.shape[0]))
            factor = cholesky(covariance, "the latent process")
            latent = (factor @ rng.standard_normal(factor.shape[0])).reshape(self.rank, -1)
            out = out + self._loadings(parameters)[:, : self.rank] @ latent
        if orbits:
            work, _ = self._work(parameters, gradient=False, reference=True)
            out = out + (work.stacked[:, :, 1:] @ work.beta) * sd
        return out


def _project(q: Array, stacked: Array) -> Array:
    """Rows of ``stacked`` in the space of the loadings, shape (rank n, columns), Fortran order."""
    rank, _, n = q.shape
    out = np.empty((rank * n, stacked.shape[2]), order="F")
    for k in range(rank):
        rows = q[k][0][:, None] * stacked[0]
        for s in range(1, stacked.shape[0]):
            rows += q[k][s][:, None] * stacked[s]
        out[k * n : (k + 1) * n] = rows
    return out


def _thin_qr(loading: Array, rank: int) -> tuple[Array, Array]:
    """Gram-Schmidt of the loadings of every time: q (rank, n_series, n), r as in ``Work``."""
    first = loading[:, :, 0]
    if rank == 1 and first.shape[0] == 1:
        return np.sign(first)[None], np.abs(first)
    r11 = np.sqrt((first * first).sum(axis=0))
    q1 = first / (r11 + (r11 == 0))
    if rank == 1:
        return q1[None], r11[None]
    second = loading[:, :, 1]
    r12 = (q1 * second).sum(axis=0)
    rest = second - q1 * r12
    r22 = np.sqrt((rest * rest).sum(axis=0))
    # a remainder at rounding level is no direction of its own
    r22 *= r22 > 1e-10 * np.sqrt((second * second).sum(axis=0))
    alone = r22 == 0
    q2 = rest / (r22 + alone)
    q2 *= ~alone
    return np.stack([q1, q2]), np.stack([r11, r12, r22])
