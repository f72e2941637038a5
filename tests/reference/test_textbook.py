"""The textbook procedure does what it says, so that beating it means something."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from screener.core import Indicator, TimeSeries
from tests.reference.textbook import judge


def star(seed: int, planet: float = 0.0, spots: float = 0.0) -> TimeSeries:
    """Ninety nights at two instruments; ``planet`` at 13.7 d e = 0.4, ``spots`` at 9.1 d."""
    rng = np.random.default_rng(seed)
    n = 90
    time = np.sort(rng.choice(400, n, replace=False) + rng.uniform(-0.2, 0.2, n))
    label = (np.arange(n) % 2).astype(np.intp)
    from screener.models.kepler import keplerian_velocity

    rotation = np.sin(2 * np.pi * time / 9.1)
    rv = 40.0 * label + rng.normal(0, 2.0, n) + spots * rotation
    if planet:
        rv = rv + keplerian_velocity(time, 13.7, planet, 0.4, 1.0, 3.0)
    bis = Indicator("bis", -spots * rotation + rng.normal(0, 2.0, n), np.full(n, 2.0))
    return TimeSeries(time, rv, np.full(n, 2.0), label, ("one", "two"), (bis,))


def test_a_planet_is_found_once() -> None:
    found = judge(star(1, planet=12.0))
    assert [s["grade"] for s in found] == ["planetary"]
    assert abs(found[0]["period_d"] - 13.7) < 0.05
    assert abs(found[0]["k_m_s"] - 12.0) < 1.5


def test_a_spot_is_rejected_by_the_bisector() -> None:
    found = judge(star(2, spots=10.0))
    assert found and found[0]["grade"] == "likely stellar"
    assert abs(found[0]["period_d"] - 9.1) < 0.05


def test_without_an_indicator_the_spot_passes_for_a_planet() -> None:
    found = judge(replace(star(2, spots=10.0), indicators=()))
    assert found[0]["grade"] == "planetary"


def test_noise_is_nothing() -> None:
    assert [judge(star(seed)) for seed in (3, 4, 5)] == [[], [], []]
