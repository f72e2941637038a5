"""From the entries of a rule file to rules; every fault is collected, none ends the reading."""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from screener.core import Grade, InputFault
from screener.rules.explain import check_template
from screener.rules.grammar import (
    Condition,
    ConditionError,
    Field,
    did_you_mean,
    fields_of,
    parse,
    parse_field,
)
from screener.rules.scope import SIGNAL, SIGNAL_FIELDS, Scope, holds
from screener.rules.toml_lines import Path_, Source
from screener.rules.types import EFFECTS, RULE_KEYS, Advice, PriorClass, Ramp, Rule

__all__ = ["Builder", "Entry"]

MAX_WEIGHT = 50.0
_ID = re.compile(r"[a-z][a-z0-9]*(?:[-_][a-z0-9]+)*")
_LIMITS = {"veto": Grade.LIKELY_STELLAR, "cap": Grade.AMBIGUOUS, "floor": Grade.AMBIGUOUS}


@dataclass(frozen=True)
class Entry:
    """A table of a rule file and where it stands."""

    source: Source
    path: Path_
    data: Mapping[str, Any]

    @property
    def what(self) -> str:
        """The entry in words, for messages."""
        name = self.data.get("id")
        kind = next((str(p) for p in reversed(self.path) if isinstance(p, str)), "")
        return f"{kind} '{name}'" if isinstance(name, str) else ""


class Builder:
    """Checks types and ranges; what is sound is built, what is not becomes a fault."""

    def __init__(self, faults: list[InputFault]) -> None:
        self.faults = faults
        self.seen: list[tuple[Entry, str, tuple[Field, ...]]] = []

    def fault(self, entry: Entry, key: str, problem: str, cure: str, what: str = "") -> None:
        path = (*entry.path, key)
        self.faults.append(entry.source.fault(path, problem, cure, what or entry.what))

    # tables and keys

    def table(self, source: Source, path: Path_, required: bool) -> Entry:
        data: Any = source.data
        for part in path:
            data = data.get(part) if isinstance(data, dict) else None
        if data is None and required:
            name = ".".join(map(str, path))
            self.faults.append(source.fault((), f"the table [{name}] is missing", f"Add [{name}]"))
        elif data is not None and not isinstance(data, dict):
            self.faults.append(source.fault(path, "must be a table", f"Write [{path[-1]}]"))
        return Entry(source, path, data if isinstance(data, dict) else {})

    def array(self, source: Source, path: tuple[str, ...]) -> list[Entry]:
        data: Any = source.data
        for part in path:
            data = data.get(part, []) if isinstance(data, dict) else []
        if not isinstance(data, list) or not all(isinstance(d, dict) for d in data):
            cure = f"Write [[{'.'.join(path)}]]"
            self.faults.append(source.fault(path, "must be an array of tables", cure))
            return []
        return [Entry(source, (*path, n), d) for n, d in enumerate(data)]

    def keys(self, entry: Entry, allowed: Collection[str]) -> None:
        for key in entry.data:
            if key not in allowed:
                cure = did_you_mean(key, allowed) or "Keys here: " + ", ".join(allowed)
                self.fault(entry, key, "there is no such key", cure)

    def id(self, entry: Entry, kind: str) -> str | None:
        name = entry.data.get("id")
        if isinstance(name, str) and _ID.fullmatch(name) and len(name) <= 60 and name != "prior":
            return name
        problem = "is missing" if name is None else f"{name!r} cannot be an id"
        cure = "Ids are lower-case words joined by hyphens, like too-few-nights"
        self.fault(entry, "id", problem, cure, f"{kind} {entry.path[-1]}")
        return None

    # values

    def text(self, entry: Entry, key: str, default: str | None = None) -> str:
        value = entry.data.get(key, default)
        if isinstance(value, str) and (value.strip() or default == "") and "\n" not in value:
            return value
        problem = "is missing" if value is None else "must be a text on one line"
        self.fault(entry, key, problem, f'Write {key} = "..."')
        return ""

    def number(
        self, entry: Entry, key: str, low: float, high: float, default: float | None = None
    ) -> float:
        value = entry.data.get(key, default)
        number = math.nan
        if isinstance(value, int | float) and not isinstance(value, bool):
            number = float(value)
        if low <= number <= high:  # never so for NaN
            return number
        problem = "is missing" if value is None else f"{value!r} is no number in the allowed range"
        self.fault(entry, key, problem, f"Write a number from {low:g} to {high:g}")
        return 0.0 if default is None else default

    def flag(self, entry: Entry, key: str) -> bool:
        value = entry.data.get(key, False)
        if not isinstance(value, bool):
            self.fault(entry, key, f"{value!r} is neither true nor false", f"Write {key} = true")
        return value is True

    def condition(
        self, entry: Entry, key: str, terms: Mapping[str, Condition], what: str = ""
    ) -> Condition | None:
        if key not in entry.data:
            return None
        source = entry.data[key]
        if not isinstance(source, str):
            self.fault(entry, key, "must be a text", 'Write "test.p_value < 0.01"', what)
            return None
        try:
            condition = parse(source, terms)
        except ConditionError as error:
            problem = f"column {error.column} of the condition: {error.problem}"
            self.fault(entry, key, problem, error.cure or "See the grammar of conditions", what)
            return None
        self.look(entry, key, fields_of(condition))
        return condition

    def look(self, entry: Entry, key: str, fields: tuple[Field, ...]) -> None:
        """Remember which fields are named where; those of the signal are known already."""
        self.seen.append((entry, key, fields))
        names = [*SIGNAL_FIELDS, "present"]
        for field in fields:
            if field.test == SIGNAL and field.name not in names:
                cure = did_you_mean(field.name, names) or "It has: " + ", ".join(names)
                self.fault(entry, key, f"a signal has no {field.name!r}", cure)

    # entries

    def rule(self, entry: Entry, terms: Mapping[str, Condition]) -> Rule | None:
        before = len(self.faults)
        self.keys(entry, RULE_KEYS["rule"])
        data = entry.data
        effects = [e for e in EFFECTS if e in data]
        if len(effects) != 1:
            problem = f"has {len(effects) or 'no'} effect{'s' * (len(effects) > 1)}"
            cure = f"Give exactly one of {', '.join(EFFECTS)}"
            self.fault(entry, effects[-1] if effects else "id", problem, cure)
            return None
        effect = effects[0]
        rule = Rule(
            id=str(data["id"]),
            sentence=self.text(entry, "sentence"),
            effect=effect,
            when=self.condition(entry, "when", terms),
            unless=self.condition(entry, "unless", terms),
            weight=self.number(entry, effect, -MAX_WEIGHT, MAX_WEIGHT) if effect == "weight" else 0,
            ramp=self.ramp(entry),
            cure=self.text(entry, "cure", ""),
            fitted=self.flag(entry, "fitted"),
            direction=self.direction(entry),
        )
        if effect != "weight":
            self.limit(entry, effect)
        if len(self.faults) == before:
            self.sense(entry, rule)
        return rule if len(self.faults) == before else None

    def limit(self, entry: Entry, effect: str) -> None:
        wanted = _LIMITS[effect].value
        if entry.data[effect] != wanted:
            problem = f"{entry.data[effect]!r} is not what a {effect} can say"
            self.fault(entry, effect, problem, f'Write {effect} = "{wanted}"')
        for key in ("ramp", "fitted", "direction"):
            if key in entry.data:
                self.fault(entry, key, f"does not go with a {effect}", "Only weights have it")

    def direction(self, entry: Entry) -> int:
        word = entry.data.get("direction")
        if word is None:
            return 0
        if word not in ("planet", "star"):
            cure = did_you_mean(str(word), ("planet", "star")) or 'Write "planet" or "star"'
            self.fault(entry, "direction", f"{word!r} is no direction", cure)
            return 0
        return 1 if word == "planet" else -1

    def sense(self, entry: Entry, rule: Rule) -> None:
        """What is well formed but makes no sense."""
        if rule.fitted and rule.direction == 0:
            self.fault(entry, "fitted", "needs a direction", 'Add direction = "planet" or "star"')
        if rule.direction * rule.weight < 0:
            self.fault(entry, "weight", "has the other sign than its direction", "Change one")
        bare = rule.when is None and rule.unless is None and rule.ramp is None
        if rule.effect == "weight" and bare:
            self.fault(entry, "weight", "always counts", "Add when or ramp, or use [prior]")
        if rule.effect == "veto" and (rule.when is None or rule.fires(Scope(()))):
            problem = "would fire without any finding; a veto needs positive evidence"
            self.fault(entry, "veto", problem, "Ask for a finding in 'when', or use a cap")

    def ramp(self, entry: Entry) -> Ramp | None:
        raw = entry.data.get("ramp")
        if raw is None:
            return None
        if not isinstance(raw, dict):
            cure = 'Write ramp = { of = "test.statistic", from = 2.0, to = 8.0 }'
            self.fault(entry, "ramp", "must be a table", cure)
            return None
        part = Entry(entry.source, (*entry.path, "ramp"), raw)
        before = len(self.faults)
        self.keys(part, RULE_KEYS["ramp"])
        of = self.quantity(part, entry)
        start = self.number(part, "from", -1e12, 1e12)
        stop = self.number(part, "to", -1e12, 1e12)
        scale = self.text(part, "scale", "linear")
        if scale not in ("linear", "log"):
            cure = did_you_mean(scale, ("linear", "log")) or 'Write "linear" or "log"'
            self.fault(part, "scale", f"{scale!r} is no scale", cure, entry.what)
        if len(self.faults) > before or of is None:
            return None
        if start == stop or (scale == "log" and min(start, stop) <= 0):
            problem = (
                "from and to must differ" if start == stop else "a log scale needs positive ends"
            )
            self.fault(part, "to", problem, "Change one of them", entry.what)
            return None
        return Ramp(of, start, stop, scale == "log")

    def quantity(self, part: Entry, entry: Entry) -> Field | None:
        text = self.text(part, "of")
        if not text:
            return None
        try:
            field = parse_field(text)
        except ConditionError as error:
            self.fault(part, "of", error.problem, error.cure, entry.what)
            return None
        self.look(part, "of", (field,))
        return field

    def prior_class(self, entry: Entry, terms: Mapping[str, Condition]) -> PriorClass | None:
        before = len(self.faults)
        self.keys(entry, RULE_KEYS["prior.class"])
        sentence = self.text(entry, "sentence")
        when = self.condition(entry, "when", terms)
        if "when" not in entry.data:
            self.fault(entry, "when", "is missing", "Say which signals are of this kind")
        occurrence = self.number(entry, "occurrence", 1e-9, 1.0)
        calibrated = self.number(entry, "calibrated", 1e-9, 1.0)
        if len(self.faults) > before or when is None:
            return None
        return PriorClass(str(entry.data["id"]), sentence, when, occurrence, calibrated)

    def advice(self, entry: Entry, terms: Mapping[str, Condition]) -> Advice | None:
        before = len(self.faults)
        self.keys(entry, RULE_KEYS["advice"])
        sentence = self.text(entry, "sentence")
        try:
            check_template(sentence)
        except ConditionError as error:
            problem = f"column {error.column}: {error.problem}"
            self.fault(entry, "sentence", problem, error.cure)
        grades = entry.data.get("grades", [g.value for g in Grade])
        names = [g.value for g in Grade]
        for name in grades if isinstance(grades, list) else [grades]:
            if name not in names:
                cure = did_you_mean(str(name), names) or "Grades: " + ", ".join(names)
                self.fault(entry, "grades", f"there is no grade {name!r}", cure)
        when = self.condition(entry, "when", terms)
        unless = self.condition(entry, "unless", terms)
        priority = self.number(entry, "priority", -1e6, 1e6, 0.0)
        if not isinstance(grades, list):
            self.fault(entry, "grades", "must be a list", 'Write grades = ["ambiguous"]')
        if len(self.faults) > before:
            return None
        picked = tuple(Grade(g) for g in grades)
        return Advice(str(entry.data["id"]), sentence, priority, picked, when, unless)

    def fallbacks(self, source: Source, advice: Sequence[Advice]) -> None:
        """Each grade needs an advice that always fits."""
        for grade in Grade:
            always = [
                a
                for a in advice
                if grade in a.grades
                and (a.when is None or holds(a.when, Scope(())) is True)
                and a.unless is None
                and "{" not in a.sentence
            ]
            if not always and not self.faults:
                problem = f"no advice fits every case graded {grade.value!r}"
                cure = "Add an [[advice]] without conditions and placeholders"
                self.faults.append(source.fault(("advice",), problem, cure))
