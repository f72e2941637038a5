"""Errors of a fit by Laplace's approximation: the posterior as a Gaussian at its maximum.

The curvature of log-likelihood plus log-prior comes from central differences of the exact
gradient. Amplitudes of orbits, which the likelihood integrates out, get back what the other
parameters do to them (law of total variance): with b(theta) their conditional mean and V their
conditional covariance,

    cov(b) = V + (db/dtheta) cov(theta) (db/dtheta)^T.

See e.g. MacKay (2003, Information Theory, Inference, and Learning Algorithms, ch. 27). Parameters
at a wall are held there: the likelihood still rises beyond it, so that no curvature exists.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from screener.core import Array, Orbit
from screener.models.fitting import Fit, prior_terms
from screener.models.noise import NoiseModel

__all__ = ["LaplaceErrors", "OrbitErrors", "laplace", "with_errors"]

_STEP = 1e-4  # parameters are logarithms, phases or amplitudes in units of the scatter
_AT_WALL = 1e-7


@dataclass(frozen=True)
class OrbitErrors:
    """1-sigma errors of one orbit: d, m/s; None where a parameter sits at a wall.

    ``eccentricity`` is None for a circular orbit.
    """

    period: float | None
    semi_amplitude: float
    eccentricity: float | None


@dataclass(frozen=True, eq=False)
class LaplaceErrors:
    """Errors of everything that was fitted.

    Attributes
    ----------
    orbits : tuple of OrbitErrors
        In the order of the fit's orbits.
    rotation_period, rotation_period_err : float or None
        Period of the activity kernel, d, and its error; the posterior is closer to normal in the
        logarithm, so that an interval is period * exp(+-z err / period). None without a periodic
        kernel; the error is None at a wall.
    kernel_log_err : mapping
        Error of each of the kernel's parameters, natural logarithms; those at a wall are absent.
    covariance : Array
        Of all non-linear parameters, shape (n_parameters, n_parameters); zero where held.
    held : tuple of int
        Parameters at a wall.
    curved : bool
        Whether the curvature was positive in every direction, as it must be at a maximum. If not,
        the errors along the others are those of the space between the walls.
    """

    orbits: tuple[OrbitErrors, ...]
    rotation_period: float | None
    rotation_period_err: float | None
    kernel_log_err: Mapping[str, float]
    covariance: Array
    held: tuple[int, ...]
    curved: bool


def laplace(noise: NoiseModel, fit: Fit) -> LaplaceErrors:
    """Errors at the optimum ``fit`` of ``noise``; two gradients for each parameter.

    Raises
    ------
    NumericalError
        Where the likelihood cannot be computed beside the optimum.
    """
    model, x = fit.model, fit.parameters
    _, sd, lower, upper = prior_terms(model, noise.prior)
    wall = _AT_WALL * (1 + np.abs(x))
    free = np.flatnonzero((x - lower > wall) & (upper - x > wall))
    curvature, slopes = np.diag(1 / sd[free] ** 2), np.zeros((model.column_sd.size, free.size))
    for j, index in enumerate(free):
        step = np.zeros(x.size)
        step[index] = _STEP
        (above, b_above), (below, b_below) = (
            model.gradient_and_linear_mean(x + step),
            model.gradient_and_linear_mean(x - step),
        )
        curvature[:, j] -= (above - below)[free] / (2 * _STEP)
        slopes[:, j] = (b_above - b_below) / (2 * _STEP)
    inside, curved = _inverse(0.5 * (curvature + curvature.T), (upper - lower)[free])
    covariance = np.zeros((x.size, x.size))
    covariance[np.ix_(free, free)] = inside
    solution = model.solve(x, velocities=False)
    linear = solution.linear_covariance + slopes @ inside @ slopes.T
    orbits = _orbit_errors(noise, fit, covariance, solution.linear_mean, linear)
    log_err, rotation = {}, None
    if model.kernel is not None:
        for i, name in enumerate(model.kernel.names):
            if i in free:
                log_err[name] = math.sqrt(covariance[i, i])
            if name == "period":
                rotation = math.exp(x[i])
    rotation_err = rotation * log_err["period"] if rotation and "period" in log_err else None
    held = tuple(int(i) for i in range(x.size) if i not in free)
    return LaplaceErrors(orbits, rotation, rotation_err, log_err, covariance, held, curved)


def with_errors(orbits: list[Orbit], errors: LaplaceErrors) -> list[Orbit]:
    """The same orbits (``NoiseModel.orbits`` of the same fit) with these errors."""
    out = []
    for orbit, own in zip(orbits, errors.orbits, strict=True):
        period_err = orbit.period_err if own.period is None else own.period
        out.append(
            replace(
                orbit,
                period_err=period_err,
                semi_amplitude_err=own.semi_amplitude,
                eccentricity_err=own.eccentricity,
            )
        )
    return out


def _inverse(curvature: Array, width: Array) -> tuple[Array, bool]:
    """Covariance from a curvature; in no direction wider than between the walls."""
    if width.size == 0:
        return np.zeros((0, 0)), True
    scale = width / math.sqrt(12)  # sd of a uniform distribution between them
    values, vectors = np.linalg.eigh(curvature * np.outer(scale, scale))
    curved = bool(values[0] > 0)
    half = vectors * scale[:, None] / np.sqrt(np.maximum(values, 1.0))
    return np.asarray(half @ half.T), curved


def _orbit_errors(
    noise: NoiseModel, fit: Fit, covariance: Array, mean: Array, linear: Array
) -> tuple[OrbitErrors, ...]:
    """By the delta method from the model's own parameters."""
    model = fit.model
    span = model.data.span
    start, column, out = model.slices["orbits"].start, model.data.columns.shape[2], []
    for term, values in zip(model.orbits, model.orbit_parameters(fit.parameters), strict=True):
        frequency = 1 / term.period + values[0] / (2 * math.pi * span)
        frequency_err = math.sqrt(covariance[start, start]) / (2 * math.pi * span)
        two = slice(column, column + 2)
        amplitude = float(np.hypot(*mean[two]))
        along = mean[two] / amplitude if amplitude > 0 else np.array([1.0, 0.0])
        amplitude_err = math.sqrt(float(along @ linear[two, two] @ along))
        ecc_err: float | None = None
        if term.eccentric:
            size = math.hypot(values[1], values[2])
            # de / d|p| along p; at p = 0 any direction serves
            along = values[1:] / size if size > 0 else np.array([1.0, 0.0])
            own = slice(start + 1, start + 3)
            ecc_err = math.sqrt(float(along @ covariance[own, own] @ along))
            ecc_err *= (1 + size * size) ** -1.5
        out.append(
            OrbitErrors(
                frequency_err / frequency**2 if frequency_err > 0 else None,
                amplitude_err * noise.scale,
                ecc_err if ecc_err else None,
            )
        )
        start += term.n_parameters
        column += 2
    return tuple(out)
