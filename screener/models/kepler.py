"""Keplerian orbits: Kepler's equation, velocities, and the quantities derived from them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from astropy import constants

from screener.core import Array, Orbit

__all__ = [
    "keplerian_velocity",
    "minimum_mass",
    "orbit_columns",
    "orbit_velocity",
    "semi_major_axis",
    "solve_kepler",
    "time_of_conjunction",
]

_DAY = 86400.0
_GM_SUN = float(constants.GM_sun.si.value)
_GM_JUP = float(constants.GM_jup.si.value)
_AU = float(constants.au.si.value)
_MARKLEY_C1 = 3.0 * math.pi**2 / (math.pi**2 - 6.0)
_MARKLEY_C2 = 1.6 * math.pi / (math.pi**2 - 6.0)


def solve_kepler(mean_anomaly: Any, eccentricity: Any) -> Array:
    """Eccentric anomaly from mean anomaly, both in radians.

    Parameters
    ----------
    mean_anomaly : array_like
        Any real value; the result differs from it by less than one radian times e.
    eccentricity : array_like, broadcast against it
        0 <= e < 1.

    Raises
    ------
    ValueError
        Where an eccentricity lies outside [0, 1).

    Notes
    -----
    Markley (1995, CeMDA 63, 101): a cubic starter and one fifth-order correction; the residual
    E - e sin E - M stays below 1e-14 (tested up to e = 0.99). No iteration, hence vectorised.
    """
    anomaly = np.asarray(mean_anomaly, dtype=float)
    ecc = np.asarray(eccentricity, dtype=float)
    if np.any((ecc < 0) | (ecc >= 1)) or np.any(~np.isfinite(ecc)):
        raise ValueError("the eccentricity of a bound orbit lies in [0, 1)")
    turns = 2 * np.pi * np.round(anomaly / (2 * np.pi))
    reduced = anomaly - turns
    m = np.abs(reduced)
    alpha = _MARKLEY_C1 + _MARKLEY_C2 * (np.pi - m) / (1 + ecc)
    d = 3 * (1 - ecc) + alpha * ecc
    alpha_d = alpha * d
    r = (3 * alpha_d * (d - 1 + ecc) + m * m) * m
    q = 2 * alpha_d * (1 - ecc) - m * m
    w = np.cbrt(np.abs(r) + np.sqrt(q * q * q + r * r)) ** 2
    start = (2 * r * w / (w * w + w * q + q * q) + m) / d
    sin_e, cos_e = np.sin(start), np.cos(start)
    f0 = start - ecc * sin_e - m
    f1 = 1 - ecc * cos_e
    f2 = ecc * sin_e
    f3 = 1 - f1
    d3 = -f0 / (f1 - 0.5 * f0 * f2 / f1)
    d4 = -f0 / (f1 + 0.5 * d3 * f2 + d3 * d3 * f3 / 6)
    d5 = -f0 / (f1 + 0.5 * d4 * f2 + d4 * d4 * f3 / 6 - d4 * d4 * d4 * f2 / 24)
    return np.asarray(np.copysign(start + d5, reduced) + turns)


def _true_anomaly_parts(
    time: Array, period: float, eccentricity: float, time_peri: float
) -> tuple[Array, Array]:
    """cos and sin of the true anomaly, shape of ``time``."""
    anomaly = 2 * np.pi * (time - time_peri) / period
    if eccentricity == 0:
        return np.cos(anomaly), np.sin(anomaly)
    e_anomaly = solve_kepler(anomaly, eccentricity)
    cos_e = np.cos(e_anomaly)
    shrink = 1 - eccentricity * cos_e
    return (
        (cos_e - eccentricity) / shrink,
        math.sqrt(1 - eccentricity**2) * np.sin(e_anomaly) / shrink,
    )


def orbit_columns(time: Array, period: float, eccentricity: float, time_peri: float) -> Array:
    """The two columns in which a Keplerian velocity is linear, shape (n_obs, 2).

    The velocity is ``columns @ [K cos(omega), K sin(omega)]``.
    """
    cos_nu, sin_nu = _true_anomaly_parts(time, period, eccentricity, time_peri)
    return np.stack([cos_nu + eccentricity, -sin_nu], axis=1)


def keplerian_velocity(
    time: Array,
    period: float,
    semi_amplitude: float,
    eccentricity: float,
    omega_peri: float,
    time_peri: float,
) -> Array:
    """K [cos(nu + omega) + e cos(omega)] at ``time``; m/s where K is."""
    columns = orbit_columns(np.asarray(time, dtype=float), period, eccentricity, time_peri)
    weights = np.array([math.cos(omega_peri), math.sin(omega_peri)])
    return np.asarray(semi_amplitude * (columns @ weights))


def orbit_velocity(orbit: Orbit, time: Array) -> Array:
    """Velocity of the star on that orbit, m/s, shape of ``time``."""
    return keplerian_velocity(
        time,
        orbit.period,
        orbit.semi_amplitude,
        orbit.eccentricity,
        orbit.omega_peri,
        orbit.time_peri,
    )


def minimum_mass(
    period: float, semi_amplitude: float, eccentricity: float, stellar_mass: float
) -> float:
    """m sin i in Jupiter masses.

    Solves the mass function K^3 P (1 - e^2)^(3/2) / (2 pi G) = (m sin i)^3 / (M + m sin i)^2
    exactly (for sin i = 1 in the total mass); ``stellar_mass`` in solar masses.
    """
    if min(period, stellar_mass) <= 0 or semi_amplitude < 0:
        raise ValueError("period and stellar mass must be positive, the amplitude not negative")
    function = (  # G times the mass function, m^3 s^-2
        semi_amplitude**3 * period * _DAY * (1 - eccentricity**2) ** 1.5 / (2 * math.pi)
    )
    gm_star = stellar_mass * _GM_SUN
    gm = (function * gm_star**2) ** (1 / 3)
    for _ in range(60):
        new = (function * (gm_star + gm) ** 2) ** (1 / 3)
        if abs(new - gm) <= 1e-15 * new:
            break
        gm = new
    return float(gm / _GM_JUP)


def semi_major_axis(period: float, stellar_mass: float, companion_mass: float = 0.0) -> float:
    """Semi-major axis in au by Kepler's third law; masses in solar and Jupiter masses."""
    gm = stellar_mass * _GM_SUN + companion_mass * _GM_JUP
    return float((gm * (period * _DAY / (2 * math.pi)) ** 2) ** (1 / 3)) / _AU


def time_of_conjunction(
    period: float, eccentricity: float, omega_peri: float, time_peri: float
) -> float:
    """Inferior conjunction (transit, if any) that follows ``time_peri``: nu + omega = pi / 2."""
    nu = math.pi / 2 - omega_peri
    e_anomaly = 2 * math.atan2(
        math.sqrt(1 - eccentricity) * math.sin(nu / 2),
        math.sqrt(1 + eccentricity) * math.cos(nu / 2),
    )
    mean = (e_anomaly - eccentricity * math.sin(e_anomaly)) % (2 * math.pi)
    return time_peri + period * mean / (2 * math.pi)
