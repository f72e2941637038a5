"""The star's own null: would this star without the planet give such a signal?

Statistic: share of draws of the star's activity model, screened like the star itself, that hold a
signal at least as convincing (score as high). p-value (k + 1) / (n + 1). Power: the share of draws
in which no planet was announced. Parameters: the share of draws graded planetary with its Wilson
interval, and how often the same signal, injected, was graded planetary, ambiguous or stellar.
"""

from __future__ import annotations

import math

from screener.core import Finding, Grade, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "own_null"
QUESTION = "How often does this star, without the planet, give a signal as convincing?"
REQUIRES = ("velocities", "activity model", "draws (standard depth or deeper)")
REFERENCES = ()
_FEWEST = 8


def _wilson(k: int, n: int, z: float = 1.96) -> tuple[float, float]:
    """95 % interval of a share (Wilson 1927, JASA 22, 209)."""
    p = k / n
    middle = (p + z * z / (2 * n)) / (1 + z * z / n)
    half = z * math.sqrt(p * (1 - p) / n + z * z / (4 * n * n)) / (1 + z * z / n)
    return max(0.0, middle - half), min(1.0, middle + half)


def run(case: Case) -> Finding:
    """Compare the signal's score with those of the draws."""
    nulls, score = case.nulls, case.score
    if nulls is None or score is None or len(nulls.draws) < _FEWEST:
        return Finding(
            ID, Outcome.NOT_APPLICABLE, "The star's own null was not drawn at this depth."
        )
    n = len(nulls.draws)
    like = sum(any(s.score >= score for s in draw) for draw in nulls.draws)
    false = sum(any(s.grade is Grade.PLANETARY for s in draw) for draw in nulls.draws)
    low, high = _wilson(false, n)
    like_low, like_high = _wilson(like, n)
    if like_high < 0.1:
        outcome = Outcome.SUPPORTS_PLANET
    elif like_low > 0.1:
        outcome = Outcome.SUPPORTS_STAR
    else:
        outcome = Outcome.INCONCLUSIVE
    sentence = (
        f"Of {n} draws of the star without planets, {like} hold a signal at least as convincing; "
        f"{false} would be announced as a planet ({100 * low:.0f} to {100 * high:.0f} %)."
    )
    grades = nulls.injected.get(case.signal.id, ())
    parameters: dict[str, float | int | None] = {
        "n_draws": n,
        "n_as_convincing": like,
        "false_planet_share": false / n,
        "false_planet_low": low,
        "false_planet_high": high,
    }
    if grades:
        kept = sum(g is Grade.PLANETARY for g in grades)
        lost = sum(g is Grade.LIKELY_STELLAR for g in grades)
        parameters |= {
            "n_injected": len(grades),
            "injected_planetary": kept / len(grades),
            "injected_stellar": lost / len(grades),
            "injected_missed": sum(g is None for g in grades) / len(grades),
        }
        sentence += (
            f" The same orbit put into {len(grades)} draws is graded planetary in {kept}, "
            f"likely stellar in {lost}."
        )
    return Finding(
        ID,
        outcome,
        sentence,
        statistic=like / n,
        p_value=(like + 1) / (n + 1),
        power=1 - false / n,
        parameters=parameters,
        references=REFERENCES,
    )
