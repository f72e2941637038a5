"""Keplerian orbits against closed forms, a handbook and the solar system."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from screener.models.kepler import (
    keplerian_velocity,
    minimum_mass,
    orbit_columns,
    semi_major_axis,
    solve_kepler,
    time_of_conjunction,
)


def test_equation_is_solved_up_to_high_eccentricity() -> None:
    mean = np.concatenate([np.linspace(-20, 20, 4001), np.geomspace(1e-8, 1e-2, 200)])
    for ecc in (0.0, 0.01, 0.3, 0.7, 0.9, 0.97, 0.99):
        e_anomaly = solve_kepler(mean, ecc)
        assert np.max(np.abs(e_anomaly - ecc * np.sin(e_anomaly) - mean)) < 1e-12


def test_against_bisection() -> None:
    for ecc, mean in ((0.5, 0.3), (0.99, 0.01), (0.99, 3.0), (0.9, 1.0)):
        root = brentq(lambda x, e=ecc, m=mean: x - e * math.sin(x) - m, 0, 7, xtol=1e-15)
        assert abs(float(solve_kepler(mean, ecc)) - root) < 1e-12


def test_worked_example_of_a_handbook() -> None:
    # Meeus, Astronomical Algorithms, example 30.a (from memory): e = 0.1, M = 5 deg
    assert math.degrees(float(solve_kepler(math.radians(5), 0.1))) == pytest.approx(
        5.554589, abs=1e-6
    )


@pytest.mark.parametrize("ecc", [-0.1, 1.0, 1.5, math.nan])
def test_unbound_orbits_are_refused(ecc: float) -> None:
    with pytest.raises(ValueError, match="bound orbit"):
        solve_kepler(1.0, ecc)


@given(st.floats(0, 0.95), st.floats(-3, 3), st.floats(0.6, 5000), st.floats(0.1, 300))
def test_velocity_range_is_twice_the_semi_amplitude(
    ecc: float, omega: float, period: float, k: float
) -> None:
    # sample evenly in true anomaly, so that the extremes are hit at any eccentricity
    nu = np.linspace(-np.pi, np.pi, 2001)
    e_anomaly = 2 * np.arctan2(np.sqrt(1 - ecc) * np.sin(nu / 2), np.sqrt(1 + ecc) * np.cos(nu / 2))
    time = period * (e_anomaly - ecc * np.sin(e_anomaly)) / (2 * np.pi)
    velocity = keplerian_velocity(time, period, k, ecc, omega, 0.0)
    assert np.ptp(velocity) == pytest.approx(2 * k, rel=1e-5)


def test_columns_carry_the_orbit() -> None:
    time = np.linspace(0, 40, 300)
    columns = orbit_columns(time, 7.3, 0.4, 1.1)
    expected = keplerian_velocity(time, 7.3, 5.0, 0.4, 0.8, 1.1)
    assert np.allclose(columns @ [5 * math.cos(0.8), 5 * math.sin(0.8)], expected, atol=1e-12)


def test_jupiter_and_earth() -> None:
    # Sun's reflex motion 12.5 m/s (Jupiter) and 0.089 m/s (Earth): textbook values, from memory
    assert minimum_mass(4332.59, 12.47, 0.0484, 1.0) == pytest.approx(1.0, rel=0.005)
    assert minimum_mass(365.256, 0.0895, 0.0167, 1.0) == pytest.approx(1 / 317.83, rel=0.005)
    assert semi_major_axis(4332.59, 1.0, 1.0) == pytest.approx(5.2026, rel=2e-4)
    assert semi_major_axis(365.256, 1.0) == pytest.approx(1.0, rel=1e-5)


@given(st.floats(0, 0.9), st.floats(-3.1, 3.1))
def test_conjunction_is_where_the_star_is_behind(ecc: float, omega: float) -> None:
    t_conj = time_of_conjunction(10.0, ecc, omega, 3.0)
    assert 3.0 <= t_conj <= 13.0
    cos_part, sin_part = orbit_columns(np.array([t_conj]), 10.0, ecc, 3.0)[0]
    nu = math.atan2(-sin_part, cos_part - ecc)
    assert math.cos(nu + omega - math.pi / 2) == pytest.approx(1.0, abs=1e-9)
