"""The system around the graded signals, as one mapping ready for JSON."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

import numpy as np

from screener.core import (
    Array,
    Depth,
    Grade,
    NumericalError,
    Orbit,
    Rotation,
    Signal,
    Star,
    TimeSeries,
)
from screener.models.kepler import minimum_mass, orbit_velocity, semi_major_axis
from screener.system.alternatives import eccentric_or_two
from screener.system.masses import (
    OrientationPrior,
    equilibrium_temperature,
    isotropic_sin_i,
    mass_posterior,
    outer_companion,
    stellar_sin_i_weights,
    transit_forecast,
)
from screener.system.nbody import NBodyOutcome, nbody_available, nbody_check
from screener.system.plan_output import plan_as_dict
from screener.system.schedule import NightPlan, rank_nights
from screener.system.sensitivity import sensitivity_summary
from screener.system.stability import pair_stability

__all__ = ["describe_system", "json_ready", "references_used", "target_velocities"]

_QUICK_DRAWS, _DRAWS = 1000, 8000
_MAX_PLANS = 2
_ALBEDO = 0.3


def describe_system(
    star: Star,
    series: TimeSeries,
    signals: Sequence[Signal],
    grades: Mapping[str, Grade],
    *,
    slope: float | None,
    slope_err: float | None,
    residual_sd: Array,
    depth: Depth,
    seed: int,
    rotation: Rotation | None = None,
    site: str | None = None,
    start: float | None = None,
) -> dict[str, Any]:
    """Masses, stability, alternatives, nights that would settle it, and detection limits.

    Parameters
    ----------
    star, series, signals, grades
        As screened; ``grades`` by signal id. Known planets need none. Signals graded likely
        stellar are left out of masses and stability.
    slope, slope_err : float or None
        Linear drift of the velocities, m/s per day, None where none was fitted.
    residual_sd : Array, shape (n_obs,)
        Total white noise of each velocity, m/s.
    depth : Depth
        Quick gives masses and pairwise stability only; standard adds alternatives, nights and
        sensitivity; deep adds an N-body check where ``rebound`` is installed.
    seed : int
        The same seed gives the same result.
    rotation : Rotation, optional
        The star's rotation, for its inclination and the activity hypothesis.
    site, start
        For the nights: see ``rank_nights``.

    Returns
    -------
    dict
        JSON-ready, None for what is not known. ``planets`` by signal id; ``stability``,
        ``alternatives``, ``nights``, ``outer_companion``, ``sensitivity``; ``sentences``.
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 0x5E57]))
    planets = [s for s in signals if s.known or grades.get(s.id) is not Grade.LIKELY_STELLAR]
    n_draws = _QUICK_DRAWS if depth is Depth.QUICK else _DRAWS
    period, period_err = _rotation(star, rotation)
    result: dict[str, Any] = {
        "planets": {
            s.id: _companion(star, s.orbit, series, (period, period_err), rng, n_draws)
            for s in planets
            if s.orbit.semi_amplitude > 0
        },
        "stability": _stability(star, planets, rng, depth),
        "outer_companion": None,
        "alternatives": {},
        "nights": {},
        "sensitivity": None,
    }
    if slope is not None and star.mass is not None and series.n_obs > 1:
        result["outer_companion"] = outer_companion(slope, slope_err, series.baseline, star.mass)
    if depth is not Depth.QUICK and series.n_obs >= 8:
        _deeper(
            result, star, series, signals, grades, slope, residual_sd, seed, period, site, start
        )
    result["sentences"] = _sentences(result)
    return json_ready(result)  # type: ignore[no-any-return]


def _rotation(star: Star, rotation: Rotation | None) -> tuple[float | None, float | None]:
    if star.rotation_period is not None:
        return star.rotation_period, star.rotation_period_err
    return (None, None) if rotation is None else (rotation.period, rotation.period_err)


def _deeper(
    result: dict[str, Any],
    star: Star,
    series: TimeSeries,
    signals: Sequence[Signal],
    grades: Mapping[str, Grade],
    slope: float | None,
    sd: Array,
    seed: int,
    rotation_period: float | None,
    site: str | None,
    start: float | None,
) -> None:
    residual = target_velocities(series, signals, slope, sd)
    nuisance = _nuisance(series, slope is not None)
    result["sensitivity"] = sensitivity_summary(
        series.time, residual, sd, seed=seed, stellar_mass=star.mass, nuisance=nuisance
    )
    plans = 0
    for signal in signals:
        if signal.known or grades.get(signal.id) is Grade.LIKELY_STELLAR:
            continue
        target = target_velocities(series, signals, slope, sd, keep=signal.id)
        result["alternatives"][signal.id] = eccentric_or_two(
            series.time, target, sd, signal.orbit, nuisance=nuisance
        )
        if grades.get(signal.id) is Grade.AMBIGUOUS and plans < _MAX_PLANS:
            plans += 1
            plan = _plan(star, series, target, sd, signal.orbit, rotation_period, site, start)
            result["nights"][signal.id] = None if plan is None else plan_as_dict(plan)


def _plan(
    star: Star,
    series: TimeSeries,
    target: Array,
    sd: Array,
    orbit: Orbit,
    rotation_period: float | None,
    site: str | None,
    start: float | None,
) -> NightPlan | None:
    try:
        return rank_nights(
            star,
            series.time,
            target,
            sd,
            orbit,
            rotation_period=rotation_period,
            site=site,
            start=start,
            indicators=series.indicators,
        )
    except NumericalError:
        return None  # a plan is a service; its failure must not take the verdict along


def target_velocities(
    series: TimeSeries,
    signals: Sequence[Signal],
    slope: float | None,
    sd: Array,
    *,
    keep: str | None = None,
) -> Array:
    """Velocities less slope, zero points and every orbit but the one to ``keep``, (n_obs,) m/s.

    Zero points are taken from what is left with all orbits subtracted, so that a badly sampled
    orbit does not end in them.
    """
    rest = series.rv - (slope or 0.0) * (series.time - float(np.mean(series.time)))
    kept = np.zeros_like(rest)
    for signal in signals:
        if signal.orbit.semi_amplitude > 0:
            velocity = orbit_velocity(signal.orbit, series.time)
            rest = rest - velocity
            if signal.id == keep:
                kept = velocity
    for index in range(len(series.instruments)):
        rows = series.instrument == index
        if np.any(rows):
            rest[rows] -= np.average(rest[rows], weights=sd[rows] ** -2)
    return np.asarray(rest + kept)


def _nuisance(series: TimeSeries, with_slope: bool) -> Array:
    """One column for each instrument, and one for the slope if it was fitted."""
    columns = [
        (series.instrument == index).astype(float)
        for index in range(len(series.instruments))
        if np.any(series.instrument == index)
    ]
    if with_slope:
        columns.append((series.time - series.time.mean()) / max(series.baseline, 1.0))
    return np.stack(columns, axis=1)


def _companion(
    star: Star,
    orbit: Orbit,
    series: TimeSeries,
    rotation: tuple[float | None, float | None],
    rng: np.random.Generator,
    n_draws: int,
) -> dict[str, Any] | None:
    if star.mass is None:
        return None
    mass = minimum_mass(orbit.period, orbit.semi_amplitude, orbit.eccentricity, star.mass)
    axis = semi_major_axis(orbit.period, star.mass, mass)
    sin_i = isotropic_sin_i(n_draws, rng)
    posteriors = {
        prior.value: mass_posterior(orbit, star, rng, prior=prior, sin_i=sin_i)
        for prior in OrientationPrior
    }
    weights = stellar_sin_i_weights(star, rotation[0], rotation[1], sin_i, rng)
    if weights is not None:
        posteriors["aligned with the star's spin"] = mass_posterior(
            orbit, star, rng, sin_i=sin_i, sin_i_weights=weights
        )
    temperatures = {}
    if star.teff is not None and star.radius is not None:
        temperatures = {
            f"equilibrium_temperature_albedo_{label}_k": equilibrium_temperature(
                star.teff, star.radius, axis, orbit.eccentricity, albedo
            )
            for label, albedo in (("0", 0.0), ("0_3", _ALBEDO))
        }
    return {
        "m_sin_i_mjup": mass,
        "semi_major_axis_au": axis,
        "true_mass": {k: _posterior_dict(p) for k, p in posteriors.items() if p is not None},
        "transit": _transit(star, orbit, series),
        **temperatures,
    }


def _posterior_dict(posterior: Any) -> dict[str, Any]:
    names = ("q05_mjup", "q16_mjup", "median_mjup", "q84_mjup", "q95_mjup")
    return {
        **dict(zip(names, posterior.quantiles, strict=True)),
        "chance_above_13_mjup": posterior.above_13,
        "chance_above_80_mjup": posterior.above_80,
        "effective_draws": posterior.effective_draws,
    }


def _transit(star: Star, orbit: Orbit, series: TimeSeries) -> dict[str, Any] | None:
    if series.n_obs == 0:
        return None
    forecast = transit_forecast(orbit, star, float(series.time[0]), float(series.time[-1]))
    if forecast is None:
        return None
    return {
        "probability": forecast.probability,
        "next_bjd_d": forecast.time,
        "next_err_d": forecast.time_err,
        "window_start_bjd_d": forecast.time - 2 * forecast.time_err - forecast.duration / 2,
        "window_end_bjd_d": forecast.time + 2 * forecast.time_err + forecast.duration / 2,
        "duration_d": forecast.duration,
        "depth_ppm": 1e6 * forecast.depth,
    }


def _stability(
    star: Star, planets: Sequence[Signal], rng: np.random.Generator, depth: Depth
) -> dict[str, Any]:
    n_draws = 300 if depth is Depth.QUICK else 2000
    pairs = pair_stability(star, planets, rng, n_draws=n_draws)
    result: dict[str, Any] = {"pairs": [asdict(p) for p in pairs], "n_body": None}
    if depth is Depth.DEEP and pairs:
        outcome = nbody_check(star, planets, rng)
        result["n_body"] = None if outcome is None else _nbody_dict(outcome)
        if outcome is None and not nbody_available():
            result["n_body_missing"] = "the optional package rebound is not installed"
    return result


def _nbody_dict(outcome: NBodyOutcome) -> dict[str, Any]:
    return {
        "n_draws": outcome.n_draws,
        "n_survived": outcome.n_survived,
        "span_d": outcome.span,
        "integrator": outcome.integrator,
    }


def _sentences(result: Mapping[str, Any]) -> list[str]:
    lines = []
    for name, planet in result["planets"].items():
        if planet is None:
            continue
        mass = planet["true_mass"]["isotropic"]
        lines.append(
            f"{name}: m sin i = {planet['m_sin_i_mjup']:.3g} Jupiter masses at "
            f"{planet['semi_major_axis_au']:.3g} au; true mass {mass['median_mjup']:.3g} "
            f"({mass['q05_mjup']:.3g} to {mass['q95_mjup']:.3g}) for random orientations, above 13 "
            f"with a chance of {_small(mass['chance_above_13_mjup'])}."
        )
    for pair in result["stability"]["pairs"]:
        lines.append(_pair_sentence(pair))
    if result["outer_companion"] is not None:
        lines.append(_slope_sentence(result["outer_companion"]))
    lines += [f"{name}: {a['sentence']}" for name, a in result["alternatives"].items()]
    lines += [f"{name}: {p['sentence']}" for name, p in result["nights"].items() if p]
    if result["sensitivity"] is not None:
        lines.append(result["sensitivity"]["sentence"])
    return lines


def _small(chance: float) -> str:
    """A share of a thousand draws or so in per cent; none of them is less than a thousandth."""
    return f"{100 * chance:.2g} %" if chance > 0 else "less than 0.1 %"


def _slope_sentence(outer: Mapping[str, Any]) -> str:
    mass, error = outer["mass_min_mjup"], outer["mass_min_err_mjup"]
    if error is not None and mass < 3 * error:
        return "No slope beyond three times its error: no sign of a body far out."
    return (
        f"The slope asks for an outer companion of at least {mass:.2g} Jupiter masses beyond "
        f"{outer['distance_min_au']:.2g} au."
    )


def _pair_sentence(pair: Mapping[str, Any]) -> str:
    near = pair["commensurability"]
    text = (
        f"{pair['inner']} and {pair['outer']}: {pair['hill_separation']:.1f} mutual Hill radii "
        f"apart; orbits cross in {100 * pair['crossing']:.0f} %, AMD-unstable in "
        f"{100 * pair['amd_unstable']:.0f} % of the draws"
    )
    if near["near"]:
        text += f"; periods near {near['p']}:{near['q']} (off by {100 * near['offset']:+.1f} %)"
        if near["harmonic"]:
            text += ", so the shorter may be a harmonic of the longer"
    return text + "."


def json_ready(value: Any) -> Any:
    """The same with plain Python numbers, lists and None for NaN and infinities."""
    if isinstance(value, Mapping):
        return {str(k): json_ready(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [json_ready(v) for v in value]
    if isinstance(value, np.ndarray):
        return [json_ready(v) for v in value.tolist()]
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, np.integer):
        return int(value)
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    return value


def references_used(description: Mapping[str, Any]) -> tuple[str, ...]:
    """Citation keys of the methods behind a description made by ``describe_system``."""
    keys: set[str] = set()
    planets = [p for p in (description.get("planets") or {}).values() if p]
    if planets:
        keys |= {"cumming2008", "ho2011"}
        if any("aligned with the star's spin" in p["true_mass"] for p in planets):
            keys.add("masuda2020")
        if any(p["transit"] for p in planets):
            keys |= {"barnes2007", "chen2017", "winn2010"}
    stability = description.get("stability") or {}
    if stability.get("pairs"):
        keys |= {"gladman1993", "laskar2017"}
    if stability.get("n_body"):
        keys.add("rein2012")
    if description.get("outer_companion"):
        keys.add("feng2015")
    if description.get("alternatives"):
        keys |= {"angladaescude2010", "kass1995", "kurster2015"}
    if any((description.get("nights") or {}).values()):
        keys |= {"dawson2010", "giles2017", "haywood2014", "kolchinsky2017", "saar1997"}
    return tuple(sorted(keys))
