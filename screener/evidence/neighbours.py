"""Neighbours: does the signal stand in a crowd of periods?

Spots that come and go at several latitudes leave a bundle of periods around rotation and its
harmonics; one sinusoid after another is needed to describe it. Planets keep their distance: two
within a quarter of each other's period would seldom be stable. Statistic: the summed amplitude of
the other signals within a quarter of the period, in units of the signal's own.
"""

from __future__ import annotations

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "neighbours"
QUESTION = "Does the signal stand alone, or in a crowd of nearby periods?"
REQUIRES = ("velocities",)
REFERENCES = ("gladman1993",)
_REACH = 1.25


def run(case: Case) -> Finding:
    """Amplitude of the neighbours over the signal's own."""
    period, own = case.signal.orbit.period, case.signal.orbit.semi_amplitude
    near = [other for other in case.others if 1 / _REACH < other.orbit.period / period < _REACH]
    crowd = sum(min(o.orbit.semi_amplitude, 3 * own) for o in near) / max(own, 1e-9)
    if crowd > 0.5:
        outcome = Outcome.SUPPORTS_STAR
        listed = ", ".join(f"{o.orbit.period:.4g} d" for o in near)
        sentence = f"Other signals stand within a quarter of the period: {listed}; so do spots."
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = "No other signal of weight stands within a quarter of the period."
    return Finding(
        ID,
        outcome,
        sentence,
        statistic=crowd,
        parameters={"n_near": len(near), "n_signals": 1 + len(case.others)},
        references=REFERENCES,
    )
