"""Screen the real stars of the shared material and print how the grades compare with literature.

Each star runs as a user would run it, ``screener candidate TABLE``, into its own folder; a star
whose verdict is there already is kept, so that a broken-off run goes on. The score is that of the
shared ``score_real.py``.

Run: python -m tests.reference.real_stars [--depth quick] [--stars corot7 gj849] [--out FOLDER]
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.shared import shared

__all__ = ["main", "run_star", "score"]


def run_star(name: str, folder: Path, depth: str, seed: int = 1) -> tuple[int, float]:
    """Exit code of the command and seconds it took; its words go to ``folder``/STAR.log."""
    folder.mkdir(parents=True, exist_ok=True)
    table = shared("real_stars", f"{name}.csv")
    command = [sys.executable, "-m", "screener", "candidate", str(table), "--depth", depth]
    command += ["--seed", str(seed), "--out", str(folder / name)]
    threads = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
    start = time.monotonic()
    with (folder / f"{name}.log").open("w", encoding="utf-8") as log:
        done = subprocess.run(
            command, stdout=log, stderr=log, env={**os.environ, **threads}, check=False
        )
    return done.returncode, time.monotonic() - start


def score(folder: Path) -> str:
    """What the shared script prints about a folder of verdicts."""
    done = subprocess.run(
        [
            sys.executable, str(shared("score_real.py")), "--truth",
            str(shared("real_stars", "truth.json")), "--verdicts", str(folder),
        ],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return done.stdout


def main(argv: list[str] | None = None) -> int:
    """Run and score; exit status 1 where a star failed, 2 where there is nothing to run."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--depth", choices=("quick", "standard", "deep"), default="quick")
    parser.add_argument("--stars", nargs="*", help="names; all if absent")
    parser.add_argument("--out", type=Path, help="a temporary folder if absent")
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args(argv)
    tables = sorted(shared("real_stars").glob("*.csv"))
    names = arguments.stars or [t.stem for t in tables if not t.stem.endswith(".phot")]
    if not names or not shared("real_stars").exists():
        print(f"no tables in {shared('real_stars')}; set SCREENER_SHARED", file=sys.stderr)
        return 2
    folder = arguments.out or Path(tempfile.mkdtemp(prefix="real_stars_"))
    failed = 0
    for name in names:
        if (folder / name / "verdict.json").exists():
            print(f"{name:15s} kept", flush=True)
            continue
        code, seconds = run_star(name, folder, arguments.depth, arguments.seed)
        failed += code != 0
        print(f"{name:15s} exit code {code}, {seconds:.0f} s", flush=True)
    print(f"verdicts in {folder}\n{score(folder)}", end="")
    return int(failed > 0)


if __name__ == "__main__":
    raise SystemExit(main())
