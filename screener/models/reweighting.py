"""Errors beyond Laplace's Gaussian: draws from a wide copy of it, weighted to the posterior.

Tails of rotation period and amplitude are longer than the curvature at the maximum says. Draws
from a multivariate t distribution with Laplace's covariance, weighted by posterior over proposal
(importance sampling; e.g. Robert & Casella 2004, Monte Carlo Statistical Methods, ch. 3; Geweke
1989, Econometrica 57, 1317, for the t), give the posterior's own spread, with the noise of the
fit marginalised as well. Amplitudes are drawn from their conditional normal distribution.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import solve_triangular

from screener.core import Array, NumericalError
from screener.models.fitting import Fit, prior_terms
from screener.models.laplace import LaplaceErrors, OrbitErrors, laplace
from screener.models.noise import NoiseModel

__all__ = ["Weighted", "reweighted", "weighted_draws"]

_DOF = 6.0
_DRAWS = 1200  # up to _FULL_UP_TO velocities; fewer for longer series, whose posteriors are closer
_FULL_UP_TO = 120
_FEWEST = 200
_EFFECTIVE = 25.0  # fewer effective draws say less than the curvature
_MOST_CHANGE = 2.5  # of an error; more is an accident of few heavy draws


@dataclass(frozen=True, eq=False)
class Weighted:
    """Draws (n_draws, n_parameters) with weights of sum 1 and amplitudes (n_draws, n_orbits)."""

    parameters: Array
    amplitudes: Array  # scaled units
    weight: Array
    effective: float


def weighted_draws(
    noise: NoiseModel, fit: Fit, errors: LaplaceErrors, rng: np.random.Generator, number: int
) -> Weighted:
    """Draw and weight; parameters held at a wall are drawn from the exponential behind it.

    Raises
    ------
    NumericalError
        Where no draw has a finite likelihood.
    """
    model, x = fit.model, fit.parameters
    mean, sd, lower, upper = prior_terms(model, noise.prior)
    held = np.array(errors.held, dtype=np.intp)
    free = np.setdiff1d(np.arange(x.size), held)
    inside = errors.covariance[np.ix_(free, free)]
    half = np.linalg.cholesky(inside + 1e-12 * np.diag(np.diagonal(inside)))
    stretch = np.sqrt(rng.chisquare(_DOF, number) / _DOF)[:, None]
    u = rng.standard_normal((number, free.size)) / stretch
    draws = np.tile(x, (number, 1))
    draws[:, free] += u @ half.T
    log_proposal = -0.5 * (_DOF + free.size) * np.log1p((u * u).sum(axis=1) / _DOF)
    if held.size:
        slope, _ = model.gradient_and_linear_mean(x)
        slope -= (x - mean) / sd**2
        rate = np.maximum(np.abs(slope[held]), 3 / (upper - lower)[held])
        behind = rng.exponential(1 / rate, (number, held.size))
        at_lower = x[held] - lower[held] < upper[held] - x[held]
        draws[:, held] += np.where(at_lower, behind, -behind)
        log_proposal -= behind @ rate
    amplitudes = np.zeros((number, len(model.orbits)))
    log_weight = np.full(number, -np.inf)
    normal = rng.standard_normal((number, model.column_sd.size))
    first = model.data.columns.shape[2]
    allowed = np.all((draws >= lower) & (draws <= upper), axis=1)
    for i in np.flatnonzero(allowed):
        try:
            value, beta, factor = model.linear_terms(draws[i])
        except NumericalError:
            continue
        z = (draws[i] - mean) / sd
        log_weight[i] = value - 0.5 * float(z @ z) - log_proposal[i]
        linear = beta + solve_triangular(factor, normal[i], lower=True, trans=1)
        amplitudes[i] = np.hypot(linear[first::2], linear[first + 1 :: 2])
    if not np.isfinite(log_weight).any():
        raise NumericalError("no draw around the optimum has a finite likelihood")
    weight = np.exp(log_weight - log_weight.max())
    weight /= weight.sum()
    return Weighted(draws, amplitudes, weight, float(1 / (weight @ weight)))


def reweighted(noise: NoiseModel, fit: Fit, seed: int = 1) -> LaplaceErrors:
    """Laplace's errors with the posterior's own spread about the estimate where draws tell it.

    Where fewer than 25 draws count, or an error would change more than 2.5 times, Laplace's stays.
    Errors are root mean square distances from the estimate, so that they hold its bias as well.

    Raises
    ------
    NumericalError
        As ``laplace``.
    """
    errors = laplace(noise, fit)
    model, x = fit.model, fit.parameters
    number = int(np.clip(_DRAWS * (_FULL_UP_TO / model.data.n_obs) ** 2, _FEWEST, _DRAWS))
    try:
        found = weighted_draws(noise, fit, errors, np.random.default_rng(seed), number)
    except (NumericalError, np.linalg.LinAlgError):
        return errors
    if found.effective < _EFFECTIVE:
        return errors

    def spread(values: Array, centre: float, known: float) -> float:
        own = math.sqrt(float(found.weight @ (values - centre) ** 2))
        return own if known / _MOST_CHANGE < own < known * _MOST_CHANGE else known

    orbits, start = [], model.slices["orbits"].start
    at = noise.orbits(fit)
    for k, (term, orbit, known) in enumerate(zip(model.orbits, at, errors.orbits, strict=True)):
        frequency = 1 / term.period + found.parameters[:, start] / (2 * math.pi * model.data.span)
        period = known.period and spread(1 / frequency, float(orbit.period), known.period)
        amplitude = spread(
            found.amplitudes[:, k] * noise.scale, orbit.semi_amplitude, known.semi_amplitude
        )
        orbits.append(OrbitErrors(period, amplitude, known.eccentricity))
        start += term.n_parameters
    names = model.kernel.names if model.kernel is not None else ()
    log_err = {
        name: spread(found.parameters[:, i], float(x[i]), errors.kernel_log_err[name])
        for i, name in enumerate(names)
        if name in errors.kernel_log_err
    }
    rotation_err = errors.rotation_period_err
    if errors.rotation_period is not None and "period" in log_err:
        rotation_err = errors.rotation_period * log_err["period"]
    return replace(
        errors, orbits=tuple(orbits), kernel_log_err=log_err, rotation_period_err=rotation_err
    )
