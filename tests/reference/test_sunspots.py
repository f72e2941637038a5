"""The yearly sunspot numbers that statsmodels ships, as the activity indicator of a star.

Source: statsmodels.datasets.sunspots (SIDC, yearly means 1700-2008); the cycle lasts about 11 yr
(Schwabe 1844, AN 21, 233).
"""

from __future__ import annotations

import functools

import numpy as np
import pytest
import statsmodels.api as sm

from screener.core import (
    Array,
    Depth,
    Indicator,
    Orbit,
    Outcome,
    Rotation,
    Signal,
    Star,
    TimeSeries,
)
from screener.curves import _indicator_trace
from screener.evidence import cycle
from screener.evidence.case import Case
from screener.evidence.lines import channels_of
from screener.models.dataset import long_term_part
from screener.search.false_alarm import effective_baseline, level
from screener.search.periodogram import frequency_grid

YEAR = 365.25


@functools.cache
def sunspots(first: int) -> TimeSeries:
    """Yearly values from ``first`` on; velocities are plain noise of 1 m/s."""
    table = sm.datasets.sunspots.load_pandas().data
    table = table[table["YEAR"] >= first]
    time = 2415020.5 + YEAR * (table["YEAR"].to_numpy() + 0.5 - 1900.0)
    value = table["SUNACTIVITY"].to_numpy()
    rng = np.random.default_rng(first)
    n = time.size
    return TimeSeries(
        time, rng.normal(0, 1.0, n), np.ones(n), np.zeros(n, dtype=np.intp), ("one",),
        (Indicator("s_index", value, np.full(n, 5.0)),),
    )  # fmt: skip


@functools.cache
def observed(first: int, n: int = 150) -> TimeSeries:
    """The same from nights of a survey: yearly means interpolated, with a scatter of their own.

    Yearly sampling would make half a year an exact alias of the cycle.
    """
    yearly = sunspots(first)
    rng = np.random.default_rng(first + 1)
    time = np.sort(rng.uniform(yearly.time[0], yearly.time[-1], n))
    value = np.interp(time, yearly.time, yearly.indicators[0].value) + rng.normal(0, 20.0, n)
    return TimeSeries(
        time, rng.normal(0, 1.0, n), np.ones(n), np.zeros(n, dtype=np.intp), ("one",),
        (Indicator("s_index", value, np.full(n, 5.0)),),
    )  # fmt: skip


def case_of(series: TimeSeries, curve: Array, period: float, amplitude: float) -> Case:
    """A signal whose velocity curve is given."""
    signal = Signal("S1", Orbit(period, amplitude), 1e-6, ("white noise",))
    return Case(
        star=Star("Sun"), series=series, signal=signal, others=(), target_rv=series.rv + curve,
        residual_rv=series.rv, rv_sd=series.rv_err, rotation=Rotation(26.0, 1.0),
        rotation_density=None, depth=Depth.QUICK, seed=1,
    )  # fmt: skip


def test_the_periodogram_of_three_centuries_peaks_at_eleven_years() -> None:
    series = sunspots(1700)
    grid = frequency_grid(series.baseline, 5.0, shortest_period=3 * YEAR)
    one_percent = level(
        0.01, float(np.ptp(grid)), effective_baseline(series.time, np.ones(series.n_obs))
    )
    trace = _indicator_trace(series, series.indicators[0], grid, one_percent)
    best = int(np.argmax(trace.power))
    assert 1 / trace.frequency[best] / YEAR == pytest.approx(11.0, abs=0.3)
    assert trace.power[best] > 3 * one_percent


@pytest.mark.parametrize("first", [1909, 1929, 1949, 1969, 1985])
def test_the_cycle_line_of_evidence_finds_it_in_decades(first: int) -> None:
    series = observed(first)
    case = case_of(series, np.zeros(series.n_obs), 4000.0, 1.0)
    channels = channels_of(case)
    assert channels is not None
    period, gain = cycle.long_period(case, channels)
    # single cycles last from 9 to 12 yr; a grid of 80 periods has 7 per cent between neighbours
    assert period / YEAR == pytest.approx(10.7, abs=1.0)
    assert gain > 20.0


def test_velocities_that_follow_the_spots_are_the_star() -> None:
    series = observed(1949)
    value = series.indicators[0].value
    curve = 3.0 * (value - value.mean()) / float(np.std(value))
    finding = cycle.run(case_of(series, curve, 10.6 * YEAR, 4.2))
    assert finding.outcome is Outcome.SUPPORTS_STAR
    assert finding.statistic is not None and finding.statistic > 0.9


@pytest.mark.parametrize("years", [6.3, 29.5])
def test_an_orbit_of_another_period_is_not_called_the_cycle(years: float) -> None:
    series = observed(1949)
    curve = 4.2 * np.cos(2 * np.pi * series.time / (years * YEAR))
    finding = cycle.run(case_of(series, curve, years * YEAR, 4.2))
    assert finding.outcome is not Outcome.SUPPORTS_STAR


def test_the_slow_part_of_the_indicator_is_the_cycle() -> None:
    """What the joint model takes out of an indicator before the rotation process is fitted."""
    series = observed(1985)
    item = series.indicators[0]
    slow = long_term_part(series.time, item.value, series.instrument, 2000.0)
    assert np.corrcoef(slow, item.value)[0, 1] > 0.9
