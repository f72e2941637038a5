"""The noise in its eigenbasis, and the integral over the white jitter.

The covariance is K + diag(sigma_i^2) + s^2 I. The jitter s adds a multiple of the unit matrix, so
the eigenvectors Q of A = K + diag(sigma_i^2) serve every s: in the rotated data Q^T r the
covariance is diag(lambda_i + s^2). A quadratic form for all nodes of a quadrature over s is one
product with a table 1 / (lambda_i + s_k^2). The zero points are integrated analytically at each
node (uniform prior, normal integral).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import linalg
from scipy.special import logsumexp

from screener.core import Array, NumericalError
from screener.models.evidence_integrals.problem import EvidenceProblem

__all__ = ["JitterNodes", "log_evidence_without_planets", "make_nodes"]

_NEGLIGIBLE = 30.0  # nodes this far (in ln) below the peak of the posterior of s are left out


@dataclass(frozen=True, eq=False)
class JitterNodes:
    """Tables for n_nodes values of the jitter; all vectors are in the eigenbasis.

    Attributes
    ----------
    basis : array, shape (n_obs, n_obs)
        Q; ``x @ basis`` rotates rows.
    data : array, shape (n_obs,)
        Rotated velocities.
    jitter : array, shape (n_nodes,)
        m/s.
    inverse : array, shape (n_obs, n_nodes)
        1 / (lambda + s^2).
    projection : array, shape (n_obs, n_nodes, n_offsets)
        V with P = diag(inverse) - V V^T, the metric after the zero points are integrated.
    log_zero : array, shape (n_nodes,)
        ln(weight of the node times likelihood without planets).
    """

    basis: Array
    data: Array
    jitter: Array
    inverse: Array
    projection: Array
    log_zero: Array

    @property
    def n_nodes(self) -> int:
        return int(self.jitter.size)

    def products(self, columns: Array) -> tuple[Array, Array]:
        """Gram matrices and right-hand sides at every node.

        Parameters
        ----------
        columns : array, shape (n_samples, n_columns, n_obs)
            Rotated columns.

        Returns
        -------
        gram : array, shape (n_columns (n_columns + 1) / 2, n_samples, n_nodes)
            Entries (0,0), (1,0), (1,1), (2,0), ... of X^T P X.
        right : array, shape (n_columns, n_samples, n_nodes)
            X^T P y.
        """
        n_samples, n_columns, n_obs = columns.shape
        lower = [(a, b) for a in range(n_columns) for b in range(a + 1)]
        stacked = np.empty((len(lower) + n_columns, n_samples, n_obs))
        for row, (a, b) in enumerate(lower):
            np.multiply(columns[:, a], columns[:, b], out=stacked[row])
        for a in range(n_columns):
            np.multiply(columns[:, a], self.data, out=stacked[len(lower) + a])
        result = (stacked.reshape(-1, n_obs) @ self.inverse).reshape(*stacked.shape[:2], -1)
        n_offsets = self.projection.shape[2]
        for m in range(n_offsets):
            v = self.projection[:, :, m]
            along = np.ascontiguousarray(columns.swapaxes(0, 1)) @ v
            along_data = self.data @ v
            for row, (a, b) in enumerate(lower):
                result[row] -= along[a] * along[b]
            for a in range(n_columns):
                result[len(lower) + a] -= along[a] * along_data
        return result[: len(lower)], result[len(lower) :]


def _eigenbasis(problem: EvidenceProblem) -> tuple[Array, Array]:
    matrix = problem.covariance + np.diag(problem.rv_err**2)
    eigenvalues, basis = linalg.eigh(matrix)
    if eigenvalues[0] <= 0:
        raise NumericalError(
            f"the noise covariance is not positive definite: smallest eigenvalue "
            f"{eigenvalues[0]:.3g}, largest {eigenvalues[-1]:.3g} (m/s)^2"
        )
    return eigenvalues, basis


def _tables(
    problem: EvidenceProblem, eigenvalues: Array, basis: Array, jitter: Array, log_weight: Array
) -> JitterNodes:
    data, offsets = problem.rv @ basis, problem.offset_columns.T @ basis
    n_obs, n_offsets = problem.n_obs, offsets.shape[0]
    variance = eigenvalues[:, None] + jitter**2
    inverse = 1 / variance
    projection = np.empty((n_obs, jitter.size, n_offsets))
    log_zero = log_weight - 0.5 * (n_obs * math.log(2 * math.pi) + np.log(variance).sum(axis=0))
    log_zero += n_offsets * (0.5 * math.log(2 * math.pi) - math.log(2 * problem.offset_half_width))
    for k in range(jitter.size):
        weighted = offsets.T * inverse[:, k, None]
        factor = np.linalg.cholesky(offsets @ weighted)
        v = linalg.solve_triangular(factor, weighted.T, lower=True).T
        projection[:, k] = v
        square = data**2 @ inverse[:, k] - np.sum((data @ v) ** 2)
        log_zero[k] -= 0.5 * square + np.log(np.diag(factor)).sum()
    return JitterNodes(basis, data, jitter, inverse, projection, log_zero)


def make_nodes(problem: EvidenceProblem, n_nodes: int | None = None) -> JitterNodes:
    """Gauss-Legendre nodes over the jitter where the posterior without planets has any mass.

    Orbits only lower the jitter, so larger values than the zero-planet model allows are left out.
    """
    eigenvalues, basis = _eigenbasis(problem)
    if problem.jitter is None:
        return _tables(problem, eigenvalues, basis, np.zeros(1), np.zeros(1))
    coarse = np.linspace(0, 1, 257)
    tables = _tables(
        problem, eigenvalues, basis, problem.jitter.value(coarse), np.zeros(coarse.size)
    )
    allowed = np.flatnonzero(tables.log_zero > tables.log_zero.max() - _NEGLIGIBLE)
    upper = float(coarse[min(allowed[-1] + 1, coarse.size - 1)])
    if n_nodes is None:
        # the posterior of ln s narrows as n_obs^(-1/2)
        n_nodes = int(np.clip(math.ceil(32 * math.sqrt(problem.n_obs / 200)), 32, 128))
    x, w = np.polynomial.legendre.leggauss(n_nodes)
    u, weight = 0.5 * upper * (x + 1), 0.5 * upper * w
    return _tables(problem, eigenvalues, basis, problem.jitter.value(u), np.log(weight))


def log_evidence_without_planets(problem: EvidenceProblem, n_nodes: int = 400) -> float:
    """ln Z of the model without planets: one quadrature over the jitter."""
    eigenvalues, basis = _eigenbasis(problem)
    if problem.jitter is None:
        return float(_tables(problem, eigenvalues, basis, np.zeros(1), np.zeros(1)).log_zero[0])
    x, w = np.polynomial.legendre.leggauss(n_nodes)
    tables = _tables(
        problem, eigenvalues, basis, problem.jitter.value(0.5 * (x + 1)), np.log(0.5 * w)
    )
    return float(logsumexp(tables.log_zero))
