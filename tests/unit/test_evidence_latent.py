"""The latent activity from the indicators, and the velocities' correlation with it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from screener.core import Array, Indicator, TimeSeries
from screener.evidence import correlation
from screener.evidence.case import Case
from screener.evidence.latent import LatentActivity, latent_activity
from screener.models.dataset import Scaled, choose_indicators, scaled_data
from screener.models.fitting import Fit, HyperPrior, starting_point
from screener.models.noise import joint_process
from tests.statistical.evidence_cases import Recipe, fitted, nights

_TURN = 24.0


def _operator(series: TimeSeries, at_velocity: tuple[float, float] = (0.7, 0.5)) -> LatentActivity:
    """The operator for given hyper-parameters: nothing is fitted."""
    found = latent_activity(*_given(series, at_velocity))
    assert found is not None
    return found


def _given(series: TimeSeries, at_velocity: tuple[float, float]) -> tuple[Fit, Scaled]:
    scaled = scaled_data(series, choose_indicators(series, 3), 1e4)
    prior = HyperPrior(math.log(_TURN), 0.1)
    noise = joint_process(scaled, prior)
    model = noise.model(())
    x = starting_point(model, prior, np.ones(scaled.data.n_series), 0.3)
    x[model.slices["a"].start], x[model.slices["b"].start] = at_velocity
    return Fit(model, x, 0.0, 0.0, 0.0, 0, True), scaled


def _spotted(seed: int, along: float, before: float, n: int = 80) -> TimeSeries:
    """Velocities that follow the width by ``along`` and its time derivative by ``before``."""
    rng = np.random.default_rng(seed)
    time = nights(rng, n, 2)
    phase = rng.uniform(0, 2 * np.pi, 2)
    angle = 2 * np.pi * time / _TURN
    spot: Array = np.cos(angle + phase[0]) + 0.5 * np.cos(2 * angle + phase[1])
    slope: Array = -np.sin(angle + phase[0]) - np.sin(2 * angle + phase[1])
    rv = 4.0 * (along * spot + before * slope) + rng.standard_normal(n)
    fwhm = 10.0 * spot + 2.0 * rng.standard_normal(n)
    fwhm[::9] = np.nan
    s_index = 0.02 * spot + 0.005 * rng.standard_normal(n)
    return TimeSeries(
        time,
        rv,
        np.full(n, 1.0),
        np.zeros(n, dtype=np.intp),
        ("A",),
        (
            Indicator("fwhm", fwhm, np.where(np.isnan(fwhm), np.nan, 2.0)),
            Indicator("s_index", s_index, np.full(n, 0.005)),
        ),
    )


def _case(series: TimeSeries, period: float = _TURN) -> Case:
    return replace(fitted(series, Recipe(period=period, error=1.0), 3), activity=_operator(series))


def test_the_operator_is_the_joint_model_without_velocities() -> None:
    # the same posterior mean by the likelihood's own way, the velocities masked out
    series = _spotted(1, 1.0, 0.4, n=50)
    result, scaled = _given(series, (1.0, 0.0))
    operator = latent_activity(result, scaled)
    assert operator is not None
    values = np.stack([series.indicator(name).value for name in operator.names], axis=1)
    g, derivative = operator(values[:, :, None])[:, :, 0]
    mask = scaled.data.mask.copy()
    mask[0] = False
    blind = replace(scaled.data, mask=mask)
    # centring changes nothing but what the wide priors of the zero points hold back
    for loadings, ours in (((1.0, 0.0), g), ((0.0, 1.0), derivative)):
        model = replace(result.model, data=blind)
        x = result.parameters.copy()
        x[model.slices["a"].start], x[model.slices["b"].start] = loadings
        expected, _ = model.predict_activity(x, series.time)
        assert ours == pytest.approx(expected, abs=2e-3)


def test_velocities_do_not_pull_the_activity() -> None:
    series = _spotted(1, 1.0, 0.0)
    other = series.with_rv(series.rv[::-1].copy())
    assert np.array_equal(_operator(series).weights, _operator(other).weights)


def test_nothing_without_indicators() -> None:
    series = replace(_spotted(1, 1.0, 0.0), indicators=())
    assert latent_activity(*_given(series, (0.7, 0.5))) is None


def test_spots_are_told_by_the_derivative_where_the_activity_itself_says_nothing() -> None:
    for seed in range(5):
        found = correlation.run(_case(_spotted(seed, 0.0, 1.0))).parameters
        assert abs(found["latent_derivative_pearson"]) > 0.7 > 2 * abs(found["latent_pearson"])
        assert found["latent_derivative_pearson_p"] < 0.02
        assert found["latent_p"] < 0.02
        # the derivative of a cosine runs a quarter of a turn ahead of it
        assert abs(abs(found["latent_phase_lag_rad"]) - 0.5 * np.pi) < 0.35


def test_in_phase_there_is_no_lag() -> None:
    for seed in range(5):
        found = correlation.run(_case(_spotted(seed, 1.0, 0.0))).parameters
        assert found["latent_pearson"] > 0.7
        assert abs(found["latent_phase_lag_rad"]) < 0.35
        assert abs(found["latent_pearson_without_signal"]) < found["latent_pearson"]


def test_an_unrelated_signal_has_no_part_in_the_activity() -> None:
    # the control: velocities of a planet beside a spotted star whose spots do not move them
    found = []
    for seed in range(12):
        series = _spotted(seed, 0.0, 0.0)
        orbit = 5.0 * np.cos(2 * np.pi * series.time / 9.1 + seed)
        found.append(correlation.run(_case(series.with_rv(series.rv + orbit), 9.1)).parameters)
    assert sum(f["latent_p"] < 0.05 for f in found) <= 3
    assert np.median([f["latent_multiple"] for f in found]) < 0.4


def test_the_figures_are_left_out_where_no_joint_model_was_fitted() -> None:
    case = replace(_case(_spotted(1, 1.0, 0.0)), activity=None)
    assert not any(name.startswith("latent") for name in correlation.run(case).parameters)
