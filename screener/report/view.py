"""One view of a screened star, from which page, Markdown and PDF are all made.

Everything in it is text ready for a reader; the templates only arrange it. Nothing in it is
markup: names come from tables of strangers and are escaped by whoever writes them out.
"""

from __future__ import annotations

import shlex
from dataclasses import dataclass

from screener.core import Signal, Verdict
from screener.core.references import Reference, bibtex, cited
from screener.report.signal_view import (
    FindingView,
    RuleView,
    SignalView,
    null_findings,
    signal_view,
)
from screener.report.system_view import Block, system_blocks
from screener.report.words import amplitude, headline, number, period, uncertain

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
_FINEST = 0.001  # of log10 Z; more digits say nothing to a reader
ALWAYS_USED = ("astropy2022", "harris2020", "virtanen2020", "hunter2007")


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
    models_head: tuple[str, ...]
    models: tuple[tuple[str, ...], ...]
    models_note: str
    evidences: tuple[tuple[str, ...], ...]
    posterior: tuple[tuple[str, ...], ...]
    posterior_note: str
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
    models_head, models, models_note = _models(verdict)
    return DossierView(
        star=verdict.star.name,
        version=verdict.version,
        headline=headline(verdict),
        facts=_star_facts(verdict),
        signals=tuple(signal_view(item) for item in verdict.signals),
        cautions=verdict.cautions,
        known=tuple(_known_row(s) for s in verdict.known_planets),
        rotation=tuple(
            (s.source, f"{uncertain(s.period, s.period_err)} d") for s in verdict.rotation.sources
        ),
        rotation_sentence=_rotation_sentence(verdict),
        models_head=models_head,
        models=models,
        models_note=models_note,
        evidences=_evidences(verdict),
        posterior=_posterior(verdict),
        posterior_note=_posterior_note(verdict),
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


def _models(verdict: Verdict) -> tuple[tuple[str, ...], tuple[tuple[str, ...], ...], str]:
    """Head, rows and a note; evidences only where there are any."""
    evidences = [m.log_evidence for m in verdict.models if m.log_evidence is not None]
    best = max(evidences, default=None)
    rows = []
    for model in verdict.models:
        known = model.log_evidence is not None and best is not None
        gap = model.log_evidence - best if known else None  # type: ignore[operator]
        weighed = (number(model.log_evidence, 5), number(gap, 3)) if len(evidences) > 1 else ()
        rows.append(
            (
                model.name,
                str(model.n_planets),
                str(model.n_parameters),
                number(model.log_likelihood, 5),
                *weighed,
                "yes" if model.converged else "no",
            )
        )
    columns = ("ln evidence", "less the best") if len(evidences) > 1 else ()
    head = ("hypothesis", "planets", "parameters", "ln L", *columns, "converged")
    note = "A fit that did not converge counts for nothing."
    if columns:
        note = f"Differences in ln evidence of 5 or more are commonly called strong. {note}"
    if verdict.indicators:
        note += (
            " Models with activity describe velocities and indicators together, so their ln L "
            "compares with each other and not with that of white noise."
        )
    return head, tuple(rows), note


def _evidences(verdict: Verdict) -> tuple[tuple[str, ...], ...]:
    """Number of planets, evidence by two methods, and whether they agree; at deep depth only."""
    return tuple(
        (
            str(e["n_planets"]),
            uncertain(e["log10_z"], max(e["log10_z_err"], _FINEST)),
            uncertain(e["check_log10_z"], max(e["check_log10_z_err"], _FINEST)),
            "yes" if e["agree"] else "no",
        )
        for e in (verdict.posterior or {}).get("evidences", ())
    )


def _posterior(verdict: Verdict) -> tuple[tuple[str, ...], ...]:
    """Medians and 68 % intervals of sampled quantities; at deep depth only."""
    posterior = verdict.posterior or {}
    named = [
        (f"orbit {i}, {word}", orbit[key], unit)
        for i, orbit in enumerate(posterior.get("orbits", ()), start=1)
        for key, word, unit in (("period_d", "period", "d"), ("k_m_s", "semi-amplitude", "m/s"))
    ]
    if posterior.get("rotation_period_d"):
        named.append(("rotation", posterior["rotation_period_d"], "d"))
    return tuple(
        (
            name,
            f"{number(v['median'], 7)} {unit}",
            f"{number(v['low'], 7)} to {number(v['high'], 7)}",
        )
        for name, v, unit in named
    )


def _posterior_note(verdict: Verdict) -> str:
    posterior = verdict.posterior or {}
    if "r_hat" not in posterior:
        return ""
    state = "converged" if posterior["converged"] else "not converged: use the errors of the fit"
    return (
        f"Sampling {state}: R-hat {number(posterior['r_hat'], 4)}, "
        f"{number(posterior['effective_sample_size'], 3)} effective samples, autocorrelation time "
        f"{number(posterior['autocorrelation_time'], 3)} steps."
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
        columns = [o.column for o in notes.outliers]
        listing = ", ".join(f"{columns.count(c)} in {c}" for c in dict.fromkeys(columns))
        result.append(
            f"{count} value{' was' if count == 1 else 's were'} marked as outlier and left out "
            f"of the fits: {listing}."
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
