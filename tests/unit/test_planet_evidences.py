"""Evidences of numbers of planets on top of a star's activity."""

from __future__ import annotations

import numpy as np
import pytest

from screener.core import Depth, Indicator, Star, TimeSeries
from screener.models import planet_evidences as module
from screener.models.evidence_integrals import AnnealingEffort
from screener.models.kepler import keplerian_velocity
from screener.models.planet_evidences import evidence_problem, planet_evidences
from screener.models.portrait import Portrait, paint


@pytest.fixture(scope="module")
def star() -> tuple[TimeSeries, Portrait]:
    """Spots in velocities and width, and a planet of 4 m/s at 6.3 d."""
    rng = np.random.default_rng(3)
    time = np.sort(rng.choice(np.arange(300), 60, replace=False)) + rng.uniform(0, 0.2, 60)
    angle = 2 * np.pi * time / 19.0
    rv = rng.normal(0, 1, 60) + 2 * np.sin(angle)
    rv += keplerian_velocity(time, 6.3, 4.0, 0.0, 0.3, 2.0)
    width = Indicator("fwhm", rng.normal(0, 1, 60) + 4 * np.cos(angle), np.ones(60))
    series = TimeSeries(
        time, rv, np.ones(60), (np.arange(60) % 2).astype(np.intp), ("A", "B"), (width,)
    )
    return series, paint(Star("Tern 5"), series, (), None, Depth.QUICK)


def test_the_noise_is_that_of_the_activity_model(star: tuple[TimeSeries, Portrait]) -> None:
    series, portrait = star
    problem = evidence_problem(portrait, series.time, series.rv_err)
    noise = portrait.noise
    bare = noise.model(())
    solution = bare.solve(noise.transfer(bare, portrait.activity.fit))
    inverse = np.linalg.inv(problem.covariance + np.diag(problem.rv_err**2))
    # what zero points cannot absorb weighs the same; both instruments have their own
    x = np.random.default_rng(1).normal(size=(60, 5))
    for instrument in (0, 1):
        rows = series.instrument == instrument
        x[rows] -= x[rows].mean(axis=0)
    ours = np.einsum("ij,ik,kj->j", x, inverse, x) * noise.scale**2
    theirs = np.einsum("ij,ik,kj->j", x, solution.rv_precision, x)
    assert ours == pytest.approx(theirs, rel=1e-3)
    # and so does the evidence for a column on the data
    assert x.T @ inverse @ problem.rv * noise.scale == pytest.approx(
        x.T @ solution.rv_weighted, rel=1e-3, abs=1e-2
    )


@pytest.mark.slow
def test_the_planet_is_worth_its_evidence(
    star: tuple[TimeSeries, Portrait], monkeypatch: pytest.MonkeyPatch
) -> None:
    series, portrait = star
    monkeypatch.setattr(module, "_CHECK", AnnealingEffort(islands=6, particles=250, sweeps=5))
    problem = evidence_problem(portrait, series.time, series.rv_err)
    none, one = planet_evidences(problem, 1, np.random.default_rng(2))
    assert none.agree
    assert (none.n_planets, one.n_planets) == (0, 1)
    assert one.log10_z - none.log10_z > 5.0
    assert abs(one.check_log10_z - one.log10_z) < 0.3
