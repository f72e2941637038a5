"""The activity model of long series: its calls against differences and a dense form, its use."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from screener.core import Array, Depth, Indicator, Star, TimeSeries
from screener.models.dataset import scaled_data
from screener.models.fitting import HyperPrior
from screener.models.kepler import keplerian_velocity
from screener.models.laplace import laplace
from screener.models.long import rotation_term
from screener.models.long_noise import DENSE_UP_TO, LongNoise, is_long, long_processes
from screener.models.noise import NoiseModel
from screener.models.portrait import paint
from screener.search.periodogram import Precision, power

pytest.importorskip("celerite2")

PRIOR = HyperPrior(math.log(25.0), 0.2)


def _series(n: int, seed: int = 3) -> TimeSeries:
    """Rotation of 27 d in velocities and width, a planet of 11.4 d, a season in three."""
    rng = np.random.default_rng(seed)
    nights = np.arange(3 * n)
    nights = nights[nights % 365 < 250][:n]
    time = nights + rng.uniform(-0.1, 0.1, n)
    lag = np.abs(time[:, None] - time[None, :])
    covariance = np.asarray(rotation_term(27.0, 60.0, 0.3, 1.5).get_value(lag))
    latent = np.linalg.cholesky(covariance + 1e-8 * np.eye(n)) @ rng.normal(size=n)
    rv = latent + rng.normal(0, 1, n) + keplerian_velocity(time, 11.4, 1.6, 0.0, 0.0, 2.0)
    width = Indicator("fwhm", 3 * latent + rng.normal(0, 2, n), np.full(n, 2.0))
    return TimeSeries(time, rv, np.ones(n), np.zeros(n, dtype=np.intp), ("A",), (width,))


def _process(n: int = 150) -> tuple[LongNoise, Array]:
    series = _series(n)
    _, noise = long_processes(scaled_data(series, series.indicators, 250.0), PRIOR)
    start = [math.log(27), math.log(50), math.log(0.4), -0.8, math.log(0.3)]
    return noise, np.array([*start, 0.2, 0.1, 0.3, -0.2])


def test_gradient_against_central_differences() -> None:
    noise, x = _process()
    model = noise.model([noise.term(11.36), noise.term(40.0, True)])
    value, gradient = model.value_and_gradient(x)
    assert value == pytest.approx(model.log_likelihood(x), abs=1e-10)
    steps = 1e-5 * np.eye(x.size)
    numeric = [(model.log_likelihood(x + s) - model.log_likelihood(x - s)) / 2e-5 for s in steps]
    assert np.allclose(gradient, numeric, rtol=1e-4, atol=2e-3)
    assert np.allclose(model.gradient_and_linear_mean(x)[0], gradient)


def test_solution_against_the_dense_form() -> None:
    noise, x = _process()
    term = noise.term(11.36)
    x = x[:6]
    model, data = noise.model([term]), noise.data
    lag = np.abs(data.time[:, None] - data.time[None, :])
    kernel = np.asarray(rotation_term(27.0, 50.0, 0.4, 0.8).get_value(lag))
    covariance = kernel + np.diag(data.variance[0] + 0.3**2)
    frequency = 1 / term.period + x[5] / (2 * math.pi * data.span)
    angle = 2 * math.pi * frequency * (data.time - data.mid_time)
    columns = np.concatenate(
        [data.columns[0], np.cos(angle)[:, None], -np.sin(angle)[:, None]], axis=1
    )
    full = covariance + (columns * model.column_sd**2) @ columns.T
    precision = np.linalg.inv(full)
    linear = np.linalg.inv(columns.T @ np.linalg.solve(covariance, columns)
                           + np.diag(model.column_sd**-2.0))  # fmt: skip
    mean = linear @ columns.T @ np.linalg.solve(covariance, data.value[0])
    solution = model.solve(x)
    assert np.allclose(solution.linear_mean, mean, atol=1e-6)
    assert np.allclose(solution.linear_covariance, linear, rtol=1e-5, atol=1e-8)
    rows = np.arange(20, 60)
    block = precision[np.ix_(rows, rows)]
    assert np.allclose(solution.velocity_block(rows), block, atol=1e-7 * np.abs(block).max())
    activity = kernel @ np.linalg.solve(covariance, data.value[0] - columns @ mean)
    assert np.allclose(solution.activity_mean, activity, atol=1e-6)
    at, sd = model.predict_activity(x, data.time[rows] + 1e-9)
    assert np.allclose(at, activity[rows], atol=1e-5) and np.all((sd > 0) & (sd < 0.8))
    grid = np.linspace(0.05, 0.15, 50)
    found = noise.fit([term])
    operator = noise.precision(replace(found, parameters=x))
    dense = Precision(precision @ data.value[0], matrix=precision)
    assert np.allclose(power(data.time, operator, grid), power(data.time, dense, grid), atol=1e-5)
    rng = np.random.default_rng(1)
    draws = np.array([model.draw(x, rng)[0] for _ in range(400)])
    assert np.var(draws) == pytest.approx(np.diagonal(covariance).mean(), rel=0.1)
    assert np.cov(draws.T)[10, 11] == pytest.approx(covariance[10, 11], abs=0.15)


def test_the_best_indicator_guides_period_and_decay() -> None:
    noise, _ = _process(300)
    assert math.exp(noise.prior.log_period) == pytest.approx(27.0, rel=0.1)
    assert noise.prior.log_period_sd < PRIOR.log_period_sd
    assert "fwhm" in noise.approximation
    series = _series(300)
    mute = Indicator("fwhm", np.random.default_rng(2).normal(0, 2, 300), np.full(300, 2.0))
    other = replace(series, indicators=(mute,))
    _, unguided = long_processes(scaled_data(other, other.indicators, 250.0), PRIOR)
    assert unguided.prior == PRIOR and "No indicator" in unguided.approximation


def test_errors_are_those_of_the_planet() -> None:
    noise, _ = _process(300)
    result = noise.fit([noise.term(11.41)], fresh=True)
    assert result.converged
    orbit, errors = noise.orbits(result)[0], laplace(noise, result)
    assert abs(orbit.period - 11.4) < 4 * (errors.orbits[0].period or 0.0)
    assert abs(orbit.semi_amplitude - 1.6) < 4 * errors.orbits[0].semi_amplitude
    assert errors.curved and 0.05 < errors.orbits[0].semi_amplitude < 0.3


def test_only_long_series_get_it(monkeypatch: pytest.MonkeyPatch) -> None:
    assert not is_long(DENSE_UP_TO) and is_long(DENSE_UP_TO + 1)
    series = _series(160)
    star = Star("Long")
    dense = paint(star, series, (), None, Depth.QUICK)
    assert type(dense.noise) is NoiseModel and not dense.noise.approximation
    monkeypatch.setattr("screener.models.long_noise.DENSE_UP_TO", 100)
    long = paint(star, series, (), None, Depth.QUICK)
    assert isinstance(long.noise, LongNoise) and "160 velocities" in long.noise.approximation
    for portrait in (dense, long):
        best = portrait.sightings[0]
        assert best.orbit.period == pytest.approx(11.4, rel=0.01)
        assert best.orbit.semi_amplitude == pytest.approx(1.6, abs=0.5)
        assert best.assessment.gains["joint process"] > 12


def test_without_celerite_everything_stays_dense(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("screener.models.long_noise.find_spec", lambda _name: None)
    assert not is_long(3000)
