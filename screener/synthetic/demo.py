"""The demo scenario: four stars of an invented survey, each with a tale of its own.

The Heron Survey and its stars do not exist.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from screener.synthetic.files import write_star, write_truth
from screener.synthetic.observing import Plan
from screener.synthetic.orbits import Planet
from screener.synthetic.star import Recipe, SyntheticStar, simulate

__all__ = ["SCENARIO", "TALES", "demo_stars", "write_demo"]

SCENARIO = "heron_survey"
_EPOCH = 2459000.0


def _planet(period: float, k: float, e: float, omega: float, phase: float) -> Planet:
    return Planet(period, k, e, omega, _EPOCH + phase * period, snr_alone=0.0)


# name, seed, recipe; a pair of equal numbers pins what is otherwise drawn
TALES: tuple[tuple[str, str, int, Recipe], ...] = (
    (
        "Heron 12",
        "a clean planet of a quiet star",
        12,
        Recipe(
            "sunlike",
            fixed_planets=(_planet(6.137, 6.4, 0.08, 1.1, 0.35),),
            body_teff=5620.0,
            rotation=26.5,
            inclination=1.2,
            plan=Plan(118, 3, 1, 0.95, 1.08),
            photometry=None,
            drop=("contrast",),
            overrides={"rms": (1.0, 1.0)},
        ),
    ),
    (
        "Heron 31",
        "a spotted impostor: its rotation, no planet",
        105,
        Recipe(
            "fast spotted",
            fixed_planets=(),
            body_teff=5050.0,
            rotation=7.4,
            inclination=1.25,
            plan=Plan(124, 2, 1, 3.2, 1.0),
            photometry="ground",
            drop=("contrast",),
            overrides={"rms": (32.0, 32.0), "life": (90.0, 90.0), "nest_share": (0.9, 0.9)},
        ),
    ),
    (
        "Heron 47",
        "a truly ambiguous case: a planet on top of the half rotation period",
        87,
        Recipe(
            "active dwarf",
            fixed_planets=(_planet(9.62, 4.4, 0.0, 0.0, 0.6),),
            body_teff=4900.0,
            rotation=18.6,
            inclination=1.1,
            plan=Plan(84, 2, 2, 1.4, 1.0),
            photometry=None,
            drop=("contrast", "halpha"),
            overrides={"rms": (3.6, 3.6), "life": (60.0, 60.0)},
        ),
    ),
    (
        "Heron 58",
        "a planet of an active star",
        58,
        Recipe(
            "active dwarf",
            fixed_planets=(_planet(5.387, 11.8, 0.05, 2.0, 0.1),),
            body_teff=5200.0,
            rotation=14.2,
            inclination=1.2,
            plan=Plan(142, 3, 2, 1.2, 1.08),
            photometry=None,
            drop=("contrast",),
            overrides={"rms": (6.5, 6.5)},
        ),
    ),
)


def demo_stars() -> tuple[SyntheticStar, ...]:
    """The four stars, the same at every call."""
    out = []
    for name, tale, seed, recipe in TALES:
        star = simulate(name, recipe, np.random.default_rng(np.random.SeedSequence(seed)))
        star.truth["tale"] = tale
        out.append(star)
    return tuple(out)


def write_demo(folder: Path) -> tuple[SyntheticStar, ...]:
    """Write the scenario: a table and a sidecar per star, photometry of one, and the truth.

    Raises OSError where a file cannot be written.
    """
    stars = demo_stars()
    for star in stars:
        write_star(folder / "stars", star, stem=star.name.lower().replace(" ", "-"))
    truth = [{**s.truth, "name": s.name.lower().replace(" ", "-")} for s in stars]
    write_truth(folder / "truth.json", {"set": SCENARIO}, truth)
    return stars
