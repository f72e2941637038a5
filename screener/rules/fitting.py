"""Fitting weights: penalised logistic regression whose weights keep their sign.

With x_r in [0, 1] the share of rule r that counts, the log-odds of a planet are
b + sum_fixed w_r x_r + sum_fitted w_r x_r. The fitted weights minimise the weighted log loss plus
a ridge (strength/2 * sum w^2) or lasso (strength * sum |w|) penalty, each weight bounded to one
sign. Kind and strength are those with the least log loss on stars that were left out, in folds of
whole stars. Out-of-fold scores then set one common scale and the intercept (Platt 1999), so that
the odds mean what they say.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from screener.core import Array
from screener.core.errors import NumericalError
from screener.rules.population import BoolArray, IntArray

__all__ = ["Design", "Fit", "fit_weights", "fold_of_stars", "logistic", "recalibrate"]

STRENGTHS = tuple(float(s) for s in np.geomspace(0.1, 100.0, 7))
KINDS = ("ridge", "lasso")
SCALE_RANGE = (0.5, 1.5)
MIN_ACTIVE = 25  # signals on which a rule must count before its weight is fitted


@dataclass(frozen=True, eq=False)
class Design:
    """What the fit sees.

    Attributes
    ----------
    x : array, shape (n, n_rules)
        Shares of the fitted rules.
    sign : array, shape (n_rules,)
        +1 for rules towards planet, -1 for those towards star.
    offset : array, shape (n,)
        Log-odds from everything that is not fitted.
    y : array, shape (n,)
        1 for planets, 0 for signals that are none.
    cost : array, shape (n,)
        Weight of each signal.
    fold : array of int, shape (n,)
        Fold of the signal's star.
    """

    x: Array
    sign: Array
    offset: Array
    y: Array
    cost: Array
    fold: IntArray


@dataclass(frozen=True, eq=False)
class Fit:
    """Weights and how they were found.

    ``weights`` has shape (n_rules,), ``scores`` (out of fold, intercept and offset included)
    shape (n,).
    """

    weights: Array
    intercept: float
    scores: Array
    kind: str
    strength: float
    scale: float
    log_loss: float


def fold_of_stars(n_stars: int, n_folds: int, rng: np.random.Generator) -> IntArray:
    """A fold for each star, as even as can be; shape (n_stars,)."""
    fold: IntArray = np.arange(n_stars, dtype=np.int64) % n_folds
    return np.asarray(rng.permutation(fold))


def logistic(
    design: Design, rows: BoolArray, kind: str, strength: float, start: Array | None = None
) -> tuple[Array, float]:
    """Weights (signed) and intercept from some of the signals.

    Parameters
    ----------
    rows : bool array, shape (n,)
    kind : {"ridge", "lasso"}
    strength : float
    start : array, shape (n_rules,), optional
        Weights to start from.

    Raises
    ------
    NumericalError
        If the optimiser does not converge.
    """
    x = design.x[rows] * design.sign
    y, cost, offset = design.y[rows], design.cost[rows], design.offset[rows]
    n_rules, total = x.shape[1], float(cost.sum())
    # about the mean, the intercept goes its own way and the optimiser needs far fewer steps
    mean = cost @ x / total
    x -= mean

    def loss(theta: Array) -> tuple[float, Array]:
        eta = offset + theta[0] + x @ theta[1:]
        value = float(cost @ (np.logaddexp(0.0, eta) - y * eta))
        slope = cost * (special.expit(eta) - y)
        gradient = np.concatenate([[slope.sum()], x.T @ slope])
        u = theta[1:]
        if kind == "ridge":
            value += 0.5 * strength * float(u @ u)
            gradient[1:] += strength * u
        else:
            value += strength * float(u.sum())
            gradient[1:] += strength
        return value / total, gradient / total

    first = np.full(n_rules, 0.1) if start is None else start * design.sign
    bounds = [(-50.0, 50.0)] + [(0.0, 50.0)] * n_rules
    found = optimize.minimize(
        loss,
        np.concatenate([[0.0], first]),
        jac=True,
        method="L-BFGS-B",
        bounds=bounds,
        options={"maxiter": 2000, "maxfun": 20000, "maxcor": 20, "ftol": 1e-11, "gtol": 1e-7},
    )
    if not found.success:
        raise NumericalError(
            f"the weights did not converge ({kind}, strength {strength:g}, {y.size} signals): "
            f"{found.message}"
        )
    u = found.x[1:]
    return np.asarray(u * design.sign), float(found.x[0] - mean @ u)


def _log_loss(y: Array, eta: Array, cost: Array) -> float:
    return float(cost @ (np.logaddexp(0.0, eta) - y * eta) / cost.sum())


def _out_of_fold(design: Design, kind: str) -> list[tuple[float, Array]]:
    """For each strength: log loss, and the fitted part of the score, shape (n,).

    Each signal's part comes from the folds without its star; each strength starts from the
    weights of the one before.
    """
    n = design.y.size
    parts = np.zeros((len(STRENGTHS), n))
    etas = np.zeros((len(STRENGTHS), n))
    for fold in np.unique(design.fold):
        out = design.fold == fold
        weights: Array | None = None
        for row in reversed(range(len(STRENGTHS))):
            weights, b = logistic(design, ~out, kind, STRENGTHS[row], weights)
            parts[row, out] = design.x[out] @ weights
            etas[row, out] = design.offset[out] + parts[row, out] + b
    return [(_log_loss(design.y, e, design.cost), p) for e, p in zip(etas, parts, strict=True)]


def recalibrate(part: Array, offset: Array, y: Array) -> tuple[float, float]:
    """Scale of the fitted part and intercept that make the odds true (Platt 1999)."""

    def loss(theta: Array) -> tuple[float, Array]:
        eta = theta[0] * part + theta[1] + offset
        slope = special.expit(eta) - y
        gradient = np.array([slope @ part, slope.sum()])
        return float(np.sum(np.logaddexp(0.0, eta) - y * eta)), gradient

    found = optimize.minimize(
        loss, np.array([1.0, 0.0]), jac=True, method="L-BFGS-B", bounds=[SCALE_RANGE, (-50.0, 50.0)]
    )
    if not found.success:
        raise NumericalError(f"the scale of the odds did not converge: {found.message}")
    return float(found.x[0]), float(found.x[1])


def fit_weights(design: Design) -> Fit:
    """Choose the penalty by folds of stars, fit all signals with it, and set scale and intercept.

    Raises
    ------
    NumericalError
        If an optimisation does not converge.
    """
    trials = [
        (loss, kind, strength, part)
        for kind in KINDS
        for strength, (loss, part) in zip(STRENGTHS, _out_of_fold(design, kind), strict=True)
    ]
    log_loss, kind, strength, part = min(trials, key=lambda t: t[0])
    weights, _ = logistic(design, np.ones(design.y.size, dtype=bool), kind, strength)
    scale, intercept_ = recalibrate(part, design.offset, design.y)
    scores = design.offset + scale * part + intercept_
    return Fit(scale * weights, intercept_, scores, kind, strength, scale, log_loss)
