"""The exact gradient of the joint model's likelihood.

With K the covariance, y the data, A the linear terms and beta their posterior mean, the derivative
in any parameter of K is half the trace of (u u^T + V V^T - K^-1) dK, where u = K^-1 (y - A beta)
and V V^T = K^-1 A N^-1 A^T K^-1 with N the normal matrix (Rasmussen & Williams 2006, eq. 5.9, with
the linear terms of section 2.7). In the space of the loadings this is a matrix of the size of B.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import lapack

from screener.core import Array
from screener.models.kernels import Blocks
from screener.models.latent import Engine
from screener.models.linear_algebra import gram_of_inverse, multiply

if TYPE_CHECKING:
    from screener.models.joint import JointModel

__all__ = ["Work", "combinations", "joint_gradient", "residuals"]


@dataclass(frozen=True, eq=False)
class Work:
    """Intermediate results shared by likelihood, gradient and solution."""

    weight: Array  # 1 / sd where measured, else 0
    q: Array  # (rank, n_series, n_obs)
    r: Array  # (3, n_obs): r11, r12, r22, or (1, n_obs)
    blocks: Blocks | None
    factor: Array  # lower Cholesky factor of B, empty where the gradient was asked for
    triangle: Array | None  # its inverse, where the gradient was asked for
    stacked: Array  # whitened data and linear terms, (n_series, n_obs, 1 + p)
    stacked_q: Array  # the same in the space of the loadings, (rank n_obs, 1 + p)
    half: Array  # factor^-1 stacked_q
    small_factor: Array  # lower Cholesky factor L of the normal matrix N
    beta: Array
    log_likelihood: float
    variance: Array
    jitter2: Array


def combinations(work: Work, profile: bool) -> tuple[Array, Array]:
    """What turns (y, A) into (y - A beta, A L^-T), shape (1 + p, 1 + p), and L^-1.

    Without marginalisation (``profile``) only the first column is kept.
    """
    inverse, _ = lapack.dtrtri(work.small_factor, lower=1)
    p = work.beta.size
    mix = np.zeros((1 + p, 1 if profile else 1 + p))
    mix[0, 0] = 1
    mix[1:, 0] = -work.beta
    if not profile:
        mix[1:, 1:] = inverse.T
    return mix, np.asarray(inverse)


def residuals(work: Work, mix: Array) -> tuple[Array, Array]:
    """Whitened (u, V), shape (n_series, n_obs, columns), and B^-1 times their projections.

    ``work`` must hold the inverse ``triangle``.
    """
    n_series, n, width = work.stacked.shape
    uv = (work.stacked.reshape(-1, width) @ mix).reshape(n_series, n, -1)
    if work.triangle is None:
        return uv, np.zeros((0, mix.shape[1]))
    # in Fortran order, as LAPACK wants it
    st = multiply(work.triangle, (mix.T @ work.half.T).T, transposed=True)
    change = st - work.stacked_q @ mix
    for k, q in enumerate(work.q):
        uv += q[:, :, None] * change[k * n : (k + 1) * n][None]
    return uv, st


def joint_gradient(
    model: JointModel,
    parameters: Array,
    work: Work,
    orbit_gradients: list[list[Array]],
    how: Engine | None,
) -> Array:
    """Gradient in all parameters, in their order."""
    data, n = model.data, model.data.n_obs
    out = np.zeros(model.n_parameters)
    mix, _ = combinations(work, model.profile)
    uv, st = residuals(work, mix)
    # twice the derivative in each log variance: diagonal of u u^T + V V^T - K^-1, whitened
    twice = (uv * uv).sum(axis=2)
    twice -= 1
    if how is not None and work.blocks is not None and work.triangle is not None:
        weights = gram_of_inverse(work.triangle, st)
        diagonal = np.einsum("ii->i", weights)
        inverse_diagonal = np.einsum("ij,ij->i", st, st) - diagonal
        for i, q in enumerate(work.q):
            twice += q * q * (1 - inverse_diagonal[i * n : (i + 1) * n])
        if model.rank == 2:
            cross = np.einsum("ij,ij->i", st[:n], st[n:]) - np.diagonal(weights[n:, :n])
            twice -= 2 * work.q[0] * work.q[1] * cross
        diagonal *= 0.5  # the lower triangle alone then stands for the whole
        by_kernel, by_loading = how.backward(
            data.lags, parameters[model.slices["kernel"]], work.blocks, work.r, weights.T
        )
        out[model.slices["kernel"]] = by_kernel
        loadings = _loading_gradient(work, uv, st, by_loading, how)
        out[model.slices["a"]] = loadings[0]
        if model.rank == 2:
            out[model.slices["b"]] = loadings[1][model.derivative_rows]
    if data.unmeasured is not None:
        twice[data.unmeasured] = 0
    twice *= work.jitter2
    twice /= work.variance
    out[model.slices["jitter"]] = np.bincount(data.label, twice.ravel(), minlength=data.n_jitter)
    if model.orbits:
        out[model.slices["orbits"]] = _orbit_gradient(model, work, uv, mix, orbit_gradients)
    return out


def _loading_gradient(
    work: Work, uv: Array, st: Array, by_loading: Array, how: Engine
) -> list[Array]:
    """Gradient in the loadings of every series on the process and on its derivative."""
    n = work.weight.shape[1]
    assert work.blocks is not None
    rest = uv.copy()
    for k, q in enumerate(work.q):
        rest -= q[:, :, None] * st[k * n : (k + 1) * n][None]
    out = []
    for k, latent in enumerate(how.apply(work.blocks, work.r, st)):
        piece = np.einsum("snm,nm->sn", rest, latent)
        for i, q in enumerate(work.q):
            piece += q * by_loading[i, k]
        out.append(np.einsum("sn,sn->s", piece, work.weight))
    return out


def _orbit_gradient(
    model: JointModel, work: Work, uv: Array, mix: Array, orbit_gradients: list[list[Array]]
) -> Array:
    by_column = (uv[0] * work.weight[0][:, None]) @ -mix[1:].T
    start = model.data.columns.shape[2]
    out: list[float] = []
    for derivatives in orbit_gradients:
        columns = by_column[:, start : start + 2]
        out.extend(float(np.vdot(d, columns)) for d in derivatives)
        start += 2
    return np.array(out)
