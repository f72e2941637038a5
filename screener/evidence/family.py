"""Family: is the signal one of a set that rotation makes?

Evolving spots give periods at rotation, its half and its third, and the seasons add their yearly
aliases. Statistic: how many *other* signals stand at the rotation period or its harmonics while
this one does as well; 0 where this one does not. A planet may sit at a harmonic by chance, but does
not bring relatives.
"""

from __future__ import annotations

from screener.core import Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "family"
QUESTION = "Does the signal belong to a set of rotation, its harmonics and their yearly aliases?"
REQUIRES = ("velocities", "rotation period")
REFERENCES = ("haywood2014",)
_DIVISORS = (1, 2, 3, 4)
_YEAR = 365.25


def _member(period: float, rotation: float, width: float, resolution: float) -> int:
    """Which harmonic the period stands at, 0 for none."""
    frequency = 1 / period
    for n in _DIVISORS:
        for shift in (0.0, 1 / _YEAR, -1 / _YEAR):
            centre = n / rotation + shift
            if abs(frequency - centre) < max(width * n / rotation, resolution):
                return n
    return 0


def run(case: Case) -> Finding:
    """Count the relatives."""
    rotation = case.rotation.period
    if rotation is None:
        return Finding(ID, Outcome.NOT_APPLICABLE, "The rotation period is not known.")
    # active latitudes drift: a tenth of the period either side (Sun: 25 to 28 d below 40 deg)
    width = min(max((case.rotation.period_err or 0.0) / rotation, 0.06), 0.12)
    resolution = 1 / max(case.series.baseline, 1.0)
    own = _member(case.signal.orbit.period, rotation, width, resolution)
    relatives = [
        other
        for other in case.others
        if not other.known and _member(other.orbit.period, rotation, width, resolution)
    ]
    count = len(relatives) if own else 0
    if count:
        outcome = Outcome.SUPPORTS_STAR
        listed = ", ".join(f"{o.orbit.period:.4g} d" for o in relatives)
        sentence = (
            f"The period stands at rotation{'' if own == 1 else f' / {own}'} and so do {listed}: "
            "one stellar family."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = "The period is not part of a set of rotation and its harmonics."
    return Finding(
        ID,
        outcome,
        sentence,
        statistic=float(count),
        parameters={"harmonic": own, "n_relatives": len(relatives)},
        references=REFERENCES,
    )
