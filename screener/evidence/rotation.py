"""Is the signal's period the rotation of the star, its half or third, or an alias of these?

Null: the period has nothing to do with the star and is spread evenly in ln(period) over the
range searched. Statistic: natural log of the density at the signal's period if it were the
star's, over that even density; positive means near rotation. The p-value is the share of the
range with a statistic at least as high, so it is uniform under the null by construction. Real
planets sit near rotation periods, too: this is suspicion, not proof.
"""

from __future__ import annotations

import math

import numpy as np

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "rotation"
QUESTION = "Is the period the star's rotation, a harmonic, or an alias of one?"
REQUIRES = ("a rotation period from any source",)
REFERENCES = ("noyes1984", "mamajek2008", "suarezmascareno2015", "boisse2011")

# Chance that a stellar signal sits at P, P/2, P/3 (spots twice or three times per turn; Boisse
# et al. 2011) and, for each, at a daily or yearly alias. Common practice, no source.
_HARMONICS = ((1, 0.5), (2, 0.3), (3, 0.1))
_ALIAS_SHARE = 0.1
# Latitudes differ in their rotation, so a stellar signal need not sit at the mean (solar-like
# differential rotation across the spot belt).
_LATITUDES = 0.04
_SIDEREAL = 1.0 / 0.99726957
_ALIASES = (1.0, _SIDEREAL, 1.0 / 365.25)
_N_GRID = 1500
# natural log of 3.5: "substantial" on the usual scale of Bayes factors
_NEAR = 1.25


def _stellar_density(case: Case, period: Array, width: float) -> Array:
    """Density per ln(period) of a stellar signal at ``period`` (days, shape (n,))."""
    density = case.rotation_density
    assert density is not None
    spread = math.hypot(_LATITUDES, width)
    nodes = np.linspace(-2.0, 2.0, 9)
    weight = np.exp(-0.5 * nodes**2)
    weight /= weight.sum()
    shift = np.exp(spread * nodes)[:, None]

    def at(values: Array) -> Array:
        smooth = sum(
            share * (weight[:, None] * density.at(n * values[None, :] * shift)).sum(axis=0)
            for n, share in _HARMONICS
        )
        return np.asarray(smooth)

    total = (1.0 - _ALIAS_SHARE) * at(period)
    frequency = 1.0 / period
    for alias in _ALIASES:
        for sign in (-1.0, 1.0):
            other = np.abs(frequency + sign * alias)
            near = 1.0 / np.maximum(other, 1e-4)
            # the same stretch of frequency is another stretch of ln(period)
            jacobian = frequency * near
            total += _ALIAS_SHARE / 6.0 * at(near) * np.minimum(jacobian, 1e3)
    return np.asarray(total)


def _closeness(case: Case) -> dict[str, float]:
    """Distance to the nearest of P, P/2 and P/3, relative and in frequency resolutions."""
    rotation, period = case.rotation.period, case.signal.orbit.period
    if rotation is None:
        return {}
    distance = [(abs(period * n / rotation - 1.0), n) for n, _ in _HARMONICS]
    relative, harmonic = min(distance)
    resolution = abs(1.0 / period - harmonic / rotation) * max(case.series.baseline, 1e-9)
    return {
        "rotation_period": rotation,
        "rotation_period_err": case.rotation.period_err or 0.0,
        "nearest_harmonic": harmonic,
        "closeness_relative": relative,
        "closeness_resolution": resolution,
    }


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable where nothing is known of the rotation."""
    if case.rotation_density is None or case.rotation.period is None:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            "Nothing is known of the star's rotation.",
            references=REFERENCES,
        )
    orbit = case.signal.orbit
    longest = max(2.0 * case.series.baseline, 1.05 * orbit.period)
    grid: Array = np.geomspace(min(0.8, 0.9 * orbit.period), longest, _N_GRID)
    span = math.log(grid[-1] / grid[0])
    width = min((orbit.period_err or 0.0) / orbit.period, 0.2)
    density = _stellar_density(case, np.append(grid, orbit.period), width) * span
    statistic = float(np.log(max(density[-1], 1e-6)))
    trials = np.log(np.maximum(density[:-1], 1e-6))
    p_value = float((1 + np.count_nonzero(trials >= statistic)) / (1 + trials.size))
    critical = float(np.quantile(trials, 0.95))
    weight = density[:-1] / np.sum(density[:-1])
    power = float(np.sum(weight[trials >= critical]))
    near = _closeness(case)
    low, high = 0.9 * orbit.period, 1.1 * orbit.period
    chance = {
        f"chance_rotation_over_{n}": case.rotation_density.chance(n * low, n * high)
        for n, _ in _HARMONICS
    }
    if statistic > _NEAR:
        outcome = Outcome.SUPPORTS_STAR
        harmonic = int(near["nearest_harmonic"])
        part = {1: "the rotation period", 2: "half the rotation period"}.get(
            harmonic, "a third of the rotation period"
        )
        sentence = (
            f"The period of {orbit.period:.4g} d is close to {part} "
            f"({case.rotation.period:.3g} d) or an alias: {math.exp(statistic):.3g} times as "
            "likely as for an unrelated period."
        )
    elif statistic < -_NEAR and power > 0.7:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"The period of {orbit.period:.4g} d is neither the rotation "
            f"({case.rotation.period:.3g} d) nor its half, third or an alias."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The rotation ({case.rotation.period:.3g} +- {case.rotation.period_err or 0.0:.2g} d)"
            f" neither explains nor excludes the period of {orbit.period:.4g} d."
        )
    parameters = {**near, **chance, "n_sources": len(case.rotation.sources)}
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
