"""``screener rules``: list, explain or check grading rules."""

from __future__ import annotations

import importlib
import json
import pkgutil
import textwrap
from pathlib import Path
from typing import Any

import click

from screener.core import InputFault
from screener.rules import DEFAULT_FILE, RULE_KEYS, Rule, RuleSet, load_rules
from screener.rules import grammar as _grammar
from screener.rules.grammar import did_you_mean, write
from screener.rules.scope import SIGNAL_FIELDS
from screener.rules.types import Advice, PriorClass

__all__ = ["command"]

_FILE = click.Path(path_type=Path)
_OVERLAY = click.option(
    "--rules", "overlay", type=_FILE, help="A rule file of your own, laid over the defaults."
)
_JSON = click.option("--json", "as_json", is_flag=True, help="Print JSON.")
_TOPICS = ("keys", "grammar", "prior", "thresholds")


@click.group("rules")
def command() -> None:
    """List, explain or check grading rules."""


@command.command("list")
@_OVERLAY
@_JSON
def list_rules(overlay: Path | None, as_json: bool) -> None:
    """List every rule with its effect."""
    rules = load_rules(None, overlay)
    if as_json:
        content = {
            "rules": rules.label,
            "sha256": rules.sha256,
            "prior_log_odds": rules.log_odds,
            "planetary_above": rules.thresholds.planetary_above,
            "likely_stellar_below": rules.thresholds.likely_stellar_below,
            "list": [_as_dict(r) for r in rules.rules],
        }
        click.echo(json.dumps(content, indent=1, ensure_ascii=False))
        return
    click.echo(f"{rules.label}  (sha256 {rules.sha256[:12]})")
    width = max(len(r.id) for r in rules.rules)
    for rule in rules.rules:
        click.echo(f"{rule.id:{width}}  {_effect(rule):<22}  {rule.sentence}")
    click.echo("\n'screener rules explain ID' shows one of them in full.")


@command.command("explain")
@click.argument("id")
@_OVERLAY
@_JSON
def explain_rule(id: str, overlay: Path | None, as_json: bool) -> None:
    """Explain one rule, prior class or advice; or: keys, grammar, prior, thresholds."""
    rules = load_rules(None, overlay)
    known = [r.id for r in rules.rules]
    known += [c.id for c in rules.classes] + [a.id for a in rules.advice]
    if id in _TOPICS:
        click.echo(_topic(id, rules))
        return
    if id not in known:
        cure = did_you_mean(id, [*known, *_TOPICS]) or "'screener rules list' shows the ids"
        raise InputFault(id, "there is no rule of this id", cure.rstrip("."))
    found = {r.id: r for r in rules.rules}.get(id)
    if found is not None:
        entry = _as_dict(found)
        click.echo(
            json.dumps(entry, indent=1, ensure_ascii=False) if as_json else _full(found, rules)
        )
        return
    others: tuple[PriorClass | Advice, ...] = (*rules.classes, *rules.advice)
    entry = next(_other(x) for x in others if x.id == id)
    if as_json:
        click.echo(json.dumps(entry, indent=1, ensure_ascii=False))
        return
    for key, value in entry.items():
        click.echo(f"{key:<12} {value}")


@command.command("check")
@click.argument("file", type=_FILE)
@click.option("--whole", is_flag=True, help="FILE is a whole rule set, not laid over the defaults.")
@_JSON
def check_file(file: Path, whole: bool, as_json: bool) -> None:
    """Check a rule file; every fault comes with line, key and a suggestion."""
    tests = known_tests()
    rules = load_rules(file if whole else None, None if whole else file, known_tests=tests)
    defaults = load_rules()
    changed = _changes(defaults, rules)
    if as_json:
        content = {"rules": rules.label, "sha256": rules.sha256, "changes": changed}
        click.echo(json.dumps(content, indent=1, ensure_ascii=False))
        return
    click.echo(f"{file}: no faults. {rules.label}, {len(rules.rules)} rules.")
    for line in changed:
        click.echo(f"  {line}")


def known_tests() -> tuple[str, ...]:
    """IDs of the evidence modules, and the tests that the default rules know."""
    import screener.evidence as room

    found = set(load_rules(DEFAULT_FILE).tests)
    for module in pkgutil.iter_modules(room.__path__):
        name = getattr(importlib.import_module(f"screener.evidence.{module.name}"), "ID", None)
        if isinstance(name, str):
            found.add(name)
    return tuple(sorted(found))


def _effect(rule: Rule) -> str:
    if rule.effect != "weight":
        return f"{rule.effect}: {rule.limit}"
    return f"weight {rule.weight:+.2f}" + (" (ramp)" if rule.ramp is not None else "")


def _as_dict(rule: Rule) -> dict[str, Any]:
    entry: dict[str, Any] = {"id": rule.id, "sentence": rule.sentence, "effect": rule.effect}
    entry["value"] = rule.weight if rule.limit is None else str(rule.limit.value)
    for key in ("when", "unless"):
        condition = getattr(rule, key)
        entry[key] = None if condition is None else write(condition)
    ramp = rule.ramp
    entry["ramp"] = ramp and {
        "of": str(ramp.of),
        "from": ramp.start,
        "to": ramp.stop,
        "scale": "log" if ramp.log else "linear",
    }
    entry["fitted"] = rule.fitted
    entry["cure"] = rule.cure or None
    entry["tests"] = list(rule.tests)
    return entry


def _other(item: Any) -> dict[str, Any]:
    entry = {"id": item.id, "sentence": item.sentence}
    for key in ("when", "unless"):
        condition = getattr(item, key, None)
        if condition is not None:
            entry[key] = write(condition)
    for key in ("occurrence", "calibrated", "priority"):
        if hasattr(item, key):
            entry[key] = getattr(item, key)
    if hasattr(item, "grades"):
        entry["grades"] = ", ".join(g.value for g in item.grades)
    return entry


def _full(rule: Rule, rules: RuleSet) -> str:
    lines = [f"{rule.id}: {rule.sentence}", f"  effect   {_effect(rule)} {_meaning(rule)}"]
    used: dict[str, None] = {}
    for key in ("when", "unless"):
        condition = getattr(rule, key)
        if condition is not None:
            lines.append(f"  {key:<8} {write(condition)}")
            used.update(dict.fromkeys(_terms_in(write(condition), rules)))
    if rule.ramp is not None:
        ramp = rule.ramp
        scale = " on a logarithmic scale" if ramp.log else ""
        lines.append(
            f"  ramp     nothing at {ramp.of} = {ramp.start:g}, all of it at {ramp.stop:g}{scale}"
        )
    if rule.fitted:
        lines.append("  fitted   the calibration sets the weight; its sign is fixed")
    if rule.cure:
        lines.append(f"  changes  if {rule.cure}")
    meanings = dict(rules.terms)
    for name in used:
        lines.append(f"  {name} means: {write(meanings[name])}")
    return "\n".join(lines)


def _terms_in(text: str, rules: RuleSet) -> list[str]:
    """Terms used, those inside of terms too, in the order in which they are met."""
    meanings, found = dict(rules.terms), []
    queue = [w for w in text.replace("(", " ").replace(")", " ").split() if w in meanings]
    while queue:
        name = queue.pop(0)
        if name not in found:
            found.append(name)
            inner = write(meanings[name]).replace("(", " ").replace(")", " ").split()
            queue += [w for w in inner if w in meanings]
    return found


def _meaning(rule: Rule) -> str:
    return {
        "weight": "(natural log-odds, positive towards planet)",
        "veto": "(whatever the score)",
        "cap": "(at best)",
        "floor": "(at worst, unless a veto fires)",
    }[rule.effect]


def _topic(name: str, rules: RuleSet) -> str:
    if name == "grammar":
        fields = "\n".join(f"  signal.{key:<18} {text}" for key, text in SIGNAL_FIELDS.items())
        return f"{(_grammar.__doc__ or '').strip()}\n\nThe signal itself is seen as:\n{fields}"
    if name == "keys":
        lines = []
        for section, keys in RULE_KEYS.items():
            lines.append(f"[{section}]" if section else "(top)")
            for key, text in keys.items():
                lines += textwrap.wrap(
                    text, 96, initial_indent=f"  {key:<21} ", subsequent_indent=" " * 24
                )
        return "\n".join(lines)
    if name == "thresholds":
        limits = rules.thresholds
        return (
            f"planetary_above       {limits.planetary_above:+.3f} (natural log-odds)\n"
            f"likely_stellar_below  {limits.likely_stellar_below:+.3f}"
        )
    lines = [f"log_odds   {rules.log_odds:+.3f}", f"intercept  {rules.intercept:+.3f}"]
    lines += [
        f"{c.id}: occurrence {c.occurrence:g}, moves by {c.shift:+.3f}" for c in rules.classes
    ]
    return "\n".join(lines)


def _changes(before: RuleSet, after: RuleSet) -> list[str]:
    """What a file changes, in words."""
    lines = []
    for kind in ("rules", "classes", "advice"):
        old = {x.id: x for x in getattr(before, kind)}
        new = {x.id: x for x in getattr(after, kind)}
        lines += [f"adds {n}" for n in new if n not in old]
        lines += [f"takes away {n}" for n in old if n not in new]
        lines += [f"replaces {n}" for n in new if n in old and new[n] != old[n]]
    for name in ("log_odds", "intercept", "thresholds"):
        if getattr(before, name) != getattr(after, name):
            lines.append(f"changes {name}")
    return lines
