"""One star from observations to verdict; no input or output here.

The way of the data: star -> signals -> activity and orbit model -> lines of evidence -> rules ->
verdict.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, replace
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

from screener import __version__
from screener.core import (
    Depth,
    Grade,
    Observations,
    Rotation,
    Screening,
    Signal,
    SignalVerdict,
    TimeSeries,
    Verdict,
)
from screener.curves import products
from screener.judging import Judged, Progress, against_own_null, judge
from screener.models.laplace import laplace
from screener.models.planet_evidences import evidence_problem, planet_evidences
from screener.models.portrait import Portrait, paint
from screener.models.posterior import sample
from screener.models.rotation import estimate_rotation
from screener.rules import RuleSet, load_rules
from screener.system import describe_system, references_used

__all__ = ["Progress", "screen"]

_STEPS = 6000  # of each walker at the deep level
_METHODS = ("baluev2008", "zechmeister2009", "rajpaul2015", "haywood2014", "delisle2020")


def _silent(_stage: str, _share: float) -> None:
    """No progress wanted."""


def screen(
    observations: Observations,
    *,
    depth: Depth = Depth.STANDARD,
    seed: int = 1,
    rules: RuleSet | None = None,
    period: float | None = None,
    progress: Progress | None = None,
    with_products: bool = True,
    workers: int = 1,
    site: str | None = None,
) -> Screening:
    """Screen one star.

    Parameters
    ----------
    observations : Observations
        From ``screener.intake.read_star``.
    depth, seed
        How much work to spend, and the seed of every random draw. The same input, version, depth
        and seed give the same verdict.
    rules : RuleSet, optional
        The default rules if absent.
    period : float, optional
        A period (d) that is to be graded whether or not a search finds it.
    progress : callable, optional
        Called with the name of the stage and the share done.
    with_products : bool
        Whether to make the arrays behind the figures as well.
    workers : int
        Processes for the draws of the star's own null; does not change the result.
    site : str, optional
        Observatory (a name, or "latitude,longitude[,height]") for which the nights that would
        settle an ambiguous signal are ranked.

    Raises
    ------
    NumericalError
        Where no noise model can be fitted.
    """
    rules = rules or load_rules()
    if period is not None:
        period = float(f"{period:.10g}")  # as it is recorded, so that a rerun starts from the same
    # two numeric threads on two busy cores make small factorisations hundreds of times slower
    with threadpool_limits(1):
        return _screen(
            observations, depth, seed, rules, period, progress or _silent, with_products, workers,
            site,
        )  # fmt: skip


def _screen(
    observations: Observations,
    depth: Depth,
    seed: int,
    rules: RuleSet,
    period: float | None,
    tell: Progress,
    with_products: bool,
    workers: int,
    site: str | None,
) -> Screening:
    series = observations.series
    tell("rotation period", 0.0)
    rotation, density = estimate_rotation(observations.star, series)
    portrait = paint(
        observations.star,
        series,
        observations.known_planets,
        density,
        depth,
        forced=(period,) if period else (),
        seed=seed,
        progress=tell,
    )
    tell("lines of evidence", 0.75)
    judged, known = judge(
        observations.star, series, portrait, rotation, density, rules, depth, seed
    )
    if depth is not Depth.QUICK and judged:
        judged = against_own_null(observations.star, portrait, judged, rules, seed, workers, tell)
    tell("the system", 0.95)
    posterior = None
    if depth is Depth.DEEP:
        tell("sampling the posterior", 0.92)
        posterior = _sampled(portrait, seed)
        if not portrait.noise.approximation:
            tell("weighing the number of planets", 0.94)
            posterior["evidences"] = _evidences(portrait, series, seed)
    verdict = _verdict(
        observations, portrait, rotation, judged, known, posterior,
        rules=rules, depth=depth, seed=seed, site=site,
    )  # fmt: skip
    verdict = replace(verdict, asked_period=period, rules_file=rules.overlay, site=site)
    shown = None
    if with_products:
        tell("curves for the figures", 0.97)
        shown = products(series, portrait, [j.signal for j in judged], known)
    tell("done", 1.0)
    return Screening(verdict, shown)


def _verdict(
    observations: Observations,
    portrait: Portrait,
    rotation: Rotation,
    judged: Sequence[Judged],
    known: Sequence[Signal],
    posterior: dict[str, Any] | None,
    *,
    rules: RuleSet,
    depth: Depth,
    seed: int,
    site: str | None,
) -> Verdict:
    series = observations.series
    grades: dict[str, Grade] = {j.signal.id: j.graded.grade for j in judged}
    system = describe_system(
        observations.star,
        series,
        [*(j.signal for j in judged), *known],
        grades,
        slope=portrait.slope,
        slope_err=portrait.slope_err,
        residual_sd=portrait.white_sd,
        depth=depth,
        seed=seed,
        rotation=rotation,
        site=site,
    )
    verdicts = tuple(
        SignalVerdict(
            j.signal,
            j.graded.grade,
            j.graded.score,
            j.findings,
            j.graded.trace,
            j.graded.deciding_rules,
            j.graded.next_step,
            j.graded.would_change,
        )
        for j in judged
    )
    used = {key for j in judged for f in j.findings for key in f.references}
    used |= set(references_used(system))
    return Verdict(
        star=observations.star,
        version=__version__,
        rules=rules.label,
        rules_sha256=rules.sha256,
        seed=seed,
        depth=depth,
        record=observations.record,
        notes=observations.notes,
        n_obs=observations.notes.n_exposures,
        n_nights=series.n_nights,
        baseline=series.baseline,
        instruments=series.instruments,
        indicators=tuple(i.name for i in series.indicators),
        rotation=rotation,
        signals=verdicts,
        known_planets=tuple(known),
        models=portrait.comparisons,
        system=system,
        cautions=_cautions(observations, portrait, rotation, posterior),
        references=tuple(sorted(used | set(_METHODS))),
        posterior=posterior,
    )


def _sampled(portrait: Portrait, seed: int) -> dict[str, Any]:
    """Posterior of the activity model with all its orbits: medians, 68 % intervals, convergence."""
    result, noise = portrait.activity.fit, portrait.noise
    errors = np.sqrt(np.diagonal(laplace(noise, result).covariance))
    rng = np.random.default_rng(np.random.SeedSequence([seed, 15]))
    found = sample(noise, result, errors, rng, n_steps=_STEPS)
    orbits = [
        {"period_d": asdict(p), "k_m_s": asdict(k)}
        for p, k in zip(found.periods, found.semi_amplitudes, strict=True)
    ]
    return {
        "orbits": orbits,
        "rotation_period_d": asdict(found.rotation) if found.rotation else None,
        "r_hat": found.r_hat,
        "effective_sample_size": found.effective,
        "autocorrelation_time": found.autocorrelation,
        "acceptance": found.acceptance,
        "converged": found.converged,
    }


def _evidences(portrait: Portrait, series: TimeSeries, seed: int) -> list[dict[str, Any]]:
    """Evidences of up to one planet more than the activity model holds."""
    problem = evidence_problem(portrait, series.time, series.rv_err)
    most = len(portrait.activity.fit.model.orbits) + 1
    rng = np.random.default_rng(np.random.SeedSequence([seed, 16]))
    return [asdict(e) for e in planet_evidences(problem, most, rng)]


def _cautions(
    observations: Observations,
    portrait: Portrait,
    rotation: Rotation,
    posterior: dict[str, Any] | None,
) -> tuple[str, ...]:
    """What a reader must know before trusting a grade."""
    series = observations.series
    out = []
    if not series.indicators:
        out.append(
            "There is no activity indicator: nothing but the velocities can speak for the star."
        )
    if rotation.period is None:
        out.append("The star's rotation period is not known.")
    if series.n_nights < 40:
        out.append(f"There are only {series.n_nights} nights.")
    if series.baseline < 90:
        out.append(f"The velocities span only {series.baseline:.0f} d.")
    if portrait.noise.approximation:
        out.append(portrait.noise.approximation)
    if not all(m.converged for m in portrait.comparisons):
        out.append("A model fit stopped before it converged; its numbers are less certain.")
    apart = [e for e in (posterior or {}).get("evidences", ()) if not e["agree"]]
    if apart:
        out.append(
            "Two methods disagree on the evidence of "
            f"{' and '.join(str(e['n_planets']) for e in apart)} planets; trust neither closely."
        )
    if posterior is not None and not posterior["converged"]:
        out.append(
            "The posterior samples have not converged "
            f"(R-hat {posterior['r_hat']:.3f}); use the Laplace errors instead."
        )
    return tuple(out)
