"""Finding signals and weighing them: null case, injected case, and what must not be announced."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from screener.core import Array, Depth, Indicator, TimeSeries
from screener.models.assessment import gain_of, prediction_gain, time_blocks
from screener.models.dataset import choose_indicators, long_term_part, scaled_data
from screener.models.exploration import daily_aliases, search_activity, search_white
from screener.models.fitting import Fit, HyperPrior
from screener.models.kepler import keplerian_velocity
from screener.models.noise import joint_process, white_noise
from screener.models.nulls import n_draws

PRIOR = HyperPrior(math.log(18.0), 0.1)


def _nights(rng: np.random.Generator, n: int, span: float) -> Array:
    """Nightly sampling in two seasons a year apart, a few hours of scatter."""
    days = rng.choice(np.arange(int(span)), size=2 * n, replace=False)
    days = np.sort(days[(days % 365) < 230])[:n]
    return np.asarray(days + rng.normal(0, 0.06, days.size), dtype=float)


def _series(
    rng: np.random.Generator,
    n: int = 90,
    span: float = 500.0,
    activity: float = 0.0,
    signal: Array | None = None,
    time: Array | None = None,
) -> TimeSeries:
    """White noise of 1 m/s, spots of two lifetimes in velocities and width, and a signal."""
    time = _nights(rng, n, span) if time is None else time
    rv, width = rng.normal(0, 1.0, time.size), rng.normal(0, 1.0, time.size)
    for start in np.arange(time[0] - 30, time[-1], 25.0):  # spots that live a rotation or two
        phase, life = rng.uniform(0, 2 * np.pi), rng.uniform(15, 30)
        envelope = np.exp(-0.5 * ((time - start) / life) ** 2)
        angle = 2 * np.pi * time / 18.0 + phase
        rv = rv + activity * envelope * np.sin(angle)
        width = width + 2 * activity * envelope * np.cos(angle)
    if signal is not None:
        rv = rv + signal
    item = Indicator("fwhm", width, np.ones(time.size))
    return TimeSeries(
        time, rv, np.ones(time.size), np.zeros(time.size, dtype=np.intp), ("A",), (item,)
    )


def _white(series: TimeSeries) -> list[float]:
    noise = white_noise(scaled_data(series, series.indicators, 1000.0))
    return [o.period for o in noise.orbits(search_white(series, noise, (), Depth.QUICK).fit)]


def test_a_doubtful_signal_is_checked_by_shuffling() -> None:
    rng = np.random.default_rng(4)
    time = _nights(rng, 60, 300)
    checked = 0
    for amplitude in (0.9, 1.0, 1.1, 4.0):
        signal = keplerian_velocity(time, 7.3, amplitude, 0.0, 0.4, 3.0)
        series = _series(rng, signal=signal, time=time)
        noise = white_noise(scaled_data(series, (), 1000.0))
        first, again = (search_white(series, noise, (), Depth.STANDARD, seed=7) for _ in range(2))
        assert [f.resampled for f in first.found] == [f.resampled for f in again.found]
        for found in first.found:
            if found.false_alarm_probability < 1e-4:
                assert found.resampled is None
            else:
                checked += 1
                assert found.resampled is not None
                # both ask the same; counts of 200 leave room for a factor of some
                assert 1 / 200 <= found.resampled < 0.06
    assert checked


def test_noise_gives_no_signal() -> None:
    counts = [len(_white(_series(np.random.default_rng(seed)))) for seed in range(12)]
    # one in a hundred is the search's own level; three in twelve would be a chance of 2e-4
    assert sum(counts) <= 2


def test_a_planet_is_found_in_white_noise_at_its_own_period_and_not_at_an_alias() -> None:
    for seed, period in ((1, 5.19), (2, 2.43), (3, 37.0)):
        rng = np.random.default_rng(seed)
        time = _nights(rng, 80, 480)
        signal = keplerian_velocity(time, period, 2.5, 0.0, 0.4, 3.0)
        found = _white(_series(rng, signal=signal, time=time))
        assert found[0] == pytest.approx(period, rel=0.01)
        assert not any(
            abs(1 / p - alias) < 2e-3 for p in found for alias in daily_aliases(1 / period)
        )


def test_an_eccentric_orbit_is_one_signal() -> None:
    rng = np.random.default_rng(5)
    time = _nights(rng, 110, 700)
    signal = keplerian_velocity(time, 61.0, 25.0, 0.6, 1.0, 10.0)
    found = _white(_series(rng, signal=signal, time=time))
    assert len(found) == 1
    assert found[0] == pytest.approx(61.0, rel=0.01)


def test_a_curvature_is_a_long_period() -> None:
    rng = np.random.default_rng(6)
    time = _nights(rng, 110, 900)
    signal = keplerian_velocity(time, 1500.0, 30.0, 0.0, 1.0, 200.0)
    found = _white(_series(rng, signal=signal, time=time))
    assert found
    assert found[0] > 0.8 * (time[-1] - time[0])


def test_on_top_of_activity_the_planet_is_found_and_rotation_is_not() -> None:
    rng = np.random.default_rng(11)
    time = _nights(rng, 110, 600)
    signal = keplerian_velocity(time, 5.19, 3.0, 0.0, 0.4, 3.0)
    series = _series(rng, activity=5.0, signal=signal, time=time)
    noise = joint_process(scaled_data(series, series.indicators, 1000.0), PRIOR)
    found = [f.term.period for f in search_activity(series, noise, (), Depth.QUICK, ()).found]
    assert found and found[0] == pytest.approx(5.19, rel=0.01)
    assert not any(abs(p / 18.0 - 1) < 0.1 for p in found)


def test_gains_are_nested_and_tell_a_planet_from_rotation() -> None:
    rng = np.random.default_rng(12)
    time = _nights(rng, 100, 500)
    signal = keplerian_velocity(time, 5.19, 3.0, 0.0, 0.4, 3.0)
    series = _series(rng, activity=5.0, signal=signal, time=time)
    noise = joint_process(scaled_data(series, series.indicators, 1000.0), PRIOR)
    planet, spot = noise.term(5.19), noise.term(18.0)
    full = noise.fit([planet], fresh=True)
    gain, best, without = gain_of(noise, [planet], planet, [full])
    assert gain > 15
    assert best.profile >= without.profile
    spot_gain, *_ = gain_of(noise, [planet, spot], spot, [full])
    assert 0 <= spot_gain < 6
    blocks = time_blocks(series.time)
    score, error = prediction_gain(best, without, blocks)
    assert score > 2 * error > 0


def _covariance(result: Fit) -> Array:
    """Activity, white noise and linear terms under their priors, written out."""
    model, x = result.model, result.parameters
    assert model.kernel is not None
    blocks = model.kernel.blocks(model.data.lags, x[model.slices["kernel"]], derivative=False)
    amplitude, jitter = x[model.slices["a"]][0], np.exp(2 * x[model.slices["jitter"]])
    covariance = amplitude**2 * blocks.gg + np.diag(model.data.variance[0] + jitter)
    columns = [model.data.columns[0]]
    for term, (offset, *_) in zip(model.orbits, model.orbit_parameters(x), strict=True):
        frequency = 1 / term.period + offset / (2 * np.pi * model.data.span)
        angle = 2 * np.pi * frequency * (model.data.time - model.data.mid_time)
        columns.append(np.stack([np.cos(angle), -np.sin(angle)], axis=1))
    design = np.concatenate(columns, axis=1) * model.column_sd
    return np.asarray(covariance + design @ design.T)


def test_prediction_against_the_explicit_conditional() -> None:
    rng = np.random.default_rng(13)
    series = _series(rng, n=40, activity=3.0)
    noise = joint_process(scaled_data(series, (), 1000.0), PRIOR, joint=False)
    # wide priors of zero points would cost the explicit form its digits
    noise.data = replace(noise.data, column_sd=np.minimum(noise.data.column_sd, 5.0))
    one, none = noise.fit([noise.term(7.0)], fresh=True), noise.fit([], fresh=True)
    rows = np.arange(10, 20)
    expected = []
    for result in (one, none):
        covariance = _covariance(result)
        rest = np.setdiff1d(np.arange(series.n_obs), rows)
        y = result.model.data.value[0]
        gain = covariance[np.ix_(rows, rest)] @ np.linalg.inv(covariance[np.ix_(rest, rest)])
        mean = gain @ y[rest]
        spread = covariance[np.ix_(rows, rows)] - gain @ covariance[np.ix_(rest, rows)]
        miss = y[rows] - mean
        expected.append(
            -0.5 * miss @ np.linalg.solve(spread, miss) - 0.5 * np.linalg.slogdet(spread)[1]
        )
    score, _ = prediction_gain(one, none, [rows])
    assert score == pytest.approx(expected[0] - expected[1], abs=1e-6)


def test_blocks_cover_every_row_once() -> None:
    time = np.concatenate([np.arange(0, 90, 2.0), np.arange(300, 310, 2.0), np.arange(700, 760)])
    blocks = time_blocks(time)
    assert sorted(np.concatenate(blocks)) == list(range(time.size))
    assert min(b.size for b in blocks) >= 2


def test_cycle_is_taken_out_and_noise_is_not() -> None:
    rng = np.random.default_rng(14)
    time = np.sort(rng.uniform(0, 1500, 120))
    zero = np.zeros(time.size, dtype=np.intp)
    noise = rng.normal(0, 1, time.size)
    assert not np.any(long_term_part(time, noise, zero, 300.0))
    cycle = 3 * np.sin(2 * np.pi * time / 1200)
    slow = long_term_part(time, cycle + noise, zero, 300.0)
    assert np.corrcoef(slow, cycle)[0, 1] > 0.95


def test_indicators_are_chosen_by_kind_and_coverage() -> None:
    rng = np.random.default_rng(15)
    base = _series(rng)
    n = base.n_obs
    sparse = np.full(n, np.nan)
    sparse[:5] = 1.0
    items = (
        Indicator("s_index", rng.normal(0.2, 0.01, n), np.full(n, 0.002)),
        Indicator("log_rhk", rng.normal(-4.9, 0.02, n), np.full(n, 0.02)),
        Indicator("contrast", sparse, np.full(n, 0.1)),
        Indicator("bis", np.full(n, 3.0), np.full(n, 1.0)),
    )
    series = TimeSeries(base.time, base.rv, base.rv_err, base.instrument, base.instruments, items)
    assert [i.name for i in choose_indicators(series, 3)] == ["s_index"]


def test_number_of_draws_depends_on_depth_and_length_only() -> None:
    assert n_draws(Depth.QUICK, 100) == 0
    assert n_draws(Depth.STANDARD, 150) == 50
    assert n_draws(Depth.DEEP, 150) == 400
    assert n_draws(Depth.STANDARD, 220) < 50
    assert n_draws(Depth.STANDARD, 700) == 0


def test_the_lean_precision_is_the_dense_one() -> None:
    rng = np.random.default_rng(16)
    series = _series(rng, n=50)
    noise = white_noise(scaled_data(series, (), 1000.0))
    result = noise.fit([noise.term(7.0), noise.term(31.0, True)], fresh=True)
    lean, dense = noise.precision(result), result.model.solve(result.parameters)
    assert lean.weight is not None and lean.low_rank is not None
    matrix = np.diag(lean.weight) - lean.low_rank @ lean.low_rank.T
    assert np.allclose(matrix, dense.rv_precision, atol=1e-9 * lean.weight.max())
    assert np.allclose(lean.weighted, dense.rv_weighted, atol=1e-8)
