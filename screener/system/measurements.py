"""What a measurement other than a velocity would tell, in the same coin: expected log-odds.

Rough by nature: each number is the expected log-odds against the planet if the star makes the
signal, which is what these measurements are taken for.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from astropy import constants

from screener.core import Indicator, Orbit, Star
from screener.system.hypotheses import SLOWEST_ROTATION, Velocities

__all__ = ["ExtraMeasurement", "extra_measurements", "spot_flux_amplitude"]

_R_SUN_KM = float(constants.R_sun.si.value) / 1000.0
_PHOTOMETRIC_ERROR = 1e-3  # relative flux a night from the ground: common practice, no source
_INFRARED_SHARE = 0.4  # of the optical amplitude of cool spots, order of Reiners et al. (2010)
_INFRARED_ERROR = 1.5  # times the optical error: common practice, no source
_TYPICAL_CORRELATION = 0.5  # of an unmeasured indicator with the star's velocities: no source
_DEFAULT_VSINI = 2.0  # km/s, slow rotator


@dataclass(frozen=True)
class ExtraMeasurement:
    """``log_odds`` per night, and ``worth``: how many well-chosen velocities that equals."""

    name: str
    log_odds: float
    worth: float
    sentence: str


def spot_flux_amplitude(velocity_amplitude: float, vsini: float) -> float:
    """Flux semi-amplitude (relative) of a spot that makes ``velocity_amplitude`` (m/s).

    Saar & Donahue (1997, ApJ 485, 319): K = 6.5 f^0.9 v sin i with f the spot's filling factor in
    per cent and v sin i in km/s; a dark spot that comes and goes takes f from the flux, so its
    semi-amplitude is f / 2.
    """
    percent = (velocity_amplitude / (6.5 * max(vsini, 0.5))) ** (1 / 0.9)
    return float(0.5 * percent / 100.0)


def _count(worth: float) -> str:
    return "more than 20" if worth > 20 else f"{worth:.1f}"


def _variance_odds(ratio: float) -> float:
    """Expected log-odds of one value for extra variance ``ratio`` times that of the noise."""
    return 0.5 * (ratio - math.log1p(ratio))


def _correlation(indicator: Indicator, data: Velocities) -> float:
    """Size of the correlation with the velocities, less what chance alone would give."""
    known = np.isfinite(indicator.value)
    n = int(np.count_nonzero(known))
    if n < 8 or indicator.value.size != data.rv.size:
        return 0.0
    x, y = indicator.value[known], data.rv[known]
    if np.std(x) == 0 or np.std(y) == 0:
        return 0.0
    r = float(np.corrcoef(x, y)[0, 1])
    return math.sqrt(max(r * r - 1 / n, 0.0))


def _spot_measurements(
    star: Star, data: Velocities, k: float, rotation_period: float | None
) -> list[tuple[str, float, str]]:
    """Photometry and near-infrared velocities: name, log-odds a night, reason."""
    vsini = star.vsini / 1000.0 if star.vsini else _DEFAULT_VSINI
    if not star.vsini and star.radius and rotation_period:
        vsini = 2 * math.pi * star.radius * _R_SUN_KM / (rotation_period * 86400.0)
    flux = spot_flux_amplitude(k, vsini)
    contrast = (1 - _INFRARED_SHARE) * k
    noise = float(np.median(data.sd)) ** 2 * (1 + _INFRARED_ERROR**2)
    return [
        (
            "photometry",
            _variance_odds(0.5 * (flux / _PHOTOMETRIC_ERROR) ** 2),
            f"spots of this amplitude would vary the flux by {1e3 * flux:.1f} parts in a thousand",
        ),
        (
            "near-infrared velocities",
            _variance_odds(0.5 * contrast**2 / noise),
            f"of the star's {k:.1f} m/s about {_INFRARED_SHARE * k:.1f} would be left there, "
            "of a planet's all",
        ),
    ]


def extra_measurements(
    star: Star,
    data: Velocities,
    orbit: Orbit,
    velocity_odds: float,
    indicators: Sequence[Indicator] = (),
    *,
    rotation_period: float | None = None,
) -> tuple[ExtraMeasurement, ...]:
    """Photometry, near-infrared velocities and indicators, the most telling first.

    ``velocity_odds`` is the expected log-odds of one well-chosen velocity. The first two look for
    spots and are left out where the signal is slower than any rotation.
    """
    base = max(velocity_odds, 1e-3)
    rows: list[tuple[str, float, str]] = []
    if orbit.period < SLOWEST_ROTATION:
        rows = _spot_measurements(star, data, orbit.semi_amplitude, rotation_period)
    if indicators:
        correlation = max(_correlation(i, data) for i in indicators)
        reason = (
            f"the best of those measured follows the velocities to {100 * correlation:.0f} %, "
            "and each further spectrum brings them along"
        )
    else:
        correlation, reason = _TYPICAL_CORRELATION, "none was measured so far"
    rows.append(
        (
            "a line-shape or chromospheric indicator",
            -0.5 * math.log1p(-(min(correlation, 0.99) ** 2)),
            reason,
        )
    )
    result = [
        ExtraMeasurement(
            name,
            odds,
            odds / base,
            f"{name[0].upper()}{name[1:]}, worth {_count(odds / base)} of the best velocities: "
            f"{sentence}.",
        )
        for name, odds, sentence in rows
    ]
    return tuple(sorted(result, key=lambda e: -e.log_odds))
