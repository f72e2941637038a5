"""Evidences against those of the evidence challenge (Nelson et al. 2020, AJ 159, 73)."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest

from screener.models.evidence_integrals import (
    AnnealingEffort,
    Effort,
    annealed_evidence,
    direct_evidence_without_planets,
    log_evidence_without_planets,
)
from screener.models.evidence_integrals.problem import LN10
from tests.reference import published_evidence
from tests.reference.published_evidence import inside, load_problem, published, run
from tests.shared import needs_shared, shared

pytestmark = needs_shared("evidence")

REDUCED = Effort(adapt=1500, kernels=200, final=1500, batches=3)


def _sets() -> list[int]:
    path = shared("evidence", "published_log10_evidence.csv")
    if not path.exists():
        return []
    with path.open(newline="") as file:
        found = {int(row["dataset"]) for row in csv.DictReader(file)}
    return sorted(d for d in found if shared("evidence", f"rvs_{d:04d}.txt").exists())


@pytest.mark.parametrize("dataset", _sets())
def test_without_planets_inside_by_both_methods(dataset: int) -> None:
    problem = load_problem(shared("evidence"), dataset, "a")
    value = log_evidence_without_planets(problem)
    assert inside(0, value / LN10, published(shared("evidence"))[dataset, "a", 0])
    second = direct_evidence_without_planets(problem)
    assert value == pytest.approx(second.log_z, abs=1e-3)


def test_one_planet_inside_at_reduced_effort() -> None:
    records = run(
        shared("evidence"), 1, "a", max_planets=1, check_planets=0, effort=REDUCED, seed=3
    )
    assert [r.n for r in records] == [0, 1]
    assert all(r.inside and r.converged for r in records)
    assert records[1].error < 0.05


def test_narrow_bounds_change_the_evidence_by_the_prior_volume() -> None:
    """One dominant planet: only the normalisation of its period prior differs between a and b."""
    values = {}
    for prior in "ab":
        records = run(shared("evidence"), 1, prior, max_planets=1, check_planets=-1, effort=REDUCED)
        values[prior] = records[1].log10_z
    priors = [load_problem(shared("evidence"), 1, p).planets[0] for p in "ab"]
    expected = np.log10(priors[0].log_period_span / priors[1].log_period_span)
    # wide periods also see aliases and bounds cut tails, hence not closer
    assert values["b"] - values["a"] == pytest.approx(expected, abs=0.1)


@pytest.mark.slow
def test_annealing_agrees_on_one_planet() -> None:
    problem = load_problem(shared("evidence"), 1, "b")
    rng = np.random.default_rng(5)
    first = run(shared("evidence"), 1, "b", max_planets=1, check_planets=-1, effort=REDUCED)[1]
    second = annealed_evidence(problem, 1, rng, AnnealingEffort(islands=6, particles=120))
    assert abs(first.log10_z - second.log10_z) < first.error + second.log10_error


def test_tolerances_can_fail() -> None:
    quartiles = (-10.0, -9.5, -9.0)
    assert inside(0, -9.36, quartiles)
    assert not inside(0, -9.7, quartiles)
    assert inside(1, -10.49, quartiles)
    assert not inside(1, -10.51, quartiles)
    assert not inside(2, -8.49, quartiles)


def test_command_writes_its_records(tmp_path, capsys) -> None:  # type: ignore[no-untyped-def]
    target = tmp_path / "records.json"
    code = published_evidence.main(
        [
            str(shared("evidence")),
            *("--sets", "3", "--priors", "a", "--max-planets", "0", "--workers", "1"),
            *("--json", str(target)),
        ]
    )
    assert code == 0
    (record,) = json.loads(target.read_text())
    expected = {"set", "prior", "n", "log10_z", "error", "q25", "median", "q75", "inside"}
    assert expected | {"seconds"} <= set(record)
    assert record["inside"] is True
    assert record["agree"] is True
    assert "inside" in capsys.readouterr().out


def test_command_names_what_is_missing(capsys) -> None:  # type: ignore[no-untyped-def]
    with pytest.raises(SystemExit) as stop:
        published_evidence.main([str(shared("evidence")), "--sets", "99"])
    assert stop.value.code == 2
    assert "rvs_0099.txt" in capsys.readouterr().err
