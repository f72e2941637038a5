"""One graded signal as text ready for a reader."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from screener.core import Finding, Outcome, RuleEffect, SignalVerdict, Verdict
from screener.core.wording import QUANTITIES, TESTS
from screener.report.reasons import counts, deciding_findings, grade_sentence
from screener.report.style import (
    GRADE_COLOUR,
    GRADE_SYMBOL,
    OUTCOME_COLOUR,
    OUTCOME_SYMBOL,
)
from screener.report.words import (
    MISSING,
    amplitude,
    chance,
    compact,
    effect_text,
    false_alarm,
    number,
    odds,
    period,
    polished,
    short_odds,
    test_title,
    uncertain,
)

__all__ = ["FindingView", "RuleView", "SignalView", "null_findings", "signal_view"]

_NOT_RUN = (Outcome.NOT_APPLICABLE, Outcome.FAILED)
_MARK = re.compile(r"\s*\(rule '([^']*)'\)")


@dataclass(frozen=True)
class FindingView:
    """A finding as it is shown; ``numbers`` are those behind it, by name."""

    id: str
    test: str
    question: str
    outcome: str
    symbol: str
    colour: str
    sentence: str
    statistic: str
    p_value: str
    power: str
    numbers: str


@dataclass(frozen=True)
class RuleView:
    """A rule that fired; ``weight`` is None for limits, ``counts`` whether it moved anything."""

    rule: str
    sentence: str
    effect: str
    weight: float | None
    findings: str
    without: str
    decided: bool
    counts: bool


@dataclass(frozen=True)
class SignalView:
    """A graded signal.

    ``not_run`` are tests without an answer, ``idle_rules`` rules that fired and moved nothing,
    ``change_mark`` the rule behind ``would_change``.
    """

    id: str
    grade: str
    symbol: str
    colour: str
    sentence: str
    facts: tuple[tuple[str, str], ...]
    row: tuple[str, ...]
    deciding: tuple[FindingView, ...]
    findings: tuple[FindingView, ...]
    not_run: tuple[FindingView, ...]
    rules: tuple[RuleView, ...]
    idle_rules: tuple[RuleView, ...]
    largest_weight: float
    score: str
    next_step: str
    would_change: str
    change_mark: str


def _finding_view(finding: Finding) -> FindingView:
    details = []
    for name, value in finding.parameters.items():
        if isinstance(value, bool):
            details.append(f"{name.replace('_', ' ')}: {'yes' if value else 'no'}")
        elif isinstance(value, float) and not math.isfinite(value):
            continue
        elif isinstance(value, int | float):
            details.append(f"{name.replace('_', ' ')}: {compact(value)}")
        elif value is not None:
            details.append(f"{name.replace('_', ' ')}: {value}")
    return FindingView(
        id=finding.test,
        test=test_title(finding.test),
        question=TESTS[finding.test].question if finding.test in TESTS else "",
        outcome=finding.outcome.value,
        symbol=OUTCOME_SYMBOL[finding.outcome],
        colour=OUTCOME_COLOUR[finding.outcome],
        sentence=polished(finding.sentence),
        statistic=compact(finding.statistic),
        p_value=chance(finding.p_value),
        power=MISSING if finding.power is None else f"{100 * finding.power:.0f}\u00a0%",
        numbers="; ".join(details),
    )


def _rule_view(effect: RuleEffect, item: SignalVerdict) -> RuleView:
    weighs = effect.effect == "weight" and isinstance(effect.value, int | float)
    changed = effect.grade_without is not None and effect.grade_without is not item.grade
    return RuleView(
        rule=effect.rule,
        sentence=effect.sentence,
        effect=effect_text(effect),
        weight=float(effect.value) if weighs else None,
        findings=_looked_at(effect.findings),
        without=str(effect.grade_without.value) if changed and effect.grade_without else "the same",
        decided=effect.rule in item.deciding_rules,
        counts=counts(effect, item),
    )


def signal_view(item: SignalVerdict) -> SignalView:
    signal, orbit = item.signal, item.signal.orbit
    rules = [_rule_view(effect, item) for effect in item.trace]
    change, mark = _without_mark(item.would_change)
    order = list(Outcome)
    speaking = sorted(item.findings, key=lambda f: order.index(f.outcome))
    views = [_finding_view(f) for f in speaking]
    ran = [f.outcome not in _NOT_RUN for f in speaking]
    shuffled = signal.false_alarm_shuffled
    facts = (
        ("period", period(signal)),
        ("semi-amplitude", amplitude(signal)),
        ("eccentricity", uncertain(orbit.eccentricity, orbit.eccentricity_err, 2)),
        ("false-alarm probability", false_alarm(signal)),
        *([] if shuffled is None else [("the same by shuffling", chance(shuffled))]),
        ("found by", ", ".join(signal.found_by)),
        ("gain over white noise", f"{number(signal.white_gain, 3)} in ln L"),
        ("gain over the activity model", f"{number(signal.activity_gain, 3)} in ln L"),
        ("score", f"{number(item.score, 2)} in ln odds, {odds(item.score)}"),
    )
    return SignalView(
        id=signal.id,
        grade=item.grade.value,
        symbol=GRADE_SYMBOL[item.grade],
        colour=GRADE_COLOUR[item.grade],
        sentence=grade_sentence(item),
        facts=facts,
        row=(
            signal.id,
            *(value for _, value in facts[:4]),
            f"{GRADE_SYMBOL[item.grade]} {item.grade.value}",
            short_odds(item.score),
        ),
        deciding=tuple(_finding_view(f) for f in deciding_findings(item)),
        findings=tuple(v for v, spoke in zip(views, ran, strict=True) if spoke),
        not_run=tuple(v for v, spoke in zip(views, ran, strict=True) if not spoke),
        rules=tuple(r for r in rules if r.counts),
        idle_rules=tuple(r for r in rules if not r.counts),
        largest_weight=max((abs(r.weight) for r in rules if r.weight is not None), default=1.0),
        score=number(item.score, 2),
        next_step=item.next_step,
        would_change=polished(change),
        change_mark=mark,
    )


def _looked_at(seen: Sequence[str]) -> str:
    """What a rule looked at, test by test: "Rotation period (supports star; 2.62)"."""
    groups: dict[str, list[str]] = {}
    for text in seen:
        field, _, value = text.partition(" = ")
        test, _, name = field.rpartition(".")
        quantity = QUANTITIES.get(field)
        if name == "p_value":
            value = f"p = {value}"
        elif quantity is not None and (quantity.unit or quantity.scale != 1):
            value = f"{compact(quantity.scale * float(value))}{quantity.unit}"
        elif name not in ("outcome", "statistic"):
            value = {"True": "yes", "False": "no"}.get(value, value)
            value = f"{name.replace('_', ' ')} {value}".strip()
        groups.setdefault(test_title(test) if test else field, []).append(value)
    return polished("; ".join(f"{name} ({', '.join(values)})" for name, values in groups.items()))


def _without_mark(sentence: str) -> tuple[str, str]:
    """A sentence and the rules that it names in brackets."""
    marks = _MARK.findall(sentence)
    return _MARK.sub("", sentence), ", ".join(marks)


def null_findings(verdict: Verdict) -> tuple[tuple[str, FindingView], ...]:
    """For each signal the findings that come from draws of the star's own activity."""
    return tuple(
        (item.signal.id, _finding_view(finding))
        for item in verdict.signals
        for finding in item.findings
        if "null" in finding.test.lower() and finding.outcome not in _NOT_RUN
    )
