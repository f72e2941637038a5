"""The Sun's own reflex motion, from the JPL ephemeris DE421, observed like a star.

Source: DE421 (Folkner, Williams & Boggs 2009, IPN Progress Report 42-178) as packaged for
jplephem. Expected: Jupiter 4333 d and 12.4 m/s, Saturn 10 760 d and 2.7 m/s (K from the masses and
orbits of the planets with sin i = 1, from memory; 12.5 and 2.8 m/s by the textbooks' rounding).
"""

from __future__ import annotations

import functools
import math
import warnings
from pathlib import Path

import numpy as np
import pytest

from screener.core import Array, Depth, Grade, TimeSeries
from screener.intake import read_star
from screener.models.dataset import scaled_data
from screener.models.exploration import Search, search_white
from screener.models.noise import NoiseModel, white_noise
from screener.pipeline import screen

de421 = pytest.importorskip("de421")
ephem = pytest.importorskip("jplephem.ephem")

JUPITER, JUPITER_K = 4332.6, 12.45
SATURN, SATURN_K = 10759.0, 2.75


def solar_velocity(time: Array) -> Array:
    """Velocity of the Sun about the barycentre towards the vernal equinox, m/s.

    That direction lies in the ecliptic and is the ephemeris' x axis.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # this reader is older than numpy's present rules
        _, velocity = ephem.Ephemeris(de421).position_and_velocity("sun", time)
    return np.asarray(-velocity[0] * 1000.0 / 86400.0)


def observed(years: float, n: int, noise: float, seed: int) -> TimeSeries:
    """``n`` nights in seasons of eight months, ended in 2015."""
    rng = np.random.default_rng(seed)
    end = 2457200.5
    nights = np.arange(math.floor(end - years * 365.25), end)
    nights = nights[(nights % 365.25) < 243.0]
    time = np.sort(rng.choice(nights, n, replace=False) + rng.uniform(-0.15, 0.15, n))
    rv = solar_velocity(time) + rng.normal(0, noise, n)
    return TimeSeries(time, rv, np.full(n, noise), np.zeros(n, dtype=np.intp), ("one",))


@functools.cache
def decades() -> tuple[NoiseModel, Search]:
    series = observed(64.0, 110, 0.3, 4)
    noise = white_noise(scaled_data(series, (), 250.0))
    return noise, search_white(series, noise, (), Depth.QUICK)


@pytest.mark.slow
def test_jupiter_then_saturn_over_decades() -> None:
    noise, search = decades()
    assert len(search.found) >= 2
    jupiter, saturn = noise.orbits(search.fit)[:2]
    assert jupiter.period == pytest.approx(JUPITER, rel=0.01)
    assert jupiter.semi_amplitude == pytest.approx(JUPITER_K, rel=0.03)
    assert saturn.period == pytest.approx(SATURN, rel=0.05)
    assert saturn.semi_amplitude == pytest.approx(SATURN_K, rel=0.1)


@pytest.mark.slow
def test_nothing_but_giants_comes_out_of_the_decades() -> None:
    """Uranus may show as a curvature; anything below a Jupiter year would be invented."""
    noise, search = decades()
    for orbit in noise.orbits(search.fit)[2:]:
        assert orbit.period > SATURN and orbit.semi_amplitude < 1.0


@pytest.mark.slow
@pytest.mark.parametrize("seed", [6, 7, 8])
def test_ten_years_at_three_metres_per_second_announce_no_planet(tmp_path: Path, seed: int) -> None:
    """As the trade says of such data (common practice, no source)."""
    series = observed(10.0, 70, 3.0, seed)
    table = tmp_path / "sun.csv"
    rows = zip(series.time, series.rv, series.rv_err, strict=True)
    table.write_text("time,rv,rv_err\n" + "".join(f"{t:.5f},{v:.3f},{e:.3f}\n" for t, v, e in rows))
    verdict = screen(read_star(table), depth=Depth.QUICK, seed=1, with_products=False).verdict
    announced = [s for s in verdict.signals if s.grade is Grade.PLANETARY]
    assert not announced, [(s.signal.orbit.period, s.score) for s in announced]
