"""Series of thousands of velocities: a likelihood whose cost grows linearly.

The quasi-periodic kernel needs dense algebra. For long series two damped oscillators, at the
rotation period and at half of it, take its place: a semi-separable kernel (Foreman-Mackey et al.
2017, AJ 154, 220; Foreman-Mackey 2018, RNAAS 2, 31), factorised by celerite2 (extra ``long``),
which is imported only here and only when used. Zero points and slopes are marginalised as in the
joint model.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy.linalg import lapack

from screener.core import Array, IntArray, NumericalError, ScreenerError
from screener.models.linear_algebra import cholesky
from screener.search.periodogram import Precision

__all__ = ["LongModel", "LongPrecision", "rotation_term"]

_LOG_2PI = math.log(2 * math.pi)


def _terms() -> Any:
    try:
        from celerite2 import terms
    except ImportError as error:
        raise ScreenerError(
            "long series need celerite2: install the extra 'long', or bin the series"
        ) from error
    return terms


def rotation_term(period: float, decay: float, half: float, amplitude: float) -> Any:
    """Two damped oscillators of total variance ``amplitude``^2.

    ``half`` is the ratio of variances of the one at ``period / 2`` to the one at ``period``; both
    lose a factor e of their amplitude in ``decay`` (d), that is Q = pi decay / period of each,
    kept above 0.51 so that they oscillate.

    Raises
    ------
    ScreenerError
        If celerite2 is not installed.
    """
    terms = _terms()
    first = amplitude / math.sqrt(1 + half)
    out = terms.SHOTerm(sigma=first, rho=period, Q=max(math.pi * decay / period, 0.51))
    return out + terms.SHOTerm(
        sigma=first * math.sqrt(half),
        rho=period / 2,
        Q=max(2 * math.pi * decay / period, 0.51),
    )


@dataclass(frozen=True, eq=False)
class LongPrecision(Precision):
    """The inverse covariance as an operator: N instead of N^2 for each frequency.

    ``process`` is a factorised celerite2 process; ``low_rank`` (n_obs, n_linear) carries the
    projection of the linear terms: P = K^-1 - low_rank low_rank^T.
    """

    process: Any = None

    def products(self, cos: Array, sin: Array) -> tuple[Array, Array, Array]:
        """cos.P.cos, cos.P.sin and sin.P.sin for columns of shape (n_obs, m)."""
        assert self.low_rank is not None
        k_cos = self.process.apply_inverse(np.ascontiguousarray(cos))
        k_sin = self.process.apply_inverse(np.ascontiguousarray(sin))
        l_cos, l_sin = self.low_rank.T @ cos, self.low_rank.T @ sin
        column = "ij,ij->j"
        return (
            np.einsum(column, cos, k_cos) - np.einsum(column, l_cos, l_cos),
            np.einsum(column, sin, k_cos) - np.einsum(column, l_sin, l_cos),
            np.einsum(column, sin, k_sin) - np.einsum(column, l_sin, l_sin),
        )

    def block(self, rows: IntArray) -> Array:
        """Rows and columns ``rows`` of the matrix."""
        assert self.low_rank is not None
        unit = np.zeros((self.weighted.size, rows.size))
        unit[rows, np.arange(rows.size)] = 1
        low = self.low_rank[rows]
        return np.asarray(self.process.apply_inverse(unit)[rows] - low @ low.T)


@dataclass(frozen=True, eq=False)
class LongLinear:
    """Marginal log-likelihood, mean of the linear terms, and L^-1 of their normal matrix L L^T."""

    log_likelihood: float
    beta: Array
    inverse_small: Array
    precision: LongPrecision


@dataclass(frozen=True, eq=False)
class LongModel:
    """Velocities of shape (n_obs,) at increasing times, with linear terms under Gaussian priors.

    ``columns`` has shape (n_obs, n_linear), ``column_sd`` (n_linear,) holds the standard
    deviations of their priors. ``jitter`` gives each velocity the index of its jitter parameter.
    Parameters: natural logarithms of period, decay, half (see ``rotation_term``), amplitude, and
    of each jitter.
    """

    time: Array
    value: Array
    error: Array
    columns: Array
    column_sd: Array
    jitter: np.ndarray[tuple[int, ...], np.dtype[np.intp]] = field(
        default_factory=lambda: np.zeros(0, dtype=np.intp)
    )

    names = ("period", "decay", "half", "amplitude", "jitter")

    def solution(self, parameters: Array) -> LongLinear:
        """Likelihood, linear terms and precision at these parameters (errors as below)."""
        from celerite2 import GaussianProcess

        period, decay, half, amplitude, *jitters = np.exp(parameters).tolist()
        jitter = np.array(jitters)
        added = jitter[self.jitter] if self.jitter.size else jitter[0]
        process = GaussianProcess(rotation_term(period, decay, half, amplitude))
        try:
            process.compute(self.time, diag=self.error**2 + added**2, quiet=False)
        except (ArithmeticError, ValueError) as error:
            # celerite2's own error type derives from Exception alone in some versions
            raise self._failure(parameters) from error
        except Exception as error:
            if type(error).__name__ != "LinAlgError":
                raise
            raise self._failure(parameters) from error
        both = np.concatenate([self.value[:, None], self.columns], axis=1)
        solved = process.apply_inverse(both)
        gram = both.T @ solved
        normal = gram[1:, 1:] + np.diag(1 / self.column_sd**2)
        small = cholesky(normal.copy(order="F"), "the linear terms")
        beta, _ = lapack.dpotrs(small, gram[1:, 0], lower=1)
        chi2 = float(gram[0, 0] - gram[1:, 0] @ beta)
        # celerite2 normalises a draw of zeros: -(log det + n ln 2 pi) / 2
        log_norm = float(process.log_likelihood(np.zeros_like(self.value)))
        log_likelihood = log_norm - 0.5 * chi2
        log_likelihood -= float(np.log(np.diagonal(small)).sum() + np.log(self.column_sd).sum())
        if not math.isfinite(log_likelihood):
            raise self._failure(parameters)
        inverse, _ = lapack.dtrtri(small, lower=1)
        precision = LongPrecision(
            weighted=solved[:, 0] - solved[:, 1:] @ beta,
            low_rank=solved[:, 1:] @ inverse.T,
            process=process,
        )
        return LongLinear(log_likelihood, np.asarray(beta), np.asarray(inverse), precision)

    def _failure(self, parameters: Array) -> NumericalError:
        values = ", ".join(f"{v:.4g}" for v in np.exp(parameters))
        return NumericalError(
            f"the covariance of {self.time.size} velocities cannot be factorised at "
            f"(period, decay, half, amplitude, jitters) = ({values})"
        )

    def log_likelihood(self, parameters: Array) -> float:
        """Marginal log-likelihood (linear terms integrated out).

        Raises
        ------
        NumericalError
            Where the factorisation fails or a time does not increase.
        ScreenerError
            If celerite2 is not installed.
        """
        _terms()
        return self.solution(parameters).log_likelihood

    def precision(self, parameters: Array) -> LongPrecision:
        """What a periodogram on top of this noise needs (same errors)."""
        _terms()
        return self.solution(parameters).precision

    def linear_mean(self, parameters: Array) -> Array:
        """Posterior mean of the linear terms, shape (n_linear,) (same errors)."""
        _terms()
        return self.solution(parameters).beta
