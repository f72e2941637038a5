"""Our evidences against the published ones, for data sets of the layout of the evidence challenge.

    python -m tests.reference.published_evidence FOLDER --sets 1 2 3 [--json FILE]

Data and published values: Evidence Challenge of the third Extremely Precise Radial Velocities
workshop, Nelson et al. 2020, AJ 159, 73. The command ends with 1 where an evidence of prior set
``a`` with up to two planets lies outside, or where our two methods disagree.
"""

from __future__ import annotations

import argparse
import csv
import json
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

from screener.models.evidence_integrals import (
    AnnealingEffort,
    Effort,
    EvidenceProblem,
    ImportanceSampler,
    JeffreysPrior,
    PlanetPrior,
    check_evidence,
)

__all__ = ["Record", "inside", "load_problem", "published", "run"]

# the model and priors that all submissions used (README of the data)
WIDE_PERIODS = (1.25, 1.0e4)
KERNEL_VARIANCE, KERNEL_PERIOD, KERNEL_WIDTH, KERNEL_DECAY = 3.0, 20.0, 0.5, 50.0
MEDIAN_TOLERANCE = 0.15  # of log10 Z without planets
QUARTILE_TOLERANCE = 0.5  # by which the quartiles are widened with planets
REQUIRED_PLANETS = 2  # a result is demanded for up to so many planets; more are shown


@dataclass(frozen=True)
class Record:
    """One evidence beside the published quartiles; null where not published or not checked.

    ``error`` and ``check_error`` are half-widths of 95 % intervals of log10 Z; ``seconds`` is the
    wall time of ``log10_z``, ``check_seconds`` that of the second method; ``cpu_seconds`` is what
    both together took of one core, which a busy machine does not change.
    """

    set: int
    prior: str
    n: int
    log10_z: float
    error: float
    q25: float | None
    median: float | None
    q75: float | None
    inside: bool | None
    seconds: float
    method: str
    converged: bool
    check_method: str | None = None
    check_log10_z: float | None = None
    check_error: float | None = None
    check_seconds: float = 0.0
    cpu_seconds: float = 0.0
    agree: bool | None = None


def load_problem(folder: Path, dataset: int, prior: str) -> EvidenceProblem:
    """One data set with prior set ``a`` (wide periods) or ``b`` (bounds from the file)."""
    time_, rv, rv_err = np.loadtxt(folder / f"rvs_{dataset:04d}.txt", usecols=(0, 1, 2)).T
    lag = time_[:, None] - time_
    covariance = KERNEL_VARIANCE * np.exp(
        -0.5
        * (np.sin(np.pi * lag / KERNEL_PERIOD) ** 2 / KERNEL_WIDTH**2 + lag**2 / KERNEL_DECAY**2)
    )
    amplitude = JeffreysPrior(1.0, 999.0)
    if prior == "a":
        planets = (PlanetPrior(*WIDE_PERIODS, amplitude, 0.2),)
    else:
        path = folder / f"prior_bounds_{dataset:04d}.txt"
        rows = [line.split(",") for line in path.read_text().splitlines() if line.strip()]
        rows.sort(key=lambda row: int(row[1]))
        planets = tuple(PlanetPrior(float(r[2]), float(r[3]), amplitude, 0.2) for r in rows)
    return EvidenceProblem(time_, rv, rv_err, covariance, planets, jitter=JeffreysPrior(1.0, 99.0))


def published(folder: Path) -> dict[tuple[int, str, int], tuple[float, float, float]]:
    """Quartiles of the published log10 Z by (data set, prior set, number of planets)."""
    with (folder / "published_log10_evidence.csv").open(newline="") as file:
        return {
            (int(r["dataset"]), r["prior"].strip(), int(r["n_planets"])): (
                float(r["q25"]),
                float(r["median"]),
                float(r["q75"]),
            )
            for r in csv.DictReader(file)
        }


def inside(n_planets: int, value: float, quartiles: tuple[float, float, float]) -> bool:
    """Near the median without planets, within the widened quartiles with planets."""
    q25, median, q75 = quartiles
    if n_planets == 0:
        return abs(value - median) <= MEDIAN_TOLERANCE
    return q25 - QUARTILE_TOLERANCE <= value <= q75 + QUARTILE_TOLERANCE


def run(
    folder: Path,
    dataset: int,
    prior: str,
    max_planets: int = 3,
    check_planets: int = 2,
    seed: int = 1,
    effort: Effort | None = None,
    check_effort: AnnealingEffort | None = None,
) -> list[Record]:
    """All evidences of one data set and prior set; checked up to ``check_planets`` planets."""
    problem = load_problem(folder, dataset, prior)
    table = published(folder)
    known = max_planets if prior == "a" else min(max_planets, len(problem.planets))
    first_seed, second_seed = np.random.SeedSequence([seed, dataset, ord(prior)]).spawn(2)
    sampler = ImportanceSampler(problem, np.random.default_rng(first_seed), effort)
    second_rng = np.random.default_rng(second_seed)
    records = []
    for n in range(known + 1):
        start, cpu = time.perf_counter(), time.process_time()
        ours = sampler.estimate(n)
        seconds = time.perf_counter() - start
        quartiles = table.get((dataset, prior, n))
        record = {
            "set": dataset,
            "prior": prior,
            "n": n,
            "log10_z": ours.log10_z,
            "error": ours.log10_error,
            "q25": quartiles[0] if quartiles else None,
            "median": quartiles[1] if quartiles else None,
            "q75": quartiles[2] if quartiles else None,
            "inside": inside(n, ours.log10_z, quartiles) if quartiles else None,
            "method": ours.method,
            "converged": ours.converged,
        }
        if n <= check_planets:
            second = check_evidence(problem, n, second_rng, check_effort)
            record |= {
                "check_method": second.method,
                "check_log10_z": second.log10_z,
                "check_error": second.log10_error,
                "check_seconds": second.seconds,
                "agree": ours.agrees_with(second),
            }
        record |= {"seconds": seconds, "cpu_seconds": time.process_time() - cpu}
        records.append(Record(**record))
    return records


def _line(r: Record) -> str:
    quartiles = (
        f"{r.q25:9.3f} {r.median:9.3f} {r.q75:9.3f}" if r.q25 is not None else f"{'-':>9} " * 3
    )
    verdict = {True: "inside", False: "OUTSIDE", None: "-"}[r.inside]
    check = "-"
    if r.check_log10_z is not None:
        word = "agree" if r.agree else "DISAGREE"
        check = f"{r.check_log10_z:9.3f} +- {r.check_error:.3f} {word} {r.check_seconds:6.1f}"
    note = "" if r.converged else "  (not converged)"
    return (
        f"{r.set:3d}  {r.prior}  {r.n}  {r.log10_z:9.3f} +- {r.error:.3f}  {quartiles}  "
        f"{verdict:7s} {r.seconds:6.1f}  {check}{note}"
    )


def _results(arguments: argparse.Namespace) -> Iterator[list[Record]]:
    tasks = [(d, p) for d in arguments.sets for p in arguments.priors]
    options = (arguments.max_planets, arguments.check_planets, arguments.seed)
    if arguments.workers == 1:
        for dataset, prior in tasks:
            yield run(arguments.folder, dataset, prior, *options)
        return
    with ProcessPoolExecutor(arguments.workers) as pool:
        futures = [pool.submit(run, arguments.folder, d, p, *options) for d, p in tasks]
        for future in futures:
            yield future.result()


def _arguments(argv: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(
        prog="python -m tests.reference.published_evidence", description=__doc__.splitlines()[0]
    )
    parser.add_argument("folder", type=Path, help="rvs_000N.txt, bounds and published values")
    parser.add_argument("--sets", type=int, nargs="+", default=[1, 2, 3], metavar="N")
    parser.add_argument("--priors", nargs="+", choices=["a", "b"], default=["a", "b"])
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the records there")
    parser.add_argument("--max-planets", type=int, default=3, metavar="N")
    parser.add_argument(
        "--check-planets", type=int, default=2, metavar="N", help="second method up to N; -1: never"
    )
    parser.add_argument("--workers", type=int, default=2, metavar="N", help="processes")
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args(argv)
    needed = [arguments.folder / "published_log10_evidence.csv"]
    needed += [arguments.folder / f"rvs_{d:04d}.txt" for d in arguments.sets]
    if "b" in arguments.priors:
        needed += [arguments.folder / f"prior_bounds_{d:04d}.txt" for d in arguments.sets]
    missing = [str(path) for path in needed if not path.is_file()]
    if missing:
        parser.error("missing: " + ", ".join(missing))
    if arguments.workers < 1 or arguments.max_planets < 0:
        parser.error("--workers must be at least 1, --max-planets at least 0")
    return arguments


def main(argv: list[str] | None = None) -> int:
    arguments = _arguments(argv)
    print("log10 Z with the half-width of its 95 % interval, and seconds of each method")
    print(
        f"set  prior n {'log10 Z':>9}           {'q25':>9} {'median':>9} {'q75':>9}"
        f"  {'':7s} {'sec':>6}  second method, sec"
    )
    records: list[Record] = []
    for part in _results(arguments):
        records += part
        for record in part:
            print(_line(record), flush=True)
    for dataset in arguments.sets:
        for prior in arguments.priors:
            part = [r for r in records if (r.set, r.prior) == (dataset, prior)]
            part = [r for r in part if r.n <= REQUIRED_PLANETS]
            wall, check = sum(r.seconds for r in part), sum(r.check_seconds for r in part)
            cpu = sum(r.cpu_seconds for r in part)
            print(
                f"set {dataset} {prior}, n = 0, 1, 2: {wall:.1f} s, the second method "
                f"{check:.1f} s; {cpu:.1f} s of one core"
            )
    if arguments.json is not None:
        text = json.dumps([asdict(r) for r in records], indent=1, allow_nan=False)
        arguments.json.write_text(text + "\n")
    outside = [
        r for r in records if r.prior == "a" and r.n <= REQUIRED_PLANETS and r.inside is False
    ]
    apart = [r for r in records if r.agree is False]
    print(f"{len(outside)} of prior set a with n <= 2 outside; {len(apart)} pairs disagree")
    return 1 if outside or apart else 0


if __name__ == "__main__":
    sys.exit(main())
