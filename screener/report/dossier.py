"""The dossier of one star: a page, the same as Markdown and PDF, with its figures beside it."""

from __future__ import annotations

import functools
from collections.abc import Iterable
from pathlib import Path

import jinja2
from markupsafe import Markup

from screener.core import Screening
from screener.report.figures import FigureSpec, figure_bytes, figure_specs, inline_svg
from screener.report.files import write_bytes, write_text
from screener.report.style import DARK, LIGHT, css_variables
from screener.report.view import DossierView, build_view

__all__ = ["DOSSIER_FORMATS", "dossier_html", "dossier_markdown", "result_html", "write_dossier"]

DOSSIER_FORMATS = ("html", "md", "pdf")


@functools.cache
def _environment(escape: bool) -> jinja2.Environment:
    return jinja2.Environment(
        loader=jinja2.PackageLoader("screener.report", "templates"),
        autoescape=escape,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def _style() -> Markup:
    loader = _environment(False).get_template("dossier.css")
    text = loader.render(light=css_variables(LIGHT), dark=css_variables(DARK))
    return Markup(text)  # our own file and our own colours, no word of the user's


def dossier_html(view: DossierView, figures: Iterable[tuple[FigureSpec, bytes]]) -> str:
    """The page: one file that needs no network and no script.

    Parameters
    ----------
    figures : iterable of (FigureSpec, bytes)
        The figures as SVG files.
    """
    drawn = [(spec, Markup(inline_svg(spec, svg))) for spec, svg in figures]
    template = _environment(True).get_template("dossier.html")
    return template.render(view=view, figures=drawn, style=_style())


def result_html(view: DossierView) -> str:
    """A short piece of a page with the grades and what decided them, for notebooks."""
    return _environment(True).get_template("result.html").render(view=view)


def dossier_markdown(view: DossierView, figures: Iterable[FigureSpec]) -> str:
    """The same as Markdown, with the figures as links to ``figures/*.png``."""
    environment = _environment(False)
    environment.filters["md"] = _markdown_escaped
    return environment.get_template("dossier.md").render(view=view, figures=list(figures))


def _markdown_escaped(value: object) -> str:
    """Text that Markdown leaves as it is, tables included, and that is no HTML."""
    text = " ".join(str(value).split())
    for char in "\\`*_[]|#~$":
        text = text.replace(char, f"\\{char}")
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def write_dossier(
    screening: Screening,
    out_dir: Path | str,
    formats: Iterable[str] = ("html",),
    figure_formats: Iterable[str] | None = None,
) -> tuple[Path, ...]:
    """Write ``dossier.*`` and ``figures/`` into a folder, which is made if need be.

    Parameters
    ----------
    formats : iterable of str
        Of "html", "md" and "pdf".
    figure_formats : iterable of str, optional
        Of "png", "svg" and "pdf"; what is written to ``figures/``. If absent, SVG, and PNG where
        the Markdown links to it.

    Returns
    -------
    tuple of Path
        The files written.

    Raises
    ------
    ValueError
        On a format that we do not write.
    OSError
        If a file cannot be written.
    """
    out, formats = Path(out_dir), tuple(formats)
    if figure_formats is None:
        figure_formats = ("svg", "png") if "md" in formats else ("svg",)
    kinds = tuple(figure_formats)
    unknown = sorted(set(formats) - set(DOSSIER_FORMATS))
    if unknown:
        raise ValueError(
            f"no dossier format {unknown[0]!r}; there are {', '.join(DOSSIER_FORMATS)}"
        )
    view, specs = build_view(screening.verdict), figure_specs(screening)
    written = []
    svgs = []
    inside = ("svg",) if "html" in formats else ()
    for spec in specs:
        content = figure_bytes(spec, dict.fromkeys((*kinds, *inside)))
        svgs.append((spec, content.get("svg", b"")))
        for kind in kinds:
            written.append(out / "figures" / f"{spec.name}.{kind}")
            write_bytes(written[-1], content[kind])
    if "html" in formats:
        written.append(out / "dossier.html")
        write_text(written[-1], dossier_html(view, svgs))
    if "md" in formats:
        written.append(out / "dossier.md")
        write_text(written[-1], dossier_markdown(view, specs))
    if "pdf" in formats:
        from screener.report.pdf import dossier_pdf

        written.append(out / "dossier.pdf")
        write_bytes(written[-1], dossier_pdf(view, specs))
    return tuple(written)
