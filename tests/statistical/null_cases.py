"""The stars of the table of null uniformity: each test's null, and the effect it assumes."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from screener.core import Array, Band, Indicator, Orbit, Signal, Star
from screener.evidence import alias, indicator_power, persistence
from screener.evidence.case import Case
from screener.evidence.lines import channels_of, signal_columns
from screener.evidence.plausible_amplitude import amplitude_from_level
from screener.evidence.rotation import _stellar_density
from tests.statistical import joint_cases
from tests.statistical.evidence_cases import Recipe, fitted, make_case

__all__ = [
    "alias_effect",
    "alias_recipe",
    "bands",
    "bands_effect",
    "beside",
    "bundled",
    "chromatic",
    "chromatic_effect",
    "cycle_effect",
    "cycle_recipe",
    "harmonic_null",
    "indicator_effect",
    "make_case",
    "null",
    "plausible",
    "red_recipe",
    "rotation_effect",
    "rotation_null",
    "scattered",
    "steady_recipe",
    "wandering",
]


def with_indicators(case: Case, added: dict[str, Array]) -> Case:
    series = case.series
    indicators = tuple(
        replace(i, value=i.value + added[i.name]) if i.name in added else i
        for i in series.indicators
    )
    return replace(case, series=replace(series, indicators=indicators))


def mixed(seed: int, **changes: object) -> Recipe:
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


def spoken(seed: int, case: Case, mute: float, phase: float | None = None) -> Case:
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
    return with_indicators(case, added)


# --- effects ------------------------------------------------------------------------------------


def indicator_effect(seed: int) -> Case:
    return spoken(seed, make_case(seed, mixed(seed)), indicator_power.MUTE)


def cycle_recipe(seed: int) -> Recipe:
    period = float(np.random.default_rng([seed, 3]).uniform(250.0, 900.0))
    return mixed(seed, period=period, seasons=5, n=120)


def cycle_effect(seed: int) -> Case:
    case = make_case(seed, cycle_recipe(seed))
    columns = signal_columns(case)
    a, b = np.linalg.lstsq(columns, case.target_rv - case.residual_rv, rcond=None)[0]
    return spoken(seed, case, 0.0, phase=math.atan2(b, a))


def at_period(seed: int, period: float) -> Case:
    case = make_case(seed, Recipe(n=70))
    orbit = replace(case.signal.orbit, period=period, period_err=0.002 * period)
    return replace(case, signal=replace(case.signal, orbit=orbit))


def range(case: Case) -> tuple[float, float]:
    return 0.8, 2.0 * case.series.baseline


def rotation_null(seed: int) -> Case:
    bounds = np.log(range(make_case(seed, Recipe(n=70))))
    # short of the ends, where the range would follow the signal
    period = float(np.exp(np.random.default_rng([seed, 5]).uniform(bounds[0] + 0.12, bounds[1])))
    return at_period(seed, 0.95 * period)


def rotation_effect(seed: int) -> Case:
    case = make_case(seed, Recipe(n=70))
    grid: Array = np.geomspace(*range(case), 4000)
    weight = _stellar_density(case, grid, 0.002)
    rng = np.random.default_rng([seed, 7])
    return at_period(seed, float(rng.choice(grid, p=weight / weight.sum())))


def wandering(seed: int, recipe: Recipe) -> Case:
    plain = make_case(seed, recipe)
    rng = np.random.default_rng([seed, 11])
    wanderer = persistence._wandering(plain, rng, 1)[:, 0]
    return make_case(seed, replace(recipe, amplitude=0.0), rv_extra=wanderer)


def steady_recipe(seed: int) -> Recipe:
    return mixed(seed, period=20.0)


def alias_recipe(seed: int) -> Recipe:
    return mixed(seed, period=float(np.random.default_rng([seed, 2]).uniform(4.0, 30.0)))


def alias_effect(seed: int) -> Case:
    recipe = alias_recipe(seed)
    case = make_case(seed, recipe)
    members = alias.family(case.series.time, 1.0 / recipe.period)
    chosen = members[1 + int(np.random.default_rng([seed, 9]).integers(members.size - 1))]
    return fitted(case.series, replace(recipe, period=float(1.0 / chosen)), seed)


def chromatic(seed: int) -> Case:
    case = make_case(seed, mixed(seed, indicators=("crx",)))
    return with_scale(case, "crx", 3.0)


def with_scale(case: Case, name: str, scale: float) -> Case:
    item = case.series.indicator(name)
    size = scale / float(np.std(item.value))
    scaled = Indicator(name, item.value * size, item.error * size)
    return replace(case, series=replace(case.series, indicators=(scaled,)))


def chromatic_effect(seed: int) -> Case:
    case, rng = chromatic(seed), np.random.default_rng([seed, 13])
    z = float(rng.choice(indicator_power.NODES, p=indicator_power.WEIGHTS))
    angle = rng.uniform(0.0, 2.0 * np.pi)
    size = case.signal.orbit.semi_amplitude * math.exp(indicator_power.SPREAD * z)
    wave = signal_columns(case) @ np.array([math.cos(angle), math.sin(angle)])
    return with_indicators(case, {"crx": (rng.random() >= indicator_power.MUTE) * size * wave})


def bands(seed: int, slope: float = 0.0) -> Case:
    """Three bands: the common velocities, the signal scaled by the band, noise of their own."""
    case = make_case(seed, mixed(seed))
    rng = np.random.default_rng([seed, 15])
    orbit = case.target_rv - case.residual_rv
    bands = []
    waves = np.array([450.0, 550.0, 680.0])
    for wavelength, x in zip(waves, np.log(waves) - np.mean(np.log(waves)), strict=True):
        own = 0.8 * rng.standard_normal(case.series.n_obs)
        rv = case.series.rv + own - slope * x * orbit
        bands.append(Band(f"{wavelength:.0f}", rv, np.full(rv.size, 1.0), float(wavelength)))
    return replace(case, series=replace(case.series, bands=tuple(bands)))


def bands_effect(seed: int) -> Case:
    rng = np.random.default_rng([seed, 19])
    z = float(rng.choice(indicator_power.NODES, p=indicator_power.WEIGHTS))
    return bands(seed, math.exp(indicator_power.SPREAD * z))


def plausible(seed: int) -> Case:
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


def beside(seed: int, harmonic: bool) -> Case:
    rng = np.random.default_rng([seed, 23])
    case = at_period(seed, 20.0)
    other = 1.0 / (0.05 * rng.uniform(0.5, 2.0))
    if harmonic:
        err = 0.1 * 400.0 / case.series.baseline
        other = 2.0 * (20.0 + err * rng.standard_normal())
        orbit = replace(case.signal.orbit, period_err=err)
        case = replace(case, signal=replace(case.signal, orbit=orbit))
    strong = Signal("S0", Orbit(other, 50.0), 1e-9, ("white noise",))
    return replace(case, others=(strong,))


def harmonic_null(seed: int) -> Case:
    """The signal's frequency anywhere between a quarter and four times the other's."""
    case = beside(seed, False)
    low, high = 0.25 / 20.0, 4.0 / 20.0
    own = np.random.default_rng([seed, 25]).uniform(low, high)
    orbit = replace(case.signal.orbit, period=float(1.0 / own))
    fixed = Signal("S0", Orbit(20.0, 50.0), 1e-9, ("white noise",))
    return replace(case, signal=replace(case.signal, orbit=orbit), others=(fixed,))


def null(seed: int) -> Case:
    return make_case(seed, mixed(seed))


def red_recipe(seed: int) -> Recipe:
    """Red noise well above the errors, of any memory, and a signal that can be seen in it."""
    rng = np.random.default_rng([seed, 31])
    red, tau = float(rng.uniform(3.0, 15.0)), float(np.exp(rng.uniform(np.log(3.0), np.log(60.0))))
    size = red * float(rng.uniform(1.0, 4.0))
    return mixed(seed, period=20.0, red=red, red_tau=tau, amplitude=size)


def scattered(seed: int) -> Case:
    """Five signals anywhere in ln(period)."""
    rng = np.random.default_rng([seed, 35])
    periods = np.exp(rng.uniform(np.log(2.5), np.log(70.0), 5))
    return joint_cases.in_company(seed, tuple(periods), tuple(rng.uniform(1.0, 3.0, 5)))


def bundled(seed: int, divisors: tuple[int, ...], spread: float) -> Case:
    """Signals around rotation (11 d) or its harmonics."""
    rng = np.random.default_rng([seed, 37])
    periods = 11.0 / np.array(divisors) * np.exp(spread * rng.standard_normal(len(divisors)))
    sizes = rng.uniform(1.0, 3.0, periods.size)
    return joint_cases.in_company(seed, tuple(periods), tuple(sizes))
