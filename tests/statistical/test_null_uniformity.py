"""A short form of the table of ``null_uniformity``: every line of evidence, fewer stars."""

from __future__ import annotations

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

# Lines that ask the joint model, or simulate it, are tested beside that model; "sampling" has no
# p-value.
_DIRECT = {
    "alias",
    "correlation",
    "cycle",
    "harmonics",
    "indicator_power",
    "line_shape",
    "persistence",
    "plausible_amplitude",
    "rotation",
    "wavelength",
}


@pytest.mark.slow
@pytest.mark.parametrize("name", ENTRIES)
def test_p_values_are_uniform_and_powers_true(name: str) -> None:
    row = measure(name, _RUNS)
    assert row.runs == _RUNS
    assert row.ks_p > _KS
    assert abs(row.stated - row.realised) < _POWER


def test_every_line_that_works_on_the_series_has_an_entry() -> None:
    assert set(lines()) >= _DIRECT
    assert {entry.test for entry in ENTRIES.values()} == _DIRECT


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
