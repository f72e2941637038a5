"""Kill a catalogue run again and again; what comes out must not show it.

``python -m tests.integration.kill_catalogue --kills 30`` screens 60 made-up stars once without a
disturbance and once with SIGKILL at random moments, resuming each time, and compares stores and
verdict files. ``--stand-in`` replaces the screening by something that takes no time, so that most
kills fall into the writing of files and store.
"""

from __future__ import annotations

import argparse
import json
import os
import random
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np

from tests.integration.catalogue_work import write_star

__all__ = ["check_state", "differences", "kill_and_resume", "main", "write_stars"]

# columns that hold times or depend on how busy the machine was
_MEASURED = {
    "run": {"started_utc", "changed_utc"},
    "work": {"seconds", "peak_memory_mb", "finished_utc"},
    "failure": {"seconds", "at_utc"},
}
_TABLES = ("run", "star", "work", "verdict", "signal", "finding", "failure")


def write_stars(folder: Path, count: int, stand_in: bool) -> None:
    """Small tables; a few of them cannot be screened."""
    folder.mkdir(parents=True)
    rng = np.random.default_rng(6)
    for number in range(count):
        path = folder / f"K{number:03d}.csv"
        bad = number % 20 == 7
        if stand_in:
            write_star(path, "raise" if bad else "ok", rows=3 + number % 5)
        elif bad:
            path.write_text("time,rv\n2459000.5,1\n", encoding="utf-8")
        else:
            _write_real(path, rng)


def _write_real(path: Path, rng: np.random.Generator) -> None:
    time_d = np.sort(2459000.0 + rng.choice(200, 30, replace=False) + rng.uniform(0, 0.3, 30))
    rv = 8.0 * np.sin(2 * np.pi * time_d / rng.uniform(3, 30)) + rng.normal(0, 2, 30)
    fwhm = 7000 + rng.normal(0, 4, 30)
    lines = ["time,rv,rv_err,fwhm,fwhm_err"]
    lines += [f"{t:.6f},{v:.3f},2.0,{f:.2f},4.0" for t, v, f in zip(time_d, rv, fwhm, strict=True)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def _command(stars: Path, run: Path, stand_in: bool) -> list[str]:
    module = "tests.integration.catalogue_work" if stand_in else "screener"
    options = ["--depth", "quick", "--workers", "2", "--dossiers", "0"]
    return [sys.executable, "-m", module, "catalogue", str(stars), "--out", str(run), *options]


def _finish(stars: Path, run: Path, stand_in: bool) -> None:
    done = subprocess.run(_command(stars, run, stand_in), capture_output=True, text=True)
    if done.returncode != 3:  # some stars are made to fail
        raise SystemExit(f"ended with {done.returncode}:\n{done.stderr[-2000:]}")


def check_state(run: Path) -> list[str]:
    """What is wrong in the folder of a run that was killed: half-written files, a broken store."""
    faults = []
    for path in run.glob("*/verdict.json"):
        try:
            content = json.loads(path.read_text(encoding="utf-8"))
            if content["schema"] != 1 or "signals" not in content:
                faults.append(f"{path}: not whole")
        except (ValueError, KeyError) as error:
            faults.append(f"{path}: {error}")
    if (run / "index.html").exists() and "</html>" not in (run / "index.html").read_text("utf-8"):
        faults.append("index.html is not whole")
    if not (run / "catalogue.sqlite").exists():
        return faults
    with tempfile.TemporaryDirectory() as scratch:  # opening the original would mend it
        for path in run.glob("catalogue.sqlite*"):
            shutil.copy(path, scratch)
        db = sqlite3.connect(Path(scratch) / "catalogue.sqlite")
        if db.execute("PRAGMA integrity_check").fetchone()[0] != "ok":
            faults.append("the store is damaged")
        if db.execute("PRAGMA foreign_key_check").fetchall():
            faults.append("the store's tables do not fit together")
        if db.execute("PRAGMA user_version").fetchone()[0]:
            rows = db.execute("SELECT t.folder FROM verdict v JOIN star t ON t.name = v.star")
            for (folder,) in rows.fetchall():
                if not (run / folder / "verdict.json").is_file():
                    faults.append(f"{folder}: recorded, but there is no file")
        db.close()
    return faults


def _dump(run: Path) -> dict[str, list[dict[str, Any]]]:
    db = sqlite3.connect(run / "catalogue.sqlite")
    db.row_factory = sqlite3.Row
    result = {}
    for table in _TABLES:
        skip = _MEASURED.get(table, set())
        rows = [
            {key: row[key] for key in row.keys() if key not in skip}  # noqa: SIM118
            for row in db.execute(f"SELECT * FROM {table}")
        ]
        result[table] = sorted(rows, key=lambda row: json.dumps(row, sort_keys=True))
    db.close()
    return result


def differences(run: Path, other: Path) -> list[str]:
    """Where two finished runs differ, in store or verdict files, but for times."""
    found = []
    one, two = _dump(run), _dump(other)
    for table in _TABLES:
        if one[table] != two[table]:
            found.append(f"table {table}: {len(one[table])} and {len(two[table])} rows differ")
    files = {p.relative_to(r) for r in (run, other) for p in r.glob("*/verdict.json")}
    for path in sorted(files):
        texts = [(r / path).read_bytes() if (r / path).exists() else None for r in (run, other)]
        if texts[0] != texts[1]:
            found.append(f"{path} differs")
    leftovers = [p for r in (run, other) for p in r.glob("*/.*")]
    return found + [f"left over: {path}" for path in leftovers]


def computed_twice(run: Path) -> list[str]:
    """Stars that the log reports as done more than once."""
    lines = (run / "run.log").read_text(encoding="utf-8").splitlines()
    done = Counter(
        line.split(" ", 1)[1].split(":")[0]
        for line in lines
        if any(f": {grade}, " in line for grade in ("planetary", "ambiguous", "likely stellar"))
        or ": no signal, " in line
    )
    return [star for star, count in done.items() if count > 1]


def kill_and_resume(
    stars: Path, run: Path, kills: int, stand_in: bool, rng: random.Random
) -> dict[str, int]:
    """Start, kill, check, and again; then let the run end.

    Kills are spread over the whole run: each waits for a random share of the stars to be done,
    plus a random moment; every fifth falls into the start.
    """
    count = len(list(stars.glob("*.csv")))
    goals = sorted(rng.uniform(0, count) for _ in range(kills))
    seen: Counter[str] = Counter()
    for number, goal in enumerate(goals):
        process = subprocess.Popen(
            _command(stars, run, stand_in), stderr=subprocess.DEVNULL, stdout=subprocess.DEVNULL
        )
        if number % 5 == 4:
            time.sleep(rng.uniform(0.0, 2.0))
        else:
            while process.poll() is None and len(list(run.glob("*/verdict.json"))) < goal:
                time.sleep(0.001)
            time.sleep(rng.uniform(0.0, 0.02 if stand_in else 1.0))
        if process.poll() is None:
            os.kill(process.pid, signal.SIGKILL)
        code = process.wait()
        seen["killed" if code == -signal.SIGKILL else "ended first"] += 1
        faults = check_state(run) if run.exists() else []
        if faults:
            raise SystemExit("after a kill: " + "; ".join(faults[:5]))
    _finish(stars, run, stand_in)
    return dict(seen)


def main(arguments: list[str] | None = None) -> int:
    """Exit code 0 if the disturbed run cannot be told from the undisturbed one."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--kills", type=int, default=30)
    parser.add_argument("--stars", type=int, default=60)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--stand-in", action="store_true")
    options = parser.parse_args(arguments)
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        stars = folder / "stars"
        write_stars(stars, options.stars, options.stand_in)
        _finish(stars, folder / "calm", options.stand_in)
        rng = random.Random(options.seed)
        seen = kill_and_resume(stars, folder / "killed", options.kills, options.stand_in, rng)
        found = differences(folder / "killed", folder / "calm")
        found += [f"{star} was computed twice" for star in computed_twice(folder / "killed")]
        verdicts = len(list((folder / "killed").glob("*/verdict.json")))
    print(f"{options.stars} stars, {verdicts} verdicts, kills: {seen}")
    for line in found:
        print(line)
    print("identical but for times" if not found else "DIFFERENT")
    return 1 if found else 0


if __name__ == "__main__":
    sys.exit(main())
