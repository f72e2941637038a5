"""Rotation: densities, activity relations, periods from indicators and photometry."""

from __future__ import annotations

import json
import math
from collections.abc import Callable

import numpy as np
import pytest

from screener.core import Array, Indicator, Photometry, Star, TimeSeries
from screener.core.errors import NumericalError
from screener.intake import read_star
from screener.models.rotation import PERIOD_GRID, PeriodDensity, estimate_rotation
from screener.models.rotation.channels import indicator_channels
from screener.models.rotation.periodic import autocorrelation_period
from screener.models.rotation.relations import (
    colour_of,
    convective_turnover,
    noyes_period,
    period_from_rossby,
    rossby_number,
    suarez_period,
    vsini_density,
)
from tests.shared import needs_shared, shared


def _spotted(time: Array, period: float, rng: np.random.Generator, lifetime: float) -> Array:
    """A sum of spots that come and go: no Gaussian process, so not what the search assumes."""
    total = np.zeros(time.size)
    for _ in range(30):
        centre = rng.uniform(time[0] - lifetime, time[-1] + lifetime)
        phase = rng.uniform(0, 2 * np.pi)
        growth = np.exp(-0.5 * ((time - centre) / lifetime) ** 2)
        total += growth * np.maximum(np.cos(2 * np.pi * time / period + phase), 0.0)
    total -= total.mean()
    return np.asarray(total / total.std())


def _series(
    signal: Callable[[Array, np.random.Generator], Array], seed: int = 1, n: int = 110
) -> TimeSeries:
    rng = np.random.default_rng(seed)
    nights = np.sort(rng.choice(320, n, replace=False)).astype(float)
    time = nights + np.where(nights > 160, 200.0, 0.0) + rng.uniform(-0.1, 0.1, n)
    hidden = signal(time, rng)
    instrument = (time > np.median(time)).astype(np.intp)
    indicators = tuple(
        Indicator(
            name,
            scale * (hidden + 0.5 * rng.normal(size=n) + 3.0 * instrument),
            np.full(n, 0.5 * scale),
        )
        for name, scale in (("fwhm", 10.0), ("s_index", 0.01))
    )
    rv = rng.normal(size=n)
    return TimeSeries(time, rv, np.ones(n), instrument, ("A", "B"), indicators)


# --- densities ---------------------------------------------------------------------------------


def test_a_peak_integrates_to_one_and_knows_its_mode_and_width() -> None:
    density = PeriodDensity.peak(20.0, 0.05)
    assert density.chance(0.3, 300.0) == pytest.approx(1.0, abs=1e-6)
    assert density.mode == pytest.approx(20.0, rel=0.004)
    low, high = density.interval(0.683)
    # a log-normal: one sigma on each side
    assert low == pytest.approx(20.0 * math.exp(-0.05), rel=0.01)
    assert high == pytest.approx(20.0 * math.exp(0.05), rel=0.01)
    assert density.local_err() == pytest.approx(1.0, rel=0.15)


def test_the_product_of_two_peaks_is_the_weighted_mean() -> None:
    product = PeriodDensity.peak(20.0, 0.1).combine(PeriodDensity.peak(24.0, 0.1))
    assert product.mode == pytest.approx(math.sqrt(20.0 * 24.0), rel=0.01)
    low, high = product.interval(0.683)
    assert 0.5 * math.log(high / low) == pytest.approx(0.1 / math.sqrt(2.0), rel=0.05)


def test_a_floor_keeps_a_wrong_source_from_ruling_out_the_right_one() -> None:
    wrong = PeriodDensity.peak(5.0, 0.02)
    right = PeriodDensity.peak(40.0, 0.02)
    both = wrong.with_floor(0.5).combine(right.with_floor(0.1))
    assert both.mode == pytest.approx(40.0, rel=0.01)
    assert both.chance(4.5, 5.5) > 0.01


def test_the_ambiguity_lies_at_twice_and_half() -> None:
    density = PeriodDensity.peak(20.0, 0.03).with_ambiguity(0.2)
    assert density.chance(8.5, 11.5) == pytest.approx(0.1, abs=0.005)
    assert density.chance(35.0, 46.0) == pytest.approx(0.1, abs=0.005)


def test_impossible_densities_are_refused_with_the_number() -> None:
    with pytest.raises(NumericalError, match=r"0\.0"):
        PeriodDensity.from_values(np.zeros(PERIOD_GRID.size))
    assert PeriodDensity.flat().chance(10.0, 10.0) == 0.0


# --- relations: check values from memory of the papers ------------------------------------------


def test_the_sun_turns_in_its_time() -> None:
    # Mamajek & Hillenbrand (2008) give the Sun log R'HK = -4.91 and B-V = 0.65; Noyes et al.
    # (1984) find a turnover time of about 12 d for it
    assert convective_turnover(0.65) == pytest.approx(12.0, rel=0.05)
    assert 22.5 < noyes_period(-4.91, 0.65) < 25.0
    assert 22.5 < period_from_rossby(-4.91, 0.65) < 25.0
    assert rossby_number(-4.52) == pytest.approx(0.808)
    # the two branches meet within the scatter
    assert rossby_number(-4.3001) == pytest.approx(rossby_number(-4.2999), abs=0.15)


@pytest.mark.parametrize(
    ("star", "b_minus_v", "log_rhk", "observed"),
    [
        # observed periods and activity levels as in Noyes et al. (1984), table 1, and Donahue et
        # al. (1996), from memory
        ("61 Cyg A", 1.18, -4.764, 37.0),
        ("HD 101501", 0.72, -4.546, 16.7),
        ("HD 149661", 0.82, -4.583, 21.3),
        ("HD 152391", 0.76, -4.448, 11.1),
        ("HD 20630", 0.68, -4.420, 9.4),
    ],
)
def test_worked_stars_fall_within_the_stated_scatter(
    star: str, b_minus_v: float, log_rhk: float, observed: float
) -> None:
    for period in (noyes_period(log_rhk, b_minus_v), period_from_rossby(log_rhk, b_minus_v)):
        assert abs(math.log(period / observed)) < 0.30, star


@pytest.mark.parametrize(
    ("star", "log_rhk", "observed"),
    # Suarez Mascareno et al. (2015), table of M dwarfs, from memory
    [("GJ 581", -5.79, 132.5), ("GJ 667 C", -5.61, 103.9), ("GJ 674", -5.07, 32.9)],
)
def test_worked_m_dwarfs(star: str, log_rhk: float, observed: float) -> None:
    assert abs(math.log10(suarez_period(log_rhk) / observed)) < 0.15, star


def test_colours_from_temperature_and_type() -> None:
    # the Sun: 5772 K, G2V, B-V = 0.65
    assert colour_of(Star("x", teff=5772.0)) == pytest.approx(0.65, abs=0.02)
    assert colour_of(Star("x", spectral_type="G2V")) == pytest.approx(0.65, abs=0.03)
    assert colour_of(Star("x")) is None


def test_vsini_bounds_the_period_from_above_only() -> None:
    # a solar radius at 5 km/s: 2 pi R / v = 10.1 d
    found = vsini_density(Star("x", radius=1.0, vsini=5000.0, vsini_err=250.0))
    assert found is not None
    limit, _, density = found
    assert limit == pytest.approx(10.12, rel=0.01)
    assert density.chance(12.5, 300.0) < 0.02
    assert density.chance(5.0, 11.0) > 0.6
    # compatible with no rotation at all: long periods stay open
    slow = vsini_density(Star("x", radius=1.0, vsini=500.0))
    assert slow is not None and slow[2].chance(30.0, 300.0) > 0.5
    assert vsini_density(Star("x", vsini=5000.0)) is None


# --- the whole estimate -------------------------------------------------------------------------


@pytest.mark.parametrize(("period", "seed"), [(7.3, 3), (16.0, 4), (31.0, 5)])
def test_spots_give_their_period_away(period: float, seed: int) -> None:
    series = _series(lambda t, rng: _spotted(t, period, rng, 3.0 * period), seed)
    rotation, density = estimate_rotation(Star("x"), series)
    assert density is not None and rotation.period is not None
    assert rotation.period == pytest.approx(period, rel=0.1)
    assert density.chance(0.85 * period, 1.15 * period) > 0.5
    assert any(s.source == "indicators" for s in rotation.sources)


def test_noise_gives_no_period() -> None:
    rotation, density = estimate_rotation(
        Star("x"), _series(lambda t, rng: rng.normal(size=t.size))
    )
    assert rotation.period is None and rotation.sources == ()
    assert density is not None
    low, high = density.interval(0.683)
    assert high / low > 3.0


def test_velocities_are_never_looked_at() -> None:
    series = _series(lambda t, rng: _spotted(t, 16.0, rng, 40.0), 4)
    loud = series.with_rv(100.0 * np.sin(2 * np.pi * series.time / 5.0))
    first, second = estimate_rotation(Star("x"), series), estimate_rotation(Star("x"), loud)
    assert first[0] == second[0]


def test_nothing_known_is_no_density() -> None:
    series = TimeSeries(np.arange(30.0), np.zeros(30), np.ones(30), np.zeros(30, np.intp), ("A",))
    rotation, density = estimate_rotation(Star("x"), series)
    assert rotation.period is None and density is None


def test_sidecar_and_extra_sources_are_heard() -> None:
    series = TimeSeries(np.arange(30.0), np.zeros(30), np.ones(30), np.zeros(30, np.intp), ("A",))
    star = Star("x", rotation_period=25.0, rotation_period_err=1.0)
    rotation, density = estimate_rotation(star, series, [("model", PeriodDensity.peak(24.0, 0.03))])
    assert density is not None and rotation.period is not None
    assert 24.0 <= rotation.period <= 25.0
    assert [s.source for s in rotation.sources] == ["sidecar", "model"]


def test_photometry_alone_is_enough() -> None:
    rng = np.random.default_rng(11)
    when = np.sort(rng.uniform(0.0, 80.0, 600))
    flux = 1.0 + 1e-3 * _spotted(when, 9.0, rng, 40.0) + 3e-4 * rng.normal(size=600)
    series = TimeSeries(
        np.arange(30.0),
        np.zeros(30),
        np.ones(30),
        np.zeros(30, np.intp),
        ("A",),
        photometry=Photometry(when, flux, np.full(600, 3e-4)),
    )
    rotation, _ = estimate_rotation(Star("x"), series)
    assert rotation.period == pytest.approx(9.0, rel=0.1)
    assert rotation.sources[0].source == "photometry"


def test_a_cycle_is_not_taken_for_rotation() -> None:
    series = _series(
        lambda t, rng: 3.0 * np.sin(2 * np.pi * t / 900.0) + _spotted(t, 16.0, rng, 50.0), 4
    )
    rotation, _ = estimate_rotation(Star("x"), series)
    assert rotation.period == pytest.approx(16.0, rel=0.1)


def test_the_autocorrelation_of_a_sine_peaks_at_its_period() -> None:
    series = _series(lambda t, rng: 3.0 * np.sin(2 * np.pi * t / 20.0))
    channels = indicator_channels(series)
    assert channels is not None
    assert autocorrelation_period(channels) == pytest.approx(20.0, rel=0.1)


def test_missing_values_and_constant_indicators_do_no_harm() -> None:
    series = _series(lambda t, rng: _spotted(t, 16.0, rng, 50.0), 4)
    holes = series.indicators[0].value.copy()
    holes[::3] = np.nan
    flat = np.full(series.n_obs, 2.0)
    series = TimeSeries(
        series.time,
        series.rv,
        series.rv_err,
        series.instrument,
        series.instruments,
        (
            Indicator("fwhm", holes, np.where(np.isfinite(holes), 5.0, np.nan)),
            Indicator("bis", flat, 0.1 * flat),
            Indicator("halpha", np.full(series.n_obs, np.nan), np.full(series.n_obs, np.nan)),
        ),
    )
    channels = indicator_channels(series)
    assert channels is not None and channels.names == ("fwhm",)
    rotation, _ = estimate_rotation(Star("x"), series)
    assert rotation.period == pytest.approx(16.0, rel=0.1)


@needs_shared("real_stars", "hd22049_harps.csv")
def test_an_active_k_dwarf_turns_in_its_published_period() -> None:
    # 11.2 d (Donahue et al. 1996, from memory); spots at several latitudes spread it by 0.6 d
    observations = read_star(shared("real_stars", "hd22049_harps.csv"))
    rotation, _ = estimate_rotation(observations.star, observations.series)
    assert rotation.period == pytest.approx(11.2, abs=0.6)
    agreeing = [s for s in rotation.sources if abs(s.period - rotation.period) < s.period_err]
    assert len(agreeing) >= 2


@needs_shared("sim_stars", "truth.json")
@pytest.mark.slow
def test_simulated_stars_turn_as_they_were_made() -> None:
    stars = json.loads(shared("sim_stars", "truth.json").read_text())["stars"][::10]
    right = 0
    for star in stars:
        observations = read_star(shared("sim_stars", "stars", f"{star['name']}.csv"))
        rotation, _ = estimate_rotation(observations.star, observations.series)
        right += rotation.period is not None and abs(rotation.period / star["prot_d"] - 1) < 0.1
    # 72 % of all 120; twelve stars scatter by 13 %
    assert right >= 0.5 * len(stars)
