"""Survival: amplitude over its error when velocities and indicators are modelled together.

Statistic: K / sigma_K under the joint activity model (hyper-parameters at their best). The best
single separator of planets from activity that we know of: rotation leaves little amplitude over
when indicators and velocities share one process. Bayes factor and shrinkage as parameters.
"""

from __future__ import annotations

import math

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "joint_amplitude"
QUESTION = "Does the orbit survive when the star's activity is modelled along with it?"
REQUIRES = ("velocities", "activity model")
REFERENCES = ("rajpaul2015", "haywood2014")


def run(case: Case) -> Finding:
    """Amplitude, its error, Bayes factor and shrinkage."""
    item = case.assessment
    if item is None:
        return Finding(ID, Outcome.NOT_APPLICABLE, "No activity model was fitted.")
    orbit, white = item.orbit, item.white_orbit
    ratio = orbit.semi_amplitude / (orbit.semi_amplitude_err or math.inf)
    kept = orbit.semi_amplitude / white.semi_amplitude if white.semi_amplitude > 0 else 1.0
    if ratio > 7 and item.log_bayes > 5:
        outcome, word = Outcome.SUPPORTS_PLANET, "stands"
    elif ratio < 3 or item.log_bayes < 0:
        outcome, word = Outcome.SUPPORTS_STAR, "does not stand"
    else:
        outcome, word = Outcome.INCONCLUSIVE, "stands only just"
    return Finding(
        ID,
        outcome,
        f"Under the joint activity model the orbit {word}: K = {orbit.semi_amplitude:.2f} +- "
        f"{orbit.semi_amplitude_err or math.nan:.2f} m/s, ln Bayes factor {item.log_bayes:.1f}; "
        f"{100 * kept:.0f} % of the amplitude in white noise is left.",
        statistic=ratio,
        parameters={
            "log_bayes": item.log_bayes,
            "kept_share": kept,
            "k_joint": orbit.semi_amplitude,
            "k_white": white.semi_amplitude,
            "converged": item.converged,
            "in_activity_set": item.in_activity_set,
        },
        references=REFERENCES,
    )
