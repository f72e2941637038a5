"""From m sin i to what the companion may be: true mass, transits, temperature, outer companions.

Masses of companions are in Jupiter masses, of stars in solar masses, distances in au.
"""

from __future__ import annotations

import enum
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from astropy import constants

from screener.core import Array, Orbit, Star
from screener.models.kepler import minimum_mass, semi_major_axis, time_of_conjunction

__all__ = [
    "BROWN_DWARF_LIMIT",
    "STAR_LIMIT",
    "MassPosterior",
    "OrientationPrior",
    "TransitForecast",
    "companion_radius",
    "equilibrium_temperature",
    "isotropic_sin_i",
    "mass_function",
    "mass_posterior",
    "orbit_draws",
    "outer_companion",
    "sin_i_below",
    "stellar_mass_draws",
    "stellar_sin_i_weights",
    "transit_forecast",
    "transit_probability",
    "true_mass",
]

BROWN_DWARF_LIMIT = 13.0  # Jupiter masses, deuterium burning
STAR_LIMIT = 80.0  # Jupiter masses, hydrogen burning

_DAY = 86400.0
_YEAR = 365.25  # d
_AU = float(constants.au.si.value)
_R_SUN = float(constants.R_sun.si.value)
_R_SUN_AU = _R_SUN / _AU
_R_EARTH_SUN = float(constants.R_earth.si.value) / _R_SUN
_M_JUP_SUN = float(constants.GM_jup.si.value / constants.GM_sun.si.value)
_M_JUP_EARTH = float(constants.GM_jup.si.value / constants.GM_earth.si.value)
_GM_SUN = float(constants.GM_sun.si.value)
_DEFAULT_MASS_ERROR = 0.1  # relative, where the sidecar gives a stellar mass without its error


class OrientationPrior(enum.StrEnum):
    """How orbits are thought to be oriented before the star is looked at."""

    ISOTROPIC = "isotropic"
    OCCURRENCE = "occurrence"


# dN / d ln m ~ m^-0.31 between 0.3 and 10 Jupiter masses (Cumming et al. 2008, PASP 120, 531)
_OCCURRENCE_SLOPE = -0.31


@dataclass(frozen=True)
class MassPosterior:
    """What the companion's true mass may be, in Jupiter masses.

    ``quantiles`` holds the 5, 16, 50, 84 and 95 per cent points; ``above_13`` and ``above_80`` the
    chances of lying above 13 and 80 Jupiter masses; ``effective_draws`` how many equally weighted
    draws the weights are worth.
    """

    prior: OrientationPrior
    quantiles: tuple[float, float, float, float, float]
    above_13: float
    above_80: float
    effective_draws: float


@dataclass(frozen=True)
class TransitForecast:
    """When and how a transit would be seen; times in days (BJD), depth relative to the flux."""

    probability: float
    time: float
    time_err: float
    duration: float
    depth: float


def sin_i_below(x: Any) -> Array:
    """P(sin i < x) = 1 - sqrt(1 - x^2) for orbits oriented at random (cos i uniform)."""
    value = np.clip(np.asarray(x, dtype=float), 0.0, 1.0)
    return np.asarray(1.0 - np.sqrt((1.0 - value) * (1.0 + value)))


def isotropic_sin_i(n_draws: int, rng: np.random.Generator) -> Array:
    """``n_draws`` values of sin i for random orientations, one per stratum of cos i.

    Stratified draws keep the rare face-on tail at its share even when they are few.
    """
    cos_i = (rng.permutation(n_draws) + rng.random(n_draws)) / n_draws
    return np.asarray(np.sqrt((1.0 - cos_i) * (1.0 + cos_i)))


def true_mass(function: Any, sin_i: Any, stellar_mass: Any) -> Array:
    """Companion mass in Jupiter masses from the mass function, all arguments broadcast.

    Solves (m sin i)^3 / (M + m)^2 = f for m; ``function`` and ``stellar_mass`` in solar
    masses. The iteration m <- (f (M + m)^2)^(1/3) / sin i contracts by 2/3 or better.
    """
    f = np.cbrt(np.asarray(function, dtype=float)) / np.asarray(sin_i, dtype=float)
    star = np.asarray(stellar_mass, dtype=float)
    mass = f * np.cbrt(star * star)
    for _ in range(100):
        new = f * np.cbrt((star + mass) ** 2)
        done = bool(np.all(np.abs(new - mass) <= 1e-10 * new))
        mass = new
        if done:
            break
    return np.asarray(mass / _M_JUP_SUN)


def mass_function(period: Any, semi_amplitude: Any, eccentricity: Any) -> Array:
    """K^3 P (1 - e^2)^(3/2) / (2 pi G), solar masses."""
    k = np.asarray(semi_amplitude, dtype=float)
    e = np.asarray(eccentricity, dtype=float)
    p = np.asarray(period, dtype=float) * _DAY
    return np.asarray(k**3 * p * (1 - e * e) ** 1.5 / (2 * np.pi * _GM_SUN))


def stellar_mass_draws(star: Star, n_draws: int, rng: np.random.Generator) -> Array | None:
    """Draws of the star's mass (solar masses), None where it is not known.

    Lognormal, so that none is negative; a mass without an error is given one of 10 per cent.
    """
    if star.mass is None or star.mass <= 0:
        return None
    relative = (star.mass_err / star.mass) if star.mass_err else _DEFAULT_MASS_ERROR
    return np.asarray(star.mass * np.exp(relative * rng.standard_normal(n_draws)))


def stellar_sin_i_weights(
    star: Star,
    rotation_period: float | None,
    rotation_period_err: float | None,
    sin_i: Array,
    rng: np.random.Generator,
) -> Array | None:
    """Likelihood of each sin i, shape of ``sin_i``, from v sin i, rotation period and radius.

    v sin i = (2 pi R / P_rot) sin i, with the errors of R and P_rot drawn independently of the
    inclination (Masuda & Winn 2020, AJ 159, 81: v and v sin i are not independent, so sin i must
    not be taken from their ratio). Holds for the orbit only if it lies in the star's equator.
    None where one of the three is not known.
    """
    period = star.rotation_period if star.rotation_period is not None else rotation_period
    error = star.rotation_period_err if star.rotation_period is not None else rotation_period_err
    if star.vsini is None or star.radius is None or not period or star.vsini <= 0:
        return None
    n = sin_i.size
    radius_err = star.radius_err if star.radius_err else 0.05 * star.radius
    period_err = error if error else 0.1 * period
    vsini_err = star.vsini_err if star.vsini_err else max(500.0, 0.1 * star.vsini)
    radius = np.maximum(star.radius + radius_err * rng.standard_normal(n), 0.05 * star.radius)
    turn = np.maximum(period + period_err * rng.standard_normal(n), 0.05 * period)
    speed = 2 * np.pi * radius * _R_SUN / (turn * _DAY)
    deviation = (speed * sin_i - star.vsini) / vsini_err
    best = float(np.min(deviation**2))
    return np.asarray(np.exp(-0.5 * (deviation**2 - best)))


def mass_posterior(
    orbit: Orbit,
    star: Star,
    rng: np.random.Generator,
    *,
    prior: OrientationPrior = OrientationPrior.ISOTROPIC,
    sin_i_weights: Array | None = None,
    sin_i: Array | None = None,
    n_draws: int = 4000,
) -> MassPosterior | None:
    """True mass of the companion over random orientations; None without a stellar mass.

    With the prior "occurrence" the orientations are weighted by the number of companions of the
    mass they imply, dN/d ln m ~ m^-0.31 (Cumming et al. 2008); a flat law in ln m gives the
    isotropic result (Ho & Turner 2011, ApJ 739, 26). ``sin_i`` and ``sin_i_weights`` (n_draws,)
    put in orientations of one's own and their likelihoods.
    """
    draws = isotropic_sin_i(n_draws, rng) if sin_i is None else sin_i
    masses = stellar_mass_draws(star, draws.size, rng)
    if masses is None:
        return None
    amplitude, period, ecc = orbit_draws(orbit, draws.size, rng)
    mass = true_mass(mass_function(period, amplitude, ecc), draws, masses)
    weights = np.ones(draws.size) if sin_i_weights is None else np.array(sin_i_weights)
    if prior is OrientationPrior.OCCURRENCE:
        weights = weights * mass**_OCCURRENCE_SLOPE
    weights = weights / np.sum(weights)
    order = np.argsort(mass)
    cumulative = np.cumsum(weights[order]) - 0.5 * weights[order]
    points = np.interp([0.05, 0.16, 0.5, 0.84, 0.95], cumulative, mass[order])
    return MassPosterior(
        prior=prior,
        quantiles=tuple(float(x) for x in points),  # type: ignore[arg-type]
        above_13=float(np.sum(weights[mass > BROWN_DWARF_LIMIT])),
        above_80=float(np.sum(weights[mass > STAR_LIMIT])),
        effective_draws=float(1.0 / np.sum(weights**2)),
    )


def orbit_draws(orbit: Orbit, n_draws: int, rng: np.random.Generator) -> tuple[Array, Array, Array]:
    """Draws of (semi-amplitude, period, eccentricity), each of shape (n_draws,).

    Independent normal errors; the eccentricity is cut to [0, 0.95]. An eccentric orbit without an
    error gets sqrt(2) sigma_K / K, that of a weak first harmonic.
    """
    k_err = orbit.semi_amplitude_err or 0.0
    p_err = orbit.period_err or 0.0
    if orbit.eccentricity_err is not None:
        e_err = orbit.eccentricity_err
    else:
        relative = k_err / orbit.semi_amplitude if orbit.semi_amplitude > 0 else 0.0
        e_err = math.sqrt(2.0) * relative if orbit.eccentricity > 0 else 0.0
    z = rng.standard_normal((3, n_draws))
    amplitude = np.maximum(orbit.semi_amplitude + k_err * z[0], 1e-3 * orbit.semi_amplitude)
    period = np.maximum(orbit.period + p_err * z[1], 0.1 * orbit.period)
    ecc = np.clip(np.abs(orbit.eccentricity + e_err * z[2]), 0.0, 0.95)
    return np.asarray(amplitude), np.asarray(period), np.asarray(ecc)


def companion_radius(mass: float) -> float:
    """Likely radius in solar radii of a companion of ``mass`` Jupiter masses.

    The broken power law of Chen & Kipping (2017, ApJ 834, 17): exponents 0.279 below 2.04 Earth
    masses, 0.589 up to 0.414 Jupiter masses, -0.044 up to 0.08 solar masses, 0.881 above. Its
    scatter is 4 % for rocky, 15 % for Neptune-like and 7 % for giant planets.
    """
    earth = mass * _M_JUP_EARTH
    breaks = (2.04, 0.414 * _M_JUP_EARTH, 0.0800 / _M_JUP_SUN * _M_JUP_EARTH)
    radius = 1.008 * min(earth, breaks[0]) ** 0.279
    if earth > breaks[0]:
        radius *= (min(earth, breaks[1]) / breaks[0]) ** 0.589
    if earth > breaks[1]:
        radius *= (min(earth, breaks[2]) / breaks[1]) ** -0.044
    if earth > breaks[2]:
        radius *= (earth / breaks[2]) ** 0.881
    return float(radius * _R_EARTH_SUN)


def transit_probability(
    stellar_radius: float, distance: float, eccentricity: float = 0.0, omega_peri: float = 0.0
) -> float:
    """(R / a) (1 + e sin omega) / (1 - e^2), at most 1: Barnes (2007, PASP 119, 986).

    For random orientations, grazing transits by half a disc included; ``stellar_radius`` in solar
    radii, ``distance`` (the semi-major axis) in au.
    """
    bare = stellar_radius * _R_SUN_AU / distance
    return min(
        1.0, bare * (1 + eccentricity * math.sin(omega_peri)) / (1 - eccentricity * eccentricity)
    )


def transit_forecast(
    orbit: Orbit, star: Star, first_time: float, last_time: float
) -> TransitForecast | None:
    """The next conjunction after ``last_time``, and the transit if there is one.

    The epoch is taken to be known best in the middle of the data, to P sigma_K / (2 pi K), and to
    drift from there with the error of the period. The duration is the central one, R P / (pi a)
    sqrt(1 - e^2) / (1 + e sin omega) (Winn 2010, arXiv:1001.2010, eq. 14 and 16). None without a
    stellar mass and radius.
    """
    if star.mass is None or star.radius is None or orbit.semi_amplitude <= 0:
        return None
    mass = minimum_mass(orbit.period, orbit.semi_amplitude, orbit.eccentricity, star.mass)
    a = semi_major_axis(orbit.period, star.mass, mass)
    epoch = time_of_conjunction(orbit.period, orbit.eccentricity, orbit.omega_peri, orbit.time_peri)
    cycles = math.floor((last_time - epoch) / orbit.period) + 1
    time = epoch + cycles * orbit.period
    middle = 0.5 * (first_time + last_time)
    epoch_err = (
        orbit.period / (2 * math.pi) * (orbit.semi_amplitude_err or 0.0) / orbit.semi_amplitude
    )
    drift = (time - middle) / orbit.period * (orbit.period_err or 0.0)
    shape = math.sqrt(1 - orbit.eccentricity**2) / (
        1 + orbit.eccentricity * math.sin(orbit.omega_peri)
    )
    size = companion_radius(mass)
    return TransitForecast(
        probability=transit_probability(star.radius, a, orbit.eccentricity, orbit.omega_peri),
        time=time,
        time_err=math.hypot(epoch_err, drift),
        duration=orbit.period / math.pi * (star.radius + size) * _R_SUN_AU / a * shape,
        depth=min(1.0, (size / star.radius) ** 2),
    )


def equilibrium_temperature(
    teff: float,
    stellar_radius: float,
    distance: float,
    eccentricity: float = 0.0,
    albedo: float = 0.0,
) -> float:
    """Teff sqrt(R / 2a) (1 - A)^(1/4) (1 - e^2)^(-1/8), kelvin.

    Heat spread over the whole surface and the flux averaged over the orbit (textbook formula).
    """
    return float(
        teff
        * math.sqrt(stellar_radius * _R_SUN_AU / (2 * distance))
        * (1 - albedo) ** 0.25
        * (1 - eccentricity**2) ** -0.125
    )


def outer_companion(
    slope: float, slope_err: float | None, baseline: float, stellar_mass: float
) -> dict[str, float | None]:
    """Lower limits on the mass of a companion that pulls with ``slope`` (m/s per day).

    A drift seen over ``baseline`` days is cheapest as the long limb of an orbit with e = 0.5,
    omega = 90 deg and P = 1.25 baselines, whose amplitude is half the drift (Feng et al. 2015,
    ApJ 800, 22): a lower limit on m sin i. At a given distance a, m >= slope a^2 / G.

    Returns
    -------
    dict
        ``mass_min_mjup``, ``mass_min_err_mjup``, ``period_min_d``, ``distance_min_au``, and the
        mass needed at 10, 30 and 100 au.
    """
    period = 1.25 * baseline
    amplitude = 0.5 * abs(slope) * baseline
    mass = minimum_mass(period, amplitude, 0.5, stellar_mass) if baseline > 0 else 0.0
    relative = slope_err / abs(slope) if slope_err and slope else None
    g = abs(slope) / _DAY  # m/s^2
    pulls = {
        f"mass_at_{d}_au_mjup": g * (d * _AU) ** 2 / (_GM_SUN * _M_JUP_SUN) for d in (10, 30, 100)
    }
    return {
        "mass_min_mjup": mass,
        "mass_min_err_mjup": None if relative is None else mass * relative,
        "period_min_d": period,
        "distance_min_au": semi_major_axis(period, stellar_mass, mass) if baseline > 0 else None,
        **pulls,
    }
