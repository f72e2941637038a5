"""A short form of the table of ``null_uniformity``: every line of evidence, fewer stars."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from screener.evidence import tests as lines
from tests.statistical.evidence_cases import Recipe, make_case
from tests.statistical.null_uniformity import ENTRIES, measure

_RUNS = 50
# With 50 runs a uniform p-value fails 1e-3 once in a thousand, and a share of 0.5 is known within
# 0.07; the seeds are fixed, so this either passes always or never.
_KS, _POWER = 1e-3, 0.2

# Fits of the joint model for every star; a whole screening with draws takes too long for a test.
_FITTED = {"joint_amplitude", "activity_gain", "prediction", "dominance"}
_LONG = {"own_null"}


@pytest.mark.slow
@pytest.mark.parametrize("name", [n for n, e in ENTRIES.items() if e.test not in _LONG | _FITTED])
def test_p_values_are_uniform_and_powers_true(name: str) -> None:
    row = measure(name, _RUNS)
    assert row.runs == _RUNS
    if ENTRIES[name].descriptive:
        assert row.good
        return
    assert row.ks_p > _KS
    assert math.isnan(row.stated) or abs(row.stated - row.realised) < _POWER


@pytest.mark.slow
def test_the_bayes_factor_is_not_large_by_chance() -> None:
    row = measure("joint_amplitude", 12)
    assert row.below_1 == 0.0 and row.below_5 <= 0.15
    for name in _FITTED - {"joint_amplitude"}:  # the same stars: fitted once
        assert measure(name, 12).good


def test_every_line_has_an_entry() -> None:
    assert {entry.test for entry in ENTRIES.values()} == set(lines())


def test_a_line_that_states_a_p_value_is_not_descriptive(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    # the control: a test with a p-value passed off as one without
    entry = ENTRIES["indicator_power"]
    monkeypatch.setitem(ENTRIES, "disguised", replace(entry, descriptive=True))
    assert not measure("disguised", 2).good


def test_a_false_power_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    entry = ENTRIES["indicator_power"]
    monkeypatch.setitem(ENTRIES, "boastful", replace(entry, effect=entry.null))
    assert not measure("boastful", 30).good


def test_the_check_sees_a_test_that_is_not_calibrated() -> None:
    # the control: the textbook p-value of Pearson's r on slowly varying series
    p = [
        stats.pearsonr(case.target_rv, case.series.indicators[0].value)[1]
        for case in (
            make_case(
                seed,
                Recipe(
                    n=60,
                    amplitude=0.0,
                    red=9.0,
                    red_tau=25.0,
                    indicator_share=0.9,
                    indicator_tau=25.0,
                ),
            )
            for seed in range(_RUNS)
        )
    ]
    assert stats.kstest(np.array(p), "uniform").pvalue < _KS
