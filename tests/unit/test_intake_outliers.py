"""Outliers: what stands alone is marked, what a planet does is not."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from screener.core import Array
from screener.intake import read_star
from screener.intake.indicators import night_scatter
from screener.intake.outliers import far_indicator_values, isolated_velocities, odd_exposures
from screener.models.kepler import keplerian_velocity
from tests.tables import columns, write_csv


def nights(rng: np.random.Generator, n: int = 100, span: float = 1200.0) -> Array:
    return np.sort(rng.choice(np.arange(span), n, replace=False) + rng.uniform(-0.15, 0.15, n))


def marked(time: Array, rv: Array, err: float = 2.0) -> np.ndarray:
    zeros = np.zeros(time.size, dtype=np.intp)
    return np.flatnonzero(isolated_velocities(time, rv, np.full(time.size, err), zeros)[0])


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("size", [-300.0, 60.0])
def test_a_lone_far_velocity_is_marked(seed: int, size: float) -> None:
    rng = np.random.default_rng(seed)
    time = nights(rng)
    rv = 4.0 * np.sin(2 * np.pi * time / 25.0) + rng.normal(0, 2.0, time.size)
    assert marked(time, rv).size == 0
    rv[40] += size
    assert marked(time, rv).tolist() == [40]


def test_noise_alone_is_hardly_ever_marked() -> None:
    rng = np.random.default_rng(12)
    total = 0
    for _ in range(60):
        time = nights(rng, 80)
        total += marked(time, rng.standard_t(5, 80) * 2.0).size
    assert total <= 3  # of 4800, with tails heavier than normal


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize(
    ("period", "amplitude", "eccentricity"),
    [
        (3.5, 200.0, 0.0),  # a hot Jupiter
        (0.74, 60.0, 0.0),
        (900.0, 300.0, 0.3),
        (110.0, 120.0, 0.6),
        (60.0, 90.0, 0.8),
        (111.4, 475.0, 0.93),  # like HD 80606 b (period, K and e from memory)
        (600.0, 180.0, 0.9),
    ],
)
def test_planets_are_not_marked(
    period: float, amplitude: float, eccentricity: float, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    time = nights(rng)
    for phase in rng.uniform(0, period, 3):
        omega = rng.uniform(0, 2 * np.pi)
        orbit = keplerian_velocity(time, period, amplitude, eccentricity, omega, phase)
        rv = orbit + rng.normal(0, 2.0, time.size)
        assert marked(time, rv).size <= (1 if eccentricity > 0.85 else 0)


def test_outlier_on_top_of_a_hot_jupiter() -> None:
    rng = np.random.default_rng(5)
    time = nights(rng)
    rv = 80.0 * np.sin(2 * np.pi * time / 3.9) + rng.normal(0, 2.0, time.size)
    rv[33] = 2500.0
    assert marked(time, rv).tolist() == [33]


def test_few_velocities_are_left_alone() -> None:
    time = np.arange(11.0)
    rv = np.random.default_rng(0).normal(0, 1, 11)
    rv[5] = 900.0
    assert marked(time, rv).size == 0


def test_one_exposure_of_a_bin() -> None:
    rng = np.random.default_rng(2)
    bins = np.repeat(np.arange(10), 4)
    value = rng.normal(0, 1.0, 40) + np.repeat(rng.normal(0, 30.0, 10), 4)
    value[17] += 90.0
    found, deviation = odd_exposures(value, np.ones(40), bins)
    assert np.flatnonzero(found).tolist() == [17]
    assert deviation[17] > 8.0


def test_wrong_mask_nights_of_an_indicator() -> None:
    rng = np.random.default_rng(7)
    value = 6400.0 + rng.normal(0, 10.0, 40)
    value[[1, 5, 9, 30]] += 700.0
    zeros = np.zeros(40, dtype=np.intp)
    found, _ = far_indicator_values(value, np.full(40, 5.0), zeros)
    assert np.flatnonzero(found).tolist() == [1, 5, 9, 30]
    value[::3] += 700.0  # a third of all is no accident
    assert not far_indicator_values(value, np.full(40, 5.0), zeros)[0].any()


def test_outliers_are_reported_and_left_out_of_the_series_only(tmp_path: Path) -> None:
    table = columns()
    table["rv"][7] += 400.0
    table["s_index"][12] = 0.9
    seen = read_star(write_csv(tmp_path / "star.csv", table))
    by_column = {o.column: o for o in seen.notes.outliers}
    assert set(by_column) == {"rv", "s_index"}
    assert by_column["rv"].time == pytest.approx(table["time"][7])
    assert by_column["rv"].value == pytest.approx(table["rv"][7])
    assert by_column["rv"].instrument == "ECHO" and by_column["rv"].deviation > 8.0
    assert seen.exposures.n_obs == 40 and seen.series.n_obs == 39
    assert table["time"][7] not in seen.series.time
    assert np.nanmax(seen.series.indicator("s_index").value) < 0.3
    assert np.nanmax(seen.exposures.indicator("s_index").value) == 0.9


def test_isolated_blank_velocity_is_left_out_and_said(tmp_path: Path) -> None:
    table = columns()
    table["rv"][3] = np.nan
    seen = read_star(write_csv(tmp_path / "star.csv", table))
    assert seen.exposures.n_obs == 39
    assert any("without a velocity" in m and "data row 4" in m for m in seen.notes.messages)


def test_a_few_fill_values_of_an_indicator(tmp_path: Path) -> None:
    table = columns()
    table["s_index"][[2, 9]] = -1.0
    table["bis"] = np.random.default_rng(1).normal(3.0, 2.0, 40)
    table["bis"][[4, 8]] = -1.0  # within the range of that column: a value like any other
    table["bis"][20] = 9999.0
    seen = read_star(write_csv(tmp_path / "star.csv", table))
    assert np.flatnonzero(np.isnan(seen.exposures.indicator("s_index").value)).tolist() == [2, 9]
    assert np.flatnonzero(np.isnan(seen.exposures.indicator("bis").value)).tolist() == [20]
    assert any("'s_index', data row 3: -1" in m and "2 of 40" in m for m in seen.notes.messages)
    assert any("'bis', data row 21: 9999" in m for m in seen.notes.messages)


def test_night_scatter_is_the_noise_under_slow_variation() -> None:
    rng = np.random.default_rng(6)
    time = np.arange(300.0)
    value = 50.0 * np.sin(2 * np.pi * time / 200.0) + rng.normal(0, 3.0, 300)
    estimate = night_scatter(time, value)
    assert estimate is not None and estimate == pytest.approx(3.0, rel=0.15)
    assert night_scatter(time[:3], value[:3]) is None
    assert night_scatter(time, np.ones(300)) is None
