"""One star under all noise models: the signals, their assessments, and what is left over."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from screener.core import Array, Depth, KnownPlanet, ModelComparison, Orbit, Star, TimeSeries
from screener.models.assessment import Assessment, assess, merge
from screener.models.dataset import Scaled, choose_indicators, scaled_data
from screener.models.exploration import (
    Found,
    Search,
    known_terms,
    same_period,
    search_activity,
    search_white,
)
from screener.models.fitting import Fit, HyperPrior
from screener.models.joint import OrbitTerm
from screener.models.kepler import orbit_velocity
from screener.models.laplace import OrbitErrors
from screener.models.long_noise import is_long, long_processes
from screener.models.noise import NoiseModel, joint_process, white_noise
from screener.models.reweighting import reweighted
from screener.models.rotation import PeriodDensity
from screener.models.selection import choose_kernel

__all__ = ["Portrait", "Sighting", "paint", "rotation_prior"]

_INDICATORS = {Depth.QUICK: 3, Depth.STANDARD: 3, Depth.DEEP: 4}
_STARTS = {Depth.QUICK: 2, Depth.STANDARD: 4, Depth.DEEP: 6}  # of each fresh fit
_KERNELS_UP_TO = 400  # velocities; the slower kernels are not tried on longer series
_UNKNOWN_ROTATION = HyperPrior(math.log(25.0), 0.6)


@dataclass(frozen=True)
class Sighting:
    """A signal as found, with its assessment."""

    term: OrbitTerm
    false_alarm_probability: float
    found_by: tuple[str, ...]
    assessment: Assessment
    errors: OrbitErrors | None = None  # of the whole model, from standard depth on
    false_alarm_shuffled: float | None = None  # of doubtful signals, from standard depth on

    @property
    def orbit(self) -> Orbit:
        """Under the activity model where the signal is part of it, else in white noise."""
        inside = self.assessment.in_activity_set
        orbit = self.assessment.orbit if inside else self.assessment.white_orbit
        if self.errors is None:
            return orbit
        return replace(
            orbit,
            period_err=self.errors.period or orbit.period_err,
            semi_amplitude_err=self.errors.semi_amplitude,
            eccentricity_err=self.errors.eccentricity,
        )


@dataclass(frozen=True, eq=False)
class Portrait:
    """Everything the models say about one star.

    Velocities in m/s at the series' times: ``offsets`` per instrument, ``residual`` less zero
    points, slope and every orbit, ``white_sd`` the errors with fitted jitter.
    """

    scaled: Scaled
    white: Search
    activity: Search
    noise: NoiseModel
    sightings: tuple[Sighting, ...]
    known: tuple[Orbit, ...]
    offsets: Array
    jitter: Array
    residual: Array
    white_sd: Array
    slope: float  # m/s per d
    slope_err: float
    comparisons: tuple[ModelComparison, ...]
    kernel_evidence: dict[str, float]


def rotation_prior(density: PeriodDensity | None) -> HyperPrior:
    """Prior on the kernel's period from the rotation density's leading peak."""
    if density is None:
        return _UNKNOWN_ROTATION
    mode, err = density.mode, density.local_err()
    width = min(max(err / mode, 0.05), 0.35)
    return HyperPrior(math.log(mode), width)


def paint(
    star: Star,
    series: TimeSeries,
    known: Sequence[KnownPlanet],
    density: PeriodDensity | None,
    depth: Depth,
    *,
    forced: Sequence[float] = (),
    seed: int = 1,
    progress: Callable[[str, float], None] = lambda _stage, _share: None,
) -> Portrait:
    """Search, fit and assess.

    Raises
    ------
    NumericalError
        Where no fit of a noise model succeeds.
    """
    prior = rotation_prior(density)
    rotation = math.exp(prior.log_period)
    scaled = scaled_data(
        series, choose_indicators(series, _INDICATORS[depth]), max(250.0, 8 * rotation)
    )
    white = white_noise(scaled)
    progress("searching in white noise", 0.05)
    in_white = search_white(series, white, known, depth, forced, seed)
    alone, process = (
        long_processes(scaled, prior)
        if is_long(series.n_obs)
        else (joint_process(scaled, prior, joint=False), joint_process(scaled, prior))
    )
    alone.n_starts = process.n_starts = _STARTS[depth]
    progress("searching on top of the activity model", 0.15)
    hints = [f.term.period for f in in_white.found]
    on_top = search_activity(series, process, known, depth, hints)
    progress("comparing models", 0.45)
    accepted = known_terms(white, known)
    kernel_evidence: dict[str, float] = {}
    if depth is not Depth.QUICK and series.n_obs <= _KERNELS_UP_TO:
        inside = [*accepted, *(f.term for f in on_top.found)]
        choice = choose_kernel(scaled, prior, process, on_top.fit, inside)
        kernel_evidence = choice.log_evidence
        if choice.noise is not process:
            process = choice.noise
            bare = process.fit(accepted, near=[], fresh=True)
            on_top = replace(on_top, fit=choice.fit, fits=(bare, *on_top.fits[1:]))
    fitted = {
        term: orbit.period
        for noise, fit in ((white, in_white.fit), (process, on_top.fit))
        for term, orbit in zip(fit.model.orbits, noise.orbits(fit), strict=True)
    }
    found = _united(on_top.found, in_white.found, fitted, series.baseline)
    terms = [f.term for f, _ in found]
    activity_terms = [*accepted, *(f.term for f in on_top.found)]
    models = [white, white_noise(scaled, decorrelate=True)]
    models += [alone, process]
    fits = _company(models, activity_terms, [*accepted, *terms], in_white.fit, on_top.fit)
    sightings = []
    for i, (item, sources) in enumerate(found):
        progress(f"weighing the signal at {item.term.period:.4g} d", 0.45 + 0.3 * i / len(found))
        result = assess(
            series, item.term, activity_terms, [*accepted, *terms], models, fits,
            in_white.frequency,
        )  # fmt: skip
        sightings.append(
            Sighting(
                item.term,
                item.false_alarm_probability,
                sources,
                result,
                false_alarm_shuffled=item.resampled,
            )
        )
    everything = fits["white noise"]
    if depth is not Depth.QUICK:
        sightings = _with_errors(sightings, process, on_top.fit, white, everything)
    sightings.sort(key=lambda s: -max(s.assessment.gains.values()))
    rest = _leftovers(series, scaled, white, everything)
    return Portrait(
        scaled,
        in_white,
        on_top,
        process,
        tuple(sightings),
        tuple(white.orbits(everything)[: len(known)]),
        *rest,
        comparisons=_comparisons(models, fits, on_top, kernel_evidence),
        kernel_evidence=kernel_evidence,
    )


def _with_errors(
    sightings: Sequence[Sighting],
    process: NoiseModel,
    activity_fit: Fit,
    white: NoiseModel,
    white_fit: Fit,
) -> list[Sighting]:
    """Errors of the whole model, of the fit that each signal's orbit is taken from."""
    errors: dict[OrbitTerm, OrbitErrors] = {}
    for noise, result in ((white, white_fit), (process, activity_fit)):
        found = reweighted(noise, result).orbits
        errors |= dict(zip(result.model.orbits, found, strict=True))
    return [replace(s, errors=errors.get(s.term)) for s in sightings]


def _united(
    activity: Sequence[Found],
    white: Sequence[Found],
    fitted: Mapping[OrbitTerm, float],
    baseline: float,
) -> list[tuple[Found, tuple[str, ...]]]:
    """One list without doubles; each with the searches that found it."""
    terms = merge([f.term for f in activity], [f.term for f in white], fitted, baseline)
    out = []
    for term in terms:
        twins = [f for f in (*activity, *white) if f.term is term] + [
            f
            for f in white
            if f.term is not term and same_period(fitted[f.term], fitted[term], baseline)
        ]
        sources = tuple(dict.fromkeys(f.found_by for f in twins))
        fap = min(f.false_alarm_probability for f in twins)
        shuffled = next((f.resampled for f in twins if f.resampled is not None), None)
        out.append((Found(term, fap, twins[0].found_by, shuffled), sources))
    return out


def _company(
    models: Sequence[NoiseModel],
    activity_terms: Sequence[OrbitTerm],
    all_terms: Sequence[OrbitTerm],
    white_fit: Fit,
    activity_fit: Fit,
) -> dict[str, Fit]:
    """Each model with its company of orbits."""
    near = {"white noise": [white_fit], "joint process": [activity_fit]}
    fits = {}
    for noise in models:
        terms = all_terms if noise.kernel is None else activity_terms
        given = near.get(noise.name, [])
        fits[noise.name] = noise.fit(list(terms), near=given, fresh=not given)
    return fits


def _leftovers(
    series: TimeSeries, scaled: Scaled, white: NoiseModel, result: Fit
) -> tuple[Array, Array, Array, Array, float, float]:
    """Zero points, jitters, residuals, noise and slope of the white-noise fit, in m/s."""
    solution = result.model.solve(result.parameters)
    data, scale = result.model.data, white.scale
    n_columns = data.columns.shape[2]
    linear = data.columns[0] @ solution.linear_mean[:n_columns] * scale
    residual = series.rv - scaled.centre[0] - linear
    for orbit in white.orbits(result):
        residual = residual - orbit_velocity(orbit, series.time)
    n_instruments = len(series.instruments)
    offsets = scaled.centre[0] + solution.linear_mean[:n_instruments] * scale
    jitter = np.exp(result.parameters[result.model.slices["jitter"]]) * scale
    sd = np.hypot(series.rv_err, jitter[series.instrument])
    per_day = 2 * scale / max(series.baseline, 1.0)
    slope = float(solution.linear_mean[n_instruments]) * per_day
    slope_err = math.sqrt(solution.linear_covariance[n_instruments, n_instruments]) * per_day
    return offsets, jitter, residual, sd, slope, slope_err


def _comparisons(
    models: Sequence[NoiseModel],
    fits: dict[str, Fit],
    activity: Search,
    kernel_evidence: dict[str, float],
) -> tuple[ModelComparison, ...]:
    """Activity alone, planets alone, and both."""
    white, process = models[0], models[-1]
    alone = activity.fits[0]
    rows = (
        ("white noise alone", white, white.fit((), fresh=True)),
        ("orbits in white noise", white, fits["white noise"]),
        ("activity alone", process, alone),
        ("activity and orbits", process, activity.fit),
    )
    out = []
    for name, noise, result in rows:
        parameters, evidence = {}, None
        if result is activity.fit and kernel_evidence:
            evidence = kernel_evidence[noise.kernel_name]
        if noise.kernel is not None:
            parameters = {
                f"{key}{'_d' if key in ('period', 'decay') else ''}": float(np.exp(value))
                for key, value in zip(noise.kernel.names, result.parameters, strict=False)
            }
            parameters |= {f"log_evidence, {k}": v for k, v in kernel_evidence.items() if evidence}
        out.append(
            ModelComparison(
                name,
                len(result.model.orbits),
                result.log_likelihood,
                evidence,
                result.model.n_parameters + result.model.column_sd.size,
                result.converged,
                parameters,
            )
        )
    return tuple(out)
