"""Decisions for others: a table for programs, a statement for people."""

from __future__ import annotations

import csv
import functools
import io
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from screener.core import InputFault
from screener.core.described_table import Columns, described_table, harmless
from screener.core.wording import TESTS
from screener.ledger.changes import Standing
from screener.ledger.decisions import departs_from_grade
from screener.ledger.entry import Entry
from screener.report.files import write_text

__all__ = ["FORMATS", "departs", "export", "printable", "test_named"]

_SAID = {
    "announce": "to be announced",
    "observe": "to be observed further",
    "set-aside": "set aside",
}

_COLUMNS: Columns = {
    "entry": ("int", None, "number in the ledger"),
    "time_utc": ("str", None, "when it was decided, UTC"),
    "star": ("str", None, "the star's folder"),
    "star_name": ("str", None, "name of the star"),
    "signal": ("str", None, "id of the signal in the verdict decided on"),
    "decision": ("str", None, "announce, observe or set-aside"),
    "by": ("str", None, "who decided"),
    "note": ("str", None, "what they say"),
    "reason": ("str", None, "reason given; where it departs from the grade, why"),
    "weighed_most": ("str", None, "the test that weighed most"),
    "state": ("str", None, "current, outdated, verdict gone or verdict unreadable"),
    "changed": ("str", None, "what is not as it was when it was decided"),
    "replaced_by": ("int", None, "later decision on the same signal"),
    "grade": ("str", None, "grade then"),
    "score": ("float", None, "natural log-odds of planet against star then"),
    "period_d": ("float", "d", "period then"),
    "period_err_d": ("float", "d", "1-sigma error of the period then"),
    "k_m_s": ("float", "m / s", "semi-amplitude then"),
    "k_err_m_s": ("float", "m / s", "1-sigma error of the semi-amplitude then"),
    "rules": ("str", None, "rules then"),
    "screener": ("str", None, "version then"),
    "verdict_sha256": ("str", None, "hash of the verdict decided on"),
    "table_sha256": ("str", None, "hash of the table it was made from"),
    "entry_sha256": ("str", None, "hash of the entry; pins it and all before it"),
}


def printable(text: str, lines: bool = False) -> str:
    """Text without control characters, which could steer a terminal; ``lines`` keeps line feeds."""
    return "".join(c if c.isprintable() or (lines and c == "\n") else " " for c in text)


def _row(standing: Standing) -> dict[str, Any]:
    entry = standing.entry
    then = entry.snapshot
    return {
        "entry": entry.seq,
        "time_utc": entry.time,
        "star": entry.star,
        "star_name": entry.star_name,
        "signal": entry.signal,
        "decision": entry.decision,
        "by": entry.by,
        "note": entry.note,
        "reason": entry.reason,
        "weighed_most": entry.weighed_most,
        "state": standing.state,
        "changed": "; ".join(str(change) for change in standing.changes),
        "replaced_by": standing.replaced_by,
        **{k: then.get(k) for k in ("grade", "score", "period_d", "period_err_d", "k_m_s")},
        **{k: then.get(k) for k in ("k_err_m_s", "rules", "screener")},
        "verdict_sha256": entry.verdict.get("sha256"),
        "table_sha256": (entry.inputs.get("table") or {}).get("sha256"),
        "entry_sha256": entry.hash,
    }


def _csv(standings: Sequence[Standing], _title: str) -> str:
    """CSV in which no cell starts a formula in a spreadsheet: such text gets an apostrophe."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(_COLUMNS)
    for standing in standings:
        row = _row(standing)
        writer.writerow([_cell(row[name], kind) for name, (kind, _, _) in _COLUMNS.items()])
    return stream.getvalue()


def _cell(value: Any, kind: str) -> Any:
    if value is None or kind != "str":
        return "" if value is None else value
    return harmless(printable(str(value)).strip())


def _ecsv(standings: Sequence[Standing], title: str) -> str:
    table = described_table(_COLUMNS, [_row(standing) for standing in standings], printable)
    table.meta["title"] = printable(title)
    stream = io.StringIO()
    table.write(stream, format="ascii.ecsv")
    return stream.getvalue()


@functools.cache
def _environment(escape: bool) -> jinja2.Environment:
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("screener.ledger", "templates"),
        autoescape=escape,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_finalized,
    )
    environment.filters["md"] = _markdown_escaped
    environment.filters["num"] = _number
    environment.filters["said"] = lambda decision: _SAID.get(decision, decision)
    environment.filters["test"] = test_named
    environment.filters["departs"] = departs
    return environment


def _number(value: float | None, digits: int = 5) -> str:
    return "not known" if value is None else f"{value:.{digits}g}".replace("-", "−")


def test_named(test: str) -> str:
    """A test as a reader knows it, with its identifier: "Sampling (sampling)"."""
    words = TESTS.get(test)
    return test if words is None else f"{words.title} ({test})"


test_named.__test__ = False  # type: ignore[attr-defined]


def departs(entry: Entry) -> bool:
    """Whether a decision departs from the grade that it was taken on."""
    grade = entry.snapshot.get("grade")
    return isinstance(grade, str) and departs_from_grade(entry.decision, grade)


def _finalized(value: Any) -> Any:
    """Text of the user's without what is neither seen nor a line feed."""
    plain = isinstance(value, str) and not isinstance(value, Markup)
    return printable(value, lines=True) if plain else value


def _markdown_escaped(value: object) -> str:
    text = " ".join(printable(str(value)).split())
    for char in "\\`*_[]|#~$":
        text = text.replace(char, f"\\{char}")
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def _statement(template: str, standings: Sequence[Standing], title: str) -> str:
    from screener.report.style import DARK, LIGHT, css_variables

    # the last word on each signal; what was decided before stands in the table
    standing = [s for s in standings if s.replaced_by is None]
    return (
        _environment(template.endswith(".html"))
        .get_template(template)
        .render(
            title=printable(title),
            now=datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC"),
            standings=standing,
            n_replaced=len(standings) - len(standing),
            n_outdated=sum(s.state != "current" for s in standing),
            last=standings[-1].entry if standings else None,
            light=Markup(css_variables(LIGHT)),  # our own colours, no word of the user's
            dark=Markup(css_variables(DARK)),
        )
    )


FORMATS: dict[str, Callable[[Sequence[Standing], str], str]] = {
    ".ecsv": _ecsv,
    ".csv": _csv,
    ".html": lambda standings, title: _statement("statement.html", standings, title),
    ".md": lambda standings, title: _statement("statement.md", standings, title),
}


def export(standings: Sequence[Standing], path: Path, title: str) -> None:
    """Write decisions; the format follows the ending. The file appears whole or not at all.

    Parameters
    ----------
    title : str
        What the decisions are about: a star or a run.

    Raises
    ------
    InputFault
        If the ending is none of ``FORMATS``.
    OSError
        If the file cannot be written.
    """
    maker = FORMATS.get(path.suffix.lower())
    if maker is None:
        raise InputFault(
            str(path), f"the ending {path.suffix!r} is unknown", f"Use one of {', '.join(FORMATS)}"
        )
    write_text(path, maker(standings, title))
