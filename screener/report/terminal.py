"""A verdict in a terminal: a short table, plain where nobody looks at a screen."""

from __future__ import annotations

import sys
from typing import IO

from rich.console import Console
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from screener.core import Grade, SignalVerdict, Verdict
from screener.report.style import GRADE_SYMBOL
from screener.report.words import chance, deciding_findings, number, odds, uncertain

__all__ = ["print_summary"]

_STYLE = {
    Grade.PLANETARY: "bold blue",
    Grade.AMBIGUOUS: "bold",
    Grade.LIKELY_STELLAR: "bold yellow",
}


def print_summary(verdict: Verdict, file: IO[str] | None = None) -> None:
    """Print a verdict as a short table to ``file`` (standard output).

    Coloured on a terminal; without colour and at 80 columns elsewhere, so that it can be piped.
    """
    stream = sys.stdout if file is None else file
    plain = not getattr(stream, "isatty", lambda: False)()
    console = Console(
        file=stream, width=80 if plain else None, no_color=True if plain else None, highlight=False
    )
    _print(console, verdict, _ascii(stream))


def _ascii(stream: IO[str]) -> bool:
    """Whether the stream cannot take our signs."""
    encoding = getattr(stream, "encoding", None) or "utf-8"
    try:
        "●◐✱±−×⁻⁹–".encode(encoding)
    except (UnicodeEncodeError, LookupError):
        return True
    return False


def _print(console: Console, verdict: Verdict, ascii_only: bool) -> None:
    def text(value: str, style: str = "") -> Text:
        return Text(_to_ascii(value) if ascii_only else value, style=style)

    facts = (
        f"{verdict.n_obs} velocities in {verdict.n_nights} nights over "
        f"{number(verdict.baseline, 4)} d, {', '.join(verdict.instruments)}"
    )
    rotation = verdict.rotation
    known = (
        f"rotation {uncertain(rotation.period, rotation.period_err)} d"
        if rotation.period is not None
        else "rotation not known"
    )
    console.print(text(_clean(verdict.star.name), "bold"))
    console.print(text(f"{_clean(facts)}; {known}"))
    if not verdict.signals:
        console.print(text("No significant period was found."))
    else:
        console.print(_table(verdict, text))
        for item in verdict.signals:
            console.print(text(f"{item.signal.id}: {_clean(_why(item))}"))
    for caution in verdict.cautions:
        console.print(text(f"Caution: {_clean(caution)}", "yellow"))


def _table(verdict: Verdict, text) -> Table:  # type: ignore[no-untyped-def]
    table = Table(box=None, pad_edge=False, show_edge=False)
    for name in ("", "period (d)", "K (m/s)", "e", "FAP", "grade", "odds"):
        table.add_column(escape(name), overflow="fold", justify="left")
    for item in verdict.signals:
        orbit = item.signal.orbit
        table.add_row(
            text(item.signal.id),
            text(uncertain(orbit.period, orbit.period_err, 5)),
            text(uncertain(orbit.semi_amplitude, orbit.semi_amplitude_err, 3)),
            text(number(orbit.eccentricity, 2)),
            text(chance(item.signal.false_alarm_probability)),
            text(f"{GRADE_SYMBOL[item.grade]} {item.grade.value}", _STYLE[item.grade]),
            text(_short_odds(item.score)),
        )
    return table


def _short_odds(score: float) -> str:
    return (
        odds(score)
        .replace(" for a planet", " for")
        .replace(" against a planet", " against")
        .replace("more than ", ">")
        .replace("about ", "")
    )


def _why(item: SignalVerdict) -> str:
    deciding = deciding_findings(item, 1)
    reason = deciding[0].sentence if deciding else "no test had anything to say."
    return f"{reason} Next: {item.next_step}" if item.next_step else reason


def _clean(value: str) -> str:
    """Without control characters, which could steer a terminal."""
    return "".join(char if char.isprintable() else " " for char in value)


_PLAIN = {
    "●": "*", "◐": "?", "✱": "x", "±": "+-", "−": "-", "×": "x", "–": "-", "⁻": "-", "½": "1/2",
    **{sign: str(digit) for digit, sign in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")},
}  # fmt: skip


def _to_ascii(value: str) -> str:
    replaced = "".join(_PLAIN.get(char, char) for char in value)
    return replaced.encode("ascii", errors="replace").decode("ascii")
