"""Gain in log-likelihood by the orbit, under every noise model.

Statistic: the smallest of the gains over white noise, white noise with the indicators as linear
terms, a quasi-periodic process under the velocities, and the joint process. One noise model alone
has outliers that ruin the tail; a planet stands under all.
"""

from __future__ import annotations

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "activity_gain"
QUESTION = "Is the orbit needed whatever the noise model?"
REQUIRES = ("velocities", "activity model")
REFERENCES = ("haywood2014", "rajpaul2015")


def run(case: Case) -> Finding:
    """The smallest gain, and each."""
    item = case.assessment
    if item is None:
        return Finding(ID, Outcome.NOT_APPLICABLE, "No activity model was fitted.")
    gains = item.gains
    weakest = min(gains, key=lambda name: gains[name])
    least = gains[weakest]
    correlated = min(gains["joint process"], gains["velocity process"])
    if least > 12:
        outcome = Outcome.SUPPORTS_PLANET
    elif gains["joint process"] < 5:
        outcome = Outcome.SUPPORTS_STAR
    else:
        outcome = Outcome.INCONCLUSIVE
    listed = ", ".join(f"{name} {value:.1f}" for name, value in gains.items())
    return Finding(
        ID,
        outcome,
        f"The orbit raises the log-likelihood by at least {least:.1f} ({weakest}); {listed}.",
        statistic=least,
        parameters={
            "gain_white": gains["white noise"],
            "gain_decorrelated": gains["white noise and indicators"],
            "gain_velocity": gains["velocity process"],
            "gain_joint": gains["joint process"],
            "gain_correlated": correlated,
        },
        references=REFERENCES,
    )
