"""Priors, bounds and maximum-a-posteriori fits of the joint model."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from scipy.optimize import minimize

from screener.core import Array, NumericalError
from screener.models.joint import JointModel

__all__ = [
    "FREQUENCY_REACH",
    "Fit",
    "HyperPrior",
    "fit",
    "prior_terms",
    "starting_point",
    "starting_points",
]

_REFUSED = 1e12
_SHIFTS = tuple(np.linspace(-1.8, 1.8, 7))  # of the period, in sd of its prior
# How far an orbit's frequency may move, in its own parameter: 0.6 resolution elements, so that two
# orbits found 1.3 apart never become one.
FREQUENCY_REACH = 0.6 * 2 * math.pi


@dataclass(frozen=True)
class HyperPrior:
    """Priors on the kernel's hyper-parameters (natural logarithms) and walls around them.

    The decay time has a wall at a few rotations and some hundred days: without it the process can
    become coherent and swallow planets. The rotation period comes from indicators, photometry or
    the activity level, never from velocities that still hold the signal.
    """

    log_period: float
    log_period_sd: float
    decay_in_periods: float = 2.0
    log_decay_sd: float = 0.6
    log_shape: float = math.log(0.5)
    log_shape_sd: float = 0.4

    def centre(self, name: str) -> tuple[float, float, float, float]:
        """Mean, sd, lower and upper wall of one hyper-parameter."""
        if name == "period":
            reach = min(3 * self.log_period_sd, 1.2)
            return (
                self.log_period,
                self.log_period_sd,
                self.log_period - reach,
                self.log_period + reach,
            )
        if name == "decay":
            period = math.exp(self.log_period)
            upper = max(min(8 * period, 600.0), 1.5 * period)
            centre = min(max(self.decay_in_periods * period, 10.0), 0.6 * upper)
            lower = min(0.5 * period, 0.3 * upper)
            return math.log(centre), self.log_decay_sd, math.log(lower), math.log(upper)
        if name == "shape":
            return self.log_shape, self.log_shape_sd, math.log(0.15), math.log(3.0)
        if name == "half":
            return math.log(0.3), 1.0, math.log(0.01), math.log(10.0)
        if name == "mix":
            return 0.0, 1.5, -6.0, 6.0
        raise KeyError(name)


@dataclass(frozen=True, eq=False)
class Fit:
    """A maximum a posteriori.

    ``objective`` = log-likelihood + log-prior; ``profile`` = the same with the amplitudes of the
    orbits at their best instead of marginalised, so that nested models can be compared without
    the width of their prior.
    """

    model: JointModel
    parameters: Array
    objective: float
    profile: float
    log_likelihood: float
    n_evaluations: int
    converged: bool


def prior_terms(model: JointModel, prior: HyperPrior) -> tuple[Array, Array, Array, Array]:
    """Mean, sd, lower and upper bound of every parameter."""
    n = model.n_parameters
    mean, sd = np.zeros(n), np.full(n, np.inf)
    lower, upper = np.full(n, -np.inf), np.full(n, np.inf)
    slices = model.slices
    if model.kernel is not None:
        for i, name in enumerate(model.kernel.names):
            mean[i], sd[i], lower[i], upper[i] = prior.centre(name)
        for part in ("a", "b"):
            sd[slices[part]] = 2.0
            lower[slices[part]], upper[slices[part]] = -20.0, 20.0
    jitter = slices["jitter"]
    data = model.data
    for j in range(data.n_jitter):
        rows = data.mask & (data.jitter == j)
        typical = math.sqrt(float(np.median(data.variance[rows])))
        mean[jitter.start + j], sd[jitter.start + j] = math.log(0.5 * typical), 1.2
        lower[jitter.start + j] = math.log(0.02 * typical)
        upper[jitter.start + j] = math.log(max(30 * typical, 5.0))
    start = slices["orbits"].start
    for term in model.orbits:
        lower[start], upper[start] = -FREQUENCY_REACH, FREQUENCY_REACH
        if term.eccentric:
            # e of most planets is small: half-normal of width 0.3 in the vector (Kipping 2013,
            # MNRAS 434, L51, has mean 0.22)
            sd[start + 1 : start + 3] = 0.3
            lower[start + 1 : start + 3], upper[start + 1 : start + 3] = -3.0, 3.0
        start += term.n_parameters
    return mean, sd, lower, upper


def starting_point(
    model: JointModel, prior: HyperPrior, signs: Array | None = None, slope: float = 0.3
) -> Array:
    """Prior means for the kernel, moderate amplitudes, jitter at half the errors.

    ``slope`` is the amplitude on the derivative: whether velocities lead or follow the process
    makes two optima with a barrier between them.
    """
    mean, _, lower, upper = prior_terms(model, prior)
    out = mean.copy()
    if model.kernel is not None:
        out[model.slices["a"]] = 0.6
        if signs is not None:
            out[model.slices["a"]] *= signs
        out[model.slices["b"]] = slope
    return np.clip(out, lower, upper)


def starting_points(
    model: JointModel, prior: HyperPrior, signs: Array | None, count: int = 2
) -> list[Array]:
    """The likeliest of many starting points, at most ``count``, each of other signs.

    Rotation periods across the prior, the sign of the velocities against the indicators and of
    every amplitude on the derivative make separate optima, of which a single start often finds
    a poor one; a likelihood costs a third of a step of the optimiser.

    Raises
    ------
    NumericalError
        If the likelihood can be computed at none of them.
    """
    mean, sd, lower, upper = prior_terms(model, prior)
    first = starting_point(model, prior, signs)
    a, b = model.slices["a"], model.slices["b"]
    periodic = model.kernel is not None and "period" in model.kernel.names
    shifts = _SHIFTS if periodic else (0.0,)
    flips = [(1.0, -1.0)] * (b.stop - b.start)
    if model.kernel is not None and model.data.n_series > 1:
        flips = [(1.0, -1.0), *flips]
    trials: list[tuple[float, tuple[float, ...], Array]] = []
    cause: NumericalError | None = None
    for shift, own in product(shifts, product(*flips)):
        start = first.copy()
        if periodic:
            start[0] += shift * sd[0]
        if model.kernel is not None and model.data.n_series > 1:
            start[a.start] *= own[0]
        start[b] *= own[len(own) - (b.stop - b.start) :]
        start = np.clip(start, lower, upper)
        z = (start - mean) / sd
        try:
            value = model.log_likelihood(start) - 0.5 * float(z @ z)
        except NumericalError as error:
            cause = error
            continue
        trials.append((value, own, start))
    if not trials:
        raise cause or NumericalError("no start of the fit has a finite likelihood")
    out: dict[tuple[float, ...], Array] = {}
    for _, own, start in sorted(trials, key=lambda t: -t[0]):
        out.setdefault(own, start)
    return list(out.values())[:count]


def fit(
    model: JointModel, prior: HyperPrior, starts: Sequence[Array], max_iterations: int = 60
) -> Fit:
    """Best of L-BFGS-B runs with exact gradients from each start.

    Raises
    ------
    NumericalError
        If no start leads to a finite optimum; the message carries the last cause.
    """
    mean, sd, lower, upper = prior_terms(model, prior)
    inverse = 1 / sd
    cause: NumericalError | None = None

    def objective(parameters: Array) -> tuple[float, Array]:
        nonlocal cause
        z = (parameters - mean) * inverse
        try:
            value, gradient = model.value_and_gradient(parameters)
        except NumericalError as error:  # a line search may step too far: tell it so, once
            cause = error
            return _REFUSED, np.zeros(parameters.size)
        return -(value - 0.5 * float(z @ z)), -(gradient - z * inverse)

    best: Fit | None = None
    for start in starts:
        run = minimize(
            objective,
            np.clip(start, lower, upper),
            jac=True,
            method="L-BFGS-B",
            bounds=list(zip(lower, upper, strict=True)),
            options={"maxiter": max_iterations, "ftol": 1e-6, "gtol": 1e-3, "maxcor": 25},
        )
        if run.fun >= _REFUSED or (best is not None and -run.fun <= best.objective):
            continue
        z = (run.x - mean) * inverse
        best = Fit(
            model,
            np.asarray(run.x),
            float(-run.fun),
            0.0,
            float(-run.fun + 0.5 * z @ z),
            int(run.nfev),
            bool(run.success),
        )
    if best is None:
        raise cause or NumericalError("no start of the fit led to a finite likelihood")
    return replace(best, profile=best.objective + _occam(best))


def _occam(result: Fit) -> float:
    """What marginalising the orbits' amplitudes cost, to be added back for the profile."""
    model = result.model
    if not model.orbits:
        return 0.0
    solution = model.solve(result.parameters, velocities=False)
    start = model.data.columns.shape[2]
    covariance = solution.linear_covariance[start:, start:]
    mean, sd = solution.linear_mean[start:], model.column_sd[start:]
    _, log_det = np.linalg.slogdet(covariance)
    return float(np.log(sd).sum() - 0.5 * log_det + 0.5 * np.sum((mean / sd) ** 2))
