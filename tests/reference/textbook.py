"""The textbook procedure on a folder of stars, scored beside our own run.

As the trade does it: the highest peak of a Lomb-Scargle periodogram with floating mean, if its
false-alarm probability is below 0.1 %, is a signal. It is rejected as stellar if the periodogram of
an indicator has a peak of the same significance at that period (within 1 / baseline), or if
|Spearman r| between the velocities and an indicator exceeds 0.5; else it is called a planet. A
Keplerian orbit is subtracted and the search goes on (thresholds: common practice, no source). Zero
points of instruments are weighted means. Nothing of our models, tests or rules takes part; only
the reading of tables and the Keplerian curve are shared.

Run: python -m tests.reference.textbook --stars FOLDER --truth truth.json [--ours RUN] [--out RUN]
"""

from __future__ import annotations

import argparse
import json
import math
import subprocess
import sys
import tempfile
import warnings
from pathlib import Path
from typing import Any

import numpy as np
from astropy.timeseries import LombScargle
from scipy.optimize import least_squares
from scipy.stats import spearmanr

from screener.core import Array, InputFault, IntArray, TimeSeries
from screener.intake import read_star
from screener.models.kepler import orbit_columns
from tests.shared import shared

__all__ = ["judge", "main"]

MOST_SIGNALS = 6
SIGNIFICANT = 0.001  # false-alarm probability
CORRELATED = 0.5  # |Spearman r|
SHORTEST = 0.55  # d
MEASURES = (
    "false_planet_rate", "planet_recall_snr7.5", "planet_recall_snr7.5_other",
    "planet_recall_snr7.5_near_rotation", "planet_killed", "planet_ambiguous", "planet_missed",
    "stellar_caught", "ambiguous_share",
)  # fmt: skip


def less_zero_points(value: Array, error: Array, instrument: IntArray) -> Array:
    """Values less the weighted mean of each instrument."""
    out = value.copy()
    for k in np.unique(instrument):
        rows = instrument == k
        out[rows] -= np.average(value[rows], weights=1 / error[rows] ** 2)
    return out


def grid(baseline: float) -> Array:
    """Frequencies from one baseline to the shortest period, without the day itself."""
    frequency = np.arange(1 / baseline, 1 / SHORTEST, 0.2 / baseline)
    return frequency[np.abs(frequency - 1.0) > 1.5 / baseline]


def peak(time: Array, value: Array, error: Array, frequency: Array) -> tuple[float, float, Array]:
    """Period and false-alarm probability of the highest peak, and the whole periodogram."""
    search = LombScargle(time, value, error)
    power = search.power(frequency, method="slow" if time.size < 40 else "auto")
    best = int(np.argmax(power))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # overflow where the probability is one
        probability = search.false_alarm_probability(
            power[best], method="baluev", maximum_frequency=frequency[-1]
        )
    return 1 / float(frequency[best]), float(probability), np.asarray(power)


def shows(time: Array, value: Array, error: Array, frequency: Array, period: float) -> bool:
    """Whether an indicator has a significant peak at the period."""
    search = LombScargle(time, value, error)
    near = frequency[np.abs(frequency - 1 / period) < 1 / np.ptp(time)]
    if near.size == 0:
        return False
    power = float(np.max(search.power(near, method="slow")))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        probability = search.false_alarm_probability(
            power, method="baluev", maximum_frequency=frequency[-1]
        )
    return bool(probability < SIGNIFICANT)


def keplerian(time: Array, rv: Array, error: Array, period: float) -> tuple[float, Array]:
    """Semi-amplitude and velocities of the best orbit near a period, the mean apart."""
    mid = float(time.mean())

    def curve(x: Array) -> tuple[Array, Array]:
        own = 1 / (1 / period + x[0] / float(np.ptp(time)))
        size = math.hypot(x[1], x[2])
        ecc = 0.9 * math.tanh(size)
        columns = orbit_columns(time, own, ecc, mid + own * math.atan2(x[2], x[1]) / (2 * math.pi))
        design = np.column_stack([columns, np.ones(time.size)]) / error[:, None]
        return np.linalg.lstsq(design, rv / error, rcond=None)[0], columns

    def residual(x: Array) -> Array:
        coefficients, columns = curve(x)
        return (rv - columns @ coefficients[:2] - coefficients[2]) / error

    starts = [0.3 * np.array([math.cos(a), math.sin(a)]) for a in (0.0, 2.1, 4.2)]
    fits = [
        least_squares(residual, np.array([0.0, *s]), bounds=([-0.7, -2, -2], [0.7, 2, 2]))
        for s in starts
    ]
    coefficients, columns = curve(min(fits, key=lambda f: f.cost).x)
    return float(np.hypot(*coefficients[:2])), np.asarray(columns @ coefficients[:2])


def judge(series: TimeSeries) -> list[dict[str, Any]]:
    """The signals of one star with their grades, in the keys of ``verdict.json``."""
    time, error = series.time, series.rv_err
    rv = less_zero_points(series.rv, error, series.instrument)
    frequency = grid(series.baseline)
    indicators = []
    for item in series.indicators:
        good = np.isfinite(item.value) & np.isfinite(item.error) & (item.error > 0)
        if good.sum() >= 12 and np.ptp(item.value[good]) > 0:
            value = less_zero_points(item.value[good], item.error[good], series.instrument[good])
            indicators.append((good, value, item.error[good]))
    out: list[dict[str, Any]] = []
    while len(out) < MOST_SIGNALS:
        # the errors do not tell of jitter: the scatter does
        sd = np.hypot(error, math.sqrt(max(float(np.var(rv) - np.median(error) ** 2), 0.0)))
        period, probability, _ = peak(time, rv, sd, frequency)
        if probability > SIGNIFICANT:
            break
        stellar = any(
            shows(time[good], value, value_error, frequency, period)
            or abs(float(spearmanr(rv[good], value).statistic)) > CORRELATED
            for good, value, value_error in indicators
        )
        amplitude, orbit = keplerian(time, rv, sd, period)
        rv = less_zero_points(rv - orbit, error, series.instrument)
        out.append(
            {
                "id": f"S{len(out) + 1}",
                "period_d": period,
                "k_m_s": amplitude,
                "false_alarm_probability": probability,
                "grade": "likely stellar" if stellar else "planetary",
            }
        )
    return out


def run(tables: list[Path], folder: Path) -> int:
    """Write the verdicts; returns the number of tables that could not be read."""
    failed = 0
    for table in tables:
        try:
            signals = judge(read_star(table).series)
        except InputFault as fault:
            print(f"{table.name}: {fault}", file=sys.stderr)
            failed += 1
            continue
        place = folder / table.stem
        place.mkdir(parents=True, exist_ok=True)
        text = json.dumps({"star": table.stem, "signals": signals}, indent=1)
        (place / "verdict.json").write_text(text, encoding="utf-8")
    return failed


def real_score(truth: Path, folder: Path) -> str:
    """What the shared script for real stars prints."""
    command = [sys.executable, str(shared("score_real.py")), "--truth", str(truth)]
    command += ["--verdicts", str(folder)]
    return subprocess.run(command, capture_output=True, text=True, check=True).stdout


def simulated_score(truth: Path, folder: Path) -> dict[str, Any]:
    """The measures of the shared script for simulated stars."""
    with tempfile.TemporaryDirectory() as scratch:
        result = Path(scratch) / "score.json"
        command = [sys.executable, str(shared("score.py")), "--truth", str(truth)]
        command += ["--verdicts", str(folder), "--json", str(result)]
        subprocess.run(command, capture_output=True, text=True, check=True)
        loaded: dict[str, Any] = json.loads(result.read_text(encoding="utf-8"))
    return loaded


def show(truth: Path, runs: dict[str, Path]) -> None:
    """Print the scores of the runs beside each other."""
    if isinstance(json.loads(truth.read_text(encoding="utf-8"))["stars"], dict):
        for name, folder in runs.items():
            print(f"--- {name}\n{real_score(truth, folder)}", end="")
        return
    scores = {name: simulated_score(truth, folder) for name, folder in runs.items()}
    print(f"{'':36s}" + "".join(f"{name:>22s}" for name in scores))
    for measure in MEASURES:
        cells = [s[measure] for s in scores.values()]
        counts = [
            next(c[key] for key in ("planets", "signals", "stars") if key in c) for c in cells
        ]
        print(
            f"{measure:36s}"
            + "".join(
                f"{c['rate']:12.3f} {c['count']:4d}/{n:4d}"
                for c, n in zip(cells, counts, strict=True)
            )
        )
    print(f"{'failed':36s}" + "".join(f"{s['failed']:22d}" for s in scores.values()))


def main(argv: list[str] | None = None) -> int:
    """Run the procedure, score it, print."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--stars", type=Path, required=True, help="folder of tables")
    parser.add_argument("--truth", type=Path, required=True)
    parser.add_argument("--ours", type=Path, help="a run folder of ours, scored beside it")
    parser.add_argument("--out", type=Path, help="a temporary folder if absent")
    arguments = parser.parse_args(argv)
    folder = arguments.out or Path(tempfile.mkdtemp(prefix="textbook_"))
    tables = [t for t in sorted(arguments.stars.glob("*.csv")) if not t.stem.endswith(".phot")]
    failed = run(tables, folder)
    runs = {"textbook": folder}
    if arguments.ours:
        runs["ours"] = arguments.ours
    print(f"{len(tables)} stars, verdicts of the textbook procedure in {folder}")
    show(arguments.truth, runs)
    return int(failed > 0)


if __name__ == "__main__":
    raise SystemExit(main())
