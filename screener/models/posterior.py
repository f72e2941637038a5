"""Posterior samples of the joint model, with figures that say whether they may be trusted.

An affine-invariant ensemble (Goodman & Weare 2010, CAMCoS 5, 65; emcee, Foreman-Mackey et al. 2013,
PASP 125, 306) samples kernel, loadings, jitters and orbits; linear terms stay marginalised and
are drawn afterwards from their Gaussian given each sample. Convergence is judged by the integrated
autocorrelation time, the effective sample size and the split R-hat (Gelman et al. 2013, Bayesian
Data Analysis, 3rd ed., eq. 11.4); a result that fails is marked, never passed on as it is.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from screener.core import Array, NumericalError, ScreenerError
from screener.models.fitting import Fit, prior_terms
from screener.models.noise import NoiseModel

__all__ = ["Posterior", "Summary", "sample", "split_r_hat"]

_R_HAT_MOST = 1.05
_FEWEST_EFFECTIVE = 200
_FEWEST_TIMES = 20  # chain length in autocorrelation times


@dataclass(frozen=True)
class Summary:
    """Median and 68 % interval of one quantity."""

    median: float
    low: float
    high: float


@dataclass(frozen=True, eq=False)
class Posterior:
    """Samples after burn-in, shape (n_samples, n_parameters), and what they are worth.

    ``converged`` is False unless R-hat, effective sample size and chain length all pass.
    """

    samples: Array
    r_hat: float
    effective: float
    autocorrelation: float
    acceptance: float
    converged: bool
    periods: tuple[Summary, ...]
    semi_amplitudes: tuple[Summary, ...]
    rotation: Summary | None


def split_r_hat(chains: Array) -> Array:
    """Potential scale reduction of each parameter; chains (n_steps, n_chains, n_parameters)."""
    half = chains.shape[0] // 2
    parts = np.concatenate([chains[:half], chains[half : 2 * half]], axis=1)
    within = parts.var(axis=0, ddof=1).mean(axis=0)
    between = half * parts.mean(axis=0).var(axis=0, ddof=1)
    return np.asarray(np.sqrt(((half - 1) / half * within + between / half) / within))


def _summary(values: Array) -> Summary:
    low, median, high = np.percentile(values, [15.865, 50, 84.135])
    return Summary(float(median), float(low), float(high))


def sample(
    noise: NoiseModel,
    start: Fit,
    spread: Array,
    rng: np.random.Generator,
    *,
    n_steps: int = 2000,
    n_walkers: int | None = None,
) -> Posterior:
    """Sample around a maximum a posteriori.

    Parameters
    ----------
    noise, start : NoiseModel, Fit
        The model and its best parameters.
    spread : Array, shape (n_parameters,)
        Width of the initial cloud, e.g. Laplace errors.
    rng : Generator
    n_steps : int
        Steps of each walker; the first half is burn-in.

    Raises
    ------
    ScreenerError
        Where emcee is not installed (extra ``deep``).
    """
    try:
        import emcee
    except ImportError as error:
        raise ScreenerError(
            "sampling needs emcee: pip install 'activity-screener[deep]'"
        ) from error
    model = start.model
    mean, sd, lower, upper = prior_terms(model, noise.prior)

    def log_probability(parameters: Array) -> float:
        if np.any(parameters < lower) or np.any(parameters > upper):
            return -math.inf
        z = (parameters - mean) / sd
        try:
            return model.log_likelihood(parameters) - 0.5 * float(z @ z)
        except NumericalError:  # outside what can be factorised: the sampler turns back
            return -math.inf

    n_walkers = n_walkers or max(32, 2 * model.n_parameters + 2)
    width = np.where(np.isfinite(spread) & (spread > 0), spread, 1e-3)
    cloud = start.parameters + 0.5 * width * rng.standard_normal((n_walkers, width.size))
    inside = np.nextafter(lower, np.inf), np.nextafter(upper, -np.inf)
    cloud = np.clip(cloud, *inside)
    # differences between walkers cross long, narrow valleys that stretches only creep along
    moves = [(emcee.moves.DEMove(), 0.8), (emcee.moves.DESnookerMove(), 0.2)]
    sampler = emcee.EnsembleSampler(n_walkers, model.n_parameters, log_probability, moves=moves)
    sampler.random_state = np.random.MT19937(int(rng.integers(2**32))).state
    sampler.run_mcmc(cloud, n_steps, skip_initial_state_check=True)
    chains = sampler.get_chain(discard=n_steps // 2)
    time = float(np.max(emcee.autocorr.integrated_time(chains, quiet=True, tol=0)))
    flat = chains.reshape(-1, model.n_parameters)
    effective = flat.shape[0] / max(time, 1.0)
    r_hat = float(np.max(split_r_hat(chains)))
    converged = (
        r_hat < _R_HAT_MOST
        and effective >= _FEWEST_EFFECTIVE
        and chains.shape[0] >= _FEWEST_TIMES * time
    )
    thin = flat[:: max(1, flat.shape[0] // 500)]
    periods, amplitudes = _orbit_draws(noise, start, thin, rng)
    rotation = None
    if model.kernel is not None and model.kernel.names[0] == "period":
        rotation = _summary(np.exp(flat[:, 0]))
    return Posterior(
        flat,
        r_hat,
        effective,
        time,
        float(np.mean(sampler.acceptance_fraction)),
        converged,
        tuple(_summary(p) for p in periods),
        tuple(_summary(k) for k in amplitudes),
        rotation,
    )


def _orbit_draws(
    noise: NoiseModel, start: Fit, samples: Array, rng: np.random.Generator
) -> tuple[Array, Array]:
    """Period (d) and semi-amplitude (m/s) of each orbit for each sample, (n_orbits, n_samples)."""
    model, data = start.model, start.model.data
    first = data.columns.shape[2]
    periods = np.empty((len(model.orbits), samples.shape[0]))
    amplitudes = np.empty_like(periods)
    for i, parameters in enumerate(samples):
        solution = model.solve(parameters)
        linear = rng.multivariate_normal(
            solution.linear_mean[first:], solution.linear_covariance[first:, first:]
        )
        for j, (term, values) in enumerate(
            zip(model.orbits, model.orbit_parameters(parameters), strict=True)
        ):
            periods[j, i] = 1 / (1 / term.period + values[0] / (2 * math.pi * data.span))
            amplitudes[j, i] = math.hypot(*linear[2 * j : 2 * j + 2]) * noise.scale
    return periods, amplitudes
