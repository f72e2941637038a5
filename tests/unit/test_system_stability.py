"""Crossing orbits, Hill and AMD criteria, period ratios: the solar system and made-up pairs."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.optimize import brentq

from screener.core import Depth, Grade, Orbit, Outcome, Signal, Star
from screener.system.company import stability_finding, stability_findings
from screener.system.nbody import nbody_available, nbody_check
from screener.system.stability import (
    GLADMAN_LIMIT,
    amd_ratio,
    critical_amd,
    hill_separation,
    hill_stable,
    near_commensurability,
    orbits_cross,
    pair_stability,
)

SUN = Star("made-up sun", mass=1.0, mass_err=0.01)

# a (au), e, m (Jupiter masses), period (d): JPL approximate elements for J2000, from memory
PLANETS = {
    "Mercury": (0.3871, 0.2056, 1.74e-4, 87.969),
    "Venus": (0.7233, 0.0068, 2.56e-3, 224.701),
    "Earth": (1.0000, 0.0167, 3.146e-3, 365.256),
    "Mars": (1.5237, 0.0934, 3.38e-4, 686.980),
    "Jupiter": (5.2029, 0.0484, 1.0, 4332.59),
    "Saturn": (9.5367, 0.0539, 0.2994, 10759.2),
    "Uranus": (19.189, 0.0473, 0.0457, 30688.5),
    "Neptune": (30.070, 0.0086, 0.0540, 60182.0),
}


def _signal(
    name: str, period: float, k: float, ecc: float = 0.0, err: float = 0.3, omega: float = 0.0
) -> Signal:
    orbit = Orbit(period, k, ecc, omega, 0.0, 1e-3 * period, err, 0.02 if ecc else None)
    return Signal(name, orbit, 1e-6, ("white noise",))


@pytest.mark.parametrize(("inner", "outer"), list(itertools.pairwise(PLANETS)))
def test_solar_system_pairs_are_stable_and_well_separated(inner: str, outer: str) -> None:
    a_1, e_1, m_1, _ = PLANETS[inner]
    a_2, e_2, m_2, _ = PLANETS[outer]
    angles = np.linspace(0, 2 * np.pi, 13)
    assert not np.any(orbits_cross(a_1, e_1, 0.0, a_2, e_2, angles))
    assert float(hill_separation(a_1, m_1, a_2, m_2, 1.0)) > 2 * GLADMAN_LIMIT
    assert float(amd_ratio(a_1, e_1, m_1, a_2, e_2, m_2)) < 1


def test_jupiter_and_saturn_are_eight_hill_radii_apart() -> None:
    """7.9 mutual Hill radii (Chambers, Wetherill & Boss 1996, Icarus 119, 261, from memory)."""
    assert float(hill_separation(5.2029, 1.0, 9.5367, 0.2994, 1.0)) == pytest.approx(7.9, abs=0.2)


def test_a_crossing_pair_is_flagged() -> None:
    assert orbits_cross(1.0, 0.0, 0.0, 1.3, 0.5, 0.0)
    assert float(amd_ratio(1.0, 0.0, 1.0, 1.3, 0.5, 1.0)) > 1
    assert not hill_stable(1.0, 0.0, 1.0, 1.3, 0.5, 1.0, 1.0)


def test_crossing_agrees_with_the_curves_themselves() -> None:
    """The closed form against the two ellipses drawn point by point."""
    rng = np.random.default_rng(2)
    theta = np.linspace(0, 2 * np.pi, 4001)
    seen = set()
    for _ in range(200):
        a_2, e_1, e_2 = rng.uniform(1.0, 2.5), rng.uniform(0, 0.8), rng.uniform(0, 0.8)
        w_1, w_2 = rng.uniform(0, 2 * np.pi, 2)
        r_1 = (1 - e_1**2) / (1 + e_1 * np.cos(theta - w_1))
        r_2 = a_2 * (1 - e_2**2) / (1 + e_2 * np.cos(theta - w_2))
        gap = (r_2 - r_1) / r_1
        if np.min(np.abs(gap)) < 1e-3 and not np.min(gap) * np.max(gap) < 0:
            continue  # grazing: too close to call on the grid
        crossing = bool(np.min(gap) < 0 < np.max(gap))
        seen.add(crossing)
        assert bool(orbits_cross(1.0, e_1, w_1, a_2, e_2, w_2)) == crossing
    assert seen == {True, False}


def test_hill_criterion_for_circular_orbits_is_gladmans_limit() -> None:
    """For small masses the full criterion turns over at 2 sqrt(3) mutual Hill radii."""
    m = 0.003  # an Earth mass

    def margin(a_2: float) -> float:
        return 1.0 if hill_stable(1.0, 0.0, m, a_2, 0.0, m, 1.0) else -1.0

    edge = brentq(margin, 1.001, 1.2, xtol=1e-7)
    assert float(hill_separation(1.0, m, edge, m, 1.0)) == pytest.approx(GLADMAN_LIMIT, rel=0.03)


def test_critical_amd_is_the_least_deficit_of_touching_orbits() -> None:
    """Against brute force over all pairs (e, e') with alpha (1 + e) = 1 - e'."""
    for alpha, gamma in itertools.product((0.2, 0.5, 0.8, 0.95), (0.01, 0.3, 1.0, 30.0)):
        e = np.linspace(0, 1, 400_001)
        outer = 1 - alpha - alpha * e
        ok = outer >= 0
        deficit = gamma * math.sqrt(alpha) * (1 - np.sqrt(1 - e[ok] ** 2)) + (
            1 - np.sqrt(1 - outer[ok] ** 2)
        )
        assert float(critical_amd(alpha, gamma)) == pytest.approx(float(deficit.min()), rel=1e-5)


def test_pluto_and_neptune_are_three_to_two() -> None:
    """Periods of 90560 and 60182 d (fact sheets, from memory); the textbook 3:2."""
    near = near_commensurability(60182.0, 10.0, 90560.0, 50.0)
    assert (near.p, near.q, near.near, near.harmonic) == (3, 2, True, False)
    assert near.chance < 0.1


def test_galilean_moons_are_two_to_one_and_may_be_harmonics() -> None:
    """Io and Europa: 1.769138 and 3.551181 d (textbook values)."""
    near = near_commensurability(3.551181, None, 1.769138, None)
    assert (near.p, near.q, near.near, near.harmonic) == (2, 1, True, True)


def test_jupiter_and_saturn_are_near_five_to_two_but_not_in_it() -> None:
    near = near_commensurability(4332.59, 0.1, 10759.2, 1.0)
    assert (near.p, near.q) == (5, 2)
    assert near.offset == pytest.approx(-0.0067, abs=0.001)
    far = near_commensurability(10.0, 0.001, 12.7, 0.001)
    assert not far.near


def test_pair_stability_needs_two_planets_and_a_mass() -> None:
    rng = np.random.default_rng(0)
    assert pair_stability(SUN, [_signal("S1", 10, 5)], rng) == ()
    assert pair_stability(Star("s"), [_signal("S1", 10, 5), _signal("S2", 30, 5)], rng) == ()


def test_wide_pair_is_no_evidence() -> None:
    one, two = _signal("S1", 10.0, 5.0), _signal("S2", 100.0, 3.0)
    finding = stability_finding(SUN, two, [one], seed=1)
    assert finding.test == "stability"
    assert finding.outcome is Outcome.INCONCLUSIVE
    assert finding.statistic is not None and finding.statistic < 0.05


def test_crossing_pair_weighs_against_the_weaker_signal_only() -> None:
    strong = _signal("S1", 300.0, 50.0)
    weak = _signal("S2", 430.0, 9.0, ecc=0.6, err=1.0)
    against = stability_finding(SUN, weak, [strong], seed=1)
    assert against.outcome is Outcome.SUPPORTS_STAR
    assert against.parameters["partner"] == "S1"
    spared = stability_finding(SUN, strong, [weak], seed=1)
    assert spared.outcome is Outcome.INCONCLUSIVE
    quick = stability_finding(SUN, weak, [strong], seed=1, depth=Depth.QUICK)
    assert quick.outcome is Outcome.SUPPORTS_STAR


def test_crossing_orbits_in_resonance_are_not_condemned() -> None:
    strong = _signal("S1", 300.0, 50.0)
    resonant = _signal("S2", 450.5, 9.0, ecc=0.6, err=1.0)
    finding = stability_finding(SUN, resonant, [strong], seed=1)
    assert finding.outcome is Outcome.INCONCLUSIVE
    assert finding.parameters["near_resonance"] == "3:2"
    # unless the integrations say that none lasts
    lost = stability_finding(SUN, resonant, [strong], seed=1, survival=0.0)
    assert lost.outcome is Outcome.SUPPORTS_STAR


def test_uncertain_eccentricity_does_not_condemn() -> None:
    strong = _signal("S1", 300.0, 50.0)
    orbit = Orbit(500.0, 9.0, 0.35, 0.0, 0.0, 5.0, 2.0, 0.25)
    weak = Signal("S2", orbit, 1e-3, ("white noise",))
    finding = stability_finding(SUN, weak, [strong], seed=1)
    assert finding.outcome is Outcome.INCONCLUSIVE


def test_no_company_no_mass_not_applicable() -> None:
    one, two = _signal("S1", 10.0, 5.0), _signal("S2", 100.0, 3.0)
    assert stability_finding(SUN, one, [], seed=1).outcome is Outcome.NOT_APPLICABLE
    assert stability_finding(Star("s"), one, [two], seed=1).outcome is Outcome.NOT_APPLICABLE


def test_signals_of_the_star_neither_suffer_nor_condemn() -> None:
    """A spot pattern has no orbit: crossing one proves nothing."""
    spot = _signal("S1", 300.0, 50.0)
    planet = _signal("S2", 430.0, 9.0, ecc=0.6, err=1.0)
    grades = {"S1": Grade.LIKELY_STELLAR, "S2": Grade.AMBIGUOUS}
    found = stability_findings(SUN, [spot, planet], grades, seed=1)
    assert {f.outcome for f in found.values()} == {Outcome.NOT_APPLICABLE}
    both = stability_findings(SUN, [spot, planet], {**grades, "S1": Grade.PLANETARY}, seed=1)
    assert both["S2"].outcome is Outcome.SUPPORTS_STAR
    assert both["S1"].outcome is Outcome.INCONCLUSIVE


def test_known_planets_outrank_signals() -> None:
    known = Signal("K1", Orbit(300.0, 20.0), 0.0, ("known",), known=True)
    strong = _signal("S1", 315.0, 60.0)
    found = stability_findings(SUN, [strong, known], {"S1": Grade.PLANETARY}, seed=1)
    assert set(found) == {"S1"}
    assert found["S1"].outcome is Outcome.SUPPORTS_STAR


@pytest.mark.skipif(not nbody_available(), reason="needs the optional package rebound")
def test_short_integrations_tell_a_quiet_pair_from_a_packed_one() -> None:
    rng = np.random.default_rng(4)
    quiet = nbody_check(
        SUN, [_signal("S1", 10, 10), _signal("S2", 60, 10)], rng, n_draws=2, n_orbits=500
    )
    packed = nbody_check(
        SUN, [_signal("S1", 300, 80), _signal("S2", 340, 80)], rng, n_draws=2, n_orbits=2000
    )
    assert quiet is not None and quiet.survival == 1.0 and quiet.integrator == "whfast"
    assert packed is not None and packed.survival < 1.0
