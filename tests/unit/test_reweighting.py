"""Weighted draws against the exact posterior of few parameters, and when Laplace's errors stay."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from screener.models import reweighting
from screener.models.fitting import Fit, prior_terms
from screener.models.laplace import laplace
from screener.models.noise import NoiseModel
from screener.models.reweighting import reweighted, weighted_draws
from tests.unit.test_laplace import PRIOR, _active_star, _noise


def _few() -> tuple[NoiseModel, Fit]:
    """Fourteen velocities of a weak signal: the posterior has tails."""
    rng = np.random.default_rng(3)
    time = np.sort(rng.uniform(0, 90, 14))
    rv = 1.6 * np.cos(2 * np.pi * time / 31.0) + rng.normal(0, 0.7, 14)
    noise = _noise(time, rv[None], 0.5)
    return noise, noise.fit([noise.term(30.0)])


def test_against_the_exact_posterior() -> None:
    noise, result = _few()
    errors = laplace(noise, result)
    mean, sd, lower, upper = prior_terms(result.model, PRIOR)
    grids = [np.linspace(max(lower[i], -9.0), min(upper[i], 5.0), 81) for i in range(2)]
    points = np.array([[jitter, offset] for jitter in grids[0] for offset in grids[1]])
    log_weight = np.array([
        result.model.log_likelihood(x) - 0.5 * float(np.sum(((x - mean) / sd) ** 2))
        for x in points
    ])  # fmt: skip
    weight = np.exp(log_weight - log_weight.max())
    weight /= weight.sum()
    found = weighted_draws(noise, result, errors, np.random.default_rng(1), 4000)
    assert found.effective > 400
    for i in range(2):
        expected = weight @ points[:, i]
        scatter = math.sqrt(weight @ (points[:, i] - expected) ** 2)
        own = found.weight @ found.parameters[:, i]
        assert own == pytest.approx(expected, abs=0.15 * scatter)
        own = math.sqrt(found.weight @ (found.parameters[:, i] - own) ** 2)
        assert own == pytest.approx(scatter, rel=0.15)
    two = [result.model.solve(x) for x in points[weight > 1e-6]]
    k = np.array([np.hypot(*s.linear_mean[-2:]) for s in two])
    assert found.weight @ found.amplitudes[:, 0] == pytest.approx(
        weight[weight > 1e-6] @ k, rel=0.1
    )


def test_errors_hold_the_tails_that_the_curvature_misses() -> None:
    noise, result = _few()
    plain, own = laplace(noise, result), reweighted(noise, result)
    assert own.orbits[0].semi_amplitude != plain.orbits[0].semi_amplitude
    assert own.orbits[0].period is not None and plain.orbits[0].period is not None
    assert 0.7 < own.orbits[0].period / plain.orbits[0].period < 2.5


def test_the_same_seed_gives_the_same_errors() -> None:
    noise, result = _active_star()
    one, two = reweighted(noise, result, seed=4), reweighted(noise, result, seed=4)
    assert one.kernel_log_err == two.kernel_log_err and one.orbits == two.orbits
    assert one.rotation_period_err == pytest.approx(
        (one.rotation_period or 0.0) * one.kernel_log_err["period"]
    )
    assert reweighted(noise, result, seed=5).orbits != one.orbits


def test_a_parameter_at_a_wall_is_drawn_inside() -> None:
    noise, result = _active_star()
    lower = prior_terms(result.model, PRIOR)[2]
    jitter = result.model.slices["jitter"].start
    moved = result.parameters.copy()
    moved[jitter] = lower[jitter]
    held = replace(result, parameters=moved)
    errors = laplace(noise, held)
    assert jitter in errors.held
    found = weighted_draws(noise, held, errors, np.random.default_rng(2), 300)
    counted = found.parameters[found.weight > 0, jitter]
    assert np.all(counted > lower[jitter]) and np.ptp(counted) > 0.01


def test_too_few_effective_draws_leave_the_curvature(monkeypatch: pytest.MonkeyPatch) -> None:
    noise, result = _few()
    monkeypatch.setattr(reweighting, "_EFFECTIVE", 1e9)
    assert reweighted(noise, result).orbits == laplace(noise, result).orbits
