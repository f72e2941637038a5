"""Table of every line of evidence: p-values under its null, stated against realised power.

    python -m tests.statistical.null_uniformity [--runs 500] [--tests rotation,own_null:60]

Each null is the one that the module's docstring names. For the power the effect that the module
assumes is put into the same stars, and the share in which it is seen stands beside the mean of
what was stated. A Bayes factor is checked through P(BF >= b) <= 1/b: its inverse must not be
small more often than a p-value would be. Lines that state neither are descriptive: that they
state none is checked, and what they say of stars with and without a planet is printed.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

from screener.core import Finding, Outcome
from screener.evidence import indicator_power, tests
from screener.evidence.case import Case
from tests.statistical import joint_cases
from tests.statistical import null_cases as stars

__all__ = ["ENTRIES", "Row", "main", "measure"]


def _stated_p(finding: Finding) -> float | None:
    return finding.p_value


@dataclass(frozen=True)
class Entry:
    """How to make a test's null, its effect, and when the effect counts as seen.

    ``seen`` None: no power is stated. ``power_from_effect`` says that the power stated for the
    stars with the effect is compared, where the null stars do not know of it. ``bound``: the
    p-value may be too large, never too small. ``whole`` replaces everything: p-value, stated
    power, and whether it was seen.
    """

    test: str
    null: Callable[[int], Case]
    effect: Callable[[int], Case]
    seen: Callable[[Finding], bool] | None
    draws: int = 0  # of a p-value from resamples; 0 for an analytic one
    power_from_effect: bool = False
    p: Callable[[Finding], float | None] = _stated_p
    bound: bool = False
    descriptive: bool = False
    whole: Callable[[int], tuple[float, float, bool]] | None = None
    most: int = 500  # runs, unless asked for
    remark: str = ""


@dataclass(frozen=True)
class Row:
    """One line of the table; NaN where something is not stated."""

    name: str
    runs: int
    ks_p: float = math.nan
    below_1: float = math.nan
    below_5: float = math.nan
    stated: float = math.nan
    realised: float = math.nan
    remark: str = ""
    good: bool = True


def _below(level: float) -> Callable[[Finding], bool]:
    return lambda finding: finding.p_value is not None and finding.p_value <= level


def _inverse_bayes_factor(finding: Finding) -> float:
    return math.exp(min(0.0, -float(finding.parameters["log_bayes"])))


_PLANET = 3.0  # m/s, beside 1 m/s of errors and 1 to 4 m/s of activity


def _descriptive(test: str, null: Callable[[int], Case], effect: Callable[[int], Case]) -> Entry:
    return Entry(test, null, effect, None, descriptive=True)


ENTRIES: dict[str, Entry] = {
    "rotation": Entry("rotation", stars.rotation_null, stars.rotation_effect, _below(0.05)),
    "indicator_power": Entry("indicator_power", stars.null, stars.indicator_effect, _below(0.01)),
    "correlation": Entry("correlation", stars.null, stars.indicator_effect, _below(0.01), 100),
    "cycle": Entry(
        "cycle",
        lambda s: stars.make_case(s, stars.cycle_recipe(s)),
        stars.cycle_effect,
        _below(indicator_power.ALPHA),
    ),
    "line_shape": Entry("line_shape", stars.null, stars.indicator_effect, _below(0.01)),
    "persistence": Entry(
        "persistence",
        lambda s: stars.make_case(s, stars.steady_recipe(s)),
        lambda s: stars.wandering(s, stars.steady_recipe(s)),
        _below(0.05),
        100,
    ),
    "persistence (red)": Entry(
        "persistence",
        lambda s: stars.make_case(s, stars.red_recipe(s)),
        lambda s: stars.wandering(s, stars.red_recipe(s)),
        _below(0.05),
        100,
    ),
    "alias": Entry(
        "alias",
        lambda s: stars.make_case(s, stars.alias_recipe(s)),
        stars.alias_effect,
        _below(0.05),
        100,
        power_from_effect=True,
    ),
    "wavelength (index)": Entry(
        "wavelength", stars.chromatic, stars.chromatic_effect, _below(0.01)
    ),
    "wavelength (bands)": Entry("wavelength", stars.bands, stars.bands_effect, _below(0.01)),
    "plausible_amplitude": Entry(
        "plausible_amplitude",
        stars.plausible,
        stars.plausible,
        lambda f: f.p_value is not None and f.p_value > 0.05,
    ),
    "harmonics": Entry(
        "harmonics",
        stars.harmonic_null,
        lambda s: stars.beside(s, True),
        lambda f: f.statistic is not None and f.statistic < 0.5,
        power_from_effect=True,
    ),
    "correlation (latent)": Entry(
        "correlation",
        joint_cases.with_latent,
        joint_cases.with_latent,
        None,
        100,
        p=lambda finding: finding.parameters["latent_p"],
    ),
    "joint_amplitude": Entry(
        "joint_amplitude",
        lambda s: joint_cases.assessed(s, 0.0),
        lambda s: joint_cases.assessed(s, _PLANET),
        None,
        p=_inverse_bayes_factor,
        bound=True,
        remark="P(BF >= b) <= 1/b",
    ),
    "own_null": Entry(
        "own_null",
        stars.null,
        stars.null,
        None,
        joint_cases.N_DRAWS,
        # stars in which no signal is found have p = 1, and there are many
        bound=True,
        whole=joint_cases.ranked,
        most=60,
        remark="best signal; 1 where none was found",
    ),
    **{
        name: _descriptive(
            name,
            lambda s: joint_cases.assessed(s, 0.0),
            lambda s: joint_cases.assessed(s, _PLANET),
        )
        for name in ("activity_gain", "prediction", "dominance")
    },
    "neighbours": _descriptive(
        "neighbours", stars.scattered, lambda s: stars.bundled(s, (1, 1, 1, 1), 0.06)
    ),
    "family": _descriptive("family", stars.scattered, lambda s: stars.bundled(s, (1, 2, 3), 0.02)),
    "sampling": _descriptive("sampling", stars.null, stars.null),
}


def _describe(name: str, runs: int, first: int) -> Row:
    """What a line without p-value says under its null and with its effect."""
    entry = ENTRIES[name]
    run = tests()[entry.test].run
    found = {
        kind: [run(make(seed)) for seed in range(first, first + runs)]
        for kind, make in (("null", entry.null), ("effect", entry.effect))
    }

    def share(outcome: Outcome) -> str:
        parts = [np.mean([f.outcome is outcome for f in found[kind]]) for kind in found]
        return f"{outcome.value} {parts[0]:.0%} of null, {parts[1]:.0%} with the effect"

    silent = all(f.p_value is None and f.power is None for fs in found.values() for f in fs)
    says = f"{share(Outcome.SUPPORTS_PLANET)}; {share(Outcome.SUPPORTS_STAR)}"
    what = "descriptive: no p-value or power stated" if silent else "STATES WHAT IS NOT CHECKED"
    return Row(name, runs, remark=f"{what} ({says})", good=silent)


def _collect(name: str, runs: int, first: int) -> tuple[list[float], list[float], list[bool]]:
    """p-values under the null, stated powers, and whether the effect was seen."""
    entry = ENTRIES[name]
    module = tests()[entry.test]
    p_values, stated, seen = [], [], []
    for seed in range(first, first + runs):
        if entry.whole is not None:
            p, power, hit = entry.whole(seed)
            p_values.append(p)
            stated.append(power)
            seen.append(hit)
            continue
        finding = module.run(entry.null(seed))
        found = entry.p(finding)
        if found is None:
            continue
        p_values.append(found)
        if entry.seen is None:
            continue
        effect = module.run(entry.effect(100_000 + seed if entry.power_from_effect else seed))
        power = (effect if entry.power_from_effect else finding).power
        if power is not None and effect.p_value is not None:
            stated.append(power)
            seen.append(entry.seen(effect))
    return p_values, stated, seen


def measure(name: str, runs: int, first: int = 0) -> Row:
    """Run one entry: ``runs`` stars of the null from seed ``first`` on, as many with the effect."""
    entry = ENTRIES[name]
    if entry.descriptive:
        return _describe(name, runs, first)
    p_values, stated, seen = _collect(name, runs, first)
    # (k + 1) / (n + 1) is a step function: spread each step evenly
    step = 1.0 / (entry.draws + 1) if entry.draws else 0.0
    p = np.array(p_values) - np.random.default_rng(1).uniform(0.0, 1.0, len(p_values)) * step
    ks_p = float(
        stats.kstest(p, "uniform", alternative="greater" if entry.bound else "two-sided").pvalue
    )
    powers = (float(np.mean(stated)), float(np.mean(seen))) if stated else (math.nan, math.nan)
    good = ks_p > 0.01 and not abs(powers[0] - powers[1]) >= 0.10
    remark = entry.remark
    below = (float(np.mean(p < 0.01)), float(np.mean(p < 0.05)))
    return Row(name, p.size, ks_p, *below, *powers, remark, good)


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table; the exit code is 1 when a line misses its mark."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--runs", type=int, default=500)
    parser.add_argument(
        "--tests", default=",".join(ENTRIES), help="names, each with :RUNS where they differ"
    )
    parser.add_argument("--seed", type=int, default=0, help="first seed")
    options = parser.parse_args(arguments)
    print(f"{'test':22s} {'runs':>5s} {'KS p':>7s} {'p<.01':>6s} {'p<.05':>6s} {'stated':>7s} seen")
    worst = 0
    for word in options.tests.split(","):
        name, _, number = word.strip().partition(":")
        row = measure(name, int(number or min(options.runs, ENTRIES[name].most)), options.seed)
        worst |= not row.good
        print(_line(row), flush=True)
    return worst


def _line(row: Row) -> str:
    if math.isnan(row.ks_p):
        return f"{row.name:22s} {row.runs:5d}    {row.remark}"
    power = "      -    -"
    if not math.isnan(row.stated):
        power = f"{row.stated:7.2f} {row.realised:4.2f}"
    end = f"  {row.remark}" if row.remark else ""
    return (
        f"{row.name:22s} {row.runs:5d} {row.ks_p:7.3f} {row.below_1:6.3f} {row.below_5:6.3f} "
        f"{power}{end}{'' if row.good else '  <-- misses'}"
    )


if __name__ == "__main__":
    sys.exit(main())
