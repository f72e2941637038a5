"""Evidence by adaptive importance sampling of the collapsed posterior.

The integral over amplitudes, zero points and jitter is done in closed form (``collapsed``), which
leaves (frequency, e cos M, e sin M) per planet. Population Monte Carlo (Cappe et al. 2004, JCGS 13,
907) fits a proposal to them: it starts from an exhaustive scan over periods (over all pairs of
periods where there are two planets), bridges from there to the posterior by tempered weights, and
ends with a large sample from the proposal that is then kept fixed, so that the estimate of Z is
unbiased and its error follows from the scatter of the weights.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import logsumexp
from threadpoolctl import threadpool_limits

from screener.core import Array, IntArray
from screener.models.evidence_integrals.collapsed import Collapsed
from screener.models.evidence_integrals.jitter_nodes import log_evidence_without_planets
from screener.models.evidence_integrals.problem import (
    EvidenceEstimate,
    EvidenceProblem,
    PlanetPrior,
    exchangeable,
)
from screener.models.evidence_integrals.proposal import Comb, Kernels, Proposal, make_kernels
from screener.models.evidence_integrals.scan import CircularScan

__all__ = [
    "Cloud",
    "Effort",
    "ImportanceSampler",
    "importance_ladder",
    "pareto_tail_index",
]

_OVERSAMPLING = 10.0  # cells per 1 / baseline in the scan for one planet
_PAIR_OVERSAMPLING = 5.0  # the same in the table of pairs
_ERROR_FACTOR = 2.5  # 1.96 for 95 %, and some more: the scatter of the weights misses undrawn tails
_NUMERICAL_ERROR = 0.012  # width mixture, jitter nodes, single precision: ln Z


@dataclass(frozen=True)
class Effort:
    """How much work is spent on one evidence.

    Attributes
    ----------
    adapt : int
        Draws in each adaptation round.
    rounds : int
        Largest number of rounds.
    kernels : int
        Kernels of the proposal.
    final : int
        Draws in each final batch.
    batches : int
        Largest number of final batches.
    target_error : float
        No more batches once the error of ln Z (95 %) is below this.
    """

    adapt: int = 3000
    rounds: int = 9
    kernels: int = 400
    final: int = 4000
    batches: int = 20
    target_error: float = 0.04

    def __post_init__(self) -> None:
        if min(self.adapt, self.rounds, self.kernels, self.final, self.batches) < 1:
            raise ValueError("every effort must be at least one")


@dataclass(frozen=True, eq=False)
class Cloud:
    """Weighted draws: ``log_weight`` is ln (prior times likelihood over proposal density)."""

    position: Array  # (n_samples, n_planets, 3)
    log_weight: Array
    signal_to_noise: Array  # (n_samples, n_planets)
    node: IntArray

    def n_effective(self, temper: float = 1.0) -> float:
        """Effective sample size (Kong) of the weights raised to ``temper``."""
        w = self._normal(temper)
        return float(1 / np.sum(w**2))

    def temper_for(self, wanted: float) -> float:
        """The largest exponent up to one that keeps ``wanted`` effective samples."""
        if self.n_effective() >= wanted:
            return 1.0
        low, high = 0.0, 1.0
        for _ in range(30):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if self.n_effective(middle) >= wanted else (low, middle)
        return low

    def resample(self, n_samples: int, temper: float, rng: np.random.Generator) -> IntArray:
        """Systematic resampling: indices of equally weighted draws."""
        ladder = np.cumsum(self._normal(temper))
        spot = (np.arange(n_samples) + rng.random()) / n_samples
        index = np.searchsorted(ladder, spot * ladder[-1])
        return np.asarray(np.minimum(index, self.log_weight.size - 1), dtype=np.intp)

    def _normal(self, temper: float) -> Array:
        scaled = temper * (self.log_weight - self.log_weight.max())
        w = np.exp(scaled)
        w[~np.isfinite(self.log_weight)] = 0.0
        return np.asarray(w / w.sum())


def pareto_tail_index(log_weight: Array) -> float:
    """Shape of the generalised Pareto tail of importance weights, by L-moments.

    Hosking & Wallis (1987, Technometrics 29, 339), on the largest 3 n^(1/2) weights as Vehtari et
    al. (2024, JMLR 25, 72) choose them. Above 0.7 the error estimate is not to be trusted.
    """
    n_tail = min(int(3 * math.sqrt(log_weight.size)), log_weight.size // 5)
    if n_tail < 5:
        return math.nan
    tail = np.sort(np.exp(log_weight - log_weight.max()))[-(n_tail + 1) :]
    excess = tail[1:] - tail[0]
    rank = np.arange(1, n_tail + 1)
    l_one = float(excess.mean())
    l_two = float(np.sum((2 * rank - n_tail - 1) * excess) / (n_tail * (n_tail - 1)))
    return 2 - l_one / l_two if l_two > 0 else -math.inf


class ImportanceSampler:
    """Evidences of one problem; keeps what smaller models taught for the larger ones.

    Parameters
    ----------
    problem : EvidenceProblem
    rng : Generator
    effort : Effort
    """

    def __init__(
        self, problem: EvidenceProblem, rng: np.random.Generator, effort: Effort | None = None
    ) -> None:
        self.problem, self.rng = problem, rng
        self.effort = Effort() if effort is None else effort
        self.collapsed = Collapsed(problem)
        self.clouds: dict[int, Cloud] = {}
        self._broad: dict[int, Cloud] = {}
        self._scans: dict[tuple[PlanetPrior, float, int], CircularScan] = {}

    def estimate(self, n_planets: int) -> EvidenceEstimate:
        """ln Z with its error for ``n_planets`` planets (smaller models are done on the way)."""
        if n_planets < 0:
            raise ValueError("the number of planets cannot be negative")
        start = time.perf_counter()
        with threadpool_limits(1):
            if n_planets == 0:
                value = log_evidence_without_planets(self.problem)
                seconds = time.perf_counter() - start
                return EvidenceEstimate(0, value, 1e-3, "jitter quadrature", math.inf, 400, seconds)
            before = self.collapsed.n_evaluations
            proposal = self._adapt(n_planets)
            result = self._final(n_planets, proposal)
        return replace(
            result,
            n_evaluations=self.collapsed.n_evaluations - before,
            seconds=time.perf_counter() - start,
        )

    # ---- target

    def _weigh(self, position: Array, log_proposal: Array) -> Cloud:
        n_planets = position.shape[1]
        log_prior = np.zeros(position.shape[0])
        for j, prior in enumerate(self.problem.planet_priors(n_planets)):
            log_prior += prior.log_density(*position[:, j].T)
        log_weight = np.full(position.shape[0], -np.inf)
        ratio = np.zeros(position.shape[:2])
        node = np.zeros(position.shape[0], dtype=np.intp)
        good = np.flatnonzero(np.isfinite(log_prior))
        values = self.collapsed.evaluate(position[good], self.rng)
        log_weight[good] = values.log_likelihood + log_prior[good] - log_proposal[good]
        ratio[good], node[good] = values.signal_to_noise, values.node
        return Cloud(position, log_weight, ratio, node)

    def _draw(self, proposal: Proposal, n_samples: int) -> Cloud:
        position = proposal.draw(n_samples, self.rng)
        return self._weigh(position, proposal.log_density(position))

    def _scan(self, planet: int, node: int, oversampling: float = _OVERSAMPLING) -> CircularScan:
        prior = self.problem.planet_priors(planet + 1)[planet]
        key = (prior, oversampling, node)
        if key not in self._scans:
            thin = 1 if oversampling == _OVERSAMPLING else 3
            self._scans[key] = CircularScan(self.collapsed, prior, oversampling, node, thin)
        return self._scans[key]

    def _comb(self, planet: int, node: int, others: Array | None, loose: bool) -> Comb:
        """Histogram over the period of one planet given draws of the others."""
        scan = self._scan(planet, node)
        shares = (0.4, 0.4, 0.2) if loose else (0.8, 0.12, 0.08)
        probability = shares[0] * _smooth(scan.averaged(others))
        probability += shares[1] * _smooth(scan.averaged(others, 0.35))
        probability += shares[2] * np.exp(scan.log_mass)
        return Comb(scan.edges, probability / probability.sum(), scan.prior.eccentricity_scale)

    # ---- adaptation

    def _adapt(self, n_planets: int) -> Proposal:
        cloud = self._first_cloud(n_planets)
        self._broad[n_planets] = cloud
        wanted = 0.15 * self.effort.adapt
        proposal = self._fit(cloud, cloud.temper_for(150))
        for _ in range(self.effort.rounds):
            cloud = self._draw(proposal, self.effort.adapt)
            temper = cloud.temper_for(150)
            proposal = self._fit(cloud, temper)
            if temper == 1.0 and cloud.n_effective() > wanted:
                break
        self.clouds[n_planets] = cloud
        return proposal

    def _first_cloud(self, n_planets: int) -> Cloud:
        node = int(np.argmax(self.collapsed.nodes.log_zero))
        if n_planets == 1:
            comb = self._comb(0, node, None, loose=True)
            return self._draw(Proposal(1, None, comb, 0, 1.0, False), self.effort.adapt)
        if n_planets == 2:
            return self._pairs(node)
        if n_planets - 1 not in self.clouds:
            self._adapt(n_planets - 1)
        parts = []
        for cloud, temper in (
            (self.clouds[n_planets - 1], 1.0),
            (self._broad[n_planets - 1], self._broad[n_planets - 1].temper_for(200)),
        ):
            pick = cloud.resample(self.effort.kernels // 2, temper, self.rng)
            parts.append((cloud.position[pick], cloud.signal_to_noise[pick]))
        position = np.concatenate([p for p, _ in parts])
        ratio = np.concatenate([r for _, r in parts])
        others = make_kernels(position, ratio, self.problem.baseline)
        thin = position[:: max(1, position.shape[0] // 96)]
        comb = self._comb(n_planets - 1, node, thin, loose=True)
        symmetric = exchangeable(self.problem.planet_priors(n_planets))
        proposal = Proposal(n_planets, None, comb, n_planets - 1, 1.0, symmetric, others)
        return self._draw(proposal, 2 * self.effort.adapt)

    def _pairs(self, node: int) -> Cloud:
        """Draws from the tempered table of all pairs of periods."""
        first, second = (self._scan(j, node, _PAIR_OVERSAMPLING) for j in range(2))
        table = first.pair_table(second)
        table -= table.max()
        mass = (first.log_mass[:, None] + second.log_mass).astype(np.float32)
        chance = np.zeros(table.size, dtype=np.float32)
        n_samples = 2 * self.effort.adapt
        for temper, share in ((0.6, 0.45), (0.25, 0.35), (0.1, 0.2)):
            part = np.exp(temper * (table - mass) + mass).ravel()
            chance += share / float(part.sum(dtype=float)) * part
        ladder = np.cumsum(chance, dtype=float)
        cell = np.searchsorted(ladder, ladder[-1] * self.rng.random(n_samples))
        row, column = np.divmod(np.minimum(cell, table.size - 1), second.n_cells)
        position = np.empty((n_samples, 2, 3))
        log_proposal = np.log(chance[row * second.n_cells + column])
        for j, (scan, index) in enumerate(((first, row), (second, column))):
            low, high = scan.edges[index], scan.edges[index + 1]
            position[:, j, 0] = low + self.rng.random(n_samples) * (high - low)
            sigma = scan.prior.eccentricity_scale
            ecc = self.rng.normal(scale=sigma, size=(n_samples, 2))
            position[:, j, 1:] = ecc
            log_proposal -= np.log(high - low)
            log_proposal -= 0.5 * np.sum(ecc**2, axis=1) / sigma**2 + math.log(
                2 * math.pi * sigma**2
            )
        return self._weigh(position, log_proposal)

    def _fit(self, cloud: Cloud, temper: float) -> Proposal:
        """The proposal for the next round."""
        n_planets = cloud.position.shape[1]
        pick = cloud.resample(self.effort.kernels, temper, self.rng)
        position, ratio = cloud.position[pick], cloud.signal_to_noise[pick]
        symmetric = n_planets > 1 and exchangeable(self.problem.planet_priors(n_planets))
        if symmetric:  # strongest planet first
            order = np.argsort(-ratio, axis=1)
            ratio = np.take_along_axis(ratio, order, axis=1)
            position = np.take_along_axis(position, order[:, :, None], axis=1)
        loose = int(np.argmin(ratio.mean(axis=0)))
        kernels = make_kernels(position, ratio, self.problem.baseline)
        node = int(np.median(cloud.node[pick]))
        if n_planets == 1:
            comb = self._comb(0, node, None, loose=temper < 1)
            return Proposal(1, kernels, comb, 0, 0.2, False)
        rest = np.array([j for j in range(n_planets) if j != loose], dtype=np.intp)
        thin = position[:: max(1, position.shape[0] // 48), rest]
        comb = self._comb(loose, node, thin, loose=temper < 1)
        others: Kernels = make_kernels(position[:, rest], ratio[:, rest], self.problem.baseline)
        return Proposal(n_planets, kernels, comb, loose, 0.3, symmetric, others)

    # ---- the estimate

    def _final(self, n_planets: int, proposal: Proposal) -> EvidenceEstimate:
        parts: list[Cloud] = []
        for _ in range(self.effort.batches):
            parts.append(self._draw(proposal, self.effort.final))
            log_weight = np.concatenate([c.log_weight for c in parts])
            n_effective = 1 / math.exp(logsumexp(2 * log_weight) - 2 * logsumexp(log_weight))
            error = math.sqrt(max(1 / n_effective - 1 / log_weight.size, 0.0))
            if len(parts) > 1 and _ERROR_FACTOR * error < self.effort.target_error:
                break
        self.clouds[n_planets] = Cloud(
            np.concatenate([c.position for c in parts]),
            log_weight,
            np.concatenate([c.signal_to_noise for c in parts]),
            np.concatenate([c.node for c in parts]),
        )
        tail = pareto_tail_index(log_weight)
        return EvidenceEstimate(
            n_planets,
            float(logsumexp(log_weight)) - math.log(log_weight.size),
            math.hypot(_ERROR_FACTOR * error, _NUMERICAL_ERROR),
            "adaptive importance sampling",
            n_effective,
            0,
            0.0,
            converged=bool(tail < 0.7 and n_effective > 200),
            tail_index=tail,
        )


def _smooth(probability: Array) -> Array:
    """Spread a quarter of each cell's mass to either side, as eccentricity shifts peaks."""
    padded = np.pad(probability, 1)
    out = 0.5 * probability + 0.25 * (padded[:-2] + padded[2:])
    return np.asarray(out / out.sum())


def importance_ladder(
    problem: EvidenceProblem,
    n_max: int,
    rng: np.random.Generator,
    effort: Effort | None = None,
) -> list[EvidenceEstimate]:
    """Evidences of 0, 1, ..., ``n_max`` planets."""
    sampler = ImportanceSampler(problem, rng, effort)
    return [sampler.estimate(n) for n in range(n_max + 1)]
