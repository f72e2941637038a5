"""A small run with verdicts and inputs on disk; nothing is screened."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from pathlib import Path

from screener.core import InputRecord, Verdict
from screener.ledger import Entry, Request, open_place, record
from screener.report.verdict_json import write_verdict
from tests.unit.report_sample import sample

__all__ = ["STARS", "decide", "make_run", "verdict_for", "write_inputs"]

STARS = ("tern-14", "tern-15")


def _sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def write_inputs(folder: Path, star: str) -> InputRecord:
    """Table, sidecar and photometry of a star, and their record."""
    folder.mkdir(parents=True, exist_ok=True)
    table, sidecar, light = (folder / f"{star}{end}" for end in (".csv", ".toml", ".phot.csv"))
    rows = "".join(f"{2458000 + 3 * i},{i % 7 - 3}.25,1.5\n" for i in range(20))
    table.write_text(f"time,rv,rv_err\n{rows}", encoding="utf-8")
    sidecar.write_text(f'[star]\nname = "{star}"\n', encoding="utf-8")
    light.write_text("time,flux,flux_err\n2458000,1.0,0.001\n", encoding="utf-8")
    return InputRecord(
        str(table), _sha256(table), str(sidecar), _sha256(sidecar), str(light), _sha256(light)
    )


def verdict_for(star: str, inputs: InputRecord) -> Verdict:
    """S1 planetary at 37.42 d, S2 likely stellar at 11.19 d."""
    verdict = sample().verdict
    return replace(verdict, star=replace(verdict.star, name=star.title()), record=inputs)


def make_run(folder: Path) -> Path:
    """``folder/run`` with a verdict per star, made from tables in ``folder/stars``."""
    for star in STARS:
        inputs = write_inputs(folder / "stars", star)
        write_verdict(folder / "run" / star / "verdict.json", verdict_for(star, inputs))
    return folder / "run"


def decide(
    run: Path,
    star: str | None = STARS[0],
    signal: str = "S1",
    decision: str = "announce",
    note: str = "seen",
    reason: str | None = None,
    by: str = "A. Kestrel",
    weighed_most: str | None = None,
) -> tuple[Entry, tuple[str, ...]]:
    """Record a decision the way the command line does."""
    place = open_place(run)
    verdict = place.verdict(place.find(star))
    return record(place, verdict, Request(signal, decision, by, note, reason, weighed_most))
