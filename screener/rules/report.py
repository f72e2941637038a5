"""Calibrated rules, and their performance as a Markdown page."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from screener.rules.fitting import Fit
from screener.rules.performance import BINS, measure, reliability, single_features
from screener.rules.population import Population
from screener.rules.types import RuleSet

__all__ = ["Calibration", "markdown", "plain_table"]


@dataclass(frozen=True, eq=False)
class Calibration:
    """The fitted rules and what they were fitted with."""

    rules: RuleSet
    fit: Fit
    fitted: tuple[str, ...]
    kept: tuple[str, ...]  # marked as fitted, but too seldom seen: their weight stays
    trained: Population
    held_out: Population
    notes: tuple[str, ...]


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    lines = ["| " + " | ".join(head) + " |", "|" + " --- |" * len(head)]
    return lines + ["| " + " | ".join(row) + " |" for row in rows]


def _number(value: float, form: str = ".3f") -> str:
    return format(value, form) if math.isfinite(value) else "-"


def markdown(result: Calibration, before: RuleSet, seed: int) -> str:
    """The page: errors, reliability, weights, single features.

    Parameters
    ----------
    result : Calibration
    before : RuleSet
        The rules as they stood, judged on the same held-out stars.
    seed : int
    """
    rules, fit = result.rules, result.fit
    limits = rules.thresholds
    lines = ["# Performance of the calibrated rules", ""]
    lines += [
        f"Fitted on {len(result.trained.stars)} stars with {result.trained.star.size} signals, "
        f"judged on {len(result.held_out.stars)} other stars with "
        f"{result.held_out.star.size} signals; seed {seed}. Penalty {fit.kind}, strength "
        f"{fit.strength:.3g}, scale of the odds {fit.scale:.3f}, out-of-fold log loss "
        f"{fit.log_loss:.4f}. Planetary from {limits.planetary_above:.3f} (probability "
        f"{_chance(limits.planetary_above):.3f}), likely stellar below "
        f"{limits.likely_stellar_below:.3f} ({_chance(limits.likely_stellar_below):.3f}).",
        "",
        "Intervals are Wilson 95 %. Signals that match a planet twice, or are an alias of one, "
        "count as neither.",
        "",
    ]
    lines += [f"- {note}." for note in result.notes] + ([""] if result.notes else [])
    lines += ["## Errors", ""]
    new, old = measure(result.held_out, rules), measure(result.held_out, before)
    trained = measure(result.trained, rules)
    lines += _table(
        ["measure", "held out", "held out, rules before", "stars of the fit"],
        [[name, str(new[name]), str(old[name]), str(trained[name])] for name in new],
    )
    lines += ["", "## Reliability", "", "Share of planets among signals by their probability.", ""]
    lines += _table(
        ["probability", "mean", "held out", "stars of the fit", "held out: inside the bin"],
        _reliability_rows(result),
    )
    lines += ["", "## Weights", ""]
    lines += _table(["rule", "weight", "signals on which it counts"], _weight_rows(result))
    lines += ["", "## Single features, stars of the fit", ""]
    lines += _table(
        ["quantity", "AUC", "signals that have it"],
        [[name, _number(a), str(n)] for name, a, n in single_features(result.trained, rules)],
    )
    return "\n".join(lines) + "\n"


def _chance(log_odds: float) -> float:
    return 1.0 / (1.0 + math.exp(-log_odds))


def _reliability_rows(result: Calibration) -> list[list[str]]:
    rows = []
    pairs = zip(
        reliability(result.held_out, result.rules),
        reliability(result.trained, result.rules),
        strict=True,
    )
    for (low, high, mean, held), (_, _, _, trained) in pairs:
        verdict = "-"
        if held.total:
            ends = held.interval
            inside = low <= held.value <= high
            verdict = (
                "yes" if inside else "within error" if ends[0] <= high and ends[1] >= low else "no"
            )
        rows.append([f"{low:g} to {high:g}", _number(mean), str(held), str(trained), verdict])
    assert len(rows) == len(BINS) - 1
    return rows


def _weight_rows(result: Calibration) -> list[list[str]]:
    use = result.trained.label <= 1
    active = np.count_nonzero(result.trained.share[use] > 0.0, axis=0)
    rows = [["prior and intercept", f"{result.rules.log_odds + result.rules.intercept:+.3f}", "-"]]
    for k, rule in enumerate(result.rules.rules):
        mark = "" if rule.id in result.fitted else " (not fitted)"
        value = (
            f"{rule.weight:+.3f}{mark}" if rule.limit is None else f"{rule.effect}: {rule.limit}"
        )
        rows.append([rule.id, value, str(int(active[k]))])
    return rows


def plain_table(text: str) -> str:
    """A Markdown page with its tables aligned for a terminal."""
    out: list[str] = []
    block: list[list[str]] = []
    for line in [*text.splitlines(), ""]:
        if line.startswith("|"):
            block.append([c.strip() for c in line.strip("|").split("|")])
            continue
        if block:
            width = [max(len(row[k]) for row in block) for k in range(len(block[0]))]
            for row in block:
                if not set("".join(row)) <= {"-"}:
                    padded = (cell.ljust(w) for cell, w in zip(row, width, strict=True))
                    out.append("  " + "  ".join(padded).rstrip())
            block = []
        out.append(line)
    return "\n".join(out).rstrip()
