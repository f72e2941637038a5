"""Could this star's activity produce a velocity amplitude like the one seen?

Null: the star made the signal. Then ln(amplitude) scatters about what the star can do by the
stated scatter of the relations. Sources, averaged by their scatter: the activity level, photometry
through FF' (Aigrain et al. 2012), spots of the photometric size on a disc that turns at v sin i
(Saar & Donahue 1997). Statistic: ln(amplitude seen / amplitude expected); the p-value is the
chance of an amplitude at least as large from the star, so a small one speaks for a planet, and
nothing here ever speaks against one on its own: planets come in all sizes.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import stats
from scipy.linalg import cho_factor, cho_solve

from screener.core import Array, Finding, Outcome, Photometry
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "amplitude_from_level", "ff_prime", "run"]

ID = "plausible_amplitude"
QUESTION = "Could this star's activity produce an amplitude like this?"
REQUIRES = ("log R'HK, or photometry with a radius, or both with v sin i",)
REFERENCES = ("aigrain2012", "saar1997", "haywood2014")

_SOLAR_RADIUS = 6.957e8  # m
_DAY = 86400.0
# Semi-amplitude (m/s) of rotation-modulated velocities by log R'HK, rounded values from memory of
# figures in the literature (jitter of FGK stars against activity; M dwarfs move less at a given
# level). The scatter among stars of one level is a factor of two.
_LEVEL = np.array([-5.2, -5.0, -4.9, -4.8, -4.6, -4.4, -4.2, -4.0])
_SIZE = np.array([0.8, 1.3, 1.9, 2.8, 5.5, 12.0, 30.0, 60.0])
_LEVEL_M = np.array([-6.0, -5.5, -5.0, -4.5, -4.0])
_SIZE_M = np.array([0.7, 1.3, 2.8, 6.0, 15.0])
_SCATTER_LEVEL = 0.7
_SCATTER_FF = 0.5
_SCATTER_SPOT = 0.6
_POWER = 0.95


def amplitude_from_level(log_rhk: float, m_dwarf: bool) -> float:
    """Typical semi-amplitude (m/s) of activity at a level of log R'HK."""
    level, size = (_LEVEL_M, _SIZE_M) if m_dwarf else (_LEVEL, _SIZE)
    return float(np.exp(np.interp(log_rhk, level, np.log(size))))


def ff_prime(phot: Photometry, radius: float, turn: float | None) -> tuple[float, float] | None:
    """Velocities of spots from photometry: (semi-amplitude in m/s, depth of the dips).

    With F the flux over its unspotted level and f the spot's size, the deepest dip,
    rv = -F' (1 - F) R / f (Aigrain et al. 2012, eq. 10; the sign is ours, receding positive), for
    a radius R in solar radii. Flux and slope come from a Gaussian-process smoothing of a sixth of
    the rotation period ``turn`` (d; 12 d if None). The semi-amplitude is root two times the rms.
    None where the flux scatters no more than its errors.
    """
    good = np.isfinite(phot.flux) & np.isfinite(phot.flux_err) & (phot.flux_err > 0.0)
    time, flux, error = phot.time[good], phot.flux[good], phot.flux_err[good]
    if time.size < 20:
        return None
    length = (turn or 12.0) / 6.0
    # thin out: several points per smoothing length are enough
    width = 0.25 * length
    _, group = np.unique(np.floor(time / width), return_inverse=True)
    weight = 1.0 / error**2
    total = np.bincount(group, weight)
    t = np.bincount(group, weight * time) / total
    y = np.bincount(group, weight * flux) / total
    e = 1.0 / np.sqrt(total)
    if t.size > 500:
        t, y, e = t[:500], y[:500], e[:500]
    level = float(np.median(y))
    y, e = y / level - 1.0, e / level
    variance = float(np.var(y)) - float(np.mean(e**2))
    if t.size < 12 or variance < float(np.mean(e**2)):
        return None
    lag = t[:, None] - t[None, :]
    kernel = variance * np.exp(-0.5 * (lag / length) ** 2)
    solved = cho_solve(cho_factor(kernel + np.diag(e**2 + 1e-6 * variance)), y)
    smooth = kernel @ solved
    slope: Array = (-lag / length**2 * kernel) @ solved
    unspotted = float(np.max(smooth))
    dip = (unspotted - smooth) / (1.0 + unspotted)
    depth = float(np.max(dip))
    if not depth > 0.0:
        return None
    speed = -slope / (1.0 + unspotted) / _DAY * dip / depth * radius * _SOLAR_RADIUS
    return math.sqrt(2.0) * float(np.std(speed)), depth


def _estimates(case: Case) -> list[tuple[str, float, float]]:
    """(source, semi-amplitude in m/s, scatter of its natural log)."""
    star, found = case.star, []
    m_dwarf = (star.spectral_type or "").strip()[:1].upper() == "M" or (
        star.spectral_type is None and star.teff is not None and star.teff < 3900.0
    )
    level = star.log_rhk
    if level is None:
        item = next((i for i in case.series.indicators if i.name == "log_rhk"), None)
        if item is not None and np.any(np.isfinite(item.value)):
            level = float(np.nanmedian(item.value))
    if level is not None and -6.5 < level < -3.5:
        found.append(("level", amplitude_from_level(level, m_dwarf), _SCATTER_LEVEL))
    phot = case.series.photometry
    if phot is not None and star.radius is not None:
        result = ff_prime(phot, star.radius, case.rotation.period)
        if result is not None and result[0] > 0.0:
            found.append(("ff_prime", result[0], _SCATTER_FF))
            if star.vsini is not None and star.vsini > 0.0:
                # Saar & Donahue (1997): A = 6.5 f^0.9 v sin i, f in per cent, v in km/s
                percent = 100.0 * result[1]
                size = 6.5 * percent**0.9 * star.vsini / 1000.0
                found.append(("spot_size", size, _SCATTER_SPOT))
    return found


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable where nothing is known of the activity."""
    found = _estimates(case)
    if not found:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            "Neither an activity level nor photometry with a stellar radius is known.",
            references=REFERENCES,
        )
    weight = np.array([1.0 / s**2 for _, _, s in found])
    logs = np.array([math.log(a) for _, a, _ in found])
    centre = float(np.average(logs, weights=weight))
    # the relations share their faults: the error of the mean is not below a factor of 1.6
    scatter = max(1.0 / math.sqrt(float(weight.sum())), 0.5)
    if len(found) > 1:
        scatter = math.hypot(scatter, float(np.std(logs)))
    orbit = case.signal.orbit
    statistic = math.log(max(orbit.semi_amplitude, 1e-6)) - centre
    scatter = math.hypot(
        scatter, (orbit.semi_amplitude_err or 0.0) / max(orbit.semi_amplitude, 1e-6)
    )
    p_value = float(stats.norm.sf(statistic / scatter))
    typical = math.exp(centre)
    parameters: dict[str, float | int] = {
        "expected_amplitude": typical,
        "log_scatter": scatter,
        "n_sources": len(found),
        **{f"{name}_amplitude": size for name, size, _ in found},
    }
    if p_value < 0.01:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"{orbit.semi_amplitude:.3g} m/s is more than this star's activity produces "
            f"(some {typical:.2g} m/s within a factor of {math.exp(scatter):.1f}; "
            f"p = {p_value:.2g})."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"Activity of this star could produce {orbit.semi_amplitude:.3g} m/s (typically "
            f"{typical:.2g} m/s within a factor of {math.exp(scatter):.1f})."
        )
    return Finding(ID, outcome, sentence, statistic, p_value, _POWER, parameters, REFERENCES)
