"""One view of a screened star, from which page, Markdown and PDF are all made.

Everything in it is text ready for a reader; the templates only arrange it. Nothing in it is
markup: names come from tables of strangers and are escaped by whoever writes them out.
"""

from __future__ import annotations

import math
import shlex
from dataclasses import dataclass

from screener.core import (
    Finding,
    Grade,
    Outcome,
    RuleEffect,
    Signal,
    SignalVerdict,
    Verdict,
)
from screener.core.references import Reference, bibtex, cited
from screener.report.style import (
    GRADE_COLOUR,
    GRADE_SYMBOL,
    OUTCOME_COLOUR,
    OUTCOME_SYMBOL,
)
from screener.report.system_view import Block, system_blocks
from screener.report.words import (
    MISSING,
    amplitude,
    chance,
    compact,
    deciding_findings,
    effect_text,
    grade_sentence,
    number,
    odds,
    period,
    title_of,
    uncertain,
)

__all__ = [
    "DISCLAIMER",
    "DossierView",
    "FindingView",
    "RuleView",
    "SignalView",
    "build_view",
    "command_line",
    "null_findings",
]

DISCLAIMER = (
    "This is a screening aid, not a confirmation. A grade says how the signal behaves in these "
    "data under stated rules; it does not replace an independent analysis, further observations "
    "or the judgement of those who publish."
)
ALWAYS_USED = ("astropy2022", "harris2020", "virtanen2020", "hunter2007")


@dataclass(frozen=True)
class FindingView:
    """A finding as it is shown."""

    test: str
    outcome: str
    symbol: str
    colour: str
    sentence: str
    statistic: str
    p_value: str
    power: str
    details: str


@dataclass(frozen=True)
class RuleView:
    """A rule that fired; ``weight`` is None for vetoes and caps."""

    rule: str
    sentence: str
    effect: str
    weight: float | None
    findings: str
    without: str
    decided: bool


@dataclass(frozen=True)
class SignalView:
    """A graded signal."""

    id: str
    grade: str
    symbol: str
    colour: str
    sentence: str
    facts: tuple[tuple[str, str], ...]
    row: tuple[str, ...]
    deciding: tuple[FindingView, ...]
    findings: tuple[FindingView, ...]
    rules: tuple[RuleView, ...]
    largest_weight: float
    score: str
    next_step: str
    would_change: str


@dataclass(frozen=True)
class DossierView:
    """Everything a dossier says."""

    star: str
    version: str
    headline: str
    facts: tuple[tuple[str, str], ...]
    signals: tuple[SignalView, ...]
    cautions: tuple[str, ...]
    known: tuple[tuple[str, ...], ...]
    rotation: tuple[tuple[str, str], ...]
    rotation_sentence: str
    models: tuple[tuple[str, ...], ...]
    null: tuple[tuple[str, FindingView], ...]
    system: tuple[Block, ...]
    data: tuple[str, ...]
    outliers: tuple[tuple[str, ...], ...]
    references: tuple[Reference, ...]
    bibtex: str
    provenance: tuple[tuple[str, str], ...]
    command: str
    disclaimer: str = DISCLAIMER


def build_view(verdict: Verdict) -> DossierView:
    """The view of a verdict; needs nothing else and cannot fail on missing values."""
    keys = _citations(verdict)
    return DossierView(
        star=verdict.star.name,
        version=verdict.version,
        headline=_headline(verdict),
        facts=_star_facts(verdict),
        signals=tuple(_signal_view(item) for item in verdict.signals),
        cautions=verdict.cautions,
        known=tuple(_known_row(s) for s in verdict.known_planets),
        rotation=tuple(
            (s.source, f"{uncertain(s.period, s.period_err)} d") for s in verdict.rotation.sources
        ),
        rotation_sentence=_rotation_sentence(verdict),
        models=_model_rows(verdict),
        null=null_findings(verdict),
        system=system_blocks(verdict.system),
        data=_data_sentences(verdict),
        outliers=tuple(
            (
                f"{o.time:.5f}",
                o.instrument,
                o.column,
                number(o.value, 5),
                f"{number(o.deviation, 2)} σ",
            )
            for o in verdict.notes.outliers
        ),
        references=cited(keys),
        bibtex=bibtex(keys),
        provenance=_provenance(verdict),
        command=command_line(verdict),
    )


def _headline(verdict: Verdict) -> str:
    counts = {grade: sum(s.grade is grade for s in verdict.signals) for grade in Grade}
    total = len(verdict.signals)
    if total == 0:
        return (
            f"No significant period was found in {verdict.n_obs} velocities over "
            f"{number(verdict.baseline, 3)} days."
        )
    parts = [f"{count} {grade.value}" for grade, count in counts.items() if count]
    noun = "period was" if total == 1 else "periods were"
    return f"{total} significant {noun} found: {', '.join(parts)}."


def _star_facts(verdict: Verdict) -> tuple[tuple[str, str], ...]:
    star, rotation = verdict.star, verdict.rotation
    facts = [
        ("observations", f"{verdict.n_obs} in {verdict.n_nights} nights"),
        ("baseline", f"{number(verdict.baseline, 4)} d"),
        ("instruments", ", ".join(verdict.instruments)),
        ("indicators", ", ".join(verdict.indicators) or "none"),
    ]
    if rotation.period is not None:
        facts.append(("rotation", f"{uncertain(rotation.period, rotation.period_err)} d"))
    else:
        facts.append(("rotation", "not known"))
    known = (
        ("spectral type", star.spectral_type),
        ("temperature", _unit(star.teff, star.teff_err, "K")),
        ("mass", _unit(star.mass, star.mass_err, "M☉")),
        ("radius", _unit(star.radius, star.radius_err, "R☉")),
        ("B−V", _unit(star.b_minus_v, star.b_minus_v_err, "")),
        ("v sin i", _unit(_per_thousand(star.vsini), _per_thousand(star.vsini_err), "km/s")),
        ("log R′HK", _unit(star.log_rhk, star.log_rhk_err, "")),
    )
    return (*facts, *((name, value) for name, value in known if value))


def _per_thousand(value: float | None) -> float | None:
    return None if value is None else value / 1000


def _unit(value: float | None, error: float | None, unit: str) -> str | None:
    return None if value is None else f"{uncertain(value, error)} {unit}".strip()


def _finding_view(finding: Finding) -> FindingView:
    details = []
    for name, value in finding.parameters.items():
        if isinstance(value, bool):
            details.append(f"{name.replace('_', ' ')}: {'yes' if value else 'no'}")
        elif isinstance(value, float) and not math.isfinite(value):
            continue
        elif isinstance(value, int | float):
            details.append(f"{name.replace('_', ' ')}: {compact(value)}")
        elif value is not None:
            details.append(f"{name.replace('_', ' ')}: {value}")
    return FindingView(
        test=title_of(finding.test),
        outcome=finding.outcome.value,
        symbol=OUTCOME_SYMBOL[finding.outcome],
        colour=OUTCOME_COLOUR[finding.outcome],
        sentence=finding.sentence.replace("+-", "±"),
        statistic=compact(finding.statistic),
        p_value=chance(finding.p_value),
        power=MISSING if finding.power is None else f"{100 * finding.power:.0f}\u00a0%",
        details="; ".join(details),
    )


def _rule_view(effect: RuleEffect, item: SignalVerdict) -> RuleView:
    weighs = effect.effect == "weight" and isinstance(effect.value, int | float)
    changed = effect.grade_without is not None and effect.grade_without is not item.grade
    return RuleView(
        rule=effect.rule,
        sentence=effect.sentence,
        effect=effect_text(effect),
        weight=float(effect.value) if weighs else None,
        findings=", ".join(effect.findings),
        without=str(effect.grade_without.value) if changed and effect.grade_without else "the same",
        decided=effect.rule in item.deciding_rules,
    )


def _signal_view(item: SignalVerdict) -> SignalView:
    signal, orbit = item.signal, item.signal.orbit
    rules = tuple(_rule_view(effect, item) for effect in item.trace)
    order = list(Outcome)
    speaking = sorted(item.findings, key=lambda f: order.index(f.outcome))
    facts = (
        ("period", period(signal)),
        ("semi-amplitude", amplitude(signal)),
        ("eccentricity", uncertain(orbit.eccentricity, orbit.eccentricity_err, 2)),
        ("false-alarm probability", chance(signal.false_alarm_probability)),
        ("found by", ", ".join(signal.found_by)),
        ("gain over white noise", f"{number(signal.white_gain, 3)} in ln L"),
        ("gain over the activity model", f"{number(signal.activity_gain, 3)} in ln L"),
        ("score", f"{number(item.score, 2)} in ln odds, {odds(item.score)}"),
    )
    return SignalView(
        id=signal.id,
        grade=item.grade.value,
        symbol=GRADE_SYMBOL[item.grade],
        colour=GRADE_COLOUR[item.grade],
        sentence=grade_sentence(item),
        facts=facts,
        row=(
            signal.id,
            *(value for _, value in facts[:4]),
            f"{GRADE_SYMBOL[item.grade]} {item.grade.value}",
            odds(item.score),
        ),
        deciding=tuple(_finding_view(f) for f in deciding_findings(item)),
        findings=tuple(_finding_view(f) for f in speaking),
        rules=rules,
        largest_weight=max((abs(r.weight) for r in rules if r.weight is not None), default=1.0),
        score=number(item.score, 2),
        next_step=item.next_step,
        would_change=item.would_change,
    )


def _known_row(signal: Signal) -> tuple[str, ...]:
    eccentricity = uncertain(signal.orbit.eccentricity, signal.orbit.eccentricity_err, 2)
    return (signal.id, period(signal), amplitude(signal), eccentricity)


def _rotation_sentence(verdict: Verdict) -> str:
    rotation = verdict.rotation
    if rotation.period is None:
        return "Nothing is known about the rotation; periods could not be compared with it."
    value = f"{uncertain(rotation.period, rotation.period_err)} d"
    if not rotation.sources:
        return f"The rotation period is taken as {value}."
    count = len(rotation.sources)
    return f"Combined from {count} source{'s' if count > 1 else ''}: {value}."


def _model_rows(verdict: Verdict) -> tuple[tuple[str, ...], ...]:
    evidences = [m.log_evidence for m in verdict.models if m.log_evidence is not None]
    best = max(evidences, default=None)
    rows = []
    for model in verdict.models:
        known = model.log_evidence is not None and best is not None
        gap = model.log_evidence - best if known else None  # type: ignore[operator]
        rows.append(
            (
                model.name,
                str(model.n_planets),
                str(model.n_parameters),
                number(model.log_likelihood, 5),
                number(model.log_evidence, 5),
                number(gap, 3),
                "yes" if model.converged else "no",
            )
        )
    return tuple(rows)


def null_findings(verdict: Verdict) -> tuple[tuple[str, FindingView], ...]:
    """For each signal the findings that come from draws of the star's own activity."""
    return tuple(
        (item.signal.id, _finding_view(finding))
        for item in verdict.signals
        for finding in item.findings
        if "null" in finding.test.lower()
    )


def _data_sentences(verdict: Verdict) -> tuple[str, ...]:
    notes = verdict.notes
    result = []
    if notes.n_bins < notes.n_exposures and notes.bin_width > 0:
        width = notes.bin_width * 24
        result.append(
            f"{notes.n_exposures} exposures were combined into {notes.n_bins} bins of at most "
            f"{number(width, 2)} hours."
        )
    else:
        result.append(f"{notes.n_exposures} exposures were used one by one; nothing was binned.")
    count = len(notes.outliers)
    if count:
        result.append(
            f"{count} value{' was' if count == 1 else 's were'} marked as outlier and left out "
            "of the fits."
        )
    else:
        result.append("No value was marked as an outlier.")
    return (*result, *notes.messages)


def _citations(verdict: Verdict) -> set[str]:
    keys = {*verdict.references, *ALWAYS_USED}
    for item in verdict.signals:
        for finding in item.findings:
            keys.update(finding.references)
    return keys


def _provenance(verdict: Verdict) -> tuple[tuple[str, str], ...]:
    record = verdict.record
    rows: list[tuple[str, str | None]] = [
        ("table", record.file),
        ("table sha256", record.sha256),
        ("sidecar", record.sidecar),
        ("sidecar sha256", record.sidecar_sha256),
        ("photometry", record.photometry),
        ("photometry sha256", record.photometry_sha256),
        ("screener", verdict.version),
        ("rules", verdict.rules),
        ("rules sha256", verdict.rules_sha256),
        ("depth", verdict.depth.value),
        ("seed", str(verdict.seed)),
    ]
    return tuple((name, value) for name, value in rows if value)


def command_line(verdict: Verdict) -> str:
    """The command that makes this verdict again, quoted for a shell."""
    record = verdict.record
    parts = ["screener", "candidate", record.file]
    if record.sidecar:
        parts += ["--star", record.sidecar]
    if verdict.asked_period is not None:
        parts += ["--period", repr(verdict.asked_period)]
    if verdict.rules_file is not None:
        parts += ["--rules", verdict.rules_file]
    if verdict.site is not None:
        parts += ["--site", verdict.site]
    parts += ["--depth", verdict.depth.value, "--seed", str(verdict.seed)]
    return shlex.join(parts)
