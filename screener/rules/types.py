"""Rules as the engine knows them, and the table of every key of a rule file."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

from screener.core import Grade, RuleEffect
from screener.rules.grammar import Condition, Field, fields_of, write
from screener.rules.scope import Scope, holds

__all__ = [
    "EFFECTS",
    "RULE_KEYS",
    "Advice",
    "Graded",
    "PriorClass",
    "Ramp",
    "Rule",
    "RuleSet",
    "Thresholds",
]

EFFECTS = ("weight", "veto", "cap", "floor")

RULE_KEYS: Mapping[str, Mapping[str, str]] = {
    "": {
        "disable": "ids of default rules, advice and prior classes to take away (overlay only)",
    },
    "meta": {
        "name": "name of the rule set; stands in every verdict",
        "version": "version of the rule set, text",
        "weights": "file beside this one with fitted weights, prior and thresholds",
    },
    "prior": {
        "log_odds": "natural log-odds that a significant period is a planet, before any evidence",
        "intercept": "natural log-odds that go with the fitted weights (ramps start at zero)",
        "class": "kinds of planets with their occurrence, as [[prior.class]]",
    },
    "prior.class": {
        "id": "name of the kind of planet",
        "sentence": "what is meant, for a person",
        "when": "condition that says whether a signal is of this kind",
        "occurrence": "share of stars with such a planet, between 0 and 1",
        "calibrated": "the share that the weights take for granted; the log-odds move by "
        "ln(occurrence / calibrated)",
    },
    "thresholds": {
        "planetary_above": "natural log-odds from which on a signal is graded planetary",
        "likely_stellar_below": "natural log-odds below which a signal is graded likely stellar",
    },
    "terms": {
        "<name>": "a named condition, to be used in the conditions that follow",
    },
    "rule": {
        "id": "name of the rule: lower-case words joined by hyphens",
        "sentence": "what the rule says, for a person",
        "when": "condition under which the rule fires; without it, always",
        "unless": "condition that keeps the rule from firing; it must be true to do so, "
        "absent evidence does not",
        "weight": "effect: natural log-odds that the rule adds, positive towards planet",
        "ramp": "scales the weight by a quantity, from nothing to all of it",
        "veto": 'effect: the grade is "likely stellar"; needs positive evidence',
        "cap": 'effect: the grade is at most "ambiguous"',
        "floor": 'effect: the grade is at least "ambiguous", unless a veto fires',
        "cure": "clause that completes 'it would change if ...'",
        "fitted": "true: the calibration sets the weight",
        "direction": '"planet" or "star": the sign a fitted weight keeps',
    },
    "ramp": {
        "of": "the quantity, test.name",
        "from": "its value where the weight starts",
        "to": "its value where the weight is full (may be smaller than from)",
        "scale": '"linear" or "log"',
    },
    "advice": {
        "id": "name of the advice",
        "grades": "grades that it is given for; without it, all",
        "when": "condition under which it fits",
        "unless": "condition that keeps it from being given",
        "priority": "the highest that fits is given",
        "sentence": "the advice; {period}, {half_period} or {test.name} stand for values, "
        "{test.name:.0f} sets their form",
    },
}


@dataclass(frozen=True)
class Ramp:
    """weight * clip((x - start) / (stop - start), 0, 1), x or its logarithm."""

    of: Field
    start: float
    stop: float
    log: bool = False

    def share(self, x: float) -> float:
        """The share of the weight that counts at ``x``, between 0 and 1."""
        start, stop = self.start, self.stop
        if self.log:
            if x <= 0.0:
                return 0.0 if start < stop else 1.0
            x, start, stop = math.log(x), math.log(start), math.log(stop)
        return min(max((x - start) / (stop - start), 0.0), 1.0)

    def at(self, share: float) -> float:
        """The quantity at which that share of the weight counts."""
        if self.log:
            return float(self.start * (self.stop / self.start) ** share)
        return self.start + share * (self.stop - self.start)


@dataclass(frozen=True)
class Rule:
    """One rule; exactly one effect.

    ``effect`` is one of ``EFFECTS``; ``weight`` is 0 where the effect is another.
    """

    id: str
    sentence: str
    effect: str
    when: Condition | None = None
    unless: Condition | None = None
    weight: float = 0.0
    ramp: Ramp | None = None
    cure: str = ""
    fitted: bool = False
    direction: int = 0  # +1 planet, -1 star

    def fires(self, scope: Scope) -> bool:
        """Whether the conditions let it fire; the ramp is not looked at."""
        if self.when is not None and holds(self.when, scope) is not True:
            return False
        return self.unless is None or holds(self.unless, scope) is not True

    def share(self, scope: Scope) -> float:
        """How much of the effect counts for this signal, between 0 and 1."""
        if not self.fires(scope):
            return 0.0
        if self.ramp is None:
            return 1.0
        x = scope.number(self.ramp.of)
        return 0.0 if x is None else self.ramp.share(x)

    @property
    def fields(self) -> tuple[Field, ...]:
        """Every field the rule looks at."""
        found: dict[Field, None] = {}
        for condition in (self.when, self.unless):
            if condition is not None:
                found.update(dict.fromkeys(fields_of(condition)))
        if self.ramp is not None:
            found[self.ramp.of] = None
        return tuple(found)

    @property
    def tests(self) -> tuple[str, ...]:
        """Every test the rule looks at."""
        return tuple(dict.fromkeys(f.test for f in self.fields))

    @property
    def limit(self) -> Grade | None:
        """The grade of a veto, cap or floor; None for a weight."""
        if self.effect == "weight":
            return None
        return Grade.LIKELY_STELLAR if self.effect == "veto" else Grade.AMBIGUOUS


@dataclass(frozen=True)
class PriorClass:
    """A kind of planet and its occurrence."""

    id: str
    sentence: str
    when: Condition
    occurrence: float
    calibrated: float

    @property
    def shift(self) -> float:
        return math.log(self.occurrence / self.calibrated)


@dataclass(frozen=True)
class Thresholds:
    """Natural log-odds that part the grades."""

    planetary_above: float
    likely_stellar_below: float


@dataclass(frozen=True)
class Advice:
    """A next step, and when it fits."""

    id: str
    sentence: str
    priority: float = 0.0
    grades: tuple[Grade, ...] = tuple(Grade)
    when: Condition | None = None
    unless: Condition | None = None


@dataclass(frozen=True)
class RuleSet:
    """Rules, prior odds, thresholds and advice, checked and ready for grading."""

    name: str
    version: str
    log_odds: float
    intercept: float
    thresholds: Thresholds
    rules: tuple[Rule, ...]
    classes: tuple[PriorClass, ...] = ()
    advice: tuple[Advice, ...] = ()
    terms: tuple[tuple[str, Condition], ...] = ()
    overlay: str | None = None  # the file laid over the first, absolute; not part of the hash

    @property
    def label(self) -> str:
        """Name and version."""
        return f"{self.name} {self.version}"

    @property
    def tests(self) -> tuple[str, ...]:
        """Every test that any rule, class or advice looks at, sorted."""
        found = {t for rule in self.rules for t in rule.tests}
        conditions = [c.when for c in self.classes]
        conditions += [c for a in self.advice for c in (a.when, a.unless) if c is not None]
        found.update(f.test for condition in conditions for f in fields_of(condition))
        return tuple(sorted(found))

    def rule(self, id: str) -> Rule:
        """The rule of that id; KeyError if there is none."""
        for rule in self.rules:
            if rule.id == id:
                return rule
        raise KeyError(id)

    @cached_property
    def sha256(self) -> str:
        """Hash of everything that can change a verdict; comments and layout do not count."""
        return hashlib.sha256(json.dumps(_content(self), sort_keys=True).encode()).hexdigest()

    @property
    def design_sha256(self) -> str:
        """Hash of the fitted rules without their weights: what a calibration was made for."""
        design = [
            [_text(r.when), _text(r.unless), _ramp(r.ramp), r.id, r.direction]
            for r in self.rules
            if r.effect == "weight"
        ]
        return hashlib.sha256(json.dumps(sorted(design, key=str)).encode()).hexdigest()


def _text(condition: Condition | None) -> str | None:
    """A condition with its terms spelt out, so that a changed term changes the hash."""
    if condition is None:
        return None
    return repr(condition)


def _ramp(ramp: Ramp | None) -> list[object] | None:
    return None if ramp is None else [str(ramp.of), ramp.start, ramp.stop, ramp.log]


def _content(rules: RuleSet) -> dict[str, object]:
    return {
        "label": [rules.name, rules.version],
        "prior": [rules.log_odds, rules.intercept],
        "thresholds": [rules.thresholds.planetary_above, rules.thresholds.likely_stellar_below],
        "classes": [
            [c.id, c.sentence, _text(c.when), c.occurrence, c.calibrated] for c in rules.classes
        ],
        "rules": [
            [
                *(r.id, r.sentence, r.effect, r.weight, r.cure),
                *(_text(r.when), _text(r.unless), _ramp(r.ramp)),
            ]
            for r in rules.rules
        ],
        "advice": [
            [a.id, a.sentence, a.priority, list(a.grades), _text(a.when), _text(a.unless)]
            for a in rules.advice
        ],
        "terms": [[name, write(condition)] for name, condition in rules.terms],
    }


@dataclass(frozen=True)
class Graded:
    """A grade with its reasons.

    Attributes
    ----------
    grade : Grade
    score : float
        Natural log-odds of planet against star, prior included.
    trace : tuple of RuleEffect
        The prior and every rule that fired; the weights among them add up to the score.
    deciding_rules : tuple of str
        Rules without which the grade would be another; where no single one is, those that hold
        the grade together, heaviest first.
    would_change : str
        What would make the grade another.
    next_step : str
        What to do about this signal.
    """

    grade: Grade
    score: float
    trace: tuple[RuleEffect, ...]
    deciding_rules: tuple[str, ...]
    would_change: str
    next_step: str
