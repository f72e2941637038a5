"""False-alarm probabilities of periodogram peaks."""

from __future__ import annotations

import math

import numpy as np

from screener.core import Array
from screener.search.periodogram import Precision, power

__all__ = ["analytic", "effective_baseline", "gain_with_free_scale", "level", "resampled"]


def effective_baseline(time: Array, weight: Array) -> float:
    """sqrt(4 pi var(t)) with weighted variance, d (Baluev 2008, MNRAS 385, 1279)."""
    mean = np.average(time, weights=weight)
    return math.sqrt(4 * math.pi * float(np.average((time - mean) ** 2, weights=weight)))


def gain_with_free_scale(gain: Array, chi2: float, n_free: int) -> Array:
    """Gain in log-likelihood when the noise level is re-fitted at each frequency.

    ``gain`` is half the reduction of chi2 at fixed noise; ``n_free`` is the number of velocities
    less the number of linear terms. This is the statistic z_3 of Baluev (2008).
    """
    left = np.maximum(1 - 2 * np.asarray(gain) / chi2, 1e-12)
    return np.asarray(-0.5 * n_free * np.log(left))


def analytic(gain: float, bandwidth: float, baseline: float) -> float:
    """Chance that the highest of all peaks of pure noise exceeds ``gain``.

    1 - (1 - exp(-z)) exp(-W sqrt(z) exp(-z)) with W = bandwidth times effective baseline (Baluev
    2008, eqs. 5, 6 and the chi-square row of his table 1; Delisle, Hara & Segransan 2020 show
    that it holds for correlated noise with the gain measured on top of the covariance).
    """
    if gain <= 0:
        return 1.0
    single = math.exp(-gain)
    rate = bandwidth * baseline * math.sqrt(gain) * single
    return float(-math.expm1(math.log1p(-single) - rate)) if single < 1 else 1.0


def level(probability: float, bandwidth: float, baseline: float) -> float:
    """Gain whose analytic false-alarm probability is ``probability``."""
    low, high = 0.5, 200.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (
            (middle, high) if analytic(middle, bandwidth, baseline) > probability else (low, middle)
        )
    return 0.5 * (low + high)


def resampled(
    time: Array,
    precision: Precision,
    frequency: Array,
    gain: float,
    n_draws: int,
    rng: np.random.Generator,
) -> float:
    """The same by shuffling what the model without the signal leaves, for white noise.

    ``precision`` is of the diagonal kind; ``gain`` the highest power that it gives at
    ``frequency``. Residuals are shuffled in units of their noise, so that errors stay with their
    times. Returns (k + 1) / (n_draws + 1) (Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9,
    39).
    """
    weight, low_rank = precision.weight, precision.low_rank
    if weight is None or low_rank is None:
        raise ValueError("residuals of correlated noise cannot be shuffled")
    root = np.sqrt(weight)
    scaled = precision.weighted / root  # residuals over their noise
    exceed = 0
    for _ in range(n_draws):
        shuffled = rng.permutation(scaled) / root
        weighted = weight * shuffled - low_rank @ (low_rank.T @ shuffled)
        draw = Precision(weighted, None, weight, low_rank)
        exceed += bool(power(time, draw, frequency).max() >= gain)
    return (exceed + 1) / (n_draws + 1)
