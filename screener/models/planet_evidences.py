"""Evidences of no, one, two ... planets on top of a star's activity, by two methods.

The activity is that of the joint model at its most probable hyper-parameters: what remains of the
velocities once the indicators are known has a Gaussian law, whose mean is taken off and whose
covariance is the noise of the evidence problem. Orbits are the only unknowns then; their number is
what the evidences compare.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array
from screener.models.evidence_integrals import (
    AnnealingEffort,
    EvidenceProblem,
    ImportanceSampler,
    JeffreysPrior,
    PlanetPrior,
    check_evidence,
)
from screener.models.portrait import Portrait
from screener.search.periodogram import SHORTEST_PERIOD

__all__ = ["MOST_PLANETS", "PlanetEvidence", "evidence_problem", "planet_evidences"]

MOST_PLANETS = 3
_WIDEST = 20.0  # standard deviations of the velocities that a zero point may move freely
_CHECK = AnnealingEffort(islands=16, particles=600, sweeps=10)
_OWN_SHARE = 0.5  # of each error that is told apart from the covariance; any share gives the same


@dataclass(frozen=True)
class PlanetEvidence:
    """log10 Z of so many planets and of the check, with half-widths of 95 % intervals.

    ``agree`` says whether the two differ by no more than the sum of their errors.
    """

    n_planets: int
    log10_z: float
    log10_z_err: float
    check_log10_z: float
    check_log10_z_err: float
    agree: bool
    converged: bool


def evidence_problem(portrait: Portrait, time: Array, rv_err: Array) -> EvidenceProblem:
    """Velocities less what the indicators tell of the activity, with the noise that is left.

    Parameters
    ----------
    time, rv_err : array, shape (n_obs,)
        d, m/s.
    """
    noise = portrait.noise
    bare = noise.model(())
    solution = bare.solve(noise.transfer(bare, portrait.activity.fit))
    # zero points are free, so that their directions have no precision, and no bound on variance
    values, vectors = np.linalg.eigh(solution.rv_precision)
    covariance = (vectors / np.maximum(values, 1 / _WIDEST**2)) @ vectors.T
    rv = covariance @ solution.rv_weighted * noise.scale
    own = _OWN_SHARE * rv_err
    half_width = max(1000.0, 10 * float(np.abs(rv).max()))
    prior = PlanetPrior(
        SHORTEST_PERIOD, 2 * float(np.ptp(time)), JeffreysPrior(1.0, half_width), 0.2
    )
    return EvidenceProblem(
        time=time,
        rv=rv,
        rv_err=own,
        covariance=covariance * noise.scale**2 - np.diag(own**2),
        planets=(prior,),
        offset_half_width=half_width,
    )


def planet_evidences(
    problem: EvidenceProblem, most: int, rng: np.random.Generator
) -> tuple[PlanetEvidence, ...]:
    """Evidences of 0 ... ``most`` planets, at most ``MOST_PLANETS``, each by both methods."""
    first, second = rng.spawn(2)
    sampler = ImportanceSampler(problem, first)
    out = []
    for n in range(min(most, MOST_PLANETS) + 1):
        ours = sampler.estimate(n)
        check = check_evidence(problem, n, second, _CHECK)
        out.append(
            PlanetEvidence(
                n_planets=n,
                log10_z=ours.log10_z,
                log10_z_err=ours.log10_error,
                check_log10_z=check.log10_z,
                check_log10_z_err=check.log10_error,
                agree=ours.agrees_with(check),
                converged=ours.converged and check.converged,
            )
        )
    return tuple(out)
