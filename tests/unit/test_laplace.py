"""Laplace errors against published formulas, a posterior on a grid, and second differences."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from screener.core import Array
from screener.models.fitting import Fit, HyperPrior, fit, prior_terms
from screener.models.joint import JointData
from screener.models.kernels import KERNELS
from screener.models.laplace import laplace, with_errors
from screener.models.noise import NoiseModel

PRIOR = HyperPrior(math.log(20.0), 0.2)


def _noise(time: Array, values: Array, error: float, kernel: str | None = None) -> NoiseModel:
    n_series, n = values.shape
    columns = np.zeros((n_series, n, n_series))
    for s in range(n_series):
        columns[s, :, s] = 1.0
    data = JointData(
        time, values, np.full(values.shape, error**2), np.ones(values.shape, bool),
        np.repeat(np.arange(n_series)[:, None], n, axis=1), n_series, columns,
        np.full(n_series, 1e3),
    )  # fmt: skip
    derivative = (kernel is not None,) + (False,) * (n_series - 1)
    process = KERNELS[kernel] if kernel else None
    return NoiseModel("test", data, process, derivative, PRIOR, scale=2.0)


def test_a_sinusoid_in_white_noise_against_the_published_formulas() -> None:
    """Montgomery & O'Donoghue (1999, DSSN 13, 28), even sampling:

    sigma_K = sqrt(2 / N) sigma, sigma_f = sqrt(6 / N) sigma / (pi T K).
    """
    n, sigma, k, period = 400, 1.0, 2.0, 11.7
    rng = np.random.default_rng(8)
    time = np.arange(n) * 0.5
    rv = k * np.sin(2 * np.pi * time / period + 0.3) + rng.normal(0, sigma, n)
    noise = _noise(time, rv[None], sigma)
    result = noise.fit([noise.term(11.71)])
    orbit = noise.orbits(result)[0]
    errors = laplace(noise, result)
    own = errors.orbits[0]
    # the jitter adds a little to the errors: take the noise that was fitted
    jitter = math.exp(result.parameters[0])
    total = math.hypot(sigma, jitter)
    fitted = orbit.semi_amplitude / noise.scale
    expected_k = math.sqrt(2 / n) * total * noise.scale
    expected_f = math.sqrt(6 / n) * total / (math.pi * n * 0.5 * fitted)
    assert own.semi_amplitude == pytest.approx(expected_k, rel=0.01)
    assert own.period == pytest.approx(expected_f * orbit.period**2, rel=0.02)
    assert own.eccentricity is None and errors.rotation_period is None and errors.curved
    assert with_errors([orbit], errors)[0].period_err == own.period


def test_against_the_exact_posterior_of_few_irregular_velocities() -> None:
    """Two non-linear parameters: the whole posterior fits on a grid."""
    rng = np.random.default_rng(3)
    time = np.sort(rng.uniform(0, 90, 40))
    rv = 2.0 * np.cos(2 * np.pi * time / 31.0) + rng.normal(0, 0.7, 40)
    noise = _noise(time, rv[None], 0.5)
    result = noise.fit([noise.term(30.0)])
    errors = laplace(noise, result)
    mean, sd, _, _ = prior_terms(result.model, PRIOR)
    spread = np.sqrt(np.diagonal(errors.covariance))
    grids = [result.parameters[i] + spread[i] * np.linspace(-5, 5, 41) for i in range(2)]
    log_weight, periods, k_mean, k_var = [], [], [], []
    for jitter in grids[0]:
        for offset in grids[1]:
            x = np.array([jitter, offset])
            z = (x - mean) / sd
            solution = result.model.solve(x)
            log_weight.append(solution.log_likelihood - 0.5 * float(z @ z))
            orbit = noise.orbits(replace(result, parameters=x))[0]
            periods.append(orbit.period)
            k_mean.append(orbit.semi_amplitude)
            k_var.append((orbit.semi_amplitude_err or 0.0) ** 2)
    weight = np.exp(np.array(log_weight) - max(log_weight))
    weight /= weight.sum()

    def exact(values: list[float], within: float = 0.0) -> float:
        v = np.array(values)
        return math.sqrt(float(weight @ (v - weight @ v) ** 2) + within)

    own = errors.orbits[0]
    # forty velocities: the posterior is a Gaussian to some per cent
    assert own.period == pytest.approx(exact(periods), rel=0.08)
    assert own.semi_amplitude == pytest.approx(exact(k_mean, float(weight @ k_var)), rel=0.08)


def _active_star() -> tuple[NoiseModel, Fit]:
    rng = np.random.default_rng(11)
    time = np.sort(rng.uniform(0, 150, 50))
    noise = _noise(time, np.zeros((2, 50)), 0.2, "quasi-periodic")
    model = noise.model([])
    truth = np.array([math.log(20.0), math.log(45.0), math.log(0.5), 0.8, 1.0, 0.4, -1.6, -1.6])
    values = model.draw(truth, rng)
    values[0] += 0.7 * np.cos(2 * np.pi * time / 7.3)
    noise = _noise(time, values, 0.2, "quasi-periodic")
    term = noise.term(7.3, eccentric=True)
    model = noise.model([term])
    start = np.concatenate([truth, [0.0, 0.1, 0.1]])
    return noise, fit(model, PRIOR, [start], 300)


def test_curvature_against_second_differences_of_the_likelihood() -> None:
    noise, result = _active_star()
    errors = laplace(noise, result)
    assert errors.curved
    _, sd, _, _ = prior_terms(result.model, PRIOR)
    x, n, h = result.parameters, result.parameters.size, 1e-3
    free = [i for i in range(n) if i not in errors.held]
    units = np.eye(n) * h

    def value(step: Array) -> float:
        return result.model.log_likelihood(x + step)

    curvature = np.diag(1 / sd**2)
    for i in range(n):
        for j in range(i + 1):
            second = (
                value(units[i] + units[j]) - value(units[i] - units[j])
                - value(units[j] - units[i]) + value(-units[i] - units[j])
            ) / (4 * h * h)  # fmt: skip
            curvature[i, j] -= second
            curvature[j, i] = curvature[i, j]
    expected = np.linalg.inv(curvature[np.ix_(free, free)])
    found = errors.covariance[np.ix_(free, free)]
    assert np.allclose(np.diagonal(found), np.diagonal(expected), rtol=0.01)
    assert errors.rotation_period == pytest.approx(math.exp(x[0]))
    assert errors.rotation_period_err == pytest.approx(
        math.exp(x[0]) * math.sqrt(expected[0, 0]), rel=0.01
    )
    assert errors.kernel_log_err.keys() == {"period", "decay", "shape"}


def test_unknown_noise_and_shape_widen_the_amplitude() -> None:
    noise, result = _active_star()
    conditional = noise.orbits(result)[0].semi_amplitude_err
    own = laplace(noise, result).orbits[0]
    assert conditional is not None and own.semi_amplitude > conditional
    assert own.eccentricity is not None and 0 < own.eccentricity < 0.5


def test_a_parameter_at_a_wall_is_held_and_says_so() -> None:
    noise, result = _active_star()
    upper = prior_terms(result.model, PRIOR)[3]
    moved = result.parameters.copy()
    moved[0] = upper[0]
    errors = laplace(noise, replace(result, parameters=moved))
    assert 0 in errors.held and errors.rotation_period_err is None
    assert "period" not in errors.kernel_log_err
    assert not errors.covariance[0].any()


def test_a_saddle_is_not_taken_for_a_maximum() -> None:
    noise, result = _active_star()
    moved = result.parameters.copy()
    moved[result.model.slices["orbits"].start] += 2 * math.pi * 0.7  # between two peaks
    errors = laplace(noise, replace(result, parameters=moved))
    assert not errors.curved
    assert np.all(np.isfinite(errors.covariance))
