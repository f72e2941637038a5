"""Sentences on a grade: what would change it, and what to do next."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

from screener.core import Grade, RuleEffect
from screener.core.wording import QUANTITIES, TESTS, Quantity
from screener.rules.grammar import ConditionError, Field, did_you_mean, parse_field
from screener.rules.scope import SIGNAL, Scope, Value, holds
from screener.rules.types import Rule, RuleSet

__all__ = ["SHORT_NAMES", "check_template", "next_step", "render", "would_change"]

_YEAR = 365.25
# what no observation and no analysis can change
_GIVEN = (SIGNAL, "neighbours", "family", "sampling")
_HOLE = re.compile(r"\{([^{}]*)\}")
_FORM = re.compile(r"(\.[0-9])?[fge]")

# names that a template may use besides test.name: the field and the factor on its value
SHORT_NAMES: Mapping[str, tuple[Field, float]] = {
    "period": (Field(SIGNAL, "period"), 1.0),
    "half_period": (Field(SIGNAL, "period"), 0.5),
    "period_years": (Field(SIGNAL, "period"), 1.0 / _YEAR),
    "amplitude": (Field(SIGNAL, "semi_amplitude"), 1.0),
    "rotation": (Field("rotation", "rotation_period"), 1.0),
    "half_cycle_years": (Field("cycle", "cycle_period"), 0.5 / _YEAR),
}


def check_template(text: str) -> None:
    """Check the placeholders of an advice.

    Raises
    ------
    ConditionError
        For the first placeholder that means nothing.
    """
    for match in _HOLE.finditer(text):
        name, _, form = match.group(1).partition(":")
        column = match.start() + 1
        if form and not _FORM.fullmatch(form):
            raise ConditionError(f"unknown form {form!r}", column, "Forms look like .1f or .3g")
        if name in SHORT_NAMES:
            continue
        try:
            parse_field(name)
        except ConditionError:
            cure = did_you_mean(name, SHORT_NAMES) or "Use test.name or one of: " + ", ".join(
                SHORT_NAMES
            )
            raise ConditionError(f"unknown placeholder {name!r}", column, cure) from None
    rest = _HOLE.sub("", text)
    if "{" in rest or "}" in rest:
        raise ConditionError("a brace without its partner", 1, "Placeholders look like {period}")


def render(text: str, scope: Scope) -> str | None:
    """Fill the placeholders in; None if one of them has no value."""
    missing = False

    def fill(match: re.Match[str]) -> str:
        nonlocal missing
        name, _, form = match.group(1).partition(":")
        field, factor = SHORT_NAMES.get(name) or (parse_field(name), 1.0)
        value = scope.value(field)
        if value is None or isinstance(value, bool):
            missing = True
            return ""
        if isinstance(value, str):
            return value
        return format(value * factor, form or ".4g")

    filled = _HOLE.sub(fill, text)
    return None if missing else filled


def next_step(grade: Grade, rules: RuleSet, scope: Scope) -> str:
    """The advice of the highest priority that fits and whose values are known."""
    for advice in sorted(rules.advice, key=lambda a: -a.priority):
        if grade not in advice.grades:
            continue
        if advice.when is not None and holds(advice.when, scope) is not True:
            continue
        if advice.unless is not None and holds(advice.unless, scope) is True:
            continue
        text = render(advice.sentence, scope)
        if text is not None:
            return text
    return ""


@dataclass(frozen=True)
class _Change:
    """A single finding that moves the score far enough."""

    effort: float  # share of the rule's range that it must move; absent findings come last
    words: str


def would_change(
    grade: Grade, score: float, trace: Sequence[RuleEffect], rules: RuleSet, scope: Scope
) -> str:
    """One sentence: which finding would make the grade another."""
    limits = rules.thresholds
    held = {kind: [e for e in trace if e.effect == kind] for kind in ("veto", "cap", "floor")}
    if held["veto"]:
        rest = "it would then be graded by its other evidence"
        return _sentence("be no longer likely stellar", _cures(held["veto"], rules), rest)
    if grade is Grade.AMBIGUOUS and held["cap"] and score >= limits.planetary_above:
        return _sentence("become planetary", _cures(held["cap"], rules))
    if grade is Grade.AMBIGUOUS and held["floor"] and score < limits.likely_stellar_below:
        return _sentence("become likely stellar", _cures(held["floor"], rules))
    up, down = limits.planetary_above - score, score - limits.likely_stellar_below
    if grade is Grade.LIKELY_STELLAR:
        goal, need = "become ambiguous", limits.likely_stellar_below - score
    elif grade is Grade.PLANETARY:
        goal, need = "become ambiguous", limits.planetary_above - score - 1e-9
    elif up <= down or held["floor"]:
        goal, need = "become planetary", up
    else:
        goal, need = "become likely stellar", -down - 1e-9
    changes = [c for r in rules.rules if (c := _change(r, need, scope)) is not None]
    if not changes:
        return _together(goal, need, rules, scope)
    words = min(changes, key=lambda c: c.effort).words
    if goal == "become planetary" and held["cap"]:
        words = f"{words}, and if {_cures(held['cap'], rules)}"
    return _sentence(goal, words)


def _together(goal: str, need: float, rules: RuleSet, scope: Scope) -> str:
    """Which findings it would take, where none alone suffices."""
    room: dict[str, float] = {}
    for rule in rules.rules:
        if rule.effect != "weight":
            continue
        now = rule.weight * rule.share(scope)
        ends = (min(rule.weight, 0.0) - now, max(rule.weight, 0.0) - now)
        gain = ends[1] if need > 0 else -ends[0]
        test = rule.ramp.of.test if rule.ramp is not None else rule.fields[0].test
        if gain > 0.0 and test not in _GIVEN:
            room[test] = room.get(test, 0.0) + gain
    taken: list[str] = []
    left = abs(need)
    for test in sorted(room, key=lambda t: (-room[t], t)):
        taken.append(test)
        left -= room[test]
        if left <= 0.0:
            side = "for a planet" if need > 0 else "for the star"
            names = [_quoted(test) for test in taken]
            if len(names) == 1:
                return _sentence(goal, f"the test {names[0]} spoke {side} as clearly as it can")
            listed = ", ".join(names[:-1]) + f" and {names[-1]}"
            words = f"{listed} {'all' if len(names) > 2 else 'both'} spoke"
            return (
                f"No single finding would change the grade; it would {goal} if the tests "
                f"{words} {side}."
            )
    return (
        f"No finding of these tests would change the grade; it is {left:.1f} too far in log-odds."
    )


def _quoted(test: str) -> str:
    words = TESTS.get(test)
    return f"“{words.title}”" if words is not None else test


def _sentence(goal: str, words: str, rest: str = "") -> str:
    return f"It would {goal} if {words}" + (f"; {rest}." if rest else ".")


def _cures(effects: Sequence[RuleEffect], rules: RuleSet) -> str:
    words = []
    for effect in effects:
        cure = rules.rule(effect.rule).cure
        words.append(cure or f"the rule '{effect.rule}' no longer held")
    return ", and if ".join(words)


def _change(rule: Rule, need: float, scope: Scope) -> _Change | None:
    """How one weight could move the score by ``need``; None if it cannot."""
    if rule.effect != "weight" or rule.weight == 0.0:
        return None
    if (rule.ramp.of if rule.ramp is not None else rule.fields[0]).test in _GIVEN:
        return None
    share = rule.share(scope)
    wanted = share + need / rule.weight
    if not 0.0 <= wanted <= 1.0 + 1e-12:
        return None
    mark = f"(rule '{rule.id}')"
    if rule.ramp is None:
        return _step_change(rule, share, mark, scope)
    if rule.unless is not None and holds(rule.unless, scope) is True:
        return None
    if rule.when is not None and holds(rule.when, scope) is False:
        return None
    now, then = scope.number(rule.ramp.of), rule.ramp.at(wanted)
    said = QUANTITIES.get(str(rule.ramp.of)) or Quantity(str(rule.ramp.of))
    then *= said.scale
    if now is None:
        known = scope.value(Field(rule.ramp.of.test, "present")) is True
        verb = "were known and" if known else "could be had and"
        bound = "at least" if rule.ramp.stop > rule.ramp.start else "at most"
        words = f"{said.name} {verb} were {bound} {then:.3g}{said.unit}"
        return _Change(10.0 + wanted, f"{words} {mark}")
    now *= said.scale
    verb = "rose" if then > now else "fell"
    words = f"{said.name} {verb} from {now:.3g} to {_beyond(then, now)}{said.unit} {mark}"
    return _Change(abs(wanted - share), words)


def _beyond(value: float, start: float) -> str:
    """Three digits, rounded away from ``start`` so that the number said does suffice."""
    text = f"{value:.3g}"
    if abs(float(text) - start) >= abs(value - start):
        return text
    step = 10.0 ** _magnitude(value)
    return f"{float(text) + (step if value > start else -step):.3g}"


def _magnitude(value: float) -> int:
    return int(f"{value:.2e}".partition("e")[2]) - 2


def _step_change(rule: Rule, share: float, mark: str, scope: Scope) -> _Change | None:
    telling: Callable[[Field], Value] = scope.value
    absent = all(telling(f) is None for f in rule.fields)
    said = rule.sentence.rstrip(".")
    said = said[:1].lower() + said[1:]
    if share == 1.0:
        return _Change(2.0, f"it were no longer found that {said} {mark}")
    if rule.cure:
        return _Change(12.0 if absent else 3.0, f"{rule.cure} {mark}")
    return _Change(12.0 if absent else 3.0, f"it were found that {said} {mark}")
