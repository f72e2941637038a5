"""True mass, transits, temperature and outer companions against closed forms and known values."""

from __future__ import annotations

import math

import numpy as np
import pytest

from screener.core import Orbit, Star
from screener.models.kepler import semi_major_axis
from screener.system.masses import (
    OrientationPrior,
    companion_radius,
    equilibrium_temperature,
    isotropic_sin_i,
    mass_function,
    mass_posterior,
    outer_companion,
    sin_i_below,
    stellar_sin_i_weights,
    transit_forecast,
    transit_probability,
    true_mass,
)

SUN = Star("made-up sun", mass=1.0, mass_err=0.001, radius=1.0, teff=5772.0)
JUPITER = Orbit(4332.59, 12.46, 0.0489, 0.0, 0.0)


@pytest.mark.parametrize("x", [0.1, 0.5, 0.866, 0.99])
def test_isotropic_orientations_follow_the_closed_form(x: float) -> None:
    """P(sin i < x) = 1 - sqrt(1 - x^2): plain geometry."""
    draws = isotropic_sin_i(200_000, np.random.default_rng(3))
    share = float(np.mean(draws < x))
    # stratified draws scatter far less than the binomial, which serves as an upper bound
    assert share == pytest.approx(1 - math.sqrt(1 - x * x), abs=3 * math.sqrt(0.25 / 200_000))
    assert float(sin_i_below(x)) == pytest.approx(1 - math.sqrt(1 - x * x), rel=1e-12)


def test_negative_control_a_uniform_sin_i_is_not_isotropic() -> None:
    draws = np.random.default_rng(3).random(200_000)
    assert abs(float(np.mean(draws < 0.5)) - float(sin_i_below(0.5))) > 0.3


def test_the_sun_and_jupiter() -> None:
    """12.46 m/s, 5.20 au, one Jupiter mass (planetary fact sheets, from memory)."""
    f = mass_function(JUPITER.period, 12.46, JUPITER.eccentricity)
    assert float(true_mass(f, 1.0, 1.0)) == pytest.approx(1.0, abs=0.01)
    assert semi_major_axis(JUPITER.period, 1.0, 1.0) == pytest.approx(5.204, abs=0.01)
    amplitudes = np.linspace(12.3, 12.6, 301)
    masses = true_mass(mass_function(JUPITER.period, amplitudes, JUPITER.eccentricity), 1.0, 1.0)
    assert 12.4 < float(np.interp(1.0, masses, amplitudes)) < 12.5


def test_true_mass_solves_the_mass_function_up_to_stellar_companions() -> None:
    sin_i = np.array([1.0, 0.1, 0.01, 0.001])
    f = float(mass_function(10.0, 500.0, 0.2))
    m = true_mass(f, sin_i, 0.8) * 9.545942e-4
    np.testing.assert_allclose((m * sin_i) ** 3 / (0.8 + m) ** 2, f, rtol=1e-6)


def test_mass_posterior_agrees_with_the_closed_form() -> None:
    """For a light companion P(m > m0) = P(sin i < m sin i / m0)."""
    orbit = Orbit(1000.0, 100.0)
    rng = np.random.default_rng(1)
    posterior = mass_posterior(orbit, SUN, rng, n_draws=40_000)
    assert posterior is not None
    m_sin_i = float(true_mass(mass_function(1000.0, 100.0, 0.0), 1.0, 1.0))
    assert posterior.above_13 == pytest.approx(float(sin_i_below(m_sin_i / 13)), abs=0.003)
    assert posterior.quantiles[2] == pytest.approx(m_sin_i / math.sqrt(0.75), rel=0.01)


def test_occurrence_law_shifts_to_lighter_companions() -> None:
    """Weights sin^0.31 i: the mean of a law that favours light planets is edge-on."""
    orbit, rng = Orbit(1000.0, 100.0), np.random.default_rng(1)
    sin_i = isotropic_sin_i(40_000, rng)
    flat = mass_posterior(orbit, SUN, rng, sin_i=sin_i)
    law = mass_posterior(orbit, SUN, rng, sin_i=sin_i, prior=OrientationPrior.OCCURRENCE)
    assert flat is not None and law is not None
    weight = sin_i**0.31
    m_sin_i = float(true_mass(mass_function(1000.0, 100.0, 0.0), 1.0, 1.0))
    expected = float(np.sum(weight[sin_i < m_sin_i / 13]) / np.sum(weight))
    assert law.above_13 == pytest.approx(expected, rel=0.03)
    assert law.above_13 < flat.above_13


def test_slow_projected_rotation_means_pole_on() -> None:
    """A star with v = 2 pi R / P = 5.06 km/s but v sin i = 1 km/s has sin i near 0.2."""
    star = Star("s", mass=1.0, radius=1.0, radius_err=0.02, vsini=1000.0, vsini_err=150.0)
    rng = np.random.default_rng(5)
    sin_i = isotropic_sin_i(20_000, rng)
    weights = stellar_sin_i_weights(star, 10.0, 0.1, sin_i, rng)
    assert weights is not None
    mean = float(np.sum(weights * sin_i) / np.sum(weights))
    assert mean == pytest.approx(1000.0 / 5060.0, abs=0.03)
    assert stellar_sin_i_weights(star, None, None, sin_i, rng) is None


def test_unknown_stellar_mass_gives_no_posterior() -> None:
    assert mass_posterior(JUPITER, Star("s"), np.random.default_rng(0)) is None


def test_transit_probability_of_a_hot_jupiter() -> None:
    """About 10 % at 4 d around a sun (common practice, no source)."""
    chance = transit_probability(1.0, semi_major_axis(4.0, 1.0, 1.0))
    assert 0.08 < chance < 0.11
    # periastron towards us makes it likelier by (1 + e) / (1 - e^2) = 1 / (1 - e)
    assert transit_probability(1.0, 0.05, 0.5, math.pi / 2) == pytest.approx(
        2 * transit_probability(1.0, 0.05), rel=1e-12
    )


def test_transit_forecast_of_a_hot_jupiter() -> None:
    """Depth near 1 %, duration near 3 h (common practice, no source)."""
    orbit = Orbit(4.0, 120.0, 0.0, 0.0, 100.0, period_err=0.001, semi_amplitude_err=1.2)
    forecast = transit_forecast(orbit, SUN, 0.0, 200.0)
    assert forecast is not None
    assert 0.007 < forecast.depth < 0.018
    assert 2.5 / 24 < forecast.duration < 4 / 24
    assert 200.0 < forecast.time <= 204.0
    # circular, omega = 0: conjunction a quarter turn after periastron
    assert (forecast.time - 101.0) % 4.0 == pytest.approx(0.0, abs=1e-6)
    drift = (forecast.time - 100.0) / 4.0 * 0.001
    assert forecast.time_err == pytest.approx(
        math.hypot(4.0 / (2 * math.pi) * 0.01, drift), rel=1e-9
    )


def test_equilibrium_temperature_of_the_earth() -> None:
    """255 K at an albedo of 0.3 (textbook value)."""
    assert equilibrium_temperature(5772.0, 1.0, 1.0, 0.0167, 0.3) == pytest.approx(255.0, abs=1.0)


@pytest.mark.parametrize(
    ("mass", "radius", "tolerance"),
    [(1 / 317.8, 1.0, 0.05), (1.0, 11.2, 0.25), (0.0540, 3.88, 0.25), (0.2994, 9.45, 0.3)],
)
def test_radii_of_solar_system_planets(mass: float, radius: float, tolerance: float) -> None:
    """Earth, Jupiter, Neptune, Saturn in Earth radii (fact sheets, from memory); the relation
    itself scatters by 4 to 15 per cent and follows irradiated giants, larger than Saturn."""
    assert companion_radius(mass) * 109.08 == pytest.approx(radius, rel=tolerance)


def test_radius_relation_is_continuous() -> None:
    masses = np.geomspace(1e-3, 150, 3000)
    radii = np.array([companion_radius(float(m)) for m in masses])
    assert np.max(np.abs(np.diff(np.log(radii)))) < 0.01


def test_slope_gives_the_published_lower_limit() -> None:
    """0.0164 Mjup (tau / yr)^(4/3) (slope / m/s/yr) M^(2/3), Feng et al. (2015), from memory.

    There tau = the baseline and P = 1.25 tau, e = 0.5.
    """
    years, slope = 10.0, 5.0
    limits = outer_companion(slope / 365.25, 0.5 / 365.25, years * 365.25, 1.0)
    expected = 0.0164 * years ** (4 / 3) * slope
    assert limits["mass_min_mjup"] == pytest.approx(expected, rel=0.01)
    assert limits["mass_min_err_mjup"] == pytest.approx(0.1 * expected, rel=0.01)
    # Jupiter at 5.2 au pulls the Sun with up to G m / a^2 = 6.6 m/s per year
    jupiter = limits["mass_at_10_au_mjup"]
    assert jupiter is not None
    assert jupiter == pytest.approx(slope / 6.6 * (10 / 5.2) ** 2, rel=0.03)
