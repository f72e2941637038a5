"""What the tests of catalogue runs have in common."""

from __future__ import annotations

import io
import subprocess
import sys
import time
from pathlib import Path

from screener.catalogue import Limits, Options, Summary, run_catalogue
from screener.catalogue.progress import LineWatch
from tests.integration.catalogue_work import DRAW, WORK

__all__ = ["MODULE", "cli", "options", "run_stars", "wait_for"]

MODULE = "tests.integration.catalogue_work"


def options(**changes: object) -> Options:
    given = {"workers": 2, "limits": Limits(20.0, 400.0), "work": WORK, "draw": DRAW}
    given |= {"dossiers": 0, **changes}
    return Options(**given)  # type: ignore[arg-type]


def run_stars(source: Path, out: Path, **changes: object) -> tuple[Summary, str]:
    stream = io.StringIO()
    summary = run_catalogue(source, out, options(**changes), LineWatch(stream))
    return summary, stream.getvalue()


def cli(*arguments: object, module: str = MODULE) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", module, "catalogue", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, timeout=120)


def wait_for(condition, seconds: float):  # type: ignore[no-untyped-def]
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        value = condition()
        if value:
            return value
        time.sleep(0.05)
    raise AssertionError("waited in vain")
