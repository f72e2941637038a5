"""Two real stars through the whole tool at quick depth, against the literature.

CoRoT-7: planets at 0.854 d and 3.70 d, rotation near 23 d (Haywood et al. 2014, MNRAS 443, 2517;
Faria et al. 2016, A&A 588, A31; from memory). GJ 849: a planet near 1925 d (Butler et al. 2006,
PASP 118, 1685; Rosenthal et al. 2021, ApJS 255, 8; from memory).
"""

from __future__ import annotations

import functools

import pytest

from screener.core import Depth, Grade, SignalVerdict
from screener.intake import read_star
from screener.pipeline import screen
from tests.shared import needs_shared, shared

pytestmark = pytest.mark.slow


@functools.cache
def signals(name: str) -> tuple[SignalVerdict, ...]:
    observations = read_star(shared("real_stars", f"{name}.csv"))
    return screen(observations, depth=Depth.QUICK, seed=1, with_products=False).verdict.signals


def described(found: tuple[SignalVerdict, ...]) -> list[tuple[float, str, float]]:
    """What a failing assertion shows."""
    return [(s.signal.orbit.period, s.grade.value, s.score) for s in found]


@needs_shared("real_stars", "corot7.csv")
def test_corot7_shows_one_of_its_planets() -> None:
    found = signals("corot7")
    periods = [s.signal.orbit.period for s in found]
    assert any(
        p == pytest.approx(planet, rel=0.005) for p in periods for planet in (0.8536, 3.70)
    ), described(found)


@needs_shared("real_stars", "corot7.csv")
def test_the_rotation_of_corot7_is_no_planet() -> None:
    found = signals("corot7")
    for stellar in (23.0, 11.5, 7.7, 9.03):  # rotation, its half and third, and the disputed 9 d
        near = [s for s in found if s.signal.orbit.period == pytest.approx(stellar, rel=0.08)]
        assert all(s.grade is not Grade.PLANETARY for s in near), described(found)


@needs_shared("real_stars", "gj849.csv")
def test_gj849_has_its_long_period_planet() -> None:
    found = signals("gj849")
    near = [s for s in found if s.signal.orbit.period == pytest.approx(1925.0, rel=0.03)]
    assert near and near[0].grade is Grade.PLANETARY, described(found)
    assert near[0].signal.orbit.semi_amplitude == pytest.approx(24.0, rel=0.15)


@needs_shared("real_stars", "gj849.csv")
def test_the_rotation_of_gj849_is_no_planet() -> None:
    found = signals("gj849")
    near = [s for s in found if s.signal.orbit.period == pytest.approx(40.0, rel=0.08)]
    assert all(s.grade is not Grade.PLANETARY for s in near), described(found)
