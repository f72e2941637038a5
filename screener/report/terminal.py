"""A verdict in a terminal: a short table, plain where nobody looks at a screen."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import IO

from rich.console import Console
from rich.table import Table
from rich.text import Text

from screener.core import Grade, SignalVerdict, Verdict
from screener.report.reasons import deciding_findings
from screener.report.style import GRADE_SYMBOL
from screener.report.words import compact, false_alarm, number, polished, short_odds, uncertain

__all__ = ["print_summary"]

_STYLE = {
    Grade.PLANETARY: "bold blue",
    Grade.AMBIGUOUS: "bold",
    Grade.LIKELY_STELLAR: "bold yellow",
}
_Maker = Callable[..., Text]


def print_summary(
    verdict: Verdict, folder: Path | None = None, *, file: IO[str] | None = None
) -> None:
    """Print a verdict as a short table, and where its dossier lies.

    Coloured on a terminal; without colour and at 80 columns elsewhere, so that it can be piped.

    Parameters
    ----------
    folder : Path or None
        The folder that holds the dossier; named in the last line.
    file : text stream
        Standard output if absent.
    """
    stream = sys.stdout if file is None else file
    plain = not getattr(stream, "isatty", lambda: False)()
    console = Console(
        file=stream, width=80 if plain else None, no_color=True if plain else None, highlight=False
    )
    poor = not _takes_signs(stream)

    def text(value: str, style: str = "") -> Text:
        clean = "".join(char if char.isprintable() else " " for char in value)
        return Text(_to_ascii(clean) if poor else clean, style=style)

    _print(console, verdict, text)
    if folder is not None:
        # never broken or padded: a path is there to be copied
        console.print(text(f"Dossier: {folder / 'dossier.html'}"), soft_wrap=True)


def _takes_signs(stream: IO[str]) -> bool:
    """Whether the encoding of a stream has our signs."""
    encoding = getattr(stream, "encoding", None) or "utf-8"
    try:
        "●◐✱±−×⁻⁹–".encode(encoding)
    except (UnicodeEncodeError, LookupError):
        return False
    return True


def _print(console: Console, verdict: Verdict, text: _Maker) -> None:
    rotation = verdict.rotation
    spin = "not known"
    if rotation.period is not None:
        spin = f"{uncertain(rotation.period, rotation.period_err)} d"
    console.print(text(verdict.star.name, "bold"))
    console.print(
        text(
            f"{verdict.n_obs} velocities, {verdict.n_nights} nights, "
            f"{number(verdict.baseline, 4)} d; {', '.join(verdict.instruments)}"
        )
    )
    console.print(text(f"rotation: {spin}"))
    if not verdict.signals:
        console.print(text("No significant period was found."))
    else:
        console.print()
        console.print(_table(verdict, text))
        console.print()
        for item in verdict.signals:
            console.print(text(f"{item.signal.id}: {_why(item)}"))
    for caution in verdict.cautions:
        console.print(text(f"Caution: {caution}", "yellow"))


def _table(verdict: Verdict, text: _Maker) -> Table:
    table = Table(box=None, pad_edge=False, show_edge=False, padding=(0, 2, 0, 0))
    for name in ("", "period (d)", "K (m/s)", "e", "FAP", "grade", "odds"):
        table.add_column(name, no_wrap=name in ("", "e", "FAP", "grade"), overflow="fold")
    for item in verdict.signals:
        orbit = item.signal.orbit
        table.add_row(
            text(item.signal.id),
            text(_tight(orbit.period, orbit.period_err, 5)),
            text(_tight(orbit.semi_amplitude, orbit.semi_amplitude_err, 3)),
            text(compact(orbit.eccentricity, 2)),
            text(false_alarm(item.signal)),
            text(f"{GRADE_SYMBOL[item.grade]} {item.grade.value}", _STYLE[item.grade]),
            text(short_odds(item.score).replace(" : ", ":")),
        )
    return table


def _tight(value: float, error: float | None, digits: int) -> str:
    return uncertain(value, error, digits).replace(" ± ", "±")


def _why(item: SignalVerdict) -> str:
    deciding = deciding_findings(item, 1)
    reason = polished(deciding[0].sentence) if deciding else "No test had anything to say."
    return f"{reason} Next: {item.next_step}" if item.next_step else reason


_PLAIN = {
    "●": "*", "◐": "?", "✱": "x", "±": "+-", "−": "-", "×": "x", "–": "-", "⁻": "-", "½": "1/2",
    "\u00a0": " ", "“": '"', "”": '"',
    **{sign: str(digit) for digit, sign in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")},
}  # fmt: skip


def _to_ascii(value: str) -> str:
    # powers of ten first: 3x10^-14, not 3x10-14
    value = value.replace("10⁻", "10^-")
    replaced = "".join(_PLAIN.get(char, char) for char in value)
    return replaced.encode("ascii", errors="replace").decode("ascii")
