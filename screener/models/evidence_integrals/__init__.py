"""Evidences of n planets on top of correlated noise, by two methods that share no sampling.

``ImportanceSampler`` is the method of choice: all linear parameters and the jitter are integrated
out and the rest is sampled from an adapted proposal. ``check_evidence`` is the second method:
annealing, which samples every parameter with the priors as stated.
"""

from __future__ import annotations

import numpy as np

from screener.models.evidence_integrals.direct import (
    direct_evidence_without_planets,
    direct_log_likelihood,
)
from screener.models.evidence_integrals.importance import (
    Effort,
    ImportanceSampler,
    importance_ladder,
)
from screener.models.evidence_integrals.jitter_nodes import log_evidence_without_planets
from screener.models.evidence_integrals.problem import (
    EvidenceEstimate,
    EvidenceProblem,
    JeffreysPrior,
    PlanetPrior,
)
from screener.models.evidence_integrals.tempering import AnnealingEffort, annealed_evidence

__all__ = [
    "AnnealingEffort",
    "Effort",
    "EvidenceEstimate",
    "EvidenceProblem",
    "ImportanceSampler",
    "JeffreysPrior",
    "PlanetPrior",
    "annealed_evidence",
    "check_evidence",
    "direct_evidence_without_planets",
    "direct_log_likelihood",
    "importance_ladder",
    "log_evidence_without_planets",
]


def check_evidence(
    problem: EvidenceProblem,
    n_planets: int,
    rng: np.random.Generator,
    effort: AnnealingEffort | None = None,
) -> EvidenceEstimate:
    """ln Z by the method that shares no sampling with ``ImportanceSampler``."""
    if n_planets == 0:
        return direct_evidence_without_planets(problem)
    return annealed_evidence(problem, n_planets, rng, effort)
