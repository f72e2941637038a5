"""Rotation from chromospheric activity, and from the width of the lines.

The formulas are written down from memory of the papers; the tests check them against the Sun and
against stars of the papers' tables.
"""

from __future__ import annotations

import math
import re

import numpy as np

from screener.core import Array, Star
from screener.models.rotation.density import PERIOD_GRID, PeriodDensity

__all__ = [
    "activity_density",
    "colour_of",
    "convective_turnover",
    "noyes_period",
    "period_from_rossby",
    "rossby_number",
    "suarez_period",
    "vsini_density",
]

#: Scatter of ln(period) about the relations. Noyes et al. (1984) quote 0.08 dex, for activity
#: averaged over the cycle; a level from one season is off by some 0.1 dex in log R'HK (cycle and
#: rotation), which the slope of the relation turns into another 0.1 to 0.2 dex. Together:
SCATTER_NOYES = 0.42
SCATTER_MAMAJEK = 0.42
#: About 0.15 dex for M dwarfs, read off the figures of the paper, and the same for the level.
SCATTER_SUAREZ = 0.42
#: Below this many m/s a tabulated v sin i says more about macroturbulence and the instrument
#: (common practice, no source).
VSINI_ERR = 1000.0

_SOLAR_SPEED = 2.0 * math.pi * 6.957e8 / 86400.0  # m/s for one solar radius in one day


def convective_turnover(b_minus_v: float) -> float:
    """Convective turnover time in days (Noyes et al. 1984, eq. 4).

    With x = 1 - (B-V): log10 tau = 1.362 - 0.166 x + 0.025 x^2 - 5.323 x^3 for x > 0 and
    1.362 - 0.14 x otherwise.
    """
    x = 1.0 - b_minus_v
    if x > 0.0:
        return float(10.0 ** (1.362 - 0.166 * x + 0.025 * x**2 - 5.323 * x**3))
    return float(10.0 ** (1.362 - 0.14 * x))


def noyes_period(log_rhk: float, b_minus_v: float) -> float:
    """Rotation period in days (Noyes et al. 1984, eq. 3).

    log10(P / tau) = 0.324 - 0.400 y - 0.283 y^2 - 1.325 y^3 with y = log10(R'HK) + 5.
    """
    y = log_rhk + 5.0
    return convective_turnover(b_minus_v) * float(
        10.0 ** (0.324 - 0.400 * y - 0.283 * y**2 - 1.325 * y**3)
    )


def rossby_number(log_rhk: float) -> float:
    """Rossby number of an activity level (Mamajek & Hillenbrand 2008, eqs. 5 and 7).

    0.808 - 2.966 (log R'HK + 4.52) for -5.0 < log R'HK < -4.3, and
    0.233 - 0.689 (log R'HK + 4.23) for more active stars.
    """
    if log_rhk < -4.3:
        return 0.808 - 2.966 * (log_rhk + 4.52)
    return max(0.233 - 0.689 * (log_rhk + 4.23), 0.03)


def period_from_rossby(log_rhk: float, b_minus_v: float) -> float:
    """Rotation period in days: Rossby number (2008) times turnover time (1984)."""
    return rossby_number(log_rhk) * convective_turnover(b_minus_v)


def suarez_period(log_rhk: float) -> float:
    """Rotation period in days of an M dwarf (Suarez Mascareno et al. 2015).

    log10 P = -2.37 - 0.777 log10(R'HK).
    """
    return float(10.0 ** (-2.37 - 0.777 * log_rhk))


# Main sequence colours by effective temperature (rounded from the table that accompanies Pecaut
# & Mamajek 2013, from memory).
_TEFF = np.array([2800.0, 3200, 3550, 3850, 4050, 4450, 4830, 5100, 5280, 5480, 5660, 5770, 5930])
_COLOUR = np.array([2.0, 1.65, 1.50, 1.43, 1.35, 1.13, 0.99, 0.90, 0.82, 0.75, 0.68, 0.65, 0.60])
_TEFF = np.append(_TEFF, [6170.0, 6510.0, 7200.0])
_COLOUR = np.append(_COLOUR, [0.54, 0.44, 0.30])
_LETTERS = {"F": (7200.0, 5970.0), "G": (5930.0, 5340.0), "K": (5280.0, 3930.0)}
_M_TEFF = (3850.0, 2650.0)


def colour_of(star: Star) -> float | None:
    """B-V of the star: given, or from its temperature, or from its spectral type."""
    if star.b_minus_v is not None:
        return star.b_minus_v
    teff = star.teff
    if teff is None and star.spectral_type:
        match = re.match(r"\s*([FGKM])\s*(\d(?:\.\d)?)?", star.spectral_type.upper())
        if match is not None:
            first, last = _LETTERS.get(match[1], _M_TEFF)
            teff = first + (last - first) * float(match[2] or 5.0) / 10.0
    return None if teff is None else float(np.interp(teff, _TEFF, _COLOUR))


def _is_m_dwarf(star: Star, colour: float | None) -> bool:
    if star.spectral_type and star.spectral_type.strip()[:1].upper() in "FGKM":
        return star.spectral_type.strip()[:1].upper() == "M"
    return colour is not None and colour > 1.40


def activity_density(
    star: Star, log_rhk: float | None
) -> list[tuple[str, float, float, PeriodDensity]]:
    """What the activity level says: (relation, period, relative error, density) per relation.

    The relations use the same input, so their densities are to be averaged, not multiplied.
    Empty without log R'HK, or where no relation holds (level outside -5.1..-4.0 for FGK stars,
    B-V outside 0.4..1.4, or outside -6.0..-4.0 for M dwarfs).
    """
    colour = colour_of(star)
    if log_rhk is None:
        return []
    # the error of the level itself, through the slope d ln P / d log R'HK of about 2
    level_err = 2.0 * (star.log_rhk_err or 0.0)
    found: list[tuple[str, float, float]] = []
    if _is_m_dwarf(star, colour):
        if -6.0 < log_rhk < -4.0:
            found.append(
                ("activity (Suarez Mascareno et al. 2015)", suarez_period(log_rhk), SCATTER_SUAREZ)
            )
    elif colour is not None and 0.4 <= colour <= 1.4 and -5.1 <= log_rhk <= -4.0:
        found.append(("activity (Noyes et al. 1984)", noyes_period(log_rhk, colour), SCATTER_NOYES))
        found.append(
            (
                "activity (Mamajek & Hillenbrand 2008)",
                period_from_rossby(log_rhk, colour),
                SCATTER_MAMAJEK,
            )
        )
    result = []
    for name, period, scatter in found:
        width = math.hypot(scatter, level_err)
        result.append((name, period, width, PeriodDensity.peak(period, width)))
    return result


def vsini_density(star: Star) -> tuple[float, float, PeriodDensity] | None:
    """What v sin i and the radius say: (upper limit in days, its relative error, density).

    The density is the likelihood of the measured v sin i given the period, 2 pi R sin(i) / P with
    isotropic inclinations (cos i even in 0..1), the errors of v sin i (1 km/s where none is given)
    and of R (7 %) in quadrature. Where v sin i is compatible with nothing, long periods stay open.
    """
    if star.vsini is None or star.radius is None or star.vsini <= 0.0 or star.radius <= 0.0:
        return None
    err = star.vsini_err if star.vsini_err else VSINI_ERR
    radius_share = (star.radius_err or 0.07 * star.radius) / star.radius
    cos_i = (np.arange(48) + 0.5) / 48.0
    sin_i = np.sqrt(1.0 - cos_i**2)
    speed: Array = _SOLAR_SPEED * star.radius / PERIOD_GRID[:, None] * sin_i[None, :]
    sd = np.hypot(err, radius_share * speed)
    values = np.mean(np.exp(-0.5 * ((star.vsini - speed) / sd) ** 2) / sd, axis=1)
    upper = float(_SOLAR_SPEED * star.radius / star.vsini)
    return upper, math.hypot(err / star.vsini, radius_share), PeriodDensity.from_values(values)
