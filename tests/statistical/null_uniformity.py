"""Table of every line of evidence: p-values under its null, stated against realised power.

    python -m tests.statistical.null_uniformity [--runs 500] [--tests rotation,cycle]

Each null is the one that the module's docstring names. For the power the effect that the module
assumes is put into the same stars, and the share in which it is seen stands beside the mean of
what was stated.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from screener.core import Array, Band, Finding, Indicator, Orbit, Signal, Star
from screener.evidence import alias, cycle, indicator_power, persistence, tests
from screener.evidence.case import Case
from screener.evidence.lines import channels_of, signal_columns
from screener.evidence.plausible_amplitude import amplitude_from_level
from screener.evidence.rotation import _stellar_density
from tests.statistical.evidence_cases import Recipe, fitted, make_case

__all__ = ["ENTRIES", "Row", "main", "measure"]


@dataclass(frozen=True)
class Entry:
    """How to make a test's null, its effect, and when the effect counts as seen.

    ``power_from_effect`` says that the power stated for the stars with the effect is compared,
    where the null stars do not know of it.
    """

    test: str
    null: Callable[[int], Case]
    effect: Callable[[int], Case]
    seen: Callable[[Finding], bool]
    draws: int = 0  # of a p-value from resamples; 0 for an analytic one
    power_from_effect: bool = False


@dataclass(frozen=True)
class Row:
    """One line of the table."""

    name: str
    runs: int
    ks_p: float
    below_1: float
    below_5: float
    stated: float
    realised: float


def _below(level: float) -> Callable[[Finding], bool]:
    return lambda finding: finding.p_value is not None and finding.p_value <= level


def _with_indicators(case: Case, added: dict[str, Array]) -> Case:
    series = case.series
    indicators = tuple(
        replace(i, value=i.value + added[i.name]) if i.name in added else i
        for i in series.indicators
    )
    return replace(case, series=replace(series, indicators=indicators))


def _mixed(seed: int, **changes: object) -> Recipe:
    """A recipe with the star's noise varied from seed to seed."""
    rng = np.random.default_rng([seed, 17])
    recipe = Recipe(
        n=int(rng.integers(60, 130)),
        amplitude=float(rng.uniform(0.7, 3.0)),
        period=float(np.exp(rng.uniform(np.log(3.0), np.log(60.0)))),
        indicator_share=float(rng.uniform(0.0, 0.9)),
        indicator_tau=float(rng.uniform(1.0, 15.0)),
        red=float(rng.uniform(0.0, 2.0)),
    )
    return replace(recipe, **changes)  # type: ignore[arg-type]


def _spoken(seed: int, case: Case, mute: float, phase: float | None = None) -> Case:
    """The indicators do what ``indicator_power`` assumes when the star makes the signal."""
    rng = np.random.default_rng([seed, 29])
    channels = channels_of(case)
    assert channels is not None
    size = indicator_power.expected(case, channels)
    # the same truncated Gaussian as the quadrature
    z = float(rng.choice(indicator_power.NODES, p=indicator_power.WEIGHTS))
    columns = signal_columns(case)
    added = {}
    for name, amplitude in zip(channels.names, size, strict=True):
        angle = rng.uniform(0.0, 2.0 * np.pi) if phase is None else phase
        loud = rng.random() >= mute
        wave = columns @ np.array([math.cos(angle), math.sin(angle)])
        added[name] = loud * amplitude * math.exp(indicator_power.SPREAD * z) * wave
    return _with_indicators(case, added)


# --- effects ------------------------------------------------------------------------------------


def _indicator_effect(seed: int) -> Case:
    return _spoken(seed, make_case(seed, _mixed(seed)), indicator_power.MUTE)


def _cycle_recipe(seed: int) -> Recipe:
    period = float(np.random.default_rng([seed, 3]).uniform(250.0, 900.0))
    return _mixed(seed, period=period, seasons=5, n=120)


def _cycle_effect(seed: int) -> Case:
    case = make_case(seed, _cycle_recipe(seed))
    columns = signal_columns(case)
    a, b = np.linalg.lstsq(columns, case.target_rv - case.residual_rv, rcond=None)[0]
    return _spoken(seed, case, 0.0, phase=math.atan2(b, a))


def _at_period(seed: int, period: float) -> Case:
    case = make_case(seed, Recipe(n=70))
    orbit = replace(case.signal.orbit, period=period, period_err=0.002 * period)
    return replace(case, signal=replace(case.signal, orbit=orbit))


def _range(case: Case) -> tuple[float, float]:
    return 0.8, 2.0 * case.series.baseline


def _rotation_null(seed: int) -> Case:
    bounds = np.log(_range(make_case(seed, Recipe(n=70))))
    # short of the ends, where the range would follow the signal
    period = float(np.exp(np.random.default_rng([seed, 5]).uniform(bounds[0] + 0.12, bounds[1])))
    return _at_period(seed, 0.95 * period)


def _rotation_effect(seed: int) -> Case:
    case = make_case(seed, Recipe(n=70))
    grid: Array = np.geomspace(*_range(case), 4000)
    weight = _stellar_density(case, grid, 0.002)
    rng = np.random.default_rng([seed, 7])
    return _at_period(seed, float(rng.choice(grid, p=weight / weight.sum())))


def _wandering_effect(seed: int) -> Case:
    recipe = _mixed(seed, period=20.0)
    plain = make_case(seed, recipe)
    rng = np.random.default_rng([seed, 11])
    wanderer = persistence._wandering(plain, rng, 1)[:, 0]
    return make_case(seed, replace(recipe, amplitude=0.0), rv_extra=wanderer)


def _alias_recipe(seed: int) -> Recipe:
    return _mixed(seed, period=float(np.random.default_rng([seed, 2]).uniform(4.0, 30.0)))


def _alias_effect(seed: int) -> Case:
    recipe = _alias_recipe(seed)
    case = make_case(seed, recipe)
    members = alias.family(case.series.time, 1.0 / recipe.period)
    chosen = members[1 + int(np.random.default_rng([seed, 9]).integers(members.size - 1))]
    return fitted(case.series, replace(recipe, period=float(1.0 / chosen)), seed)


def _chromatic(seed: int) -> Case:
    case = make_case(seed, _mixed(seed, indicators=("crx",)))
    return _with_scale(case, "crx", 3.0)


def _with_scale(case: Case, name: str, scale: float) -> Case:
    item = case.series.indicator(name)
    size = scale / float(np.std(item.value))
    scaled = Indicator(name, item.value * size, item.error * size)
    return replace(case, series=replace(case.series, indicators=(scaled,)))


def _chromatic_effect(seed: int) -> Case:
    case, rng = _chromatic(seed), np.random.default_rng([seed, 13])
    z = float(rng.choice(indicator_power.NODES, p=indicator_power.WEIGHTS))
    angle = rng.uniform(0.0, 2.0 * np.pi)
    size = case.signal.orbit.semi_amplitude * math.exp(indicator_power.SPREAD * z)
    wave = signal_columns(case) @ np.array([math.cos(angle), math.sin(angle)])
    return _with_indicators(case, {"crx": (rng.random() >= indicator_power.MUTE) * size * wave})


def _bands(seed: int, slope: float = 0.0) -> Case:
    """Three bands: the common velocities, the signal scaled by the band, noise of their own."""
    case = make_case(seed, _mixed(seed))
    rng = np.random.default_rng([seed, 15])
    orbit = case.target_rv - case.residual_rv
    bands = []
    waves = np.array([450.0, 550.0, 680.0])
    for wavelength, x in zip(waves, np.log(waves) - np.mean(np.log(waves)), strict=True):
        own = 0.8 * rng.standard_normal(case.series.n_obs)
        rv = case.series.rv + own - slope * x * orbit
        bands.append(Band(f"{wavelength:.0f}", rv, np.full(rv.size, 1.0), float(wavelength)))
    return replace(case, series=replace(case.series, bands=tuple(bands)))


def _bands_effect(seed: int) -> Case:
    rng = np.random.default_rng([seed, 19])
    z = float(rng.choice(indicator_power.NODES, p=indicator_power.WEIGHTS))
    return _bands(seed, math.exp(indicator_power.SPREAD * z))


def _plausible(seed: int) -> Case:
    """An amplitude drawn from what the star can do."""
    rng = np.random.default_rng([21, seed])
    case = make_case(seed, Recipe(n=60))
    level = float(rng.uniform(-5.1, -4.2))
    size = amplitude_from_level(level, False) * math.exp(0.7 * rng.standard_normal())
    orbit = replace(case.signal.orbit, semi_amplitude=size, semi_amplitude_err=0.0)
    return replace(
        case,
        star=Star("made-up", spectral_type="K1V", log_rhk=level),
        signal=replace(case.signal, orbit=orbit),
    )


def _beside(seed: int, harmonic: bool) -> Case:
    rng = np.random.default_rng([seed, 23])
    case = _at_period(seed, 20.0)
    other = 1.0 / (0.05 * rng.uniform(0.5, 2.0))
    if harmonic:
        err = 0.1 * 400.0 / case.series.baseline
        other = 2.0 * (20.0 + err * rng.standard_normal())
        orbit = replace(case.signal.orbit, period_err=err)
        case = replace(case, signal=replace(case.signal, orbit=orbit))
    strong = Signal("S0", Orbit(other, 50.0), 1e-9, ("white noise",))
    return replace(case, others=(strong,))


def _harmonic_null(seed: int) -> Case:
    """The signal's frequency anywhere between a quarter and four times the other's."""
    case = _beside(seed, False)
    low, high = 0.25 / 20.0, 4.0 / 20.0
    own = np.random.default_rng([seed, 25]).uniform(low, high)
    orbit = replace(case.signal.orbit, period=float(1.0 / own))
    fixed = Signal("S0", Orbit(20.0, 50.0), 1e-9, ("white noise",))
    return replace(case, signal=replace(case.signal, orbit=orbit), others=(fixed,))


def _null(seed: int) -> Case:
    return make_case(seed, _mixed(seed))


ENTRIES: dict[str, Entry] = {
    "rotation": Entry("rotation", _rotation_null, _rotation_effect, _below(0.05)),
    "indicator_power": Entry("indicator_power", _null, _indicator_effect, _below(0.01)),
    "correlation": Entry("correlation", _null, _indicator_effect, _below(0.01), 100),
    "cycle": Entry(
        "cycle", lambda s: make_case(s, _cycle_recipe(s)), _cycle_effect, _below(cycle.ALPHA)
    ),
    "line_shape": Entry("line_shape", _null, _indicator_effect, _below(0.01)),
    "persistence": Entry(
        "persistence",
        lambda s: make_case(s, _mixed(s, period=20.0)),
        _wandering_effect,
        _below(0.05),
        100,
    ),
    "alias": Entry(
        "alias",
        lambda s: make_case(s, _alias_recipe(s)),
        _alias_effect,
        _below(0.05),
        100,
        power_from_effect=True,
    ),
    "wavelength (index)": Entry("wavelength", _chromatic, _chromatic_effect, _below(0.01)),
    "wavelength (bands)": Entry("wavelength", _bands, _bands_effect, _below(0.01)),
    "plausible_amplitude": Entry(
        "plausible_amplitude",
        _plausible,
        _plausible,
        lambda f: f.p_value is not None and f.p_value > 0.05,
    ),
    "harmonics": Entry(
        "harmonics",
        _harmonic_null,
        lambda s: _beside(s, True),
        lambda f: f.statistic is not None and f.statistic < 0.5,
        power_from_effect=True,
    ),
}


def measure(name: str, runs: int, first: int = 0) -> Row:
    """Run one entry: ``runs`` stars of the null from seed ``first`` on, as many with the effect."""
    entry = ENTRIES[name]
    module = tests()[entry.test]
    p_values, stated, seen = [], [], []
    spread = np.random.default_rng(1)
    for seed in range(first, first + runs):
        finding = module.run(entry.null(seed))
        effect = module.run(entry.effect(100_000 + seed if entry.power_from_effect else seed))
        if finding.p_value is None:
            continue
        # (k + 1) / (n + 1) is a step function: spread each step evenly
        step = spread.uniform(0.0, 1.0 / (entry.draws + 1)) if entry.draws else 0.0
        p_values.append(finding.p_value - step)
        power = (effect if entry.power_from_effect else finding).power
        if power is not None and effect.p_value is not None:
            stated.append(power)
            seen.append(entry.seen(effect))
    p = np.array(p_values)
    return Row(
        name,
        p.size,
        float(stats.kstest(p, "uniform").pvalue),
        float(np.mean(p < 0.01)),
        float(np.mean(p < 0.05)),
        float(np.mean(stated)),
        float(np.mean(seen)),
    )


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the table; the exit code is 1 when a line misses its mark."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--runs", type=int, default=500)
    parser.add_argument("--tests", default=",".join(ENTRIES))
    parser.add_argument("--seed", type=int, default=0, help="first seed")
    options = parser.parse_args(arguments)
    print(f"{'test':22s} {'runs':>5s} {'KS p':>7s} {'p<.01':>6s} {'p<.05':>6s} {'stated':>7s} seen")
    worst = 0
    for name in options.tests.split(","):
        row = measure(name.strip(), options.runs, options.seed)
        good = row.ks_p > 0.01 and abs(row.stated - row.realised) < 0.10
        worst |= not good
        print(
            f"{row.name:22s} {row.runs:5d} {row.ks_p:7.3f} {row.below_1:6.3f} {row.below_5:6.3f} "
            f"{row.stated:7.2f} {row.realised:4.2f}{'' if good else '  <-- misses'}",
            flush=True,
        )
    return worst


if __name__ == "__main__":
    sys.exit(main())
