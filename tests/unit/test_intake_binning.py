"""Binning: what is joined, with which error, and what must stay apart."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from screener.core import Indicator, Observations, TimeSeries
from screener.intake import read_star
from screener.intake.binning import FLOOR, MAX_SPAN, assign_bins, bin_series
from tests.shared import needs_shared, shared
from tests.tables import write_csv


def series(time: np.ndarray, rv: np.ndarray, err: np.ndarray | float = 1.0) -> TimeSeries:
    time, rv = np.asarray(time, float), np.asarray(rv, float)
    return TimeSeries(
        time=time,
        rv=rv,
        rv_err=np.broadcast_to(np.asarray(err, float), time.shape).copy(),
        instrument=np.zeros(time.size, dtype=np.intp),
        instruments=("ECHO",),
    )


def binned(data: TimeSeries) -> TimeSeries:
    return bin_series(data, assign_bins(data.time, data.instrument))[0]


def test_close_exposures_are_joined_and_others_not() -> None:
    time = np.array([0.0, 0.005, 0.01, 0.10, 0.105, 0.3, 1.0, 1.029, 1.058])
    label = assign_bins(time, np.zeros(9, dtype=np.intp))
    assert label.tolist() == [0, 0, 0, 1, 1, 2, 3, 3, 3]


def test_instruments_are_never_joined() -> None:
    label = assign_bins(np.array([0.0, 0.001, 0.002, 0.003]), np.array([0, 1, 0, 1]))
    assert label.tolist() == [0, 1, 0, 1]


def test_a_long_run_is_cut_into_short_pieces() -> None:
    time = np.arange(0.0, 0.4, 0.002)
    label = assign_bins(time, np.zeros(time.size, dtype=np.intp))
    spans = [np.ptp(time[label == b]) for b in np.unique(label)]
    assert max(spans) <= MAX_SPAN
    assert label.max() + 1 == 7


def test_mean_and_error_against_the_textbook() -> None:
    # inverse-variance mean, Bevington & Robinson, Data Reduction, eq. 4.17 and 4.19 (from memory)
    out = binned(series([0.0, 0.01], [10.0, 12.0], np.array([3.0, 4.0])))
    weight = np.array([1 / 9, 1 / 16])
    assert out.rv[0] == pytest.approx(np.sum(weight * [10, 12]) / weight.sum())
    assert out.rv_err[0] == pytest.approx(weight.sum() ** -0.5)
    assert out.time[0] == pytest.approx(0.01 * weight[1] / weight.sum())


def test_scatter_inside_a_bin_sets_a_floor() -> None:
    values = np.array([0.0, 10.0, -10.0, 3.0])
    out = binned(series([0.0, 0.005, 0.01, 0.015], values))
    assert out.rv_err[0] == pytest.approx(np.std(values, ddof=1) / 2.0)


def test_many_exposures_do_not_average_shared_noise_away() -> None:
    rng = np.random.default_rng(4)
    out = binned(series(np.linspace(0.0, 0.05, 60), rng.normal(0, 1.0, 60)))
    assert out.rv_err[0] == pytest.approx(FLOOR)
    # four bins of one night together do not weigh more than four exposures either
    night = binned(series(np.linspace(0.0, 0.22, 110), rng.normal(0, 1.0, 110)))
    assert night.n_obs == 4
    assert np.sum(night.rv_err**-2.0) <= 4.0 + 1e-9
    # and however many bins, the floor never makes one worse than a single exposure
    night = binned(series(np.linspace(0.0, 0.4, 200), rng.normal(0, 1.0, 200)))
    assert night.n_obs == 7
    np.testing.assert_allclose(night.rv_err, 1.0)


def test_errors_of_nights_are_honest_under_shared_noise() -> None:
    """200 nights of 20 exposures, white noise 1 plus 0.5 per night: chi-square near one.

    With formal errors it would be 1 + 0.25 * 20 = 6.
    """
    rng = np.random.default_rng(8)
    night = np.repeat(np.arange(200.0), 20)
    time = night + np.tile(np.linspace(0.0, 0.05, 20), 200)
    rv = rng.normal(0, 1.0, time.size) + np.repeat(rng.normal(0, 0.5, 200), 20)
    out = binned(series(time, rv))
    assert out.n_obs == 200
    chi2 = np.mean((out.rv / out.rv_err) ** 2)
    assert 0.8 < chi2 < 1.6
    assert np.mean((out.rv * np.sqrt(20.0)) ** 2) > 4.0  # the control: formal errors fail


def test_indicator_nans_and_estimated_errors() -> None:
    data = series([0.0, 0.005, 0.01, 1.0], [1.0, 2.0, 3.0, 4.0])
    value = np.array([5.0, np.nan, 7.0, np.nan])
    error = np.where(np.isnan(value), np.nan, 2.0)

    given = replace(data, indicators=(Indicator("a", value, error),))
    out = binned(given).indicator("a")
    assert out.value[0] == pytest.approx(6.0)
    assert out.error[0] == pytest.approx(np.sqrt(2.0))
    assert np.isnan(out.value[1]) and np.isnan(out.error[1])
    guessed = replace(data, indicators=(Indicator("a", value, error, error_estimated=True),))
    assert binned(guessed).indicator("a").error[0] == 2.0  # a night's own, not divided


def test_a_period_of_half_a_day_is_not_smeared() -> None:
    rng = np.random.default_rng(1)
    night = np.arange(120.0) + rng.uniform(-0.1, 0.1, 120)
    time = np.sort((night[:, None] + np.arange(0.0, 0.3, 0.004)[None, :]).ravel())
    phase = 2 * np.pi / 0.55
    out = binned(series(time, 5.0 * np.sin(phase * time)))
    design = np.column_stack([np.sin(phase * out.time), np.cos(phase * out.time)])
    amplitude = np.hypot(*np.linalg.lstsq(design, out.rv, rcond=None)[0])
    assert 0.97 * 5.0 < amplitude <= 5.0


def nightly(folder: Path, order: np.ndarray | None = None, names: tuple[str, str] = ("A", "B")):
    rng = np.random.default_rng(3)
    time = np.repeat(2_458_000.5 + np.arange(40.0), 3) + np.tile([0.0, 0.004, 0.008], 40)
    label = np.array([names[i // 3 % 2] for i in range(120)], dtype=object)
    rv = rng.normal(0, 3.0, 120)
    cols = {
        "time": np.round(time, 5),
        "rv": rv,
        "rv_err": np.full(120, 2.0),
        "instrument": label,
        "bis": rng.normal(0, 5.0, 120),
    }
    order = np.arange(120) if order is None else order
    return write_csv(folder / "star.csv", {k: v[order] for k, v in cols.items()})


def same(a: Observations, b: Observations) -> None:
    for left, right in ((a.series, b.series), (a.exposures, b.exposures)):
        np.testing.assert_array_equal(left.time, right.time)
        np.testing.assert_array_equal(left.rv, right.rv)
        np.testing.assert_array_equal(left.rv_err, right.rv_err)
        np.testing.assert_array_equal(left.instrument, right.instrument)
        np.testing.assert_array_equal(left.indicator("bis").error, right.indicator("bis").error)


def test_order_of_rows_does_not_matter(tmp_path: Path) -> None:
    first = read_star(nightly(tmp_path))
    assert (first.exposures.n_obs, first.series.n_obs) == (120, 40)
    assert first.notes.bin_width == pytest.approx(0.008, abs=1e-6)
    for seed in range(3):
        order = np.random.default_rng(seed).permutation(120)
        same(first, read_star(nightly(tmp_path, order)))


def test_names_of_instruments_do_not_matter(tmp_path: Path) -> None:
    first = read_star(nightly(tmp_path))
    other = read_star(nightly(tmp_path, names=("zebra", "adder")))
    same(first, other)
    assert (first.series.instruments, other.series.instruments) == (("A", "B"), ("zebra", "adder"))


def test_thin_instrument_is_left_out_and_said(tmp_path: Path) -> None:
    path = nightly(tmp_path)
    text = path.read_text()
    path.write_text(text + "2458100.5,3.0,2.0,LONE,1.0\n2458101.5,4.0,2.0,LONE,2.0\n")
    seen = read_star(path)
    assert seen.series.instruments == ("A", "B")
    assert seen.exposures.instruments == ("A", "B", "LONE")
    assert seen.series.n_obs == 40
    assert any("'LONE' has 2 bins" in m for m in seen.notes.messages)


def test_missing_indicator_errors_are_estimated_and_said(tmp_path: Path) -> None:
    seen = read_star(nightly(tmp_path))
    bis = seen.series.indicator("bis")
    assert bis.error_estimated
    # nightly medians of three values with sigma 5 scatter by about 5 * 0.67
    assert 1.7 < float(np.median(bis.error)) < 6.5
    assert any("'bis'" in m and "night-to-night" in m for m in seen.notes.messages)


def test_repeated_rows(tmp_path: Path) -> None:
    path = nightly(tmp_path)
    lines = path.read_text().splitlines()
    path.write_text("\n".join([*lines, lines[5]]) + "\n")
    seen = read_star(path)
    assert seen.exposures.n_obs == 120
    assert any("data row 121, as data row 5" in m for m in seen.notes.messages)


@needs_shared("real_stars", "hd22049_harps.csv")
def test_real_star_with_eight_exposures_a_night() -> None:
    seen = read_star(shared("real_stars", "hd22049_harps.csv"))
    assert seen.exposures.n_obs == 761
    assert seen.series.n_nights == 97
    assert 97 <= seen.series.n_obs <= 110


@needs_shared("real_stars", "corot7.csv")
def test_real_star_with_hours_between_exposures() -> None:
    seen = read_star(shared("real_stars", "corot7.csv"))
    assert seen.series.n_obs >= 170
    assert seen.notes.bin_width < 0.03


@needs_shared("real_stars", "hd190360.csv")
def test_real_table_with_repeated_rows() -> None:
    seen = read_star(shared("real_stars", "hd190360.csv"))
    assert seen.exposures.n_obs == 1243 - 13
    assert any("13 rows repeat" in m for m in seen.notes.messages)
