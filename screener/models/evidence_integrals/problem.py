"""What an evidence integral needs to know: data, noise model, priors; and what it returns."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from screener.core import Array

__all__ = [
    "LN10",
    "EvidenceEstimate",
    "EvidenceProblem",
    "JeffreysPrior",
    "PlanetPrior",
    "exchangeable",
]

LN10 = math.log(10.0)


@dataclass(frozen=True)
class JeffreysPrior:
    """Modified Jeffreys prior, p(x) = 1 / [(x + scale) ln(1 + upper / scale)], 0 <= x <= upper.

    Gregory (2005, ApJ 631, 1198). With u = ln(1 + x / scale) / ln(1 + upper / scale) the prior is
    uniform in u on [0, 1].
    """

    scale: float = 1.0
    upper: float = 999.0

    @property
    def span(self) -> float:
        """ln(1 + upper / scale)."""
        return math.log1p(self.upper / self.scale)

    def value(self, uniform: Array) -> Array:
        """x for u in [0, 1]."""
        return np.asarray(self.scale * np.expm1(np.asarray(uniform) * self.span))

    def uniform(self, value: Array) -> Array:
        """u for x."""
        return np.asarray(np.log1p(np.asarray(value) / self.scale) / self.span)

    def log_density(self, value: Array) -> Array:
        """ln p(x); -inf outside of the range."""
        x = np.asarray(value, dtype=float)
        inside = (x >= 0) & (x <= self.upper)
        dense = -np.log(np.where(inside, x, 0.0) + self.scale) - math.log(self.span)
        return np.where(inside, dense, -np.inf)


@dataclass(frozen=True)
class PlanetPrior:
    """Prior of one orbit.

    The period is log-uniform between two bounds (d), the semi-amplitude modified Jeffreys, the
    eccentricity Rayleigh truncated at one, argument of periastron and mean anomaly uniform.
    """

    period_min: float
    period_max: float
    amplitude: JeffreysPrior = field(default_factory=JeffreysPrior)
    eccentricity_scale: float = 0.2

    def __post_init__(self) -> None:
        if not 0 < self.period_min < self.period_max:
            raise ValueError("the period bounds must be positive and increase")
        if not 0 < self.eccentricity_scale <= 0.5:
            raise ValueError("the eccentricity scale must lie in (0, 0.5]")

    @property
    def log_period_span(self) -> float:
        return math.log(self.period_max / self.period_min)

    def log_density(self, frequency: Array, ecc_cos: Array, ecc_sin: Array) -> Array:
        """ln prior density in (frequency, e cos M, e sin M); -inf outside.

        Rayleigh in e with M uniform is an isotropic normal in (e cos M, e sin M).
        """
        variance = self.eccentricity_scale**2
        square = ecc_cos**2 + ecc_sin**2
        inside = (frequency * self.period_max >= 1) & (frequency * self.period_min <= 1)
        inside &= square < 1
        log_norm = math.log(2 * math.pi * variance * -math.expm1(-0.5 / variance))
        dense = -np.log(np.where(inside, frequency, 1.0)) - math.log(self.log_period_span)
        return np.where(inside, dense - 0.5 * square / variance - log_norm, -np.inf)


@dataclass(frozen=True, eq=False)
class EvidenceProblem:
    """Velocities with known correlated noise, and the priors of everything else.

    Attributes
    ----------
    time, rv, rv_err : array, shape (n_obs,)
        d, m/s, m/s.
    covariance : array, shape (n_obs, n_obs)
        Covariance of the correlated noise (m/s)^2, hyper-parameters fixed; without ``rv_err``.
    planets : tuple of PlanetPrior
        Prior of each planet; for more planets than entries the last entry is used again.
    jitter : JeffreysPrior or None
        Prior of a white noise that is added in quadrature to ``rv_err``; None for no such noise.
    offsets : array, shape (n_obs, n_offsets)
        Columns of the zero points, one of ones where there is one instrument.
    offset_half_width : float
        Each zero point is uniform on plus or minus this, m/s. It must enclose the data well: the
        integral over it is done analytically without the limits.
    """

    time: Array
    rv: Array
    rv_err: Array
    covariance: Array
    planets: tuple[PlanetPrior, ...]
    jitter: JeffreysPrior | None = None
    offsets: Array | None = None
    offset_half_width: float = 1000.0

    def __post_init__(self) -> None:
        n_obs = self.time.size
        shapes = (self.rv.shape, self.rv_err.shape, self.covariance.shape)
        if shapes != ((n_obs,), (n_obs,), (n_obs, n_obs)):
            raise ValueError("time, rv, rv_err and covariance disagree in size")
        if not all(np.isfinite(a).all() for a in (self.time, self.rv, self.rv_err)):
            raise ValueError("time, rv and rv_err must be finite")
        if np.any(self.rv_err <= 0):
            raise ValueError("rv_err must be positive")
        if not self.planets:
            raise ValueError("at least one planet prior is needed")
        if float(np.abs(self.rv).max()) > 0.9 * self.offset_half_width:
            raise ValueError("the velocities come too close to the bounds of the zero point")

    @property
    def n_obs(self) -> int:
        return int(self.time.size)

    @property
    def offset_columns(self) -> Array:
        return np.ones((self.n_obs, 1)) if self.offsets is None else self.offsets

    @property
    def baseline(self) -> float:
        return float(np.ptp(self.time))

    def planet_priors(self, n_planets: int) -> tuple[PlanetPrior, ...]:
        """The priors of the first ``n_planets`` planets."""
        return tuple(self.planets[min(j, len(self.planets) - 1)] for j in range(n_planets))


def exchangeable(priors: Sequence[PlanetPrior]) -> bool:
    """Whether the labels of the planets can be swapped without changing the posterior."""
    return len(set(priors)) <= 1


@dataclass(frozen=True)
class EvidenceEstimate:
    """A marginal likelihood.

    Attributes
    ----------
    n_planets : int
    log_z : float
        Natural logarithm of the evidence (rv in m/s), labelled planets: no division by n!.
    error : float
        Half-width of the 95 % interval of ``log_z``. Two methods, or two seeds, should differ by
        less than the sum of their errors.
    method : str
    n_effective : float
        Effective number of posterior samples behind the estimate (importance sampling), number of
        particles (annealing), inf for a quadrature.
    n_evaluations : int
        Likelihood evaluations.
    seconds : float
        Wall time.
    converged : bool
        Whether the method's own diagnostics are satisfied.
    tail_index : float
        Shape of the generalised Pareto tail of the importance weights; below 0.7 the error can be
        trusted (Vehtari et al. 2024, JMLR 25, 72); NaN where it does not apply.
    """

    n_planets: int
    log_z: float
    error: float
    method: str
    n_effective: float
    n_evaluations: int
    seconds: float
    converged: bool = True
    tail_index: float = math.nan

    @property
    def log10_z(self) -> float:
        return self.log_z / LN10

    @property
    def log10_error(self) -> float:
        return self.error / LN10

    def agrees_with(self, other: EvidenceEstimate) -> bool:
        """Whether the two differ by no more than the sum of their errors."""
        return bool(abs(self.log_z - other.log_z) <= self.error + other.error)
