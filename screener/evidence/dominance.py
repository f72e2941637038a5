"""Dominance: does the period stand out in the periodogram on top of the activity model?

Statistic: gain at the period less the highest gain at any other period, daily and yearly aliases
apart, with the orbit taken out of the model.
"""

from __future__ import annotations

import math

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "dominance"
QUESTION = "Does the period stand out against all others once activity is modelled?"
REQUIRES = ("velocities", "activity model")
REFERENCES = ("delisle2020",)


def run(case: Case) -> Finding:
    """Gain over the best rival."""
    item = case.assessment
    if item is None or not math.isfinite(item.rival_period):
        return Finding(ID, Outcome.NOT_APPLICABLE, "There is no other period to compare with.")
    lead = item.dominance
    if lead > 6:
        outcome = Outcome.SUPPORTS_PLANET
    elif lead < 0:
        outcome = Outcome.SUPPORTS_STAR
    else:
        outcome = Outcome.INCONCLUSIVE
    return Finding(
        ID,
        outcome,
        f"On top of the activity model the period leads the best other one "
        f"({item.rival_period:.4g} d) by {lead:+.1f} in log-likelihood.",
        statistic=lead,
        parameters={"rival_period": item.rival_period},
        references=REFERENCES,
    )
