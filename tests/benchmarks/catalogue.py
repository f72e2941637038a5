"""How many stars an hour: ``python -m tests.benchmarks.catalogue [--stars 300] [--json FILE]``.

Simulated stars of about 100 nights with three indicators are screened at quick depth with two
workers; a part of them is screened again with two and with one worker, the two taken in turns so
that what else the machine does falls on both alike, for the efficiency of the second core. Figures
are not drawn. Numeric threads are pinned to one per worker by the run itself.
"""

from __future__ import annotations

import argparse
import io
import json
import os
import platform
import resource
import shutil
import sys
import tempfile
from pathlib import Path
from typing import Any

from screener.catalogue import Limits, Options, run_catalogue
from screener.catalogue.progress import LineWatch
from screener.catalogue.settings import Summary
from tests.shared import shared

__all__ = ["main", "measure"]

_NIGHTS, _INDICATORS = 100, 3
_PASSES = 2


def _trimmed(table: Path, shift: int) -> str | None:
    """A simulated star's table with 100 nights and three indicators; None if it has less."""
    lines = table.read_text(encoding="utf-8").splitlines()
    names = lines[0].split(",")
    rows = [dict(zip(names, line.split(","), strict=True)) for line in lines[1:]]
    indicators = [n for n in names[4:] if not n.endswith("_err") and f"{n}_err" in names]
    nights = sorted({int(float(row["time"])) for row in rows})
    if len(nights) < 60 or len(indicators) < 2:
        return None
    # repeats of a star differ in which nights they have
    kept = set(nights[shift : shift + _NIGHTS])
    columns = ["time", "rv", "rv_err", "instrument"]
    for name in indicators[:_INDICATORS]:
        columns += [name, f"{name}_err"]
    chosen = [row for row in rows if int(float(row["time"])) in kept]
    return "\n".join([",".join(columns), *(",".join(r[c] for c in columns) for r in chosen)]) + "\n"


def _write_shared(folder: Path, count: int) -> int:
    tables = sorted(shared("sim_stars", "stars").glob("*.csv"))
    tables = [t for t in tables if not t.name.endswith(".phot.csv")]
    written, shift = 0, 0
    while tables and written < count and shift < 40:
        for table in tables:
            content = _trimmed(table, shift)
            if content is None or written >= count:
                continue
            path = folder / f"{table.stem}-{shift}.csv"
            path.write_text(content, encoding="utf-8")
            if table.with_suffix(".toml").exists():
                shutil.copy(table.with_suffix(".toml"), path.with_suffix(".toml"))
            written += 1
        shift += 3
    return written


def _write_stars(folder: Path, count: int) -> str:
    """Fill ``folder`` and say with what."""
    folder.mkdir(parents=True)
    if _write_shared(folder, count) == count:
        return "simulated stars of the shared set, cut to 100 nights and three indicators"
    from screener.synthetic.population import write_population

    shutil.rmtree(folder)
    write_population(folder.parent, count, seed=6)  # makes stars/ below it
    return "synthetic population, survey mix, seed 6"


def _run(stars: Path, out: Path, workers: int) -> Summary:
    options = Options(workers=workers, limits=Limits(600.0, 2000.0), depth="quick", dossiers=0)
    return run_catalogue(stars, out, options, LineWatch(io.StringIO()))


def _cpu_of_workers() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def measure(count: int, part: int, folder: Path) -> dict[str, Any]:
    """Run the benchmark in ``folder``.

    Parameters
    ----------
    count : int
        Stars of the large run.
    part : int
        Stars of the runs for the efficiency.

    Returns
    -------
    dict
        ``stars_per_hour_2_workers``, ``efficiency_2_workers``, ``peak_memory_mb`` and more.
    """
    stars = folder / "stars"
    source = _write_stars(stars, count)
    before = _cpu_of_workers()
    large = _run(stars, folder / "run", 2)
    cpu = _cpu_of_workers() - before
    some = folder / "some.txt"
    tables = [t for t in sorted(stars.glob("*.csv")) if not t.name.endswith(".phot.csv")]
    some.write_text("\n".join(map(str, tables[:: max(1, len(tables) // part)][:part])))
    seconds = {1: 0.0, 2: 0.0}
    for turn in range(_PASSES):
        for workers in (1, 2):
            out = folder / f"part-{workers}-{turn}"
            seconds[workers] += _run(some, out, workers).seconds
    n_part = len(some.read_text().splitlines())
    return {
        "stars": large.computed,
        "failed": large.counts["failed"],
        "stars_per_hour_2_workers": round(3600 * large.computed / large.seconds, 1),
        "stars_per_hour_1_worker": round(3600 * n_part * _PASSES / seconds[1], 1),
        "efficiency_2_workers": round(seconds[1] / seconds[2] / 2, 3),
        # of the cores' time, not the clock's: holds on a busy machine as well
        "cpu_s_per_star": round(cpu / max(1, large.computed), 2),
        "peak_memory_mb": large.peak_memory_mb,
        "start_up_s": None if large.start_seconds is None else round(large.start_seconds, 2),
        "input": source,
        "hardware": f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores",
        "python": platform.python_version(),
    }


def main(arguments: list[str] | None = None) -> int:
    """Print the numbers, and write them where asked."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--stars", type=int, default=300)
    parser.add_argument("--part", type=int, default=40, help="stars for the efficiency")
    parser.add_argument("--json", type=Path, default=None)
    options = parser.parse_args(arguments)
    with tempfile.TemporaryDirectory() as scratch:
        load = os.getloadavg()[0]
        result = measure(options.stars, min(options.part, options.stars), Path(scratch))
        result["load_before"] = round(load, 1)
    for name, value in result.items():
        print(f"{name:>26}: {value}")
    if options.json is not None:
        options.json.write_text(json.dumps(result, indent=1) + "\n", encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
