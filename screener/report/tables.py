"""Signals, findings and nights as tables: astropy, pandas, ECSV and LaTeX."""

from __future__ import annotations

import io
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from astropy.table import Table

from screener.core import Signal, Verdict
from screener.report.files import write_text
from screener.report.system_view import nested
from screener.report.verdict_json import plain

__all__ = [
    "TABLE_FORMATS",
    "findings_table",
    "nights_table",
    "signals_table",
    "table_text",
    "to_pandas",
    "write_tables",
]

TABLE_FORMATS = ("ecsv", "tex")
_REAL, _WORD = "f8", "U"


def signals_table(verdict: Verdict) -> Table:
    """One row per signal, known planets last; unknown numbers are NaN."""
    rows: list[tuple[Signal, str, float | None, str, str]] = [
        (
            item.signal,
            item.grade.value,
            item.score,
            "; ".join(item.deciding_rules),
            item.next_step,
        )
        for item in verdict.signals
    ]
    rows += [(signal, "known", None, "", "") for signal in verdict.known_planets]
    columns: list[tuple[str, str, Any, Sequence[Any]]] = [
        ("star", _WORD, None, [verdict.star.name] * len(rows)),
        ("id", _WORD, None, [r[0].id for r in rows]),
        ("period", _REAL, u.day, [r[0].orbit.period for r in rows]),
        ("period_err", _REAL, u.day, [r[0].orbit.period_err for r in rows]),
        ("semi_amplitude", _REAL, u.m / u.s, [r[0].orbit.semi_amplitude for r in rows]),
        ("semi_amplitude_err", _REAL, u.m / u.s, [r[0].orbit.semi_amplitude_err for r in rows]),
        ("eccentricity", _REAL, None, [r[0].orbit.eccentricity for r in rows]),
        ("eccentricity_err", _REAL, None, [r[0].orbit.eccentricity_err for r in rows]),
        ("omega_peri", _REAL, u.rad, [r[0].orbit.omega_peri for r in rows]),
        ("time_peri", _REAL, u.day, [r[0].orbit.time_peri for r in rows]),
        ("false_alarm_probability", _REAL, None, [r[0].false_alarm_probability for r in rows]),
        ("grade", _WORD, None, [r[1] for r in rows]),
        ("score", _REAL, None, [r[2] for r in rows]),
        ("deciding_rules", _WORD, None, [r[3] for r in rows]),
        ("next_step", _WORD, None, [r[4] for r in rows]),
    ]
    return _table(columns, verdict)


def findings_table(verdict: Verdict) -> Table:
    """One row per signal and test; unknown numbers are NaN."""
    rows = [(item.signal.id, f) for item in verdict.signals for f in item.findings]
    columns: list[tuple[str, str, Any, Sequence[Any]]] = [
        ("star", _WORD, None, [verdict.star.name] * len(rows)),
        ("signal", _WORD, None, [r[0] for r in rows]),
        ("test", _WORD, None, [r[1].test for r in rows]),
        ("outcome", _WORD, None, [r[1].outcome.value for r in rows]),
        ("statistic", _REAL, None, [r[1].statistic for r in rows]),
        ("p_value", _REAL, None, [r[1].p_value for r in rows]),
        ("power", _REAL, None, [r[1].power for r in rows]),
        ("sentence", _WORD, None, [r[1].sentence for r in rows]),
    ]
    return _table(columns, verdict)


def nights_table(verdict: Verdict) -> Table | None:
    """The nights that would settle ambiguous signals, best first; None where none were ranked."""
    listed = [
        (name, night)
        for name, plan in (nested(verdict.system, "nights") or {}).items()
        for night in nested(plan, "nights") or ()
    ]
    if not listed:
        return None
    columns: list[tuple[str, str, Any, Sequence[Any]]] = [
        ("signal", _WORD, None, [name for name, _ in listed]),
        ("date", _WORD, None, [str(nested(n, "date") or "") for _, n in listed]),
    ]
    for key, name, unit in (
        ("rank", "rank", None),
        ("time_bjd_d", "time", u.day),
        ("information_nat", "information", None),
        ("log_odds_so_far", "log_odds", None),
        ("velocity_planet_m_s", "velocity_planet", u.m / u.s),
        ("velocity_star_m_s", "velocity_star", u.m / u.s),
        ("altitude_deg", "altitude", u.deg),
        ("moon_distance_deg", "moon_distance", u.deg),
        ("moon_lit", "moon_lit", None),
    ):
        columns.append((name, _REAL, unit, [nested(n, key) for _, n in listed]))
    return _table(columns, verdict)


def _table(columns: Sequence[tuple[str, str, Any, Sequence[Any]]], verdict: Verdict) -> Table:
    table = Table()
    for name, kind, unit, values in columns:
        if kind == _REAL:
            rounded = [plain(None if v is None else float(v)) for v in values]
            numbers = [np.nan if v is None else v for v in rounded]
            table[name] = np.array(numbers, dtype=float)
        else:
            table[name] = np.array([" ".join(str(v).split()) for v in values], dtype=str)
        table[name].unit = unit
    table.meta["screener"] = verdict.version
    table.meta["rules"] = verdict.rules
    table.meta["input_sha256"] = verdict.record.sha256
    return table


def to_pandas(verdict: Verdict, what: str = "signals") -> Any:
    """Signals ("signals") or findings ("findings") as a pandas DataFrame.

    Raises
    ------
    ValueError
        On any other word.
    """
    makers = {"signals": signals_table, "findings": findings_table}
    if what not in makers:
        raise ValueError(f"no table {what!r}; there are {', '.join(makers)}")
    return makers[what](verdict).to_pandas()


def table_text(table: Table, kind: str) -> str:
    """A table as ECSV ("ecsv") or as a LaTeX tabular ("tex").

    Raises
    ------
    ValueError
        On a format that we do not write.
    """
    if kind == "tex":
        return _latex(table)
    if kind != "ecsv":
        raise ValueError(f"no table format {kind!r}; there are {', '.join(TABLE_FORMATS)}")
    stream = io.StringIO()
    table.write(stream, format="ascii.ecsv")
    return stream.getvalue()


_LATEX = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_",
    "{": r"\{", "}": r"\}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}",
}  # fmt: skip


def _latex(table: Table) -> str:
    """Written by hand, because names may hold anything and LaTeX would run it."""
    numeric = [table[name].dtype.kind == "f" for name in table.colnames]
    lines = [rf"\begin{{tabular}}{{{''.join('r' if n else 'l' for n in numeric)}}}", r"\hline"]
    head = []
    for name in table.colnames:
        unit = table[name].unit
        head.append(_escaped(f"{name} ({unit.to_string()})" if unit is not None else name))
    lines += [" & ".join(head) + r" \\", r"\hline"]
    for row in table:
        cells = [
            (_number(float(value)) if is_number else _escaped(str(value)))
            for value, is_number in zip(row, numeric, strict=True)
        ]
        lines.append(" & ".join(cells) + r" \\")
    return "\n".join([*lines, r"\hline", r"\end{tabular}", ""])


def _escaped(text: str) -> str:
    return "".join(_LATEX.get(char, char) for char in text)


def _number(value: float) -> str:
    if not np.isfinite(value):
        return r"\ldots"
    text = f"{value:.10g}"
    if "e" not in text:
        return f"${text}$"
    mantissa, power = f"{value:.3g}".split("e")
    return rf"${mantissa}\times10^{{{int(power)}}}$"


def write_tables(
    verdict: Verdict, folder: Path | str, formats: Sequence[str] = TABLE_FORMATS
) -> tuple[Path, ...]:
    """Write ``signals``, ``findings`` and, where there are any, ``nights`` to ``folder``.

    Raises
    ------
    ValueError
        On a format that we do not write.
    OSError
        If a file cannot be written.
    """
    tables = {"signals": signals_table(verdict), "findings": findings_table(verdict)}
    nights = nights_table(verdict)
    if nights is not None:
        tables["nights"] = nights
    written = []
    for name, table in tables.items():
        for kind in formats:
            written.append(Path(folder) / f"{name}.{kind}")
            write_text(written[-1], table_text(table, kind))
    return tuple(written)
