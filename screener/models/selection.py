"""Which kernel describes the star's activity: chosen by evidence, not by hand."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from screener.core import NumericalError
from screener.models.dataset import Scaled
from screener.models.fitting import Fit, HyperPrior, prior_terms
from screener.models.joint import OrbitTerm
from screener.models.kernels import KERNELS
from screener.models.laplace import laplace
from screener.models.noise import NoiseModel, joint_process

__all__ = ["KernelChoice", "choose_kernel", "log_evidence"]

_DEFAULT = "quasi-periodic"
_CLEAR = 3.0  # Bayes factor e^3 = 20 to 1 (Kass & Raftery 1995, JASA 90, 773: "strong")


@dataclass(frozen=True, eq=False)
class KernelChoice:
    """The noise model chosen, its fit, and the log-evidence of every kernel tried."""

    noise: NoiseModel
    fit: Fit
    log_evidence: dict[str, float]


def log_evidence(noise: NoiseModel, result: Fit) -> float:
    """Laplace's approximation to the log-evidence at a maximum a posteriori.

    Parameters at a wall count as known. MacKay (2003, ch. 28).

    Raises
    ------
    NumericalError
        Where the likelihood cannot be computed beside the optimum.
    """
    errors = laplace(noise, result)
    free = [i for i in range(result.parameters.size) if i not in errors.held]
    _, log_det = np.linalg.slogdet(errors.covariance[np.ix_(free, free)])
    _, sd, lower, upper = prior_terms(result.model, noise.prior)
    # flat priors are normalised over the space between their walls
    width = np.where(np.isfinite(sd), math.sqrt(2 * math.pi) * sd, upper - lower)
    return float(
        result.objective
        + 0.5 * len(free) * math.log(2 * math.pi)
        + 0.5 * log_det
        - np.log(width[free]).sum()
    )


def choose_kernel(
    scaled: Scaled,
    prior: HyperPrior,
    default: NoiseModel,
    result: Fit,
    terms: Sequence[OrbitTerm],
) -> KernelChoice:
    """Compare the kernels with the orbits found; the default yields only to clear evidence."""
    evidence = {_DEFAULT: log_evidence(default, result)}
    best, best_fit = default, result
    for name in KERNELS:
        if name == _DEFAULT:
            continue
        noise = joint_process(scaled, prior, kernel=name)
        noise.n_starts = default.n_starts
        try:
            trial = noise.fit(list(terms), fresh=True)
            evidence[name] = log_evidence(noise, trial)
        except NumericalError:  # a kernel that cannot be fitted is no candidate
            continue
        lead = evidence[name] - max(v for k, v in evidence.items() if k != name)
        if lead > 0 and evidence[name] > evidence[_DEFAULT] + _CLEAR:
            best, best_fit = noise, trial
    return KernelChoice(best, best_fit, evidence)
