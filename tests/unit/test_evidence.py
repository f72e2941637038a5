"""Lines of evidence: what they share, and those about periods, indicators and sampling.

Each test has a null case, an injected case, and a negative control that must not pass.
"""

from __future__ import annotations

from dataclasses import replace
from types import ModuleType

import numpy as np
import pytest
from scipy import stats

from screener import evidence
from screener.core import Array, Finding, Indicator, Orbit, Outcome, Rotation, Signal
from screener.core.errors import NumericalError
from screener.core.references import REFERENCES
from screener.evidence import (
    correlation,
    cycle,
    harmonics,
    indicator_power,
    rotation,
    run_all,
    run_test,
    sampling,
)
from screener.evidence.correlated import draw, fit_alike, fit_noise, whiten, zero_points
from screener.evidence.lines import channels_of, fit_columns, signal_columns, velocity_channel
from screener.models.rotation import PeriodDensity
from tests.statistical.evidence_cases import Recipe, make_case, nights


def _outcomes(module: ModuleType, recipe: Recipe, n: int = 12) -> list[Finding]:
    return [module.run(make_case(seed, recipe)) for seed in range(n)]


# --- what all tests share -----------------------------------------------------------------------


def test_every_module_is_complete() -> None:
    found = evidence.tests()
    assert {"rotation", "cycle", "indicator_power", "correlation", "sampling", "harmonics"} <= set(
        found
    )
    for name, module in found.items():
        assert name == module.ID
        assert module.QUESTION.endswith("?")
        assert module.REQUIRES and module.__doc__
        for key in module.REFERENCES:
            assert key in REFERENCES, key


def test_every_finding_is_finite_and_named() -> None:
    for finding in run_all(make_case(1)):
        for value in (finding.statistic, finding.p_value, finding.power):
            assert value is None or np.isfinite(value), finding.test
        for value in (finding.p_value, finding.power):
            assert value is None or 0.0 <= value <= 1.0, finding.test
        assert finding.sentence.endswith("."), finding.test
        assert all(
            isinstance(v, (int, float, str, bool, type(None))) for v in finding.parameters.values()
        ), finding.test


def test_the_same_seed_gives_the_same_findings() -> None:
    assert run_all(make_case(3)) == run_all(make_case(3))


def test_a_broken_test_never_counts_as_a_pass() -> None:
    broken = ModuleType("broken")
    broken.ID, broken.REFERENCES = "broken", ()  # type: ignore[attr-defined]

    def ours(case: object) -> Finding:
        raise NumericalError("the pivot was -1.0")

    def factorisation(case: object) -> Finding:
        raise np.linalg.LinAlgError("singular")

    for failing in (ours, factorisation):
        broken.run = failing  # type: ignore[attr-defined]
        assert run_test(broken, make_case(1)).outcome is Outcome.FAILED

    def defect(case: object) -> Finding:
        raise TypeError("a defect of the code is not swallowed")

    broken.run = defect  # type: ignore[attr-defined]
    with pytest.raises(TypeError):
        run_test(broken, make_case(1))


def test_missing_inputs_are_not_evidence() -> None:
    bare = make_case(1, Recipe(indicators=(), rotation=None, seasons=1))
    by_name = {f.test: f for f in run_all(bare)}
    for name in ("rotation", "indicator_power", "correlation", "cycle"):
        assert by_name[name].outcome is Outcome.NOT_APPLICABLE, name
        assert by_name[name].p_value is None
    assert all(f.outcome is not Outcome.FAILED for f in by_name.values())
    # an indicator with hardly a value, or none that varies, is no indicator
    flat = replace(
        bare,
        series=replace(
            bare.series,
            indicators=(
                Indicator("fwhm", np.full(100, 3.0), np.full(100, 1.0)),
                Indicator("bis", np.full(100, np.nan), np.full(100, np.nan)),
            ),
        ),
    )
    assert indicator_power.run(flat).outcome is Outcome.NOT_APPLICABLE


# --- noise --------------------------------------------------------------------------------------


def test_whitening_is_the_inverse_of_the_dense_factor() -> None:
    rng = np.random.default_rng(1)
    time = nights(rng, 40, 2)
    white = rng.uniform(0.5, 2.0, (40, 2))
    tau, share = np.array([[3.0, 20.0]]), np.array([[0.7, 0.3]])
    columns = rng.standard_normal((40, 2, 3))
    got, log_det = whiten(time, white, tau, share, columns)
    for k in range(2):
        red = np.exp(-np.abs(time[:, None] - time[None, :]) / tau[0, k])
        covariance = share[0, k] * red + np.diag((1.0 - share[0, k]) * white[:, k])
        root = np.linalg.cholesky(covariance)
        np.testing.assert_allclose(got[:, 0, k], np.linalg.solve(root, columns[:, k]), atol=1e-10)
        assert log_det[0, k] == pytest.approx(np.sum(np.log(np.diag(root))))


def test_draws_have_the_covariance_of_the_fit() -> None:
    rng = np.random.default_rng(2)
    time = nights(rng, 30, 1)
    values = rng.standard_normal((30, 2))
    noise = fit_noise(time, values, np.ones((30, 2)), zero_points(time, np.zeros(30, np.intp)))
    noise = replace(
        noise, tau=np.array([5.0, 5.0]), share=np.array([0.8, 0.8]), scale=np.array([4.0, 1.0])
    )
    fakes = draw(noise, rng, 20000, np.array([[1.0, 0.6], [0.6, 1.0]]))
    red = np.exp(-np.abs(time[:, None] - time[None, :]) / 5.0)
    expected = 4.0 * (0.8 * red + 0.2 * np.eye(30))
    np.testing.assert_allclose(np.cov(fakes[:, 0]), expected, atol=0.15)
    cross = np.mean(fakes[:, 0] * fakes[:, 1], axis=1)
    np.testing.assert_allclose(cross, 2.0 * 0.6, atol=0.08)


def test_a_fitted_line_agrees_with_dense_generalised_least_squares() -> None:
    case = make_case(4)
    channel = velocity_channel(case, case.target_rv)
    columns = signal_columns(case)
    found = fit_columns(channel, columns)
    noise = channel.noise
    time = case.series.time
    red = np.exp(-np.abs(time[:, None] - time[None, :]) / noise.tau[0])
    share = noise.share[0]
    inverse = np.linalg.inv(share * red + (1.0 - share) * np.diag(noise.white[:, 0]))
    design = np.column_stack([columns, noise.nuisance])
    normal = design.T @ inverse @ design
    solution = np.linalg.solve(normal, design.T @ inverse @ case.target_rv)
    np.testing.assert_allclose(found.value[0], solution[:2], rtol=1e-6)
    rest = case.target_rv - design @ solution
    scale = rest @ inverse @ rest / (noise.dof[0] - 2)
    np.testing.assert_allclose(
        found.covariance[0], scale * np.linalg.inv(normal)[:2, :2], rtol=1e-5
    )


# --- rotation -----------------------------------------------------------------------------------


def _with_period(period: float, centre: float = 22.0, width: float = 0.05) -> Finding:
    case = make_case(1, Recipe(period=period))
    density = PeriodDensity.peak(centre, width).with_floor(0.05)
    case = replace(case, rotation=Rotation(centre, width * centre), rotation_density=density)
    return rotation.run(case)


@pytest.mark.parametrize("period", [22.0, 11.0, 7.35, 1.0 / (1.00274 - 1.0 / 22.0)])
def test_rotation_its_parts_and_aliases_are_suspicious(period: float) -> None:
    finding = _with_period(period)
    assert finding.statistic is not None and finding.p_value is not None
    assert finding.statistic > 0.5 and finding.p_value < 0.1
    if period > 2.0:
        assert finding.outcome is Outcome.SUPPORTS_STAR
        assert finding.parameters["closeness_relative"] < 0.01


def test_a_period_away_from_rotation_is_not() -> None:
    finding = _with_period(160.0)
    assert finding.outcome is Outcome.SUPPORTS_PLANET
    assert finding.power is not None and finding.power > 0.7


def test_a_vague_rotation_says_nothing() -> None:
    # the same period, but the rotation known only within a factor of two: the control
    finding = _with_period(160.0, width=0.7)
    assert finding.outcome is Outcome.INCONCLUSIVE


# --- sampling and harmonics ---------------------------------------------------------------------


def test_sampling_counts() -> None:
    case = make_case(1, Recipe(n=60, seasons=2, period=30.0, instruments=2))
    finding = sampling.run(case)
    assert finding.outcome is Outcome.INCONCLUSIVE
    assert finding.parameters["n_seasons"] == 2
    assert finding.parameters["fewest_per_instrument"] == 30
    assert "Thin" not in finding.sentence
    assert sampling.largest_phase_gap(np.array([0.0, 0.1, 0.5]), 1.0) == pytest.approx(0.5)
    thin = sampling.run(make_case(1, Recipe(n=25, seasons=1, period=170.0)))
    assert "Thin" in thin.sentence


def test_missing_phases_come_up_when_the_star_does():
    # two seasons from 1 January to 8 June, a night in five; worked out with a calendar by hand
    time = np.concatenate([2458484.5 + 365.25 * k + np.arange(0.0, 160.0, 5.0) for k in (0, 1)])
    # 410 d: days 155 to 365 after 1 January 2019 are missing; they return from 19 July 2020
    # to 14 February 2021, and the star is up from two weeks before 1 January on
    assert sampling.gap_season(time, 410.0) == "from December 2020 to February 2021"
    # a gap of a year's period stays behind the Sun for ever
    assert sampling.gap_season(time, 365.25) is None
    assert sampling.gap_season(time, 50.0) is None  # any season will do
    assert sampling.gap_season(time - 2450000.0, 410.0) is None  # no Julian dates


def _beside(period: float, other: float, amplitude: float = 20.0) -> Finding:
    case = make_case(2, Recipe(period=period))
    orbit = Orbit(other, amplitude, eccentricity=0.4)
    return harmonics.run(replace(case, others=(Signal("S9", orbit, 1e-9, ("known",)),)))


def test_half_of_a_stronger_period_is_suspicious() -> None:
    finding = _beside(50.0, 100.0)
    assert finding.outcome is Outcome.SUPPORTS_STAR
    assert finding.parameters["ratio"] == "2:1" and finding.parameters["of_signal"] == "S9"


def test_unrelated_and_weaker_signals_are_not() -> None:
    assert _beside(43.0, 100.0).outcome is Outcome.INCONCLUSIVE
    assert _beside(50.0, 100.0, amplitude=1.0).outcome is Outcome.INCONCLUSIVE
    # a resonant pair of planets is no left-over of an eccentric orbit
    assert _beside(66.67, 100.0).outcome is Outcome.INCONCLUSIVE


def test_a_large_eccentricity_is_named() -> None:
    case = make_case(2)
    orbit = replace(case.signal.orbit, eccentricity=0.6, eccentricity_err=0.05)
    finding = harmonics.run(replace(case, signal=replace(case.signal, orbit=orbit)))
    assert finding.parameters["large_eccentricity"] is True


# --- indicators at the period -------------------------------------------------------------------


def test_silent_indicators_speak_for_a_planet_only_where_they_would_have_spoken() -> None:
    loud = _outcomes(indicator_power, Recipe(amplitude=6.0, n=120))
    assert sum(f.outcome is Outcome.SUPPORTS_PLANET for f in loud) >= 9
    # the control: a weak signal among strong noise, about which silence means nothing
    weak = _outcomes(indicator_power, Recipe(amplitude=0.6, n=60, indicator_share=0.0, error=3.0))
    assert all(f.outcome is not Outcome.SUPPORTS_PLANET for f in weak)
    assert all(f.power is not None and f.power < 0.6 for f in weak)


def test_indicators_that_follow_speak_for_the_star() -> None:
    found = _outcomes(indicator_power, Recipe(response=1.0, lag=None))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) >= 11
    assert np.median([f.statistic for f in found if f.statistic is not None]) > 3.0


def test_the_amplitude_of_an_indicator_is_recovered_within_its_error() -> None:
    pulls = []
    for seed in range(25):
        finding = indicator_power.run(make_case(seed, Recipe(response=1.5)))
        # the first indicator's scatter is 10
        error = finding.parameters["fwhm_amplitude_err"]
        pulls.append((finding.parameters["fwhm_amplitude"] - 15.0) / error)
    assert abs(np.mean(pulls)) < 0.7 and 0.6 < np.std(pulls) < 1.5


# --- correlation --------------------------------------------------------------------------------


def test_coefficients_agree_with_scipy() -> None:
    rng = np.random.default_rng(3)
    x = rng.standard_normal(60)
    y = 0.4 * x[:, None] + rng.standard_normal((60, 3))
    y[:5, 1] = y[0, 1]  # ties
    ours: list[tuple[Array, object]] = [
        (correlation.pearson(x, y), stats.pearsonr),
        (correlation.pearson(correlation.ranks(x), correlation.ranks(y)), stats.spearmanr),
    ]
    for values, reference in ours:
        for k in range(3):
            assert values[k] == pytest.approx(reference(x, y[:, k])[0], abs=1e-12)  # type: ignore[operator]
    tau = correlation.kendall(x, y)
    for k in (0, 2):  # without ties tau-a is tau-b
        assert tau[k] == pytest.approx(stats.kendalltau(x, y[:, k])[0], abs=1e-6)


def test_a_signal_in_phase_with_an_indicator_drops_its_correlation() -> None:
    found = _outcomes(correlation, Recipe(response=1.5, lag=0.0))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) >= 11
    assert all(abs(f.parameters["phase_lag_rad"]) < 0.5 for f in found)


def test_a_planet_beside_unrelated_activity_drops_nothing() -> None:
    found = _outcomes(correlation, Recipe(indicator_share=0.9, indicator_tau=20.0))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) <= 1
    # surrogates that keep the autocorrelation see the chance correlations of slow series:
    # the naive p-value is far too small here
    naive = [
        stats.pearsonr(case.target_rv, case.series.indicators[0].value)[1]
        for case in (
            make_case(s, Recipe(amplitude=0.0, red=9.0, red_tau=25.0, indicator_share=0.9,
                                indicator_tau=25.0))
            for s in range(40)
        )
    ]  # fmt: skip
    honest = [
        correlation.run(
            make_case(s, Recipe(amplitude=0.0, red=9.0, red_tau=25.0, indicator_share=0.9,
                                indicator_tau=25.0))
        ).parameters["correlation_p"]
        for s in range(40)
    ]  # fmt: skip
    assert np.mean(np.array(naive) < 0.01) > 0.15
    assert np.mean(np.array(honest) < 0.011) < 0.15


# --- cycle --------------------------------------------------------------------------------------


def test_a_cycle_in_phase_speaks_for_the_star() -> None:
    found = _outcomes(cycle, Recipe(period=600.0, seasons=5, n=150, response=1.2, lag=0.0))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) >= 11
    ratios = [f.parameters["ln_ratio_to_cycle"] for f in found]
    assert np.median(ratios) < 0.2


def test_a_giant_planet_without_a_cycle_does_not() -> None:
    found = _outcomes(cycle, Recipe(period=600.0, seasons=5, n=150))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) <= 1
    assert sum(f.outcome is Outcome.SUPPORTS_PLANET for f in found) >= 6


def test_a_cycle_out_of_phase_is_not_the_signal() -> None:
    # the control: same period, a quarter of a turn behind
    found = _outcomes(cycle, Recipe(period=600.0, seasons=5, n=150, response=1.2, lag=0.5 * np.pi))
    assert sum(f.outcome is Outcome.SUPPORTS_STAR for f in found) <= 3


@pytest.mark.parametrize("seasons", [3, 20])
def test_the_cycle_is_found_however_long_the_baseline(seasons: int) -> None:
    # over twenty years the peak of a short cycle is a fiftieth of its period wide
    for seed, cycle_period in enumerate((170.0, 400.0, 233.0)):
        recipe = Recipe(period=cycle_period, seasons=seasons, n=150, response=1.5, lag=0.0)
        case = make_case(seed, recipe)
        channels = channels_of(case)
        assert channels is not None
        found, gain = cycle.long_period(case, channels)
        resolution = cycle_period / case.series.baseline
        assert found == pytest.approx(cycle_period, rel=0.3 * resolution)
        time = case.series.time
        angle = 2 * np.pi * time / cycle_period
        design = np.column_stack([np.ones(time.size), np.cos(angle), np.sin(angle)])
        exact = sum(
            float(np.var(y) - np.var(y - design @ np.linalg.lstsq(design, y, rcond=None)[0]))
            / float(np.var(y))
            for y in channels.values.T
        )
        assert gain > 0.9 * time.size * exact


def test_short_periods_are_not_asked() -> None:
    assert cycle.run(make_case(1)).outcome is Outcome.NOT_APPLICABLE


def test_noise_that_is_all_but_red_is_seen_as_such() -> None:
    """A grid of red shares that ends short of it takes a wandering signal's chances for too low."""
    rng = np.random.default_rng(8)
    time = np.sort(rng.uniform(0, 200, 90))
    lag = np.abs(time[:, None] - time)
    factor = np.linalg.cholesky(0.995 * np.exp(-lag / 12.0) + 0.005 * np.eye(90))
    values = factor @ rng.normal(size=(90, 40))
    _, share, _ = fit_alike(time, np.ones(90), np.ones((90, 1)), values)
    assert np.median(share) > 0.97
