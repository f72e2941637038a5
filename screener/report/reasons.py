"""Why a signal has its grade: the sentence that says so, and the findings that decided it."""

from __future__ import annotations

import math

from screener.core import Finding, Grade, Outcome, RuleEffect, SignalVerdict
from screener.report.words import number, odds

__all__ = ["counts", "deciding_findings", "grade_sentence"]

_LIMITS = ("veto", "cap", "floor")
_PRIOR = "prior"
_SILENT = (Outcome.NOT_APPLICABLE, Outcome.FAILED)
_SPEAKING = (Outcome.SUPPORTS_PLANET, Outcome.SUPPORTS_STAR)
_SAYS_NOTHING = ("sampling.", "signal.")  # what is measured, and how well; no evidence by itself
_LEAST = 0.005  # log-odds; less shows as nought

_GRADE_PHRASE = {
    Grade.PLANETARY: "behaves like a planet",
    Grade.AMBIGUOUS: "may be a planet or the star's own activity; these data do not decide",
    Grade.LIKELY_STELLAR: "is most likely made by the star",
}


def grade_sentence(item: SignalVerdict) -> str:
    """One sentence that says which signal, how large, and what it is taken for.

    Where a veto or cap binds against the odds, a second one says which.
    """
    signal = item.signal
    sentence = (
        f"The {number(signal.orbit.period, 4)} d signal of "
        f"{number(signal.orbit.semi_amplitude, 3)} m/s {_GRADE_PHRASE[item.grade]} "
        f"({odds(item.score)})."
    )
    # a cap or veto holds down what the odds would lift, a floor holds up what they would sink
    kinds = ("cap", "veto") if item.score > 0 else ("floor",)
    binding = [e for e in item.trace if e.effect in kinds and e.value == item.grade]
    if binding and item.grade is not Grade.PLANETARY:
        return sentence + f" A rule binds whatever the odds: {binding[0].sentence}"
    if item.grade is Grade.LIKELY_STELLAR and not _star_spoken_for(item):
        prior = sum(float(e.value) for e in item.trace if e.rule == _PRIOR)
        if prior < 0:
            start = f"about {float(f'{math.exp(min(-prior, 50.0)):.1g}'):g} to 1"
            sentence += (
                " No test speaks for the star by itself; the evidence for a planet does not "
                f"outweigh the odds against one before any evidence ({start})."
            )
    return sentence


def _star_spoken_for(item: SignalVerdict) -> bool:
    vetoed = any(e.effect == "veto" for e in item.trace)
    return vetoed or any(f.outcome is Outcome.SUPPORTS_STAR for f in item.findings)


def deciding_findings(item: SignalVerdict, count: int = 3) -> tuple[Finding, ...]:
    """The findings that decided a grade, weightiest first.

    Rules named as deciding come before the others, limits that bind before weights, weights that
    pull towards the grade before those that pull away, large before small. A weight brings in the
    finding that it is measured by; a limit, all that it looked at. Where the rules leave room,
    findings that speak for a side follow. Findings that say nothing never appear.
    """
    chosen: list[Finding] = []
    for effect in sorted(item.trace, key=lambda e: _rank(e, item)):
        if not counts(effect, item):
            continue
        limits = effect.effect in _LIMITS
        if not limits and effect.findings and effect.findings[-1].startswith(_SAYS_NOTHING):
            continue
        # the quantity that a weight is measured by stands last among what its rule looked at
        for text in effect.findings if limits else effect.findings[-1:]:
            found = _finding_named(text, item.findings)
            if found is not None and found not in chosen:
                chosen.append(found)
    rest = [f for f in item.findings if f.outcome in _SPEAKING and f not in chosen]
    rest.sort(key=lambda f: f.p_value if f.p_value is not None else 1.0)
    return tuple([f for f in [*chosen, *rest] if f.outcome not in _SILENT][:count])


def counts(effect: RuleEffect, item: SignalVerdict) -> bool:
    """Whether a rule that fired moved anything: the sum of the odds, or the grade."""
    if isinstance(effect.value, int | float):
        return abs(effect.value) >= _LEAST
    changed = effect.grade_without is not None and effect.grade_without is not item.grade
    return changed or effect.rule in item.deciding_rules


def _rank(effect: RuleEffect, item: SignalVerdict) -> tuple[bool, bool, bool, float]:
    value = effect.value if isinstance(effect.value, int | float) else 0.0
    side = {Grade.PLANETARY: 1, Grade.LIKELY_STELLAR: -1, Grade.AMBIGUOUS: 0}[item.grade]
    return (
        effect.rule not in item.deciding_rules,
        effect.effect not in _LIMITS,
        value * side < 0,
        -abs(value),
    )


def _finding_named(text: str, findings: tuple[Finding, ...]) -> Finding | None:
    """The finding that "test.field = number" speaks of; the longest test name wins."""
    fitting = [
        f for f in findings if text == f.test or text.startswith((f"{f.test}.", f"{f.test} "))
    ]
    return max(fitting, key=lambda f: len(f.test), default=None)
