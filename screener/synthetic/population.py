"""Whole populations: which kinds in which shares, one seed per star, files and truth."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from screener.synthetic.files import write_star, write_truth
from screener.synthetic.orbits import PlanetPlan
from screener.synthetic.star import Recipe, SyntheticStar, simulate

__all__ = ["MIXES", "Mix", "population_star", "star_seed", "write_population"]


@dataclass(frozen=True)
class Mix:
    """Shares of the kinds and of the special cases."""

    kinds: dict[str, float]
    planets: PlanetPlan = field(default_factory=PlanetPlan)
    no_indicators: float = 0.0
    long_cycle: float = 0.0


_SURVEY = {
    "active dwarf": 0.26,
    "sunlike": 0.20,
    "red dwarf": 0.18,
    "facular": 0.15,
    "fast spotted": 0.13,
    "calm": 0.08,
}

MIXES: dict[str, Mix] = {
    # what a survey of nearby dwarfs meets
    "survey": Mix(_SURVEY),
    # the same, with more of what is hard: for thresholds that must hold outside a survey too
    "wide": Mix(
        {**{k: 0.85 * v for k, v in _SURVEY.items()}, "nested red dwarf": 0.15},
        PlanetPlan(eccentric_giants=0.08, beyond_600_d=0.08, beyond_baseline=0.06),
        no_indicators=0.10,
        long_cycle=0.15,
    ),
}


def star_seed(seed: int, number: int) -> np.random.SeedSequence:
    """Seed of one star: depends on the two numbers alone, not on how many stars are made."""
    return np.random.SeedSequence(seed, spawn_key=(number,))


def population_star(number: int, seed: int, mix: str = "survey") -> SyntheticStar:
    """Star ``number`` (from 0) of the population of that seed and mix."""
    chosen = MIXES[mix]
    rng = np.random.default_rng(star_seed(seed, number))
    share = np.array(list(chosen.kinds.values()))
    kind = list(chosen.kinds)[int(rng.choice(share.size, p=share / share.sum()))]
    blind, slow = rng.random() < chosen.no_indicators, rng.random() < chosen.long_cycle
    recipe = Recipe(kind, planets=chosen.planets, long_cycle=slow)
    if blind:
        recipe = replace(recipe, drop=("fwhm", "bis", "contrast", "s_index", "halpha"))
    return simulate(f"SYN{seed}-{number:05d}", recipe, rng)


def write_population(
    out: Path, stars: int, seed: int, first: int = 0, mix: str = "survey"
) -> list[dict[str, Any]]:
    """Write stars ``first`` to ``first + stars - 1``: tables, sidecars, photometry and truth.

    Returns the truth of each star. Raises OSError where a file cannot be written.
    """
    truth = []
    for number in range(first, first + stars):
        star = population_star(number, seed, mix)
        write_star(out / "stars", star)
        truth.append(star.truth)
    write_truth(out / "truth.json", {"set": f"synthetic-{mix}", "seed": seed, "mix": mix}, truth)
    return truth
