"""What the figures are computed from, and that each is drawn."""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pytest
import scipy.stats

from screener.core import Fold, Orbit, PeriodogramTrace, Screening
from screener.models.kepler import orbit_velocity, time_of_conjunction
from screener.report.axes import broken
from screener.report.figures import figure_bytes, figure_specs, inline_svg, write_figures
from screener.report.fold import block_amplitudes, folded, orbit_at, phase_bins
from screener.report.limits import limit_curve
from screener.report.panels import rank_correlation, remainder, thinned
from tests.unit.report_sample import sample


@pytest.mark.parametrize("eccentricity", [0.0, 0.3, 0.9])
@pytest.mark.parametrize("omega", [0.4, 2.5, -1.9])
def test_drawn_orbit_is_the_fitted_one(eccentricity: float, omega: float):
    orbit = Orbit(7.3, 5.0, eccentricity, omega, 2457001.2)
    time = np.linspace(2457000, 2457100, 2001)
    np.testing.assert_allclose(orbit_at(orbit, time), orbit_velocity(orbit, time), atol=5e-3)


@pytest.mark.parametrize("eccentricity", [0.0, 0.6])
def test_phase_is_zero_at_conjunction(eccentricity: float):
    orbit = Orbit(7.3, 5.0, eccentricity, 1.1, 2457001.2)
    conjunction = time_of_conjunction(7.3, eccentricity, 1.1, 2457001.2)
    moments = conjunction + 7.3 * np.array([-3.0, 0.0, 0.25, 11.0])
    np.testing.assert_allclose(folded(orbit, moments), [0, 0, 0.25, 0], atol=1e-7)
    assert np.all(np.abs(folded(orbit, np.linspace(0, 1e5, 999))) <= 0.5)


def test_binned_points_are_weighted_means():
    rng = np.random.default_rng(3)
    phase = rng.uniform(-0.5, 0.5, 300)
    error = rng.uniform(0.5, 2.0, 300)
    x, y, e = phase_bins(phase, 4 * phase + error * rng.standard_normal(300), error)
    assert x.size == 14
    assert np.all(np.diff(x) > 0)
    assert np.mean(np.abs(y - 4 * x) < 2 * e) > 0.7
    assert [v.size for v in phase_bins(phase[:1], phase[:1], error[:1])] == [0, 0, 0]


def _fold(change: float) -> tuple[Orbit, Fold]:
    rng = np.random.default_rng(5)
    time = np.sort(np.concatenate([365 * k + rng.uniform(0, 150, 40) for k in range(4)]))
    season = time // 365
    orbit = Orbit(11.0, 5.0, 0.0, 0.3, 2.0)
    rv = orbit_velocity(orbit, time) * (1 + change * (season - 1.5))
    rv = rv + 0.5 * rng.standard_normal(time.size)
    return orbit, Fold("S1", time, rv, np.full(time.size, 0.5), np.zeros(time.size, dtype=np.intp))


def test_blocks_of_a_steady_and_of_a_growing_signal():
    orbit, fold = _fold(0.0)
    everything, blocks = block_amplitudes(orbit, fold, fold.rv_err)
    assert len(blocks) == 4
    assert everything.amplitude == pytest.approx(5.0, abs=4 * everything.amplitude_err)
    pulls = [(b.amplitude - 5.0) / b.amplitude_err for b in blocks]
    assert np.max(np.abs(pulls)) < 4
    orbit, fold = _fold(0.5)
    _, blocks = block_amplitudes(orbit, fold, fold.rv_err)
    assert blocks[-1].amplitude > 4 * blocks[0].amplitude


def test_blocks_need_most_of_a_period():
    orbit, fold = _fold(0.0)
    _, blocks = block_amplitudes(replace(orbit, period=900.0), fold, fold.rv_err)
    assert len(blocks) <= 2
    assert sum(b.stop - b.start for b in blocks) > 0.9 * np.ptp(fold.time)


def test_thinning_keeps_every_peak():
    frequency = np.linspace(1e-3, 1.0, 50001)
    power = np.random.default_rng(1).exponential(size=frequency.size)
    power[[777, 30000, 49000]] = (40.0, 50.0, 60.0)
    period, shown = thinned(PeriodogramTrace("x", frequency, power))
    assert period.size <= 900
    assert np.all(np.diff(period) > 0)
    for peak, height in ((777, 40.0), (30000, 50.0), (49000, 60.0)):
        at = np.argmin(np.abs(period - 1 / frequency[peak]))
        assert shown[at] == height
    assert period[at] == pytest.approx(1 / frequency[49000])


def test_thinning_with_gaps_and_few_points():
    trace = PeriodogramTrace(
        "x", np.array([0.0, 0.5, 0.25, 1.0]), np.array([1.0, 2.0, np.nan, 3.0])
    )
    period, power = thinned(trace)
    np.testing.assert_array_equal(period, [1.0, 2.0])
    np.testing.assert_array_equal(power, [3.0, 2.0])


def test_rank_correlation_against_scipy():
    rng = np.random.default_rng(8)
    x = np.round(rng.standard_normal(80), 1)  # with ties
    y = np.round(0.4 * x + rng.standard_normal(80), 1)
    assert rank_correlation(x, y) == pytest.approx(scipy.stats.spearmanr(x, y).statistic)
    x[::7] = np.nan
    good = np.isfinite(x)
    assert rank_correlation(x, y) == pytest.approx(
        scipy.stats.spearmanr(x[good], y[good]).statistic
    )
    assert rank_correlation(x[:3], y[:3]) is None
    assert rank_correlation(np.ones(9), y[:9]) is None


def test_remainder_is_what_no_model_explains():
    left = remainder(sample())
    assert np.std(left) < 2.0  # the errors are 0.8 to 1.6 m/s
    assert np.std(sample().products.series.rv) > 6


def test_limits_only_where_there_are_any():
    curve = limit_curve(sample().verdict.system)
    assert curve is not None
    assert np.isnan(curve["k99_m_s"]).any()
    for system in ({}, {"sensitivity": None}, {"sensitivity": {"curve": [1, 2]}}):
        assert limit_curve(system) is None


def test_every_figure_is_drawn_once_for_each_format():
    specs = figure_specs(sample())
    assert [s.name for s in specs] == [
        "series", "periodograms", "fold_S1", "fold_S2", "activity", "indicators", "limits",
    ]  # fmt: skip
    for spec in specs:
        content = figure_bytes(spec, ("png", "svg"))
        assert content["png"].startswith(b"\x89PNG")
        assert b"<svg" in content["svg"]
        assert spec.alt
        assert spec.caption
        assert spec.planet != spec.star
    assert figure_bytes(specs[0], ("pdf",))["pdf"].startswith(b"%PDF")


def test_figures_are_the_same_every_time():
    spec = figure_specs(sample())[0]
    kinds = ("png", "svg", "pdf")
    assert figure_bytes(spec, kinds) == figure_bytes(spec, kinds)


def test_unknown_format_is_refused():
    with pytest.raises(ValueError, match="'gif'"):
        figure_bytes(figure_specs(sample())[0], ("gif",))


def test_colours_follow_the_page():
    spec = figure_specs(sample())[2]
    text = inline_svg(spec, figure_bytes(spec, ("svg",))["svg"])
    assert "var(--planet)" in text
    assert "var(--i0)" in text
    assert 'role="img"' in text
    assert "#1757a6" not in text
    assert "http" not in text


def _changed(**changes) -> Screening:
    screening = sample()
    return Screening(screening.verdict, replace(screening.products, **changes))


def test_stars_with_little_to_show(tmp_path):
    products = sample().products
    few = products.series.select(np.arange(13))
    bare = Screening(
        replace(sample().verdict, signals=(), known_planets=(), system={}),
        replace(
            products,
            series=replace(few, indicators=()),
            activity_at_data=products.activity_at_data[:13],
            folds=(),
            periodograms=(),
            activity_mean=0 * products.activity_mean,
            activity_sd=0 * products.activity_sd,
        ),
    )
    assert list(write_figures(bare, tmp_path)) == ["series"]
    assert figure_specs(Screening(bare.verdict, None)) == ()


def test_many_points_stay_light():
    screening = sample("Tern 15", 900, ("A", "B", "C"))
    spec = figure_specs(screening)[0]
    assert len(figure_bytes(spec, ("svg",))["svg"]) < 300_000


def test_names_with_dollar_signs_and_foreign_scripts():
    screening = sample("Tern $\\frac{1}{2}$ 星", 40, ("NORTH $^2_$", "南", "a_b" * 30))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        series, _, fold, *_ = figure_specs(screening)
        for spec in (series, fold):
            figure_bytes(spec, ("png", "svg"))


def test_no_line_is_drawn_across_a_gap():
    grid = np.array([0.0, 0.5, 1.0, 60.0, 60.5, 61.0])
    shown, curve = broken(grid, grid**2)
    assert np.isnan(shown[3]) and np.isnan(curve[3])
    assert shown.size == grid.size + 1
    assert np.array_equal(shown[np.isfinite(shown)], grid)
    assert broken(grid[:1], grid[:1])[0].size == 1
