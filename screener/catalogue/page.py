"""``index.html``: the page to read in the morning. One file, no network, no server."""

from __future__ import annotations

import contextlib
import json
import math
import sqlite3
from collections.abc import Sequence
from pathlib import Path
from typing import Any
from urllib.parse import quote

import jinja2
from markupsafe import Markup

from screener.catalogue.compare import changes
from screener.catalogue.folder import RunFolder
from screener.catalogue.progress import clock
from screener.core import InputFault
from screener.report.files import write_text
from screener.store import Store, StoreError
from screener.store.reading import counts, current_run, failures, folds, ranked, work_summary

__all__ = ["fold_picture", "page_html", "write_page"]

_WIDTH, _HEIGHT = 96, 32


def write_page(store: Store, folder: RunFolder) -> None:
    """Write the page of the latest run, with what changed since the run it is compared with."""
    compared = current_run(store).get("compared")
    found = None
    if compared is not None:
        # the earlier run may have been moved away since
        with (
            contextlib.suppress(InputFault, StoreError, sqlite3.Error),
            Store(Path(compared) / "catalogue.sqlite", read_only=True) as before,
        ):
            found = changes(store, before)
    write_text(folder.page, page_html(store, folder, found, compared))


def page_html(
    store: Store, folder: RunFolder, found: Sequence[Any] | None, compared: str | None
) -> str:
    """The page's text; every word that comes from files is escaped."""
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(Path(__file__).parent),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    pictures = folds(store)
    rows = [_row(row, folder, pictures) for row in ranked(store)]
    work = work_summary(store)
    numbers = counts(store)
    return environment.get_template("page.html.j2").render(
        run=current_run(store),
        name=folder.path.name,
        counts=numbers,
        total=sum(numbers.values()),
        rows=rows,
        failures=failures(store),
        changes=found,
        compared=compared,
        work_time=clock(work["seconds"]),
        memory=work["peak_memory_mb"],
        style=_own("page.css"),
        script=_own("page.js"),
    )


def _own(name: str) -> Markup:
    text = (Path(__file__).parent / name).read_text(encoding="utf-8")
    return Markup(text)  # a file of ours, no word of the user's


def _first_rules(text: str, count: int = 3) -> str:
    """The first of the rules that decided; a strong signal has many."""
    names = text.split(", ")
    more = len(names) - count
    return text if more <= 0 else f"{', '.join(names[:count])} and {more} more"


def _row(
    row: dict[str, Any], folder: RunFolder, pictures: dict[tuple[str, str], str]
) -> dict[str, Any]:
    star, signal = row["star"], row["signal"]
    base = quote(row["folder"])
    fold = pictures.get((star, signal)) if signal is not None else None
    return {
        "rank": row["rank"],
        "star": star,
        "title": row["star_name"] if row["star_name"] != star else "",
        "signal": signal or "",
        "grade": row["grade"],
        "order": ("planetary", "ambiguous", "likely stellar", "no signal").index(row["grade"]),
        "period": _number(row["period_d"], 5),
        "amplitude": _number(row["k_m_s"], 3),
        "amplitude_err": _number(row["k_err_m_s"], 2),
        "score": "" if row["score"] is None else f"{row['score']:+.1f}".replace("-", "−"),
        "rotation": _number(row["rotation_period_d"], 3),
        "rules": _first_rules(row["deciding_rules"] or ""),
        "seconds": _number(row["seconds"], 3),
        "sort": [
            "" if value is None else repr(value)
            for value in (
                row["period_d"],
                row["k_m_s"],
                row["score"],
                row["rotation_period_d"],
                row["seconds"],
            )
        ],
        "picture": fold_picture(json.loads(fold), row) if fold is not None else "",
        "dossier": f"{base}/dossier.html" if folder.has_dossier(star) else "",
        "verdict": f"{base}/verdict.json",
    }


def _number(value: float | None, digits: int) -> str:
    if value is None or not math.isfinite(value):
        return ""
    text = f"{value:.{digits}g}"
    if "e" in text and 1e-3 <= abs(value) < 1e6:
        text = f"{value:.0f}"
    return text.replace("-", "−")


def fold_picture(points: list[list[float]], row: dict[str, Any]) -> Markup:
    """Phase-folded velocities as a small picture: one dot per bin.

    Parameters
    ----------
    points : list of [phase, m/s]
    row : mapping
        With ``period_d`` and ``k_m_s``, for the words that stand for the picture.
    """
    if len(points) < 2:
        return Markup("")
    values = [value for _, value in points]
    low, high = min(values), max(values)
    span = (high - low) or 1.0
    dots = "".join(
        f"M{2 + phase * (_WIDTH - 4):.0f} {3 + (high - value) / span * (_HEIGHT - 6):.0f}h0"
        for phase, value in points
    )
    zero = 3 + high / span * (_HEIGHT - 6)
    line = f'<path class="z" d="M0 {zero:.0f}H{_WIDTH}"/>' if low <= 0 <= high else ""
    words = f"folded at {_number(row['period_d'], 4)} d"
    # numbers of ours only
    return Markup(
        f'<svg viewBox="0 0 {_WIDTH} {_HEIGHT}" role="img" aria-label="{words}">{line}'
        f'<path d="{dots}"/></svg>'
    )
