"""Findings and grades of the signals: each alone, in company, against the star's own null."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial

from threadpoolctl import threadpool_limits

from screener.core import Depth, Finding, Grade, Rotation, Signal, Star, TimeSeries
from screener.evidence import own_null, run_all, run_test
from screener.evidence.case import Case
from screener.evidence.latent import latent_activity
from screener.models.kepler import orbit_velocity
from screener.models.nulls import DrawnSignal, NullDraws, injections, null_draws
from screener.models.portrait import Portrait, Sighting, paint
from screener.models.rotation import PeriodDensity, estimate_rotation
from screener.rules import Graded, RuleSet, grade
from screener.system import stability_findings

__all__ = ["Judged", "Progress", "against_own_null", "judge"]

Progress = Callable[[str, float], None]


@dataclass(frozen=True, eq=False)
class Judged:
    """A signal in its case, what was found about it, and its grade."""

    case: Case
    findings: tuple[Finding, ...]
    graded: Graded

    @property
    def signal(self) -> Signal:
        return self.case.signal


def judge(
    star: Star,
    series: TimeSeries,
    portrait: Portrait,
    rotation: Rotation,
    density: PeriodDensity | None,
    rules: RuleSet,
    depth: Depth,
    seed: int,
) -> tuple[list[Judged], list[Signal]]:
    """Findings and grade of every signal."""
    known = [
        Signal(f"K{i}", orbit, 0.0, ("known",), known=True)
        for i, orbit in enumerate(portrait.known, start=1)
    ]
    signals = [_signal(f"S{i}", sighting) for i, sighting in enumerate(portrait.sightings, start=1)]
    judged = []
    activity = latent_activity(portrait.activity.fit, portrait.scaled) if signals else None
    for signal, sighting in zip(signals, portrait.sightings, strict=True):
        others = tuple(s for s in (*signals, *known) if s is not signal)
        own = orbit_velocity(sighting.assessment.white_orbit, series.time)
        case = Case(
            star=star,
            series=series,
            signal=signal,
            others=others,
            target_rv=portrait.residual + own,
            residual_rv=portrait.residual,
            rv_sd=portrait.white_sd,
            rotation=rotation,
            rotation_density=density,
            depth=depth,
            seed=seed,
            assessment=sighting.assessment,
            activity=activity,
        )
        findings = run_all(case)
        judged.append(Judged(case, findings, grade(findings, rules, signal)))
    return _in_company(star, judged, known, rules), known


def _in_company(
    star: Star, judged: Sequence[Judged], known: Sequence[Signal], rules: RuleSet
) -> list[Judged]:
    """Grade again with what the other signals mean for each: planets must live together.

    Signals that the first pass calls stellar are no bodies; taking one out changes the rest.
    """
    if not judged:
        return []
    first = judged[0].case
    grades = {j.signal.id: j.graded.grade for j in judged}
    found = stability_findings(
        star, [*(j.signal for j in judged), *known], grades, seed=first.seed, depth=first.depth
    )
    out = []
    for item in judged:
        findings = (*item.findings, found[item.signal.id])
        out.append(Judged(item.case, findings, grade(findings, rules, item.signal)))
    return out


def _judge_draw(star: Star, rules: RuleSet, series: TimeSeries, seed: int) -> list[DrawnSignal]:
    """Screen one draw at quick depth."""
    with threadpool_limits(1):
        rotation, density = estimate_rotation(star, series)
        portrait = paint(star, series, (), density, Depth.QUICK)
        judged, _ = judge(star, series, portrait, rotation, density, rules, Depth.QUICK, seed)
    return [
        DrawnSignal(
            j.signal.orbit.period, j.signal.orbit.semi_amplitude, j.graded.score, j.graded.grade
        )
        for j in judged
    ]


def against_own_null(
    star: Star,
    portrait: Portrait,
    judged: Sequence[Judged],
    rules: RuleSet,
    seed: int,
    workers: int,
    tell: Progress,
) -> list[Judged]:
    """Draw the star without planets, screen the draws, and grade again with what they say."""
    series, depth = judged[0].case.series, judged[0].case.depth
    screen_draw = partial(_judge_draw, star, rules)
    at_stake = [j for j in judged if j.graded.grade is not Grade.LIKELY_STELLAR]
    draws = null_draws(
        series, portrait, screen_draw, [j.graded.score for j in at_stake], depth=depth, seed=seed,
        workers=workers, progress=lambda stage, share: tell(stage, 0.78 + 0.13 * share),
    )  # fmt: skip
    injected = {}
    if at_stake:
        tell("injecting the signal into draws", 0.91)
        best = max(at_stake, key=lambda j: j.graded.score)
        injected[best.signal.id] = injections(
            series,
            portrait,
            screen_draw,
            best.signal.orbit,
            depth=depth,
            seed=seed,
            workers=workers,
        )
    nulls = NullDraws(draws, injected)
    out = []
    for item in judged:
        case = replace(item.case, nulls=nulls, score=item.graded.score)
        finding = run_test(own_null, case)
        findings = tuple(finding if f.test == finding.test else f for f in item.findings)
        out.append(Judged(case, findings, grade(findings, rules, item.signal)))
    return out


def _signal(id: str, sighting: Sighting) -> Signal:
    gains = sighting.assessment.gains
    return Signal(
        id=id,
        orbit=sighting.orbit,
        false_alarm_probability=sighting.false_alarm_probability,
        false_alarm_shuffled=sighting.false_alarm_shuffled,
        found_by=sighting.found_by,
        white_gain=gains["white noise"],
        activity_gain=gains["joint process"],
    )
