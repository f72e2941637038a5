"""What must not matter does not matter: order of rows, zero of time, units, labels.

The stars are those of the bundled scenario. Grades and signals must stay the same; numbers may move
by what rounding does to an optimiser.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from screener.core import Depth, Grade, Verdict
from screener.intake import read_star
from screener.pipeline import screen

STARS = Path(__file__).resolve().parents[2] / "fixtures" / "heron_survey" / "stars"
RANK = {Grade.LIKELY_STELLAR: 0, Grade.AMBIGUOUS: 1, Grade.PLANETARY: 2}
# optimisers end within 1e-6 of the objective; scores follow within this
SCORE_TOLERANCE = 0.3
NOISE_MARGIN = 1.5  # natural-log odds that an indicator of pure noise may move a score


def _verdict(table: Path) -> Verdict:
    observations = read_star(table)
    return screen(observations, depth=Depth.QUICK, seed=1, with_products=False).verdict


def _write(
    folder: Path, star: str, change: Callable[[pd.DataFrame], pd.DataFrame], extra: str = ""
) -> Path:
    table = folder / f"{star}.csv"
    change(pd.read_csv(STARS / table.name)).to_csv(table, index=False)
    sidecar = (STARS / f"{star}.toml").read_text()
    (folder / f"{star}.toml").write_text(sidecar + extra)
    return table


def _same(first: Verdict, second: Verdict) -> None:
    assert [s.grade for s in first.signals] == [s.grade for s in second.signals]
    for a, b in zip(first.signals, second.signals, strict=True):
        width = a.signal.orbit.period_err or 0.0
        assert abs(a.signal.orbit.period - b.signal.orbit.period) < 0.1 * width
        assert a.score == pytest.approx(b.score, abs=SCORE_TOLERANCE)


@pytest.fixture(scope="module")
def reference() -> Verdict:
    return _verdict(STARS / "heron-58.csv")


def _shuffled(table: pd.DataFrame) -> pd.DataFrame:
    return table.sample(frac=1.0, random_state=4)


def _in_km_s(table: pd.DataFrame) -> pd.DataFrame:
    return table.assign(rv=table.rv / 1000, rv_err=table.rv_err / 1000)


def _renamed(table: pd.DataFrame) -> pd.DataFrame:
    return table.assign(instrument="spectrograph " + table.instrument.astype(str))


def _shifted(table: pd.DataFrame) -> pd.DataFrame:
    return table.assign(time=table.time - 2_400_000)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("change", "extra"),
    [
        (_shuffled, ""),
        (_renamed, ""),
        (_in_km_s, '\n[units]\nrv = "km/s"\nrv_err = "km/s"\n'),
        (_shifted, "\n[time]\noffset_d = 2400000\n"),
    ],
    ids=["row order", "labels", "units", "zero of time"],
)
def test_what_must_not_matter(
    tmp_path: Path,
    reference: Verdict,
    change: Callable[[pd.DataFrame], pd.DataFrame],
    extra: str,
) -> None:
    _same(reference, _verdict(_write(tmp_path, "heron-58", change, extra)))


@pytest.mark.slow
def test_the_same_input_gives_the_same_verdict(reference: Verdict) -> None:
    again = _verdict(STARS / "heron-58.csv")
    assert [s.score for s in again.signals] == [s.score for s in reference.signals]
    assert [s.findings for s in again.signals] == [s.findings for s in reference.signals]


@pytest.mark.slow
@pytest.mark.parametrize("star", ["heron-12", "heron-58"])
def test_without_indicators_nothing_becomes_planetary(tmp_path: Path, star: str) -> None:
    with_all = _verdict(STARS / f"{star}.csv")
    bare = _verdict(_write(tmp_path, star, lambda t: t[["time", "rv", "rv_err", "instrument"]]))
    # "likely stellar" may become "ambiguous": the evidence for the star went with the columns
    for b in bare.signals:
        if b.grade is Grade.PLANETARY:
            twins = [
                a.grade
                for a in with_all.signals
                if abs(a.signal.orbit.period / b.signal.orbit.period - 1) < 0.01
            ]
            assert Grade.PLANETARY in twins, b.signal.orbit.period


@pytest.mark.slow
def test_an_indicator_of_noise_changes_little(tmp_path: Path, reference: Verdict) -> None:
    rng = np.random.default_rng(9)

    def add(table: pd.DataFrame) -> pd.DataFrame:
        noise = rng.normal(0.2, 0.01, len(table))
        return table.assign(nad=noise, nad_err=0.01)

    noisy = _verdict(_write(tmp_path, "heron-58", add))
    for a in reference.signals:
        twins = [
            b
            for b in noisy.signals
            if abs(a.signal.orbit.period / b.signal.orbit.period - 1) < 0.01
        ]
        if a.grade is not Grade.LIKELY_STELLAR:
            assert twins
        for b in twins:
            assert a.score == pytest.approx(b.score, abs=NOISE_MARGIN)
            assert abs(RANK[a.grade] - RANK[b.grade]) <= 1
