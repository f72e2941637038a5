"""The dossier as a PDF, in the order of the page."""

from __future__ import annotations

from collections.abc import Sequence

from screener.report.figures import FigureSpec, drawing_style
from screener.report.paper import ROOM, Paper
from screener.report.view import DossierView, FindingView, SignalView

__all__ = ["dossier_pdf"]


def dossier_pdf(view: DossierView, figures: Sequence[FigureSpec]) -> bytes:
    """The dossier as the bytes of a PDF file on A4 that also fits on letter paper."""
    with drawing_style():
        paper = Paper(f"{view.star}: planet or star?")
        _front(paper, view)
        for signal in view.signals:
            _signal(paper, signal, [f for f in figures if f.signal == signal.id])
        _star(paper, view, [f for f in figures if f.signal is None])
        _rest(paper, view)
        return paper.pdf()


def _front(paper: Paper, view: DossierView) -> None:
    paper.text("Screening dossier: planet, or the star itself?", 8.5, colour="muted")
    paper.gap(0.04)
    paper.text(view.star, 21, "bold")
    paper.gap(0.06)
    paper.text(view.headline, 11)
    for signal in view.signals:
        paper.gap(0.2)
        paper.need(1.3)
        paper.bar(signal.colour, 0.22)
        title = f"{signal.symbol} {signal.id}, {signal.facts[0][1]}: {signal.grade}"
        paper.text(title, 12, "bold", signal.colour, keep=0.8)
        paper.gap(0.03)
        paper.text(signal.sentence)
        for number, finding in enumerate(signal.deciding, start=1):
            paper.text(f"{number}. {finding.sentence}", indent=0.15)
            paper.text(_numbers(finding), 7.5, colour="muted", indent=0.32)
    if view.cautions:
        paper.gap(0.2)
        paper.text("Caution", 9.5, "bold", "star", keep=0.3)
        for caution in view.cautions:
            paper.text(f"• {caution}", indent=0.1)
    paper.gap(0.2)
    paper.text(view.disclaimer, 8, colour="muted")


def _numbers(finding: FindingView) -> str:
    return (
        f"{finding.test}: {finding.symbol} {finding.outcome}, p-value {finding.p_value}, "
        f"power {finding.power}"
    )


def _signal(paper: Paper, signal: SignalView, figures: Sequence[FigureSpec]) -> None:
    paper.heading(f"{signal.id}: {signal.facts[0][1]}, {signal.grade}")
    paper.table(("quantity", "value"), signal.facts, (1, 3), 8)
    if signal.next_step:
        paper.text(f"Next step. {signal.next_step}")
    if signal.would_change:
        paper.text(f"What would change the grade. {signal.would_change}")
    for spec in figures:
        _figure(paper, spec)
    paper.heading(f"Findings on {signal.id}", 11)
    rows = [
        (f.test, f"{f.symbol} {f.outcome}", f.sentence, f.statistic, f.p_value, f.power)
        for f in signal.findings
    ]
    head = ("test", "says", "in words", "statistic", "p-value", "power")
    colours = ["muted" if f.colour == "muted" else "ink" for f in signal.findings]
    paper.table(head, rows, (15, 17, 42, 10, 9, 8), colours=colours)
    if signal.not_run:
        silent = " ".join(f"{f.test}: {f.sentence}" for f in signal.not_run)
        paper.text(f"Without an answer: {silent}", 8, colour="muted")
    if signal.rules:
        paper.heading(f"Why {signal.id} has this grade", 11)
        reasons = [
            (r.rule, r.effect, r.sentence, r.findings or "–", r.without) for r in signal.rules
        ]
        columns = ("rule", "effect", "because", "looked at", "grade without it")
        paper.table(columns, reasons, (18, 15, 32, 30, 15))


def _figure(paper: Paper, spec: FigureSpec) -> None:
    paper.gap(0.12)
    paper.figure(min(spec.width, ROOM), spec.height, spec.draw)
    paper.text(f"{spec.title}. {spec.caption}", 8)
    paper.text(f"● A planet would show {spec.planet}", 8, indent=0.1)
    paper.text(f"✱ The star would show {spec.star}", 8, indent=0.1)


def _star(paper: Paper, view: DossierView, figures: Sequence[FigureSpec]) -> None:
    paper.heading("The star")
    paper.table(("quantity", "value"), view.facts, (1, 3), 8)
    paper.text(view.rotation_sentence)
    if view.rotation:
        paper.table(("source of the rotation period", "period"), view.rotation, (2, 1))
    if view.known:
        head = ("known planet", "period", "semi-amplitude", "eccentricity")
        paper.table(head, view.known, (1, 1, 1, 1))
    for spec in figures:
        _figure(paper, spec)


def _rest(paper: Paper, view: DossierView) -> None:
    paper.heading("Model comparison")
    if view.models:
        widths = (30, *(11,) * (len(view.models_head) - 1))
        paper.table(view.models_head, view.models, widths)
        paper.text(view.models_note, 8, colour="muted")
    else:
        paper.text("No models were compared at this depth.")
    if view.evidences:
        head = ("planets", "log10 Z", "log10 Z by a second method", "agree")
        paper.table(head, view.evidences, (12, 26, 32, 12))
    if view.posterior:
        paper.table(("quantity", "median", "68 % interval"), view.posterior, (30, 25, 45))
        paper.text(view.posterior_note, 8, colour="muted")
    paper.heading("The star's null")
    for name, finding in view.null:
        paper.text(f"{name}: {finding.sentence} {finding.numbers}")
    if not view.null:
        paper.text("No draws of the star's own activity were made at this depth.")
    _system(paper, view)
    paper.heading("What was done to the data")
    for sentence in view.data:
        paper.text(f"• {sentence}")
    if view.outliers:
        columns = ("time (BJD)", "instrument", "column", "value", "deviation")
        paper.table(columns, view.outliers, (1, 1, 1, 1, 1))
    paper.heading("Methods and citations")
    for reference in view.references:
        paper.text(f"• {reference.line} For: {reference.purpose}.", 8)
    paper.heading("Provenance")
    paper.table(("what", "value"), view.provenance, (1, 4))
    paper.text("To make this verdict again:", keep=0.3)
    paper.text(view.command, 8.5, "bold")
    paper.gap(0.15)
    paper.text(view.disclaimer, 8, colour="muted")


def _system(paper: Paper, view: DossierView) -> None:
    if not view.system:
        return
    paper.heading("The system")
    for block in view.system:
        if block.title:
            paper.heading(block.title, 10.5)
        for sentence in block.sentences:
            paper.text(sentence)
        if block.pairs:
            paper.table(("quantity", "value"), block.pairs, (1, 1))
        if block.rows:
            paper.table(block.head, block.rows, [1.0] * len(block.head), 7)
