"""The proposal density of the importance sampler.

A mixture of two parts. The first is a kernel estimate of the posterior: multivariate Student
kernels, one per retained sample, with the covariance of the mode the sample belongs to. The second
serves posteriors in which one planet is spread over the whole prior range of periods: kernels for
all planets but that one, times a histogram over its frequency, times the prior of its eccentricity.
Where the planets are exchangeable the density is averaged over their permutations.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln, logsumexp

from screener.core import Array, IntArray

__all__ = ["Comb", "Kernels", "Proposal", "make_kernels"]

_FREEDOM = 6.0  # degrees of freedom of the Student kernels
_SAME_MODE = 0.7  # frequencies closer than this, in units of 1 / baseline, are one mode
_MAX_MODES = 48


@dataclass(frozen=True, eq=False)
class Comb:
    """A density of one planet: histogram in frequency times a normal in (e cos M, e sin M).

    ``edges`` (n_cells + 1,), ``probability`` (n_cells,); within a cell flat in frequency.
    """

    edges: Array
    probability: Array
    eccentricity_scale: float

    def log_density(self, planet: Array) -> Array:
        """ln density at (frequency, e cos M, e sin M), shape (n_samples, 3)."""
        cell = np.searchsorted(self.edges, planet[:, 0], side="right") - 1
        inside = (cell >= 0) & (cell < self.probability.size)
        cell = np.clip(cell, 0, self.probability.size - 1)
        height = self.probability[cell] / np.diff(self.edges)[cell]
        variance = self.eccentricity_scale**2
        normal = -0.5 * np.sum(planet[:, 1:] ** 2, axis=1) / variance
        dense = np.log(np.maximum(height, 1e-300)) + normal - math.log(2 * math.pi * variance)
        return np.where(inside, dense, -np.inf)

    def draw(self, n_samples: int, rng: np.random.Generator) -> Array:
        cell = rng.choice(self.probability.size, size=n_samples, p=self.probability)
        low, high = self.edges[cell], self.edges[cell + 1]
        frequency = low + rng.random(n_samples) * (high - low)
        ecc = rng.normal(scale=self.eccentricity_scale, size=(n_samples, 2))
        return np.column_stack([frequency, ecc])


@dataclass(frozen=True, eq=False)
class Kernels:
    """Student kernels in groups of equal shape.

    Attributes
    ----------
    centre : array, shape (n_kernels, n_dim)
    group : array, shape (n_kernels,)
    factor : array, shape (n_groups, n_dim, n_dim)
        Lower Cholesky factors of the kernels' scale matrices.
    """

    centre: Array
    group: IntArray
    factor: Array

    def marginal(self, keep: IntArray) -> Kernels:
        """The kernels of some of the dimensions."""
        scale = self.factor @ self.factor.swapaxes(1, 2)
        part = scale[:, keep][:, :, keep]
        return Kernels(
            self.centre[:, keep], self.group, np.asarray(np.linalg.cholesky(part), dtype=float)
        )

    def log_density(self, x: Array) -> Array:
        """ln density, x of shape (n_samples, n_dim)."""
        n_kernels, n_dim = self.centre.shape
        power = -0.5 * (_FREEDOM + n_dim)
        norm = (
            gammaln(-power) - gammaln(0.5 * _FREEDOM) - 0.5 * n_dim * math.log(_FREEDOM * math.pi)
        )
        total = np.full(x.shape[0], -np.inf)
        for g in np.unique(self.group):
            inverse = np.linalg.inv(self.factor[g])
            members = self.centre[self.group == g]
            middle = members[0]
            a, c = (x - middle) @ inverse.T, (members - middle) @ inverse.T
            square = np.sum(a**2, axis=1)[:, None] + np.sum(c**2, axis=1) - 2 * a @ c.T
            log_det = np.log(np.diag(self.factor[g])).sum()
            # (1 + r^2 / nu)^power summed: the powers stay far from underflow
            terms = (1 + np.maximum(square, 0) / _FREEDOM) ** power
            with np.errstate(divide="ignore"):
                part = np.log(terms.sum(axis=1)) + norm - log_det
            total = np.logaddexp(total, part)
        return np.asarray(total - math.log(n_kernels))

    def draw(self, n_samples: int, rng: np.random.Generator) -> Array:
        n_kernels, n_dim = self.centre.shape
        pick = (np.arange(n_samples) + rng.integers(n_kernels)) % n_kernels
        normal = rng.normal(size=(n_samples, n_dim))
        normal /= np.sqrt(rng.chisquare(_FREEDOM, size=(n_samples, 1)) / _FREEDOM)
        step = np.einsum("sij,sj->si", self.factor[self.group[pick]], normal)
        return np.asarray(self.centre[pick] + step)


def _modes(frequency: Array, baseline: float) -> IntArray:
    """Mode of each sample, -1 for those outside of the most frequent modes."""
    label = np.full(frequency.shape[0], -1, dtype=np.intp)
    for mode in range(_MAX_MODES):
        free = np.flatnonzero(label < 0)
        if free.size == 0:
            break
        # the next centre is the free sample with most free neighbours, tried on a few
        trial = free[:: max(1, free.size // 24)]
        near = np.all(
            np.abs(frequency[trial, None] - frequency[None, free]) * baseline < _SAME_MODE, axis=2
        )
        best = near[int(np.argmax(near.sum(axis=1)))]
        label[free[best]] = mode
    return label


def make_kernels(
    position: Array, signal_to_noise: Array, baseline: float, widen: float = 1.0
) -> Kernels:
    """Kernels from equally weighted samples (duplicates allowed).

    Parameters
    ----------
    position : array, shape (n_samples, n_planets, 3)
    signal_to_noise : array, shape (n_samples, n_planets)
        Amplitude over its error; sets the expected width where a mode has few samples.
    baseline : float
        d.
    widen : float
        Factor on the width of the kernels.
    """
    n_samples, n_planets, _ = position.shape
    x = position.reshape(n_samples, -1)
    n_dim = x.shape[1]
    ratio = np.maximum(signal_to_noise, 2.0)
    # a sinusoid's frequency error is sqrt(6) / (pi T ratio) (Montgomery & O'Donoghue 1999); a
    # small eccentricity is the amplitude of the first harmonic over K
    width = np.empty((n_samples, n_planets, 3))
    width[:, :, 0] = math.sqrt(6) / (math.pi * baseline * ratio)
    width[:, :, 1:] = 1 / np.sqrt(25.0 + ratio**2)[:, :, None]
    expected = width.reshape(n_samples, -1)
    label = _modes(position[:, :, 0], baseline)
    factors = []
    group = np.empty(n_samples, dtype=np.intp)
    for g, mode in enumerate(np.unique(label)):
        members = label == mode
        prior = np.diag(np.mean(expected[members] ** 2, axis=0))
        distinct = np.unique(x[members], axis=0).shape[0]
        count = float(max(distinct, 1))
        scale = prior
        if mode >= 0 and distinct > 2:
            strength = n_dim + 2.0
            scale = (distinct * np.cov(x[members].T) + strength * prior) / (distinct + strength)
        bandwidth = min(1.0, (4 / ((n_dim + 2) * count)) ** (1 / (n_dim + 4)))
        factors.append(widen * bandwidth * np.linalg.cholesky(scale))
        group[members] = g
    return Kernels(x, group, np.stack(factors))


@dataclass(frozen=True, eq=False)
class Proposal:
    """The mixture.

    Attributes
    ----------
    n_planets : int
    kernels : Kernels or None
        Of all planets.
    comb : Comb
        Of the loose planet.
    loose : int
        Which planet that is.
    comb_fraction : float
        Weight of the second part; 1 where ``kernels`` is None and there is one planet.
    symmetric : bool
        Average over permutations.
    """

    n_planets: int
    kernels: Kernels | None
    comb: Comb
    loose: int
    comb_fraction: float
    symmetric: bool
    others: Kernels | None = None

    def _rest(self) -> IntArray:
        return np.array([j for j in range(self.n_planets) if j != self.loose], dtype=np.intp)

    def draw(self, n_samples: int, rng: np.random.Generator) -> Array:
        """Positions, shape (n_samples, n_planets, 3)."""
        n_comb = round(self.comb_fraction * n_samples)
        out = np.empty((n_samples, self.n_planets, 3))
        out[:n_comb, self.loose] = self.comb.draw(n_comb, rng)
        if self.others is not None and n_comb:
            out[:n_comb, self._rest()] = self.others.draw(n_comb, rng).reshape(n_comb, -1, 3)
        if self.kernels is not None:
            rest = n_samples - n_comb
            out[n_comb:] = self.kernels.draw(rest, rng).reshape(rest, self.n_planets, 3)
        return out

    def log_density(self, position: Array) -> Array:
        """ln density, shape (n_samples,)."""
        orders = [tuple(range(self.n_planets))]
        if self.symmetric:
            orders = list(itertools.permutations(range(self.n_planets)))
        terms = [self._ordered(position[:, list(order)]) for order in orders]
        return np.asarray(logsumexp(np.stack(terms), axis=0) - math.log(len(orders)))

    def _ordered(self, position: Array) -> Array:
        n_samples = position.shape[0]
        second = self.comb.log_density(position[:, self.loose])
        if self.others is not None:
            second = second + self.others.log_density(
                position[:, self._rest()].reshape(n_samples, -1)
            )
        if self.kernels is None:
            return second
        first = self.kernels.log_density(position.reshape(n_samples, -1))
        return np.asarray(
            np.logaddexp(
                first + math.log1p(-self.comb_fraction), second + math.log(self.comb_fraction)
            )
        )
