"""Do the planets of this solution live together? Geometry, Hill and AMD criteria.

Orbits are taken as coplanar: a lower bound on the angular momentum deficit, and the orientation in
which the criteria are the mildest. Masses are in Jupiter masses, distances in au.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy import constants

from screener.core import Array, Orbit, Signal, Star
from screener.system.masses import (
    isotropic_sin_i,
    mass_function,
    orbit_draws,
    stellar_mass_draws,
    true_mass,
)

__all__ = [
    "GLADMAN_LIMIT",
    "Commensurability",
    "PairStability",
    "amd_ratio",
    "critical_amd",
    "hill_separation",
    "hill_stable",
    "near_commensurability",
    "orbits_cross",
    "pair_stability",
]

GLADMAN_LIMIT = 2.0 * math.sqrt(3.0)  # mutual Hill radii, circular orbits
_M_JUP_SUN = float(constants.GM_jup.si.value / constants.GM_sun.si.value)
_GM_SUN = float(constants.GM_sun.si.value)
_AU = float(constants.au.si.value)
_DAY = 86400.0


@dataclass(frozen=True)
class Commensurability:
    """The nearest p:q to a ratio of periods (longer over shorter)."""

    p: int
    q: int
    ratio: float
    ratio_err: float
    offset: float  # ratio / (p/q) - 1
    near: bool
    chance: float  # of a ratio without meaning lying as near to some p:q
    harmonic: bool  # q = 1: the shorter period may be a harmonic of the longer


@dataclass(frozen=True)
class PairStability:
    """Two neighbours; shares are over the draws of orbits, masses and orientation."""

    inner: str
    outer: str
    crossing: float
    hill_unstable: float
    amd_unstable: float
    hill_separation: float  # mutual Hill radii, median
    commensurability: Commensurability


def orbits_cross(
    a_1: Any, e_1: Any, omega_1: Any, a_2: Any, e_2: Any, omega_2: Any
) -> np.ndarray[Any, np.dtype[np.bool_]]:
    """Whether two coplanar ellipses about one focus meet; all arguments broadcast.

    r = p / (1 + e cos(theta - omega)) are equal somewhere if and only if
    |p_1 - p_2| <= |p_1 e_2 - p_2 e_1| with the e as vectors along the apsides.
    """
    p_1 = np.asarray(a_1) * (1 - np.asarray(e_1) ** 2)
    p_2 = np.asarray(a_2) * (1 - np.asarray(e_2) ** 2)
    x = p_1 * e_2 * np.cos(omega_2) - p_2 * e_1 * np.cos(omega_1)
    y = p_1 * e_2 * np.sin(omega_2) - p_2 * e_1 * np.sin(omega_1)
    return np.asarray(np.abs(p_1 - p_2) <= np.hypot(x, y))


def hill_separation(a_1: Any, m_1: Any, a_2: Any, m_2: Any, stellar_mass: Any) -> Array:
    """(a_2 - a_1) over the mutual Hill radius [(m_1 + m_2) / 3M]^(1/3) (a_1 + a_2) / 2.

    Circular orbits are Hill stable beyond 2 sqrt(3) (Gladman 1993, Icarus 106, 247).
    """
    m = (np.asarray(m_1) + np.asarray(m_2)) * _M_JUP_SUN
    radius = np.cbrt(m / (3 * np.asarray(stellar_mass))) * (np.asarray(a_1) + a_2) / 2
    return np.asarray(np.abs(np.asarray(a_2) - a_1) / radius)


def hill_stable(
    a_1: Any, e_1: Any, m_1: Any, a_2: Any, e_2: Any, m_2: Any, stellar_mass: Any
) -> np.ndarray[Any, np.dtype[np.bool_]]:
    """Gladman (1993, eq. 21) for eccentric coplanar orbits, a_1 < a_2: no close approaches ever.

    Sufficient, not necessary: resonances keep other pairs apart.
    """
    mu_1 = np.asarray(m_1) * _M_JUP_SUN / stellar_mass
    mu_2 = np.asarray(m_2) * _M_JUP_SUN / stellar_mass
    alpha = mu_1 + mu_2
    gamma_1, gamma_2 = np.sqrt(1 - np.asarray(e_1) ** 2), np.sqrt(1 - np.asarray(e_2) ** 2)
    delta = np.sqrt(np.asarray(a_2) / a_1)
    left = alpha**-3 * (mu_1 + mu_2 / delta**2) * (mu_1 * gamma_1 + mu_2 * gamma_2 * delta) ** 2
    return np.asarray(left > 1 + 3 ** (4 / 3) * mu_1 * mu_2 / alpha ** (4 / 3))


def critical_amd(axis_ratio: Any, mass_ratio: Any) -> Array:
    """Critical relative AMD of a pair: the least at which the orbits can touch.

    ``axis_ratio`` = a/a' < 1 and ``mass_ratio`` = m/m' (inner over outer), broadcast. Laskar &
    Petit (2017, A&A 605, A72, eq. 29 and 35): alpha e + e' = 1 - alpha with
    e' = gamma e / sqrt(alpha (1 - e^2) + gamma^2 e^2), solved by bisection, then
    C_c = gamma sqrt(alpha) [1 - sqrt(1 - e^2)] + 1 - sqrt(1 - e'^2).
    """
    alpha, gamma = np.broadcast_arrays(
        np.asarray(axis_ratio, dtype=float), np.asarray(mass_ratio, dtype=float)
    )
    low, high = np.zeros(alpha.shape), np.ones(alpha.shape)
    for _ in range(60):
        e = 0.5 * (low + high)
        outer = gamma * e / np.sqrt(alpha * (1 - e * e) + (gamma * e) ** 2)
        over = alpha * e + outer > 1 - alpha
        high, low = np.where(over, e, high), np.where(over, low, e)
    e = 0.5 * (low + high)
    outer = np.clip(1 - alpha - alpha * e, 0.0, 1.0)
    return np.asarray(
        gamma * np.sqrt(alpha) * (1 - np.sqrt(1 - e * e)) + 1 - np.sqrt(1 - outer * outer)
    )


def amd_ratio(
    a_1: Any, e_1: Any, m_1: Any, a_2: Any, e_2: Any, m_2: Any, other_amd: Any = 0.0
) -> Array:
    """AMD over its critical value for a coplanar pair, a_1 < a_2; below 1 it is AMD-stable.

    ``other_amd`` adds the deficit of further planets of the system, in units of the outer
    planet's circular angular momentum m_2 sqrt(a_2) (Laskar & Petit 2017 ask for the system's).
    """
    alpha = np.asarray(a_1, dtype=float) / np.asarray(a_2, dtype=float)
    gamma = np.asarray(m_1, dtype=float) / np.asarray(m_2, dtype=float)
    deficit = (
        gamma * np.sqrt(alpha) * (1 - np.sqrt(1 - np.asarray(e_1) ** 2))
        + 1
        - np.sqrt(1 - np.asarray(e_2) ** 2)
        + np.asarray(other_amd)
    )
    # where the orbits coincide the critical value is nil: any deficit is too much
    critical = np.maximum(critical_amd(np.minimum(alpha, 1.0), gamma), 1e-12)
    return np.asarray(deficit / critical)


def near_commensurability(
    period_1: float, err_1: float | None, period_2: float, err_2: float | None
) -> Commensurability:
    """The p:q (q <= 4, p - q <= 3) nearest to the ratio of two periods.

    It counts as near within 1 %, or within two standard errors where these are smaller than 3 %.
    ``chance`` is the share of ratios up to 4.5, log-uniform, that lie as near to a p:q of the same
    or lower order, so that a coincidence is not read as a resonance.
    """
    (short, short_err), (long, long_err) = sorted(
        [(period_1, err_1 or 0.0), (period_2, err_2 or 0.0)]
    )
    ratio = long / short
    relative_err = math.hypot(short_err / short, long_err / long)
    choices = sorted(
        {(p, q) for q in range(1, 5) for p in range(q + 1, q + 4) if math.gcd(p, q) == 1}
    )
    p, q = min(choices, key=lambda c: abs(math.log(ratio * c[1] / c[0])))
    offset = ratio * q / p - 1
    distance = abs(math.log1p(offset))
    grid = np.linspace(0.0, math.log(4.5), 4001)
    centres = np.log([a / b for a, b in choices if a - b <= p - q])
    nearest = np.min(np.abs(grid[:, None] - centres[None, :]), axis=1)
    return Commensurability(
        p=p,
        q=q,
        ratio=ratio,
        ratio_err=ratio * relative_err,
        offset=offset,
        near=distance <= max(0.01, min(2 * relative_err, 0.03)),
        chance=float(np.mean(nearest <= distance)),
        harmonic=q == 1,
    )


@dataclass(frozen=True, eq=False)
class _Draws:
    """Draws of one system, each array of shape (n_planets, n_draws), sorted by median period."""

    ids: tuple[str, ...]
    orbits: tuple[Orbit, ...]
    stellar_mass: Array
    period: Array
    axis: Array
    ecc: Array
    omega: Array
    mass: Array


def _draw(
    star: Star, signals: Sequence[Signal], n_draws: int, rng: np.random.Generator
) -> _Draws | None:
    stars = stellar_mass_draws(star, n_draws, rng)
    if stars is None:
        return None
    # one inclination for all: the planets of a system lie near one plane
    sin_i = isotropic_sin_i(n_draws, rng)
    ordered = sorted(signals, key=lambda s: s.orbit.period)
    rows: list[tuple[Array, ...]] = []
    for signal in ordered:
        amplitude, period, ecc = orbit_draws(signal.orbit, n_draws, rng)
        mass = true_mass(mass_function(period, amplitude, ecc), sin_i, stars)
        gm = _GM_SUN * (stars + mass * _M_JUP_SUN)
        axis = np.cbrt(gm * (period * _DAY / (2 * np.pi)) ** 2) / _AU
        omega = signal.orbit.omega_peri + _omega_error(signal.orbit, ecc) * rng.standard_normal(
            n_draws
        )
        rows.append((period, axis, ecc, omega, mass))
    columns = [np.stack(c) for c in zip(*rows, strict=True)]
    return _Draws(tuple(s.id for s in ordered), tuple(s.orbit for s in ordered), stars, *columns)


def _omega_error(orbit: Orbit, ecc: Array) -> Array:
    """sigma_e / e, the error of the direction of a vector of that length; at most a full turn."""
    error = orbit.eccentricity_err
    if error is None:
        error = math.sqrt(2.0) * (orbit.semi_amplitude_err or 0.0) / orbit.semi_amplitude
    return np.minimum(error / np.maximum(ecc, 1e-6), 2 * np.pi)


def pair_stability(
    star: Star, signals: Sequence[Signal], rng: np.random.Generator, *, n_draws: int = 1000
) -> tuple[PairStability, ...]:
    """Every pair of neighbours in period; empty without a stellar mass or a second planet."""
    if len(signals) < 2:
        return ()
    system = _draw(star, [s for s in signals if s.orbit.semi_amplitude > 0], n_draws, rng)
    return () if system is None else _judge_pairs(system)


def _judge_pairs(system: _Draws) -> tuple[PairStability, ...]:
    angular = system.mass * np.sqrt(system.axis)
    deficit = angular * (1 - np.sqrt(1 - system.ecc**2))
    total = np.sum(deficit, axis=0)
    pairs = []
    for k in range(len(system.ids) - 1):
        # draws may swap two orbits of nearly equal size
        swap = system.axis[k] > system.axis[k + 1]
        first = np.where(swap, k + 1, k)
        last = np.where(swap, k, k + 1)
        column = np.arange(system.axis.shape[1])
        a_1, a_2 = system.axis[first, column], system.axis[last, column]
        e_1, e_2 = system.ecc[first, column], system.ecc[last, column]
        m_1, m_2 = system.mass[first, column], system.mass[last, column]
        rest = (total - deficit[k] - deficit[k + 1]) / angular[last, column]
        crossing = orbits_cross(
            a_1, e_1, system.omega[first, column], a_2, e_2, system.omega[last, column]
        )
        one, two = system.orbits[k], system.orbits[k + 1]
        pairs.append(
            PairStability(
                inner=system.ids[k],
                outer=system.ids[k + 1],
                crossing=float(np.mean(crossing)),
                hill_unstable=float(
                    np.mean(~hill_stable(a_1, e_1, m_1, a_2, e_2, m_2, system.stellar_mass))
                ),
                amd_unstable=float(np.mean(amd_ratio(a_1, e_1, m_1, a_2, e_2, m_2, rest) >= 1)),
                hill_separation=float(
                    np.median(hill_separation(a_1, m_1, a_2, m_2, system.stellar_mass))
                ),
                commensurability=near_commensurability(
                    one.period, one.period_err, two.period, two.period_err
                ),
            )
        )
    return tuple(pairs)
