"""A short N-body check of a solution, with the optional package ``rebound``."""

from __future__ import annotations

import importlib
import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from screener.core import Orbit, Signal, Star
from screener.models.kepler import minimum_mass

__all__ = ["NBodyOutcome", "nbody_available", "nbody_check"]

_M_JUP_SUN = 9.545942e-4  # GM of Jupiter over GM of the Sun, IAU 2015 resolution B3
_YEAR = 365.25
_TWO_PI = 2 * math.pi


@dataclass(frozen=True)
class NBodyOutcome:
    """How many draws lasted; ``span`` is the time integrated (d), ``integrator`` its name."""

    n_draws: int
    n_survived: int
    span: float
    integrator: str

    @property
    def survival(self) -> float:
        return self.n_survived / self.n_draws


def nbody_available() -> bool:
    """Whether ``rebound`` can be imported."""
    try:
        importlib.import_module("rebound")
    except ImportError:
        return False
    return True


def nbody_check(
    star: Star,
    signals: Sequence[Signal],
    rng: np.random.Generator,
    *,
    n_draws: int = 8,
    n_orbits: float = 10_000.0,
) -> NBodyOutcome | None:
    """Integrate draws of a coplanar, edge-on solution for ``n_orbits`` turns of the inner planet.

    A draw is lost when two bodies come nearer than one mutual Hill radius, one leaves to 20 times
    the widest orbit, or an axis has changed by a third. Wide, nearly circular orbits use WHFast
    (Rein & Tamayo 2015, MNRAS 452, 376) with 25 steps a turn, all others IAS15 (Rein & Spiegel
    2015, MNRAS 446, 1424) for a tenth of the turns. Edge-on masses are the smallest and the
    mildest. Nothing depends on the clock, so that every machine counts the same draws.

    Returns None without ``rebound``, a stellar mass, or a second planet.
    """
    planets = sorted(
        (s for s in signals if s.orbit.semi_amplitude > 0), key=lambda s: s.orbit.period
    )
    if len(planets) < 2 or star.mass is None or not nbody_available():
        return None
    orbits = [s.orbit for s in planets]
    gentle = _gentle(orbits)
    turns = n_orbits if gentle else n_orbits / 10
    span = turns * orbits[0].period
    survived = sum(_survives(star.mass, orbits, rng, span, gentle) for _ in range(n_draws))
    return NBodyOutcome(n_draws, survived, span, "whfast" if gentle else "ias15")


def _gentle(orbits: Sequence[Orbit]) -> bool:
    """All eccentricities below 0.3 and no overlapping radial ranges."""
    for one, two in pairwise(orbits):
        ratio = (two.period / one.period) ** (2 / 3)
        if (1 + one.eccentricity) > 0.8 * ratio * (1 - two.eccentricity):
            return False
    return all(o.eccentricity < 0.3 for o in orbits)


def _simulation(stellar_mass: float, orbits: Sequence[Orbit], rng: np.random.Generator) -> Any:
    rebound = importlib.import_module("rebound")
    simulation = rebound.Simulation()
    simulation.G = 4 * math.pi**2  # au, years, solar masses
    simulation.add(m=stellar_mass)
    epoch = orbits[-1].time_peri
    for orbit in orbits:
        e_err = orbit.eccentricity_err or 0.0
        ecc = float(np.clip(abs(orbit.eccentricity + e_err * rng.standard_normal()), 0.0, 0.9))
        k = orbit.semi_amplitude + (orbit.semi_amplitude_err or 0.0) * rng.standard_normal()
        period = orbit.period + (orbit.period_err or 0.0) * rng.standard_normal()
        period = period if period > 0 else orbit.period
        mass = minimum_mass(period, max(k, 0.1 * orbit.semi_amplitude), ecc, stellar_mass)
        simulation.add(
            m=mass * _M_JUP_SUN,
            P=period / _YEAR,
            e=ecc,
            # the velocity of the star has the argument of the star; the planet's is opposite
            omega=orbit.omega_peri + math.pi,
            M=_TWO_PI * (epoch - orbit.time_peri) / period,
        )
    simulation.move_to_com()
    return simulation


def _survives(
    stellar_mass: float,
    orbits: Sequence[Orbit],
    rng: np.random.Generator,
    span: float,
    gentle: bool,
) -> bool:
    rebound = importlib.import_module("rebound")
    simulation = _simulation(stellar_mass, orbits, rng)
    bodies = simulation.particles
    axes = [bodies[i].a for i in range(1, simulation.N)]
    heavy = sum(bodies[i].m for i in range(1, simulation.N))
    simulation.exit_min_distance = axes[0] * (heavy / (3 * stellar_mass)) ** (1 / 3)
    simulation.exit_max_distance = 20 * axes[-1]
    if gentle:
        simulation.integrator = "whfast"
        simulation.dt = orbits[0].period / _YEAR / 25
    else:
        simulation.integrator = "ias15"
    end = span / _YEAR
    try:
        for moment in np.linspace(0, end, 51)[1:]:
            simulation.integrate(float(moment), exact_finish_time=0)
            now = [bodies[i].a for i in range(1, simulation.N)]
            if any(not (abs(b / a - 1) < 1 / 3) for a, b in zip(axes, now, strict=True)):
                return False
    except (rebound.Encounter, rebound.Escape):
        return False
    return True
