"""The dense, obvious way: one Cholesky factorisation per value of the jitter.

Slow; the reference for the fast paths, and the second method for the model without planets.
"""

from __future__ import annotations

import itertools
import math
import time

import numpy as np
from scipy import linalg
from scipy.integrate import quad
from threadpoolctl import threadpool_limits

from screener.core import Array
from screener.models.evidence_integrals.problem import EvidenceEstimate, EvidenceProblem

__all__ = ["direct_evidence_without_planets", "direct_log_likelihood"]


def direct_log_likelihood(problem: EvidenceProblem, model: Array, jitter: float) -> float:
    """ln likelihood of ``rv - model`` (m/s) at one jitter (m/s), zero points integrated."""
    covariance = problem.covariance + np.diag(problem.rv_err**2 + jitter**2)
    factor = linalg.cholesky(covariance, lower=True)
    white = linalg.solve_triangular(factor, problem.rv - model, lower=True)
    columns = linalg.solve_triangular(factor, problem.offset_columns, lower=True)
    offset, *_ = np.linalg.lstsq(columns, white, rcond=None)
    square = float(np.sum((white - columns @ offset) ** 2))
    _, log_det = np.linalg.slogdet(columns.T @ columns)
    n_offsets = columns.shape[1]
    return float(
        -0.5 * (square + (problem.n_obs - n_offsets) * math.log(2 * math.pi) + float(log_det))
        - float(np.log(np.diag(factor)).sum())
        - n_offsets * math.log(2 * problem.offset_half_width)
    )


def direct_evidence_without_planets(problem: EvidenceProblem) -> EvidenceEstimate:
    """ln Z without planets by adaptive quadrature over the jitter."""
    with threadpool_limits(1):
        return _quadrature(problem)


def _quadrature(problem: EvidenceProblem) -> EvidenceEstimate:
    start = time.perf_counter()
    none = np.zeros(problem.n_obs)
    prior = problem.jitter
    if prior is None:
        value = direct_log_likelihood(problem, none, 0.0)
        return EvidenceEstimate(
            0, value, 1e-9, "Cholesky", math.inf, 1, time.perf_counter() - start
        )
    grid = np.linspace(0, 1, 65)
    rough = [direct_log_likelihood(problem, none, float(prior.value(np.array(u)))) for u in grid]
    peak, top = float(grid[int(np.argmax(rough))]), float(np.max(rough))

    def integrand(u: float) -> float:
        return math.exp(direct_log_likelihood(problem, none, float(prior.value(np.array(u)))) - top)

    edges = [0.0, *(x for x in (peak - 0.05, peak, peak + 0.05) if 0 < x < 1), 1.0]
    parts = [quad(integrand, a, b, epsrel=1e-5) for a, b in itertools.pairwise(edges)]
    total, error = sum(p[0] for p in parts), sum(p[1] for p in parts)
    return EvidenceEstimate(
        0,
        top + math.log(total),
        max(error / total, 1e-6),
        "adaptive quadrature of Cholesky likelihoods",
        math.inf,
        len(rough) + 21 * len(parts),
        time.perf_counter() - start,
    )
