"""Does the line shape change along with the velocity at the signal's own period?

Null: the bisector is correlated noise without a line at this period. The bisector is fitted with
the signal's velocity curve and the same a quarter period later, under its own noise; the p-value
is that of both together. Statistic: slope of bisector against velocity at the signal, with the
errors of both. Spots give a negative slope (Queloz et al. 2001); a positive slope, or a change of
width, is the mark of a blended companion. The power assumes the bisector to follow the signal
with the proportion that its scatter bears to that of the velocities.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import stats

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.indicator_power import ALPHA, MUTE, NODES, SPREAD, WEIGHTS, expected
from screener.evidence.lines import channels_of, fit_columns, signal_columns, velocity_channel

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "power_of_two", "run", "velocity_curves"]

ID = "line_shape"
QUESTION = "Does the bisector change with the velocity at this period, and with what sign?"
REQUIRES = ("the bisector (bis)",)
REFERENCES = ("queloz2001", "boisse2011")


def velocity_curves(case: Case) -> tuple[Array, float, float]:
    """The signal as a unit sine and the same a quarter period later, its size and error.

    Shape (n_obs, 2); semi-amplitude and its error in m/s from a fit with the velocities' noise.
    """
    columns = signal_columns(case)
    found = fit_columns(velocity_channel(case, case.target_rv), columns)
    a, b = found.value[0]
    size = max(math.hypot(a, b), 1e-12)
    along = np.array([a, b]) / size
    error = math.sqrt(max(float(along @ found.covariance[0] @ along), 1e-300))
    # a cos + b sin is the signal; -b cos + a sin follows it by a quarter period
    turned = np.column_stack([columns @ along, columns @ np.array([-along[1], along[0]])])
    return turned, size, error


def power_of_two(size: float, variance: float, dof: float) -> float:
    """Chance of p < 0.01 for an amplitude near ``size`` in any phase, silence allowed for."""
    lam = size**2 / variance * np.exp(2.0 * SPREAD * NODES)
    critical = float(stats.f.isf(ALPHA, 2, dof))
    chance = stats.ncf.sf(critical, 2, dof, np.minimum(lam, 1e4))
    return float((1.0 - MUTE) * (WEIGHTS @ chance) + MUTE * ALPHA)


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable without a bisector."""
    channels = channels_of(case, ("bis",))
    if channels is None:
        return Finding(
            ID, Outcome.NOT_APPLICABLE, "No bisector was measured.", references=REFERENCES
        )
    curves, size, size_err = velocity_curves(case)
    found = fit_columns(channels, curves)
    value, covariance = found.value[0], found.covariance[0]
    p_value = float(found.p_value[0])
    slope = float(value[0] / size)
    slope_err = math.sqrt(float(covariance[0, 0]) + (slope * size_err) ** 2) / size
    dof = max(float(channels.noise.dof[0]) - 2.0, 1.0)
    variance = math.sqrt(max(float(np.linalg.det(covariance)), 1e-300))
    power = power_of_two(float(expected(case, channels)[0]), variance, dof)
    parameters: dict[str, float | bool | None] = {
        "slope": slope,
        "slope_err": slope_err,
        "quadrature_slope": float(value[1] / size),
        "slope_p": float(2.0 * stats.norm.sf(abs(slope) / slope_err)),
        "looks_like_spots": False,
        "looks_like_blend": False,
        "fwhm_p": None,
    }
    width = channels_of(case, ("fwhm",))
    if width is not None:
        parameters["fwhm_p"] = float(fit_columns(width, curves).p_value[0])
    significant = p_value < ALPHA
    if significant and slope < 0.0:
        parameters["looks_like_spots"] = True
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The bisector runs against the velocity at this period (slope {slope:.2f} +- "
            f"{slope_err:.2f}, p = {p_value:.2g}), as with spots."
        )
    elif significant:
        parameters["looks_like_blend"] = True
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The bisector follows the velocity at this period (slope {slope:+.2f} +- "
            f"{slope_err:.2f}, p = {p_value:.2g}): a blended companion, or bright regions."
        )
    elif p_value > 0.05 and power > 0.8:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"The line shape does not change with the signal (slope {slope:+.2f} +- "
            f"{slope_err:.2f}, p = {p_value:.2g}); it would have with {power:.0%}."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"Slope of bisector against velocity at this period {slope:+.2f} +- {slope_err:.2f} "
            f"(p = {p_value:.2g}): the bisector is not precise enough to tell."
        )
    return Finding(ID, outcome, sentence, slope, p_value, power, parameters, REFERENCES)
