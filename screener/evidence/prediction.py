"""Prediction: seasons or blocks left out in turn, with and without the orbit.

Statistic: sum over the blocks of the difference in log predictive score, with its error from the
scatter between blocks. Activity that forgets its phase predicts nothing; an orbit does.
"""

from __future__ import annotations

import math

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "prediction"
QUESTION = "Does the orbit predict velocities it has not seen?"
REQUIRES = ("velocities", "activity model")
REFERENCES = ("rajpaul2015",)


def run(case: Case) -> Finding:
    """Held-out score difference."""
    item = case.assessment
    if item is None or item.n_blocks < 2:
        return Finding(ID, Outcome.NOT_APPLICABLE, "Too few velocities to leave any out.")
    score, error = item.prediction, item.prediction_err
    if score > 5 and score > 2 * error:
        outcome = Outcome.SUPPORTS_PLANET
    elif score < 0:
        outcome = Outcome.SUPPORTS_STAR
    else:
        outcome = Outcome.INCONCLUSIVE
    return Finding(
        ID,
        outcome,
        f"Left out in turn, {item.n_blocks} blocks of velocities are predicted "
        f"{'better' if score > 0 else 'worse'} with the orbit: log score {score:+.1f} +- "
        f"{error:.1f}.",
        statistic=score,
        parameters={
            "score_err": error if math.isfinite(error) else None,
            "n_blocks": item.n_blocks,
            "score_per_gain": score / max(item.gains["joint process"], 1.0),
        },
        references=REFERENCES,
    )
