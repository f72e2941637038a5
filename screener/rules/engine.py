"""Adding up the evidence: findings in, a grade with every reason out."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from screener.core import Finding, Grade, RuleEffect, Signal
from screener.rules.explain import next_step, would_change
from screener.rules.grammar import Field
from screener.rules.scope import Scope, holds
from screener.rules.types import Graded, Rule, RuleSet, Thresholds

__all__ = ["Fired", "combine", "grade"]

PRIOR = "prior"


@dataclass(frozen=True)
class Fired:
    """A rule that fired, and what it adds."""

    rule: Rule
    value: float  # log-odds; 0 unless a weight


def grade(findings: Sequence[Finding], rules: RuleSet, signal: Signal | None = None) -> Graded:
    """Grade one signal.

    Parameters
    ----------
    findings : sequence of Finding
        At most one of each test. Failed and inapplicable ones count for nothing.
    rules : RuleSet
    signal : Signal, optional
        The signal itself, for conditions on its period and amplitude and for the advice.

    Returns
    -------
    Graded

    Raises
    ------
    ValueError
        If a test has two findings.
    """
    scope = Scope(findings, signal)
    prior = rules.log_odds + rules.intercept
    fired = _fired(rules, scope)
    kinds = [c for c in rules.classes if c.shift != 0.0 and holds(c.when, scope) is True]
    shift = sum(c.shift for c in kinds)
    score, result = combine(prior + shift, fired, rules.thresholds)
    trace = [_prior_effect(prior, fired, shift, rules.thresholds)]
    for kind in kinds:
        without = combine(prior + shift - kind.shift, fired, rules.thresholds)[1]
        trace.append(RuleEffect(kind.id, kind.sentence, "weight", kind.shift, (), without))
    for item in fired:
        rest = [f for f in fired if f is not item]
        without = combine(prior + shift, rest, rules.thresholds)[1]
        trace.append(_effect(item, scope, without))
    return Graded(
        grade=result,
        score=score,
        trace=tuple(trace),
        deciding_rules=_deciding(result, trace, rules.thresholds, score),
        would_change=would_change(result, score, trace, rules, scope),
        next_step=next_step(result, rules, scope),
    )


def combine(prior: float, fired: Iterable[Fired], thresholds: Thresholds) -> tuple[float, Grade]:
    """Score and grade from the rules that fired.

    The score parts the grades first; a floor lifts "likely stellar" to "ambiguous", a cap lowers
    "planetary" to it, and a veto has the last word.
    """
    fired = list(fired)
    score = prior + sum(f.value for f in fired)
    if score >= thresholds.planetary_above:
        result = Grade.PLANETARY
    elif score < thresholds.likely_stellar_below:
        result = Grade.LIKELY_STELLAR
    else:
        result = Grade.AMBIGUOUS
    effects = {f.rule.effect for f in fired}
    if "floor" in effects and result is Grade.LIKELY_STELLAR:
        result = Grade.AMBIGUOUS
    if "cap" in effects and result is Grade.PLANETARY:
        result = Grade.AMBIGUOUS
    if "veto" in effects:
        result = Grade.LIKELY_STELLAR
    return score, result


def _fired(rules: RuleSet, scope: Scope) -> list[Fired]:
    shares = [(rule, rule.share(scope)) for rule in rules.rules]
    return [Fired(rule, rule.weight * share) for rule, share in shares if share > 0.0]


def _prior_effect(
    prior: float, fired: list[Fired], shift: float, thresholds: Thresholds
) -> RuleEffect:
    without = combine(shift, fired, thresholds)[1]
    sentence = "Odds before any evidence, as in the population of the calibration."
    return RuleEffect(PRIOR, sentence, "weight", prior, (), without)


def _effect(item: Fired, scope: Scope, without: Grade) -> RuleEffect:
    rule = item.rule
    seen = tuple(f"{f} = {_show(scope, f)}" for f in rule.fields if scope.value(f) is not None)
    limit = rule.limit
    value: float | str = item.value if limit is None else str(limit.value)
    return RuleEffect(rule.id, rule.sentence, rule.effect, value, seen, without)


def _show(scope: Scope, field: Field) -> str:
    value = scope.value(field)
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def _deciding(
    result: Grade, trace: Sequence[RuleEffect], thresholds: Thresholds, score: float
) -> tuple[str, ...]:
    """Rules without which the grade would differ; else those that hold it, at most three."""
    rules = [e for e in trace if e.rule != PRIOR]

    def weight(effect: RuleEffect) -> float:
        return abs(effect.value) if isinstance(effect.value, float) else float("inf")

    single = [e for e in rules if e.grade_without is not result]
    if single:
        return tuple(e.rule for e in sorted(single, key=weight, reverse=True))
    # none alone: several caps or vetoes say the same, or many weights point one way
    limits = {
        Grade.PLANETARY: (),
        Grade.AMBIGUOUS: ("cap", "floor"),
        Grade.LIKELY_STELLAR: ("veto",),
    }[result]
    binding = [e.rule for e in rules if e.effect in limits and _binds(e.effect, score, thresholds)]
    if binding:
        return tuple(binding)
    sign = {Grade.PLANETARY: 1.0, Grade.LIKELY_STELLAR: -1.0, Grade.AMBIGUOUS: 0.0}[result]
    weights = [e for e in rules if isinstance(e.value, float) and e.value * sign >= 0.0]
    heaviest = tuple(e.rule for e in sorted(weights, key=weight, reverse=True)[:3])
    # nothing spoke: the odds before any evidence stand
    return heaviest or (PRIOR,)


def _binds(effect: str, score: float, thresholds: Thresholds) -> bool:
    """Whether a limit of that kind moves the grade at this score."""
    if effect == "cap":
        return score >= thresholds.planetary_above
    return effect == "veto" or score < thresholds.likely_stellar_below
