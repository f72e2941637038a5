"""How well rules grade signals whose truth is known."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy import special, stats

from screener.core import Array
from screener.rules.population import LABELS, BoolArray, IntArray, Population
from screener.rules.types import RuleSet, Thresholds

__all__ = [
    "PLANETARY",
    "STELLAR",
    "Rate",
    "auc",
    "grades",
    "limits_of",
    "measure",
    "reliability",
    "scores",
    "single_features",
    "wilson",
]

STELLAR, AMBIGUOUS, PLANETARY = 0, 1, 2
STRONG_SNR = 7.5
BINS = (0.0, 0.05, 0.2, 0.5, 0.8, 0.95, 1.0)


@dataclass(frozen=True)
class Rate:
    """A share with its counts and Wilson 95 % interval."""

    count: int
    total: int

    @property
    def value(self) -> float:
        return self.count / self.total if self.total else math.nan

    @property
    def interval(self) -> tuple[float, float]:
        return wilson(min(self.count, self.total), self.total)

    def __str__(self) -> str:
        low, high = self.interval
        return f"{self.value:.3f} [{low:.3f}, {high:.3f}] {self.count}/{self.total}"


def wilson(count: int, total: int, z: float = 1.959964) -> tuple[float, float]:
    """Wilson (1927) score interval of a binomial share; NaN if nothing was counted."""
    if total == 0:
        return math.nan, math.nan
    share, z2 = count / total, z * z
    middle = (share + z2 / (2 * total)) / (1 + z2 / total)
    half = z * math.sqrt(share * (1 - share) / total + z2 / (4 * total**2)) / (1 + z2 / total)
    return max(0.0, middle - half), min(1.0, middle + half)


def scores(population: Population, rules: RuleSet) -> Array:
    """Natural log-odds of each signal, shape (n_signals,)."""
    weights = np.array([r.weight for r in rules.rules])
    total = population.share @ weights + rules.log_odds + rules.intercept + population.shift
    return np.asarray(total)


def limits_of(population: Population, rules: RuleSet) -> Mapping[str, BoolArray]:
    """Whether a veto, cap or floor holds, shape (n_signals,) each."""
    effects = np.array([r.effect for r in rules.rules])
    return {
        kind: np.any(population.share[:, effects == kind] > 0.0, axis=1)
        for kind in ("veto", "cap", "floor")
    }


def grades(score: Array, limits: Mapping[str, BoolArray], thresholds: Thresholds) -> IntArray:
    """0 likely stellar, 1 ambiguous, 2 planetary; the engine's rule for many signals at once."""
    result = np.full(score.size, AMBIGUOUS, dtype=np.int64)
    result[score >= thresholds.planetary_above] = PLANETARY
    result[score < thresholds.likely_stellar_below] = STELLAR
    result[limits["floor"] & (result == STELLAR)] = AMBIGUOUS
    result[limits["cap"] & (result == PLANETARY)] = AMBIGUOUS
    result[limits["veto"]] = STELLAR
    return result


def measure(population: Population, rules: RuleSet) -> dict[str, Rate]:
    """The figures by which rules are judged."""
    grade = grades(scores(population, rules), limits_of(population, rules), rules.thresholds)
    label = np.array(LABELS, dtype=object)[population.label]
    n_stars = len(population.stars)
    planets = population.planets
    strong = planets[:, 1] >= STRONG_SNR
    near = planets[:, 2] > 0.5
    claimed = population.snr >= STRONG_SNR
    found = claimed & (grade == PLANETARY)
    hosts = set(planets[:, 0].astype(int).tolist())
    bare = np.array([s not in hosts for s in population.star.tolist()], dtype=bool)
    false = (label == "not") & (grade == PLANETARY)

    def count(mask: BoolArray) -> int:
        return int(np.count_nonzero(mask))

    return {
        "false planets per star": Rate(count(false), n_stars),
        "the same, stars without planets": Rate(count(false & bare), n_stars - len(hosts)),
        "recall, snr >= 7.5": Rate(count(found), count(strong)),
        "recall, near rotation": Rate(count(found & population.near), count(strong & near)),
        "recall, away from rotation": Rate(count(found & ~population.near), count(strong & ~near)),
        "recall, snr >= 15": Rate(
            count((population.snr >= 15.0) & (grade == PLANETARY)), count(planets[:, 1] >= 15.0)
        ),
        "planets called stellar": Rate(count(claimed & (grade == STELLAR)), count(strong)),
        "planets left ambiguous": Rate(count(claimed & (grade == AMBIGUOUS)), count(strong)),
        "planets not found": Rate(count(strong) - count(claimed), count(strong)),
        "stellar signals caught": Rate(
            count((label == "not") & (grade == STELLAR)), count(label == "not")
        ),
        "ambiguous share of signals": Rate(count(grade == AMBIGUOUS), grade.size),
    }


def reliability(population: Population, rules: RuleSet) -> list[tuple[float, float, float, Rate]]:
    """Bins of predicted probability: low and high end, mean prediction, share of planets.

    Signals that match a planet twice or are its alias are left out.
    """
    use = population.label <= 1
    chance = special.expit(scores(population, rules)[use])
    planet = population.label[use] == 1
    rows = []
    for low, high in itertools.pairwise(BINS):
        inside = (chance >= low) & ((chance < high) | (high == 1.0))
        mean = float(chance[inside].mean()) if inside.any() else math.nan
        rows.append(
            (low, high, mean, Rate(int(planet[inside].sum()), int(np.count_nonzero(inside))))
        )
    return rows


def auc(positive: Array, negative: Array) -> float:
    """Chance that a positive exceeds a negative, ties half (Mann & Whitney 1947)."""
    if positive.size == 0 or negative.size == 0:
        return math.nan
    rank = stats.rankdata(np.concatenate([positive, negative]))
    n = positive.size
    return float((rank[:n].sum() - n * (n + 1) / 2) / (n * negative.size))


def single_features(population: Population, rules: RuleSet) -> list[tuple[str, float, int]]:
    """Each quantity of a ramp and each step by itself: name, AUC, signals that have it.

    Above one half a larger value speaks for a planet.
    """
    planet, star = population.label == 1, population.label == 0
    rows = []
    for name, values in population.raw.items():
        known = np.isfinite(values)
        rows.append((name, auc(values[known & planet], values[known & star]), int(known.sum())))
    for k, rule in enumerate(rules.rules):
        if rule.effect == "weight" and rule.ramp is None:
            x = population.share[:, k]
            rows.append((f"rule {rule.id}", auc(x[planet], x[star]), int(np.count_nonzero(x))))
    return sorted(rows, key=lambda r: -abs(r[1] - 0.5) if math.isfinite(r[1]) else 1.0)
