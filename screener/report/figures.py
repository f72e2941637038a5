"""Figures of a dossier: what is drawn, its caption, and how it is written.

Drawing uses matplotlib's objects only (no pyplot), so nothing is shared between figures. The
drawing itself is in ``panels`` and ``fold``.
"""

from __future__ import annotations

import io
import re
import warnings
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure, FigureBase

from screener.core import Screening
from screener.report.files import write_bytes
from screener.report.fold import draw_fold
from screener.report.limits import draw_limits, limit_curve
from screener.report.panels import (
    activity_height,
    draw_activity,
    draw_indicators,
    draw_periodograms,
    draw_series,
    indicator_rows,
    shown_periodograms,
)
from screener.report.style import LIGHT
from screener.report.words import amplitude, number, period

__all__ = [
    "FORMATS",
    "drawing_style",
    "FigureSpec",
    "figure_bytes",
    "figure_specs",
    "inline_svg",
    "write_figures",
]

FORMATS = ("png", "svg", "pdf")
WIDTH = 6.3  # inches; the text block of a page

_RC = {
    "font.family": "sans-serif",
    "font.size": 8.5,
    "axes.titlesize": 8.5,
    "axes.labelsize": 8.5,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.fontsize": 8,
    "axes.linewidth": 0.7,
    "axes.edgecolor": LIGHT["muted"],
    "axes.labelcolor": LIGHT["ink"],
    "axes.facecolor": "none",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.color": LIGHT["ink"],
    "xtick.color": LIGHT["muted"],
    "ytick.color": LIGHT["muted"],
    "xtick.labelcolor": LIGHT["ink"],
    "ytick.labelcolor": LIGHT["ink"],
    "lines.linewidth": 1.0,
    "legend.frameon": False,
    "legend.borderaxespad": 0.0,
    "axes.unicode_minus": True,
    # names of stars and instruments may hold a dollar sign
    "text.parse_math": False,
    "svg.fonttype": "none",
    "svg.hashsalt": "dossier",
    "pdf.fonttype": 42,
    "path.simplify": True,
}


@dataclass(frozen=True)
class FigureSpec:
    """A figure before it is drawn.

    Attributes
    ----------
    name : str
        File name without ending.
    signal : str or None
        The signal it belongs to; None when it is about the star.
    caption, planet, star : str
        What is shown, and what a planet and what the star would look like there.
    alt : str
        The same for someone who cannot see it.
    """

    name: str
    title: str
    width: float
    height: float
    draw: Callable[[FigureBase], None]
    caption: str
    planet: str
    star: str
    alt: str
    signal: str | None = None


def figure_specs(screening: Screening) -> tuple[FigureSpec, ...]:
    """The figures that the data allow, in the order of the dossier; none without products."""
    if screening.products is None or screening.products.series.n_obs == 0:
        return ()
    specs = [_series(screening)]
    if screening.products.periodograms:
        specs.append(_periodograms(screening))
    specs += _folds(screening)
    if screening.products.activity_sd.any() or screening.products.activity_mean.any():
        specs.append(_activity(screening))
    if screening.products.series.indicators:
        specs.append(_indicators(screening))
    if limit_curve(screening.verdict.system) is not None:
        specs.append(_limits(screening))
    return tuple(specs)


def _series(screening: Screening) -> FigureSpec:
    verdict = screening.verdict
    names = ", ".join(verdict.instruments)
    return FigureSpec(
        "series",
        "Velocities over time",
        WIDTH,
        3.3,
        lambda fig: draw_series(fig, screening),
        "Velocities less the fitted zero point of each instrument (top) and what no model "
        "explains (bottom, observed less computed). Outliers, marked with a cross, took no part "
        "in the fits.",
        "the same swing in every season and every instrument.",
        "a swing that grows and fades from season to season, or differs between instruments.",
        f"Radial velocities of {verdict.star.name} against time, {verdict.n_obs} points from "
        f"{names} over {number(verdict.baseline, 3)} days, with residuals beneath.",
    )


def _periodograms(screening: Screening) -> FigureSpec:
    verdict = screening.verdict
    n_panels = len(shown_periodograms(screening))
    signals = ", ".join(f"{s.signal.id} at {period(s.signal)}" for s in verdict.signals)
    rotation = verdict.rotation.period
    known = f"; rotation at {number(rotation, 3)} d" if rotation is not None else ""
    return FigureSpec(
        "periodograms",
        "Periods in velocities, indicators and sampling",
        WIDTH,
        0.75 + 0.78 * n_panels,
        lambda fig: draw_periodograms(fig, screening),
        "Gain in log-likelihood against period. Vertical lines: signals; band and dashed lines: "
        "the rotation, its half and third; short dotted ticks: daily and yearly aliases of the "
        "signals. The dashed horizontal line is the 1 % false-alarm level. The window shows "
        "periods that the observing times alone produce.",
        "a peak in the velocities that stays in the activity-model panel, with nothing at that "
        "period in the indicators.",
        "a peak that vanishes in the activity-model panel, or stands at the rotation, its half "
        "or third, or in an indicator as well.",
        f"Stack of {n_panels} periodograms. Signals: {signals or 'none'}{known}.",
    )


def _folds(screening: Screening) -> list[FigureSpec]:
    products = screening.products
    assert products is not None
    have = {fold.signal_id: fold for fold in products.folds if fold.time.size}
    specs = []
    graded = [(s.signal, True) for s in screening.verdict.signals]
    known = [(s, False) for s in screening.verdict.known_planets]
    for signal, is_graded in graded + known:
        fold = have.get(signal.id)
        if fold is None:
            continue
        specs.append(
            FigureSpec(
                f"fold_{_safe(signal.id)}",
                f"{signal.id} folded at {period(signal)}",
                WIDTH,
                2.9,
                lambda fig, signal=signal, fold=fold: draw_fold(fig, screening, signal, fold),  # type: ignore[misc]
                "Left: velocities less everything but this signal, folded at its period, with "
                "the fitted orbit, binned points (large) and residuals (observed less computed). "
                "Right: amplitude and phase fitted to one block of observations at a time; the "
                "dashed lines belong to all data together.",
                "points that follow one curve, and blocks that agree with the dashed lines.",
                "scatter about the curve that is larger than the errors, and an amplitude or "
                "phase that wanders from block to block.",
                f"Phase-folded velocities of {signal.id} with a fitted orbit of semi-amplitude "
                f"{amplitude(signal)}, and its amplitude and phase block by block.",
                signal.id if is_graded else None,
            )
        )
    return specs


def _activity(screening: Screening) -> FigureSpec:
    return FigureSpec(
        "activity",
        "The activity model",
        WIDTH,
        activity_height(screening),
        lambda fig: draw_activity(fig, screening),
        "Velocities less all orbits, with the activity model and its one-sigma band; beneath, "
        "the stretch that was observed most densely. Where the band is wide the model knows "
        "nothing, and constrains nothing.",
        "points about zero within their errors: the orbits leave nothing over.",
        "points that follow the wavy curve as spots rotate, grow and decay.",
        f"Activity model of {screening.verdict.star.name} against time with its uncertainty, "
        "over the velocities less all orbits.",
    )


def _indicators(screening: Screening) -> FigureSpec:
    products = screening.products
    assert products is not None
    names = ", ".join(i.name for i in products.series.indicators)
    return FigureSpec(
        "indicators",
        "Velocities against indicators",
        WIDTH,
        0.55 + 1.85 * indicator_rows(screening),
        lambda fig: draw_indicators(fig, screening),
        "Velocities against each indicator, both less the zero point of the instrument; ρ is "
        "Spearman's rank correlation of all points.",
        "clouds without a slope: a companion moves the lines and does not bend them.",
        "a slope, or a loop: spots shift the lines and change their shape together. A planet "
        "hides such a slope, so a flat cloud alone proves little.",
        f"Scatter plots of velocity against {names}.",
    )


def _limits(screening: Screening) -> FigureSpec:
    return FigureSpec(
        "limits",
        "What would have been found",
        WIDTH,
        2.9,
        lambda fig: draw_limits(fig, screening),
        "Semi-amplitude of a circular orbit that the search would have found at half, nine tenths "
        "and 99 % of the phases, against period; points are the signals. In the shaded part a "
        "planet may hide.",
        "a point well above the curves: it was found with room to spare.",
        "nothing of its own here; a point close to the curves is a weak detection, whatever "
        "made it.",
        f"Detection limits of {screening.verdict.star.name}: semi-amplitude against period.",
    )


def _safe(text: str) -> str:
    return re.sub(r"[^A-Za-z0-9-]", "_", text)[:40]


@contextmanager
def drawing_style() -> Iterator[None]:
    """Our settings of matplotlib, for the time of a drawing."""
    with matplotlib.rc_context(_RC), warnings.catch_warnings():
        # a name in a script that our font lacks shows boxes; that is no reason to stop or to talk
        warnings.filterwarnings("ignore", message="Glyph .* missing")
        yield


def _drawn(spec: FigureSpec) -> Figure:
    figure = Figure(figsize=(spec.width, spec.height), facecolor="none")
    FigureCanvasAgg(figure)
    spec.draw(figure)
    return figure


def figure_bytes(spec: FigureSpec, formats: Iterable[str]) -> dict[str, bytes]:
    """One figure, drawn once, in each of the formats ("png", "svg", "pdf").

    Raises
    ------
    ValueError
        On a format that we do not write.
    """
    formats = tuple(formats)
    unknown = sorted(set(formats) - set(FORMATS))
    if unknown:
        raise ValueError(f"no figure format {unknown[0]!r}; there are {', '.join(FORMATS)}")
    result = {}
    # no dates in the files: the same verdict gives the same bytes
    dates = {"png": None, "svg": {"Date": None}, "pdf": {"CreationDate": None}}
    with drawing_style():
        figure = _drawn(spec)
        for kind in formats:
            stream = io.BytesIO()
            paper = LIGHT["paper"] if kind == "png" else "none"
            figure.savefig(stream, format=kind, dpi=150, facecolor=paper, metadata=dates[kind])
            result[kind] = stream.getvalue()
    return result


def inline_svg(spec: FigureSpec, svg: bytes) -> str:
    """An SVG file as an element inside a page: colours as CSS variables, own ids, a text for it."""
    text = svg.decode("utf-8")
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    view_box = re.search(r'viewBox="([^"]*)"', text)
    body = text[text.index(">") + 1 :]
    mark = f"f-{spec.name}-"
    body = re.sub(r'\bid="', f'id="{mark}', body)
    body = re.sub(r"url\(#", f"url(#{mark}", body)
    body = re.sub(r'xlink:href="#', f'href="#{mark}', body)
    body = body.replace("xlink:href=", "href=")
    # The page's own font. Without quotes inside the style attribute nothing else can slip in.
    body = re.sub(r"(font: [^;\"]*?px) [^;\"]*", r"\1 var(--font)", body)
    for name, colour in LIGHT.items():
        body = body.replace(colour, f"var(--{name})")
    box = view_box.group(1) if view_box else f"0 0 {72 * spec.width:g} {72 * spec.height:g}"
    label = _attribute(spec.alt)
    return f'<svg viewBox="{box}" role="img" aria-label="{label}">{body.strip()}'


def _attribute(text: str) -> str:
    for char, entity in (("&", "&amp;"), ("<", "&lt;"), (">", "&gt;"), ('"', "&quot;")):
        text = text.replace(char, entity)
    return text


def write_figures(
    screening: Screening, folder: Path | str, formats: Iterable[str] = ("png",)
) -> dict[str, dict[str, bytes]]:
    """Draw every figure of a star and write it to ``folder``.

    Returns
    -------
    dict
        Figure name -> format -> content, as written.

    Raises
    ------
    OSError
        If a file cannot be written.
    """
    folder = Path(folder)
    result = {}
    for spec in figure_specs(screening):
        content = figure_bytes(spec, formats)
        for kind, data in content.items():
            write_bytes(folder / f"{spec.name}.{kind}", data)
        result[spec.name] = content
    return result
