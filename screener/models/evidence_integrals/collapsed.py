"""The likelihood of periods and eccentricities with everything else integrated out.

For given (frequency, e cos M, e sin M) of each planet the velocities are linear in the two
amplitudes (K cos omega, K sin omega) of each orbit. With K modified Jeffreys and omega uniform
their prior density is, per planet, 1 / [2 pi L K (K + K0)] with L = ln(1 + K_max / K0). As

    1 / (x^(1/2) (1 + x^(1/2))) = integral_0^inf erfcx(t^(1/2)) exp(-x t) dt

(from the Laplace transforms of (pi t)^(-1/2) and (pi t)^(-1/2) - erfcx(t^(1/2)), DLMF 7.2 and 7.7),
that density is a mixture of isotropic normals of variance K0^2 / (2 t). For each width the
amplitudes are then integrated in closed form, as is the zero point; the jitter takes a quadrature
(``jitter_nodes``). What remains are three parameters per planet.
The mixture is discretised by the trapezoidal rule in ln t, which converges exponentially.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import erfcx, logsumexp

from screener.core import Array, IntArray
from screener.models.evidence_integrals.jitter_nodes import JitterNodes, make_nodes
from screener.models.evidence_integrals.orbit_basis import orbit_columns_batch
from screener.models.evidence_integrals.problem import EvidenceProblem, JeffreysPrior

__all__ = ["Collapsed", "CollapsedValues", "WidthMixture", "width_mixture"]

_STEP = 1.2  # of ln t; the rule is then good to 2e-3 at any K
_CHUNK = 96  # samples at a time, so that the products stay in the cache


@dataclass(frozen=True, eq=False)
class WidthMixture:
    """Discrete mixture of normals for the two amplitudes of an orbit.

    ``precision`` (1 / variance, (m/s)^-2) and ``log_weight`` have shape (n_widths,).
    """

    precision: Array
    log_weight: Array


def width_mixture(prior: JeffreysPrior, largest_amplitude: float) -> WidthMixture:
    """The mixture that stands for a modified Jeffreys prior, for K up to ``largest_amplitude``.

    The density is matched to 2e-3 for K between 0.06 K0 and ``largest_amplitude``; less than 1e-2
    of the prior lies below, where its mass is right and no data can tell the difference.
    """
    low = math.log(0.5 * (prior.scale / (30 * largest_amplitude)) ** 2)
    high = math.log(0.5 / 0.01**2)
    log_t = np.arange(low, high, _STEP)
    t = np.exp(log_t)
    # K0^-2 erfcx(t^1/2) exp(-K^2 t / K0^2) / (2 pi L) dt, with normals (t / pi K0^2) exp(...)
    log_weight = np.log(erfcx(np.sqrt(t)) / (2 * prior.span) * _STEP)
    beyond = math.exp(log_t[-1] + 0.5 * _STEP)  # erfcx(t^1/2) ~ (pi t)^(-1/2): the rest of the mass
    rest = 1 / (math.sqrt(math.pi * beyond) * prior.span)
    log_weight[-1] = np.logaddexp(log_weight[-1], math.log(rest))
    return WidthMixture(2 * t / prior.scale**2, log_weight)


@dataclass(frozen=True, eq=False)
class CollapsedValues:
    """ln likelihood and by-products of a batch.

    Attributes
    ----------
    log_likelihood : array, shape (n_samples,)
        An unbiased estimate (of the likelihood, not of its logarithm): the widths are drawn.
    amplitude : array, shape (n_samples, n_planets)
        Posterior-mean amplitudes as one length per planet, m/s, given the widths drawn.
    signal_to_noise : array, shape (n_samples, n_planets)
        That length over its standard error.
    node : array, shape (n_samples,)
        Index of the jitter node of largest weight.
    """

    log_likelihood: Array
    amplitude: Array
    signal_to_noise: Array
    node: IntArray


def _gains(gram: Array, right: Array, precision: Sequence[Array]) -> Array:
    """ln of the integral over all amplitudes relative to no planets; arrays broadcast.

    ``gram`` and ``right`` have the packed row on axis 0; ``precision`` one array per planet.
    A Cholesky factorisation unrolled over rows, vectorised over everything else.
    """
    n_columns = right.shape[0]
    factor: dict[tuple[int, int], Array] = {}
    solved: list[Array] = []
    result: Array = np.zeros(())
    product: Array = np.ones(())
    for a in range(n_columns):
        for b in range(a + 1):
            value = gram[a * (a + 1) // 2 + b]
            if a == b:
                value = value + precision[a // 2]
            for c in range(b):
                value = value - factor[a, c] * factor[b, c]
            factor[a, b] = np.sqrt(value) if a == b else value * factor[b, -1]
        factor[a, -1] = 1 / factor[a, a]
        z = right[a]
        for c in range(a):
            z = z - factor[a, c] * solved[c]
        z = z * factor[a, -1]
        solved.append(z)
        result = result + z * z
        product = product * factor[a, -1]
    for p in precision:
        product = product * p
    return np.asarray(0.5 * result + np.log(product))


class Collapsed:
    """Evaluates the collapsed likelihood for any number of planets.

    Parameters
    ----------
    problem : EvidenceProblem
    nodes : JitterNodes, optional
        Made from the problem where absent.
    """

    def __init__(self, problem: EvidenceProblem, nodes: JitterNodes | None = None) -> None:
        self.problem = problem
        self.nodes = make_nodes(problem) if nodes is None else nodes
        self.epoch = float(np.average(problem.time, weights=problem.rv_err**-2.0))
        self.time = problem.time - self.epoch
        spread = float(np.ptp(problem.rv))
        self._mixtures: dict[JeffreysPrior, WidthMixture] = {}
        self._spread = max(spread, 1e-3)
        self._basis = self.nodes.basis.astype(np.float32)  # columns are single anyway
        self.n_evaluations = 0

    def mixture(self, prior: JeffreysPrior) -> WidthMixture:
        """The width mixture of an amplitude prior, made once."""
        if prior not in self._mixtures:
            self._mixtures[prior] = width_mixture(prior, min(self._spread, prior.upper))
        return self._mixtures[prior]

    def columns(self, frequency: Array, ecc_cos: Array, ecc_sin: Array) -> Array:
        """Rotated orbit columns, shape (n_samples, 2 n_planets, n_obs).

        The arguments have shape (n_samples, n_planets).
        """
        n_samples, n_planets = frequency.shape
        plain = orbit_columns_batch(self.time, frequency.ravel(), ecc_cos.ravel(), ecc_sin.ravel())
        rotated = plain.reshape(-1, self.time.size) @ self._basis
        return rotated.astype(float).reshape(n_samples, 2 * n_planets, self.time.size)

    def evaluate(self, position: Array, rng: np.random.Generator) -> CollapsedValues:
        """The collapsed likelihood of a batch.

        Parameters
        ----------
        position : array, shape (n_samples, n_planets, 3)
            Frequency (1/d), e cos M, e sin M at ``epoch`` of each planet.
        rng : Generator
            Draws the widths.
        """
        n_samples, n_planets, _ = position.shape
        self.n_evaluations += n_samples
        log_likelihood = np.empty(n_samples)
        amplitude = np.empty((n_samples, n_planets))
        ratio = np.empty((n_samples, n_planets))
        node = np.empty(n_samples, dtype=np.intp)
        for first in range(0, n_samples, _CHUNK):
            rows = slice(first, first + _CHUNK)
            frequency, ecc_cos, ecc_sin = np.moveaxis(position[rows], 2, 0)
            gram, right = self.nodes.products(self.columns(frequency, ecc_cos, ecc_sin))
            out = self._integrate(gram, right, n_planets, rng)
            log_likelihood[rows], amplitude[rows], ratio[rows], node[rows] = out
        return CollapsedValues(log_likelihood, amplitude, ratio, node)

    def _integrate(
        self, gram: Array, right: Array, n_planets: int, rng: np.random.Generator
    ) -> tuple[Array, Array, Array, Array]:
        priors = self.problem.planet_priors(n_planets)
        mixtures = [self.mixture(p.amplitude) for p in priors]
        n_samples = right.shape[1]
        rows = np.arange(n_samples)
        # starting widths: those of the amplitude that the planet would have alone
        alone = [self._alone(gram, right, j) for j in range(n_planets)]
        precision = [
            np.clip(2 / np.maximum(a, 1e-6) ** 2, m.precision[0], m.precision[-1])
            for (a, _), m in zip(alone, mixtures, strict=True)
        ]
        at_nodes = self.nodes.log_zero + _gains(gram, right, [p[:, None] for p in precision])
        node = np.argmax(at_nodes, axis=1)
        gram_k, right_k = gram[:, rows, node], right[:, rows, node]
        log_ratio = np.zeros(n_samples)
        for j, mixture in enumerate(mixtures):
            trial = [p[:, None] for p in precision]
            trial[j] = mixture.precision[None, :]
            chance = _gains(gram_k[:, :, None], right_k[:, :, None], trial) + mixture.log_weight
            chance -= logsumexp(chance, axis=1, keepdims=True)
            pick = np.argmax(chance + rng.gumbel(size=chance.shape), axis=1)
            log_ratio += mixture.log_weight[pick] - chance[rows, pick]
            precision[j] = mixture.precision[pick]
        at_nodes = self.nodes.log_zero + _gains(gram, right, [p[:, None] for p in precision])
        log_likelihood = logsumexp(at_nodes, axis=1) + log_ratio
        final = [self._alone(gram, right, j, node, precision[j]) for j in range(n_planets)]
        return (
            log_likelihood,
            np.stack([a for a, _ in final], axis=1),
            np.stack([r for _, r in final], axis=1),
            node,
        )

    def _alone(
        self,
        gram: Array,
        right: Array,
        planet: int,
        node: Array | None = None,
        precision: Array | float = 0.0,
    ) -> tuple[Array, Array]:
        """Amplitude of one planet as if it were alone, and that over its error."""
        rows = np.arange(right.shape[1])
        at = self.nodes.n_nodes // 2 if node is None else node
        a, b = 2 * planet, 2 * planet + 1
        g_aa = gram[a * (a + 1) // 2 + a][rows, at] + precision
        g_ba = gram[b * (b + 1) // 2 + a][rows, at]
        g_bb = gram[b * (b + 1) // 2 + b][rows, at] + precision
        r_a, r_b = right[a][rows, at], right[b][rows, at]
        det = np.maximum(g_aa * g_bb - g_ba**2, 1e-12 * g_aa * g_bb)
        x, y = (g_bb * r_a - g_ba * r_b) / det, (g_aa * r_b - g_ba * r_a) / det
        square = np.maximum(x * r_a + y * r_b, 0.0)
        return np.hypot(x, y), np.sqrt(square)
