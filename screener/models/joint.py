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
from screener.models.kepler import solve_kepler
from screener.models.kernels import Kernel, Lags

__all__ = ["JointData", "JointModel", "OrbitTerm", "Solution"]

_LOG_2PI = math.log(2 * math.pi)

keep_freed_memory()


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


def _orbit_columns(
    term: OrbitTerm, parameters: Array, data: JointData, gradient: bool
) -> tuple[Array, list[Array]]:
    """Columns (n_obs, 2) and their derivatives with respect to each parameter."""
    frequency = 1 / term.period + parameters[0] / (2 * math.pi * data.span)
    lever = data.time - data.mid_time
    anomaly = 2 * math.pi * frequency * lever
    if not term.eccentric:
        cos, sin = np.cos(anomaly), np.sin(anomaly)
        columns = np.stack([cos, -sin], axis=1)
        if not gradient:
            return columns, []
        rate = lever / data.span
        return columns, [np.stack([-sin * rate, -cos * rate], axis=1)]
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


def _cholesky(matrix: Array, what: str) -> Array:
    """Upper factor (Fortran order) of a symmetric matrix whose lower C-order part is given."""
    factor, info = lapack.dpotrf(matrix.T, lower=0, overwrite_a=1)
    if info != 0:
        raise NumericalError(
            f"the covariance of {what} (size {matrix.shape[0]}) is not positive definite: "
            f"leading minor {info}"
        )
    return np.asarray(factor)


@dataclass(frozen=True, eq=False)
class _Work:
    """Intermediate results shared by likelihood, gradient and solution."""

    sd: Array
    weight: Array  # 1 / sd where measured, else 0
    loading: Array  # whitened, (n_series, n_obs, rank)
    q: Array
    r: Array  # (3, n_obs): r11, r12, r22, or (1, n_obs)
    blocks: object
    factor: Array
    y: Array
    design: Array
    y_q: Array  # (rank n,)
    design_q: Array  # (rank n, p)
    y_b: Array
    design_b: Array
    small_factor: Array
    beta: Array
    log_likelihood: float
    variance: Array
    jitter2: Array


@dataclass(frozen=True, eq=False)
class JointModel:
    """A likelihood over kernel, loadings, jitters and orbits.

    Parameters, in this order: logarithms of the kernel's hyper-parameters; ``a`` of every series;
    ``b`` of each series flagged in ``derivative``; ln jitter of each jitter group; parameters of
    each orbit. With no kernel the series are independent white noise.
    """

    data: JointData
    kernel: Kernel | None
    derivative: tuple[bool, ...]
    orbits: tuple[OrbitTerm, ...] = ()

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
        return self.slices["orbits"].stop

    @cached_property
    def column_sd(self) -> Array:
        extra = [o.amplitude_sd for o in self.orbits for _ in range(2)]
        return np.concatenate([self.data.column_sd, extra])

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
        work, orbit_gradients = self._work(parameters, gradient=True)
        return work.log_likelihood, self._gradient(parameters, work, orbit_gradients)

    # ---- forward ----------------------------------------------------------------------------

    def _loadings(self, parameters: Array) -> Array:
        loading = np.zeros((self.data.n_series, max(self.rank, 1)))
        if self.kernel is not None:
            loading[:, 0] = parameters[self.slices["a"]]
            if self.rank == 2:
                loading[np.array(self.derivative), 1] = parameters[self.slices["b"]]
        return loading

    def _work(self, parameters: Array, gradient: bool) -> tuple[_Work, list[list[Array]]]:
        data = self.data
        n_series, n = data.value.shape
        jitter2 = np.exp(2 * parameters[self.slices["jitter"]])[data.jitter]
        variance = data.variance + jitter2
        sd = np.sqrt(variance)
        weight = np.where(data.mask, 1 / sd, 0.0)
        y = data.value * weight
        pieces, orbit_gradients = [data.columns], []
        for term, values in zip(self.orbits, self.orbit_parameters(parameters), strict=True):
            columns, derivatives = _orbit_columns(term, values, data, gradient)
            padded = np.zeros((n_series, n, 2))
            padded[0] = columns
            pieces.append(padded)
            orbit_gradients.append(derivatives)
        design = (np.concatenate(pieces, axis=2) if len(pieces) > 1 else data.columns) * weight[
            :, :, None
        ]
        loading = self._loadings(parameters)[:, None, :] * weight[:, :, None]
        q, r = _thin_qr(loading, self.rank)
        y_q = np.concatenate(
            [np.einsum("sn,sn->n", q[k], y) for k in range(self.rank)] or [y[0, :0]]
        )
        design_q = np.concatenate(
            [np.einsum("sn,snp->np", q[k], design) for k in range(self.rank)] or [design[0, :0]]
        )
        p = design.shape[2]
        flat_design, flat_y = design.reshape(-1, p), y.reshape(-1)
        blocks, factor, log_det = None, np.zeros((0, 0)), 0.0
        y_b, design_b = y_q, design_q
        if self.kernel is not None:
            blocks = self.kernel.blocks(
                data.lags, parameters[self.slices["kernel"]], self.rank == 2
            )
            factor = _cholesky(_capacitance(blocks, r), "the activity model")
            log_det = 2 * float(np.log(np.diagonal(factor)).sum())
            stacked = np.concatenate([y_q[:, None], design_q], axis=1)
            solved, _ = lapack.dpotrs(factor, stacked, lower=0)
            y_b, design_b = solved[:, 0], solved[:, 1:]
        normal = flat_design.T @ flat_design + design_q.T @ (design_b - design_q)
        normal[np.diag_indices(p)] += 1 / self.column_sd**2
        projected = flat_design.T @ flat_y + design_q.T @ (y_b - y_q)
        small = _cholesky(normal.copy(order="C"), "the linear terms")
        beta, _ = lapack.dpotrs(small, projected, lower=0)
        chi2 = float(flat_y @ flat_y + y_q @ (y_b - y_q) - projected @ beta)
        count = int(data.mask.sum())
        log_likelihood = -0.5 * (
            chi2
            + log_det
            + float(np.log(variance[data.mask]).sum())
            + 2 * float(np.log(np.diagonal(small)).sum())
            + 2 * float(np.log(self.column_sd).sum())
            + count * _LOG_2PI
        )
        if not math.isfinite(log_likelihood):
            raise NumericalError(f"the log-likelihood is {log_likelihood} (chi2 {chi2})")
        work = _Work(
            sd, weight, loading, q, r, blocks, factor, y, design, y_q, design_q, y_b, design_b, small,
            np.asarray(beta), log_likelihood, variance, jitter2,
        )  # fmt: skip
        return work, orbit_gradients

    # ---- backward ---------------------------------------------------------------------------

    def _residuals(self, work: _Work) -> tuple[Array, Array, Array, Array]:
        """Whitened u = K^-1 (y - A beta), V = K^-1 A L^-T, and their parts s, T in the Q space."""
        n_series, n = work.y.shape
        p = work.design.shape[2]
        s = work.y_b - work.design_b @ work.beta
        e_q = work.y_q - work.design_q @ work.beta
        inverse, _ = lapack.dtrtri(work.small_factor, lower=0)
        t = work.design_b @ inverse
        u = work.y - work.design @ work.beta
        v = (work.design.reshape(-1, p) @ inverse).reshape(n_series, n, p)
        d_q = work.design_q @ inverse
        for k in range(self.rank):
            rows = slice(k * n, (k + 1) * n)
            u = u + work.q[k] * (s[rows] - e_q[rows])
            v = v + work.q[k][:, :, None] * (t[rows] - d_q[rows])[None]
        return u, v, s, t

    def _gradient(
        self, parameters: Array, work: _Work, orbit_gradients: list[list[Array]]
    ) -> Array:
        data, n = self.data, self.data.n_obs
        gradient = np.zeros(self.n_parameters)
        u, v, s, t = self._residuals(work)
        inverse_diagonal = 1 - np.einsum("snp,snp->sn", v, v)
        if self.kernel is not None:
            inverse = _symmetric_inverse(work.factor)
            full = np.outer(s, s)
            full += t @ t.T
            full -= inverse
            kernel_gradient, d_loading = self._latent_gradient(parameters, work, u, v, s, t, full)
            gradient[self.slices["kernel"]] = kernel_gradient
            gradient[self.slices["a"]] = np.einsum("sn,sn->s", d_loading[0], work.weight)
            if self.rank == 2:
                by_series = np.einsum("sn,sn->s", d_loading[1], work.weight)
                gradient[self.slices["b"]] = by_series[np.array(self.derivative)]
            for i in range(self.rank):
                inverse_diagonal -= work.q[i] ** 2
                for j in range(self.rank):
                    block = np.diagonal(inverse[i * n : (i + 1) * n, j * n : (j + 1) * n])
                    inverse_diagonal += work.q[i] * work.q[j] * block
        d_log_variance = 0.5 * (u * u - inverse_diagonal) * data.mask
        d_log_jitter = 2 * d_log_variance * work.jitter2 / work.variance
        gradient[self.slices["jitter"]] = np.bincount(
            data.jitter.ravel(), d_log_jitter.ravel(), minlength=data.n_jitter
        )
        if self.orbits:
            gradient[self.slices["orbits"]] = self._orbit_gradient(work, u, v, orbit_gradients)
        return gradient

    def _orbit_gradient(
        self, work: _Work, u: Array, v: Array, orbit_gradients: list[list[Array]]
    ) -> Array:
        weight = work.weight[0]
        inverse, _ = lapack.dtrtri(work.small_factor, lower=0)
        by_column = np.outer(u[0] * weight, work.beta) - (v[0] * weight[:, None]) @ inverse.T
        start, out = self.data.columns.shape[2], []
        for derivatives in orbit_gradients:
            columns = by_column[:, start : start + 2]
            out.extend(float(np.vdot(d, columns)) for d in derivatives)
            start += 2
        return np.array(out)

    def _latent_gradient(
        self,
        parameters: Array,
        work: _Work,
        u: Array,
        v: Array,
        s: Array,
        t: Array,
        full: Array,
    ) -> tuple[Array, list[Array]]:
        """Gradients in the kernel's parameters and in each whitened loading."""
        data, n, r = self.data, self.data.n_obs, work.r
        blocks = work.blocks
        assert self.kernel is not None
        log_parameters = parameters[self.slices["kernel"]]
        su, tv = s, t
        if self.rank == 1:
            scaled = full * r[0][None, :]
            weights: tuple[Array, ...] = (0.5 * scaled * r[0][:, None],)
            diagonal = np.einsum("ij,ij->i", scaled, blocks.gg)  # type: ignore[attr-defined]
            rc_s = blocks.gg @ (r[0] * su)  # type: ignore[attr-defined]
            rc_t = blocks.gg @ (r[0][:, None] * tv)  # type: ignore[attr-defined]
            d_loading = work.q[0] * diagonal
            d_loading += (u - work.q[0] * su) * rc_s
            d_loading += np.einsum("snp,np->sn", v - work.q[0][:, :, None] * tv[None], rc_t)
            return self.kernel.contract(data.lags, log_parameters, blocks, weights), [  # type: ignore[arg-type]
                d_loading
            ]
        r11, r12, r22 = r
        f00, f10, f11 = full[:n, :n], full[n:, :n], full[n:, n:]
        # full @ blockdiag(R), block columns for G and G'
        y00 = f00 * r11
        y01 = f00 * r12 + f10.T * r22
        y10 = f10 * r11
        y11 = f10 * r12 + f11 * r22
        w_gg = y00 * (0.5 * r11)[:, None]
        w_dg = y00 * r12[:, None] + y10 * r22[:, None]
        w_dd = y01 * (0.5 * r12)[:, None] + y11 * (0.5 * r22)[:, None]
        gg, dg, dd = blocks.gg, blocks.dg, blocks.dd  # type: ignore[attr-defined]
        kernel_gradient = self.kernel.contract(
            data.lags,
            log_parameters,
            blocks,
            (w_gg, w_dg, w_dd),  # type: ignore[arg-type]
        )
        row = "tj,tj->t"
        # cov(G_j, G_t) = gg; cov(G'_j, G_t) = -dg[t, j]; cov(G_j, G'_t) = dg[t, j]
        x00 = np.einsum(row, y00, gg) - np.einsum(row, y01, dg)
        x01 = np.einsum(row, y00, dg) + np.einsum(row, y01, dd)
        x10 = np.einsum(row, y10, gg) - np.einsum(row, y11, dg)
        x11 = np.einsum(row, y10, dg) + np.einsum(row, y11, dd)
        st = np.concatenate([su[:, None], tv], axis=1)
        on_g = r11[:, None] * st[:n]
        on_d = r12[:, None] * st[:n] + r22[:, None] * st[n:]
        rc_g = gg @ on_g - dg @ on_d
        rc_d = dg @ on_g + dd @ on_d
        u_rest = u - work.q[0] * s[:n] - work.q[1] * s[n:]
        v_rest = v - work.q[0][:, :, None] * t[:n][None] - work.q[1][:, :, None] * t[n:][None]
        out = []
        for x0, x1, rc in ((x00, x10, rc_g), (x01, x11, rc_d)):
            piece = work.q[0] * x0 + work.q[1] * x1
            piece += u_rest * rc[:, 0]
            piece += np.einsum("snp,np->sn", v_rest, rc[:, 1:])
            out.append(piece)
        return kernel_gradient, out

    # ---- results ----------------------------------------------------------------------------

    def solve(self, parameters: Array) -> Solution:
        """Everything a search or a prediction needs at these parameters."""
        work, _ = self._work(parameters, gradient=False)
        n = self.data.n_obs
        u, v, s, _t = self._residuals(work)
        weight = work.weight[0]
        precision = -(v[0] @ v[0].T)
        precision[np.diag_indices(n)] += 1
        activity = np.zeros(n)
        if self.kernel is not None:
            inverse = _symmetric_inverse(work.factor)
            for i in range(self.rank):
                for j in range(self.rank):
                    block = inverse[i * n : (i + 1) * n, j * n : (j + 1) * n]
                    precision += work.q[i][0][:, None] * block * work.q[j][0][None, :]
                precision[np.diag_indices(n)] -= work.q[i][0] ** 2
            activity = self._latent_at(work, parameters, s)[0]
        inverse_small, _ = lapack.dtrtri(work.small_factor, lower=0)
        return Solution(
            work.log_likelihood,
            work.beta,
            inverse_small @ inverse_small.T,
            precision * weight[:, None] * weight[None, :],
            u[0] * weight,
            activity,
        )

    def _latent_at(self, work: _Work, parameters: Array, s: Array) -> Array:
        """Posterior mean of a_s G + b_s G' at the data, shape (n_series, n_obs)."""
        n, r, blocks = self.data.n_obs, work.r, work.blocks
        loading = self._loadings(parameters)
        if self.rank == 1:
            return np.outer(loading[:, 0], blocks.gg @ (r[0] * s))  # type: ignore[attr-defined]
        on_g, on_d = r[0] * s[:n], r[1] * s[:n] + r[2] * s[n:]
        g = blocks.gg @ on_g - blocks.dg @ on_d  # type: ignore[attr-defined]
        d = blocks.dg @ on_g + blocks.dd @ on_d  # type: ignore[attr-defined]
        return np.outer(loading[:, 0], g) + np.outer(loading[:, 1], d)

    def predict_activity(self, parameters: Array, time: Array) -> tuple[Array, Array]:
        """Mean and standard deviation of the velocities' activity at other times (scaled units)."""
        if self.kernel is None:
            return np.zeros(time.size), np.zeros(time.size)
        work, _ = self._work(parameters, gradient=False)
        n, m, r = self.data.n_obs, time.size, work.r
        s = work.y_b - work.design_b @ work.beta
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
        mean = cross @ s
        half, _ = lapack.dtrtrs(work.factor, cross.T, lower=0, trans=1)
        return mean, np.sqrt(np.maximum(prior - np.einsum("ij,ij->j", half, half), 0))

    def draw(self, parameters: Array, rng: np.random.Generator, orbits: bool = False) -> Array:
        """One draw of all series at the data's times, shape (n_series, n_obs), scaled units.

        Activity and white noise; orbits and the other linear terms at their posterior mean only
        where asked for.
        """
        data = self.data
        variance = data.variance + np.exp(2 * parameters[self.slices["jitter"]])[data.jitter]
        out = rng.standard_normal(data.value.shape) * np.sqrt(variance)
        if self.kernel is not None:
            blocks = self.kernel.blocks(
                data.lags, parameters[self.slices["kernel"]], self.rank == 2
            )
            covariance = blocks.gg
            if blocks.dg is not None and blocks.dd is not None:
                covariance = np.block([[blocks.gg, blocks.dg.T], [blocks.dg, blocks.dd]])
            covariance = covariance + 1e-8 * np.eye(covariance.shape[0])
            factor = _cholesky(covariance, "the latent process")
            latent = (factor.T @ rng.standard_normal(factor.shape[0])).reshape(self.rank, -1)
            out = out + self._loadings(parameters)[:, : self.rank] @ latent
        if orbits:
            work, _ = self._work(parameters, gradient=False)
            out = out + (work.design @ work.beta) * work.sd
        return out


def _thin_qr(loading: Array, rank: int) -> tuple[Array, Array]:
    """Gram-Schmidt of the loadings of every time: q (rank, n_series, n), r as in ``_Work``."""
    n_series, n = loading.shape[:2]
    if rank == 0:
        return np.zeros((0, n_series, n)), np.zeros((0, n))
    first = loading[:, :, 0]
    r11 = np.sqrt(np.einsum("sn,sn->n", first, first))
    q1 = first / np.where(r11 > 0, r11, 1.0)
    if rank == 1:
        return q1[None], r11[None]
    second = loading[:, :, 1]
    r12 = np.einsum("sn,sn->n", q1, second)
    rest = second - q1 * r12
    r22 = np.sqrt(np.einsum("sn,sn->n", rest, rest))
    # a remainder at rounding level is no direction of its own
    size = np.sqrt(np.einsum("sn,sn->n", second, second))
    r22 = np.where(r22 > 1e-10 * size, r22, 0.0)
    q2 = np.where(r22 > 0, rest / np.where(r22 > 0, r22, 1.0), 0.0)
    return np.stack([q1, q2]), np.stack([r11, r12, r22])


def _capacitance(blocks: object, r: Array) -> Array:
    """B = I + R C R^T, C order, at least its lower triangle."""
    gg = blocks.gg  # type: ignore[attr-defined]
    n = gg.shape[0]
    if r.shape[0] == 1:
        b = gg * r[0]
        b *= r[0][:, None]
        b[np.diag_indices(n)] += 1
        return np.asarray(b)
    dg, dd = blocks.dg, blocks.dd  # type: ignore[attr-defined]
    r11, r12, r22 = r
    b = np.zeros((2 * n, 2 * n))
    # rows of R C: G row = r11 G + r12 G', G' row = r22 G'
    row_g = gg * r11[:, None]
    row_g += dg * r12[:, None]  # against G_j
    row_d = dd * r12[:, None]
    row_d -= dg * r11[:, None]  # against G'_j: cov(G_i, G'_j) = -dg[i, j]
    np.multiply(row_g, r11, out=b[:n, :n])
    b[:n, :n] += row_d * r12
    low = dg * r11
    low += dd * r12
    low *= r22[:, None]
    b[n:, :n] = low
    np.multiply(dd, r22, out=b[n:, n:])
    b[n:, n:] *= r22[:, None]
    b[np.diag_indices(2 * n)] += 1
    return b


def _symmetric_inverse(factor: Array) -> Array:
    """Full inverse from the upper Cholesky factor."""
    inverse, info = lapack.dpotri(factor, lower=0)
    if info != 0:
        raise NumericalError(f"inverse of a factor of size {factor.shape[0]} failed: {info}")
    full = inverse + inverse.T
    full[np.diag_indices(full.shape[0])] *= 0.5
    return np.asarray(full)
