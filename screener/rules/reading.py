"""Rule files: TOML in, a checked ``RuleSet`` out, or every fault of the files in one go."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import replace
from pathlib import Path

from screener.core import InputFault, InputFaults
from screener.rules.building import Builder, Entry
from screener.rules.grammar import Condition, did_you_mean
from screener.rules.scope import SIGNAL
from screener.rules.toml_lines import Source, read_source
from screener.rules.types import RULE_KEYS, PriorClass, Rule, RuleSet, Thresholds

__all__ = ["DEFAULT_FILE", "load_rules"]

DEFAULT_FILE = Path(__file__).with_name("default.toml")
_WEIGHT_KEYS: Mapping[str, tuple[str, ...]] = {
    "fit": ("label", "design_sha256", "stars", "seed", "note"),
    "prior": ("log_odds", "intercept"),
    "thresholds": ("planetary_above", "likely_stellar_below"),
    "weights": (),
}


def load_rules(
    path: Path | None = None,
    overlay: Path | None = None,
    *,
    known_tests: Collection[str] | None = None,
    use_weights: bool = True,
) -> RuleSet:
    """Read a rule file and, laid over it, a user's own.

    Parameters
    ----------
    path : Path, optional
        The whole rule set; the package's ``default.toml`` if not given.
    overlay : Path, optional
        A partial file: rules, advice, prior classes and terms of the same id replace those
        below, ``disable`` takes some away, ``[prior]`` and ``[thresholds]`` change numbers.
    known_tests : collection of str, optional
        If given, a rule that looks at any other test is a fault.
    use_weights : bool
        Whether to read the file of fitted weights that ``[meta]`` names.

    Raises
    ------
    InputFaults
        Every fault of the files, each with file, line, key and a cure.
    """
    rules = _Loader(known_tests).load(path or DEFAULT_FILE, overlay, use_weights)
    return rules if overlay is None else replace(rules, overlay=str(overlay.absolute()))


class _Loader:
    """Merges the files first and reads the conditions then, so that terms may be replaced."""

    def __init__(self, known_tests: Collection[str] | None) -> None:
        self.faults: list[InputFault] = []
        self.build = Builder(self.faults)
        self.known_tests = known_tests
        self.entries: dict[str, dict[str, Entry]] = {"rule": {}, "advice": {}, "class": {}}
        self.terms: dict[str, Entry] = {}
        self.numbers: dict[str, float] = {}
        self.labels: list[tuple[str, str]] = []

    def load(self, path: Path, overlay: Path | None, use_weights: bool) -> RuleSet:
        base = self.open(path)
        if base is not None:
            self.add(base, is_overlay=False)
        top = self.open(overlay) if overlay is not None else None
        weights = self.weights(base, path) if base is not None and use_weights else {}
        if top is not None:
            self.add(top, is_overlay=True)
        if base is None:
            raise InputFaults(self.faults)
        self.check_weights(path, weights)
        result = self.finish(base, top or base, weights)
        if self.faults or result is None:
            raise InputFaults(self.faults)
        return result

    def open(self, path: Path) -> Source | None:
        try:
            return read_source(path)
        except InputFault as fault:
            self.faults.append(fault)
            return None

    def add(self, source: Source, is_overlay: bool) -> None:
        """Lay one file over what there is."""
        data = source.data
        allowed = ["meta", "prior", "thresholds", "terms", "rule", "advice"]
        self.build.keys(Entry(source, (), data), allowed + ["disable"] * is_overlay)
        meta = self.build.table(source, ("meta",), required=not is_overlay)
        self.build.keys(meta, RULE_KEYS["meta"])
        fallback = Path(source.name).stem if is_overlay else None
        name = self.build.text(meta, "name", fallback)
        self.labels.append((name, self.build.text(meta, "version", "" if is_overlay else None)))
        prior = self.build.table(source, ("prior",), required=not is_overlay)
        self.build.keys(prior, RULE_KEYS["prior"])
        limits = self.build.table(source, ("thresholds",), required=not is_overlay)
        self.build.keys(limits, RULE_KEYS["thresholds"])
        for entry, keys in ((prior, ("log_odds", "intercept")), (limits, RULE_KEYS["thresholds"])):
            for key in keys:
                if not is_overlay or key in entry.data:
                    self.numbers[key] = self.build.number(entry, key, -100.0, 100.0)
        terms = self.build.table(source, ("terms",), required=False)
        for key in terms.data:
            self.terms[key] = terms
        if is_overlay:
            self.disable(source)
        for kind, place in (
            ("rule", ("rule",)),
            ("advice", ("advice",)),
            ("class", ("prior", "class")),
        ):
            self.collect(source, kind, place)

    def collect(self, source: Source, kind: str, place: tuple[str, ...]) -> None:
        seen: dict[str, Entry] = {}
        for entry in self.build.array(source, place):
            name = self.build.id(entry, kind)
            if name is None:
                continue
            if name in seen:
                line = source.line(seen[name].path)
                self.build.fault(entry, "id", f"{name!r} stands twice", f"See line {line}", name)
            seen[name] = entry
            self.entries[kind][name] = entry

    def disable(self, source: Source) -> None:
        names = source.data.get("disable", [])
        top = Entry(source, (), source.data)
        if not isinstance(names, list) or not all(isinstance(n, str) for n in names):
            self.build.fault(top, "disable", "must be a list of ids", 'Write disable = ["id"]')
            return
        known = [n for group in self.entries.values() for n in group]
        for name in names:
            if name not in known:
                cure = did_you_mean(name, known) or "'screener rules list' shows the ids"
                self.build.fault(top, "disable", f"there is no {name!r} to disable", cure)
            for group in self.entries.values():
                group.pop(name, None)

    def weights(self, base: Source, path: Path) -> dict[str, float]:
        """Fitted weights by rule id; prior and thresholds are taken over at once."""
        meta = Entry(base, ("meta",), base.data.get("meta") or {})
        name = meta.data.get("weights") if isinstance(meta.data, dict) else None
        if name is None:
            return {}
        if not isinstance(name, str) or Path(name).name != name:
            problem = "must be the name of a file in the same folder"
            self.build.fault(meta, "weights", problem, 'Write weights = "weights.toml"')
            return {}
        source = self.open(path.with_name(name))
        if source is None:
            return {}
        self.build.keys(Entry(source, (), source.data), _WEIGHT_KEYS)
        found = {}
        for section, keys in _WEIGHT_KEYS.items():
            table = self.build.table(source, (section,), required=False)
            allowed = keys if section != "weights" else tuple(self.entries["rule"])
            self.build.keys(table, allowed)
            if section == "fit":
                label = self.build.text(table, "label", "")
                title, version = self.labels[0]
                self.labels[0] = (title, f"{version}+{label}" if label else version)
                continue
            for key in table.data:
                number = self.build.number(table, key, -100.0, 100.0)
                if section == "weights":
                    found[key] = number
                else:
                    self.numbers[key] = number
        return found

    def check_weights(self, path: Path, weights: Mapping[str, float]) -> None:
        """A fitted weight keeps the sign that its rule states."""
        for id, weight in weights.items():
            entry = self.entries["rule"].get(id)
            word = None if entry is None else entry.data.get("direction")
            if (word == "planet" and weight < 0.0) or (word == "star" and weight > 0.0):
                problem = f"the weight {weight:g} of '{id}' has the other sign than its direction"
                self.faults.append(InputFault(str(path), problem, "Run the calibration again"))

    def finish(self, base: Source, top: Source, weights: Mapping[str, float]) -> RuleSet | None:
        terms = self.read_terms()
        rules = [self.build.rule(e, terms) for e in self.entries["rule"].values()]
        classes = [self.build.prior_class(e, terms) for e in self.entries["class"].values()]
        advice = [self.build.advice(e, terms) for e in self.entries["advice"].values()]
        if self.known_tests is not None:
            self.check_tests()
        if not rules:
            self.faults.append(top.fault((), "there is no rule", "Add a [[rule]]"))
        self.build.fallbacks(top, [a for a in advice if a is not None])
        numbers = self.numbers
        limits = Thresholds(numbers["planetary_above"], numbers["likely_stellar_below"])
        if limits.likely_stellar_below >= limits.planetary_above and not self.faults:
            problem = "likely_stellar_below must be less than planetary_above"
            self.faults.append(top.fault(("thresholds",), problem, "Part the two thresholds"))
        if self.faults:
            return None
        name, version = self.labels[0]
        if len(self.labels) > 1:
            version += " with " + " ".join(self.labels[1]).strip()
        return RuleSet(
            name=name,
            version=version,
            log_odds=numbers["log_odds"],
            intercept=numbers["intercept"],
            thresholds=limits,
            rules=tuple(self.weighted(r, weights, base) for r in rules if r is not None),
            classes=tuple(c for c in classes if isinstance(c, PriorClass)),
            advice=tuple(a for a in advice if a is not None),
            terms=tuple(terms.items()),
        )

    def weighted(self, rule: Rule, weights: Mapping[str, float], base: Source) -> Rule:
        """The rule with its fitted weight; a rule of the overlay keeps its own."""
        own = self.entries["rule"][rule.id].source is base
        if not own or rule.id not in weights or not rule.fitted:
            return rule
        return replace(rule, weight=weights[rule.id])

    def read_terms(self) -> dict[str, Condition]:
        terms: dict[str, Condition] = {}
        for name, entry in self.terms.items():
            condition = self.build.condition(entry, name, terms, f"term '{name}'")
            if condition is not None:
                terms[name] = condition
        return terms

    def check_tests(self) -> None:
        """Tests that do not exist, with the place where each is named."""
        known = [*(self.known_tests or ()), SIGNAL]
        for where, key, fields in self.build.seen:
            for field in fields:
                if field.test not in known:
                    cure = did_you_mean(field.test, known) or "Tests: " + ", ".join(sorted(known))
                    self.build.fault(where, key, f"there is no test {field.test!r}", cure)
