"""Stand-ins for screening a star: quick, and bad in every way that a star can be bad.

The first data line of a table says what is to happen: ``ok``, ``hang``, ``die``, ``signal``,
``memory``, ``raise``, ``garbage``, ``slow`` or ``once`` (dies at the first attempt only).
"""

from __future__ import annotations

import ctypes
import hashlib
import json
import os
import random
import sys
import time
from functools import partial
from pathlib import Path

from screener import __version__
from screener.catalogue.messages import StarTask, WorkResult
from screener.core import InputFault

__all__ = ["WORK", "draw", "main", "screen", "verdict_of", "write_star"]

WORK = "tests.integration.catalogue_work:screen"
DRAW = "tests.integration.catalogue_work:draw"
GRADES = ("planetary", "ambiguous", "likely stellar")


def write_star(path: Path, what: str = "ok", rows: int = 5) -> Path:
    """A table that ``screen`` understands."""
    path.write_text("time,rv\n" + f"{what},{path.stem}\n" * rows, encoding="utf-8")
    return path


def verdict_of(star: str, sha256: str, depth: str, seed: int, lead: int = 0) -> dict[str, object]:
    """A verdict that follows from the arguments alone."""
    rng = random.Random(f"{sha256}{depth}{seed}")
    signals = []
    for number in range(rng.randrange(3)):
        period = round(rng.uniform(1, 400), 4)
        finding = {
            "test": "same_period",
            "outcome": "inconclusive",
            "statistic": rng.random(),
            "p_value": None,
            "power": 0.5,
            "sentence": "Nothing & <nothing>.",
        }
        signals.append(
            {
                "id": f"S{number + 1}",
                "period_d": period,
                "period_err_d": period / 1000,
                "k_m_s": round(rng.uniform(0.5, 80), 3),
                "k_err_m_s": 0.4,
                "eccentricity": 0.1,
                "false_alarm_probability": 1e-5,
                "grade": GRADES[rng.randrange(3)],
                "score": round(rng.gauss(lead, 3), 4),
                "findings": [finding],
                "deciding_rules": ["same-period"],
                "next_step": "Observe again.",
            }
        )
    return {
        "schema": 1,
        "star": star,
        "screener": __version__,
        "rules": "default 1",
        "seed": seed,
        "depth": depth,
        "input": {"file": "x", "sha256": sha256, "n_obs": 5, "n_nights": 5, "baseline_d": 9.0},
        "rotation": {"period_d": None, "period_err_d": None, "sources": []},
        "signals": signals,
        "system": {},
        "cautions": [],
    }


def screen(task: StarTask) -> WorkResult:
    """Do to the worker what the table says, or give a verdict."""
    content = Path(task.table).read_bytes()
    lines = content[:4096].decode("utf-8", "replace").splitlines()
    if len(lines) < 2:
        raise InputFault(str(task.table), "the table has no rows", "Export it again")
    what = lines[1].split(",")[0]
    _misbehave(what, Path(task.table))
    verdict = verdict_of(task.star, hashlib.sha256(content).hexdigest(), task.depth, task.seed)
    if what == "garbage":
        return WorkResult(b"{not json")
    folds = {str(s["id"]): [[k / 30, float(k % 7)] for k in range(30)] for s in verdict["signals"]}
    return WorkResult(json.dumps(verdict, indent=1).encode(), folds)


def _misbehave(what: str, table: Path) -> None:
    if what == "hang":
        time.sleep(3600)
    elif what == "slow":
        time.sleep(0.4)
    elif what == "die":
        os._exit(7)
    elif what == "signal":
        ctypes.string_at(0)
    elif what == "memory":
        hoard = []
        while True:
            hoard.append(bytearray(10_000_000))
    elif what == "raise":
        raise RuntimeError("the star <b>raised</b> this")
    elif what == "once":
        mark = table.with_suffix(".mark")
        if not mark.exists():
            mark.touch()
            os._exit(7)


def draw(task: StarTask) -> str:
    """A dossier in one line."""
    assert task.folder is not None
    (task.folder / "dossier.html").write_text("<!doctype html><title>dossier</title>", "utf-8")
    return ""


def main() -> None:
    """The command line with these stand-ins."""
    import screener.catalogue
    from screener.cli import main as command_line

    screener.catalogue.Options = partial(  # type: ignore[misc,assignment]
        screener.catalogue.Options, work=WORK, draw=DRAW
    )
    command_line(sys.argv[1:])


if __name__ == "__main__":
    main()
