"""A second method: sequential Monte Carlo from the prior to the posterior, nothing integrated out.

Annealed populations (Neal 2001, Stat. Comput. 11, 125; Del Moral, Doucet & Jasra 2006, JRSS B 68,
411): particles drawn from the prior are carried to the posterior through powers of the likelihood;
the product of the mean incremental weights estimates Z. Period, eccentricity, phase, amplitude and
argument of periastron of every planet and the jitter are all sampled, with the priors as they are
stated, so that neither the algebra nor the proposal of ``importance`` enters. Only the zero points,
which are linear with a uniform prior, are integrated. Several islands run side by side and share
nothing but the ladder of powers; the error is the scatter between them.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass, fields

import numpy as np
from scipy import linalg
from scipy.special import logsumexp
from scipy.stats import t as student
from threadpoolctl import threadpool_limits

from screener.core import Array
from screener.models.evidence_integrals.orbit_basis import MAX_ECCENTRICITY, orbit_columns_batch
from screener.models.evidence_integrals.problem import EvidenceEstimate, EvidenceProblem
from screener.models.evidence_integrals.proposal import Comb
from screener.models.evidence_integrals.scan import jump_combs

__all__ = ["AnnealingEffort", "annealed_evidence"]

_BLOCK = 512  # particles moved together; bounds the memory of the temporaries
_ACCEPT = 0.3  # acceptance that the step size is steered to


@dataclass(frozen=True)
class AnnealingEffort:
    """Size of an annealing run.

    Attributes
    ----------
    islands, particles : int
        Independent populations, and particles in each. With few particles an island often misses
        part of the posterior and ln Z comes out low by more than the error says.
    sweeps : int
        Sweeps over all moves after each resampling.
    keep : float
        Each step raises the power so far that this share of the particles stays effective.
    """

    islands: int = 12
    particles: int = 450
    sweeps: int = 6
    keep: float = 0.6

    def __post_init__(self) -> None:
        if self.islands < 3 or self.particles < 20 or self.sweeps < 1 or not 0 < self.keep < 1:
            raise ValueError("annealing needs 3 islands, 20 particles, 1 sweep and 0 < keep < 1")


@dataclass(eq=False)
class _State:
    """Particles; the arrays are changed in place."""

    orbit: Array  # (n, n_planets, 3): frequency, e cos M, e sin M
    amplitude: Array  # (n, n_planets, 2): K cos(M + omega), K sin(M + omega)
    level: Array  # (n,): uniform coordinate of the jitter
    columns: (
        Array  # (n, n_planets, 2, n_obs), rotated, phased so that velocity = amplitude @ columns
    )
    residual: Array  # (n, n_obs), rotated
    log_likelihood: Array  # (n,)

    def rows(self, index: Array | slice) -> _State:
        """Some particles: a view of a slice, a copy of an index array."""
        return _State(*(getattr(self, f.name)[index] for f in fields(self)))


class _Annealer:
    """Target, moves and bookkeeping of one run."""

    def __init__(
        self, problem: EvidenceProblem, n_planets: int, combs: list[Comb], rng: np.random.Generator
    ) -> None:
        self.problem, self.n_planets, self.rng = problem, n_planets, rng
        self.priors = problem.planet_priors(n_planets)
        self.combs = combs
        values, basis = linalg.eigh(problem.covariance + np.diag(problem.rv_err**2))
        self.eigenvalues = values
        self.basis = basis.astype(np.float32)
        self.data = problem.rv @ basis
        self.offsets = problem.offset_columns.T @ basis
        self.time = problem.time - problem.time.mean()
        self.step = 1.0
        self.n_evaluations = 0

    # ---- densities

    def jitter(self, level: Array) -> Array:
        prior = self.problem.jitter
        return np.zeros_like(level) if prior is None else prior.value(level)

    def likelihood(self, residual: Array, level: Array) -> Array:
        """ln L with the zero points integrated, for rotated residuals."""
        variance = self.eigenvalues + self.jitter(level)[:, None] ** 2
        weighted = residual / variance
        m = self.offsets.shape[0]
        gram = np.einsum("mn,ln,bn->bml", self.offsets, self.offsets, 1 / variance, optimize=True)
        right = weighted @ self.offsets.T
        gain = np.sum(right * np.linalg.solve(gram, right[:, :, None])[:, :, 0], axis=1)
        _, log_det = np.linalg.slogdet(gram)
        square = np.sum(residual * weighted, axis=1)
        n_free = self.data.size - m
        log_norm = n_free * math.log(2 * math.pi) + np.log(variance).sum(axis=1) + log_det
        return np.asarray(
            0.5 * (gain - square - log_norm) - m * math.log(2 * self.problem.offset_half_width)
        )

    def log_amplitude_prior(self, planet: int, amplitude: Array) -> Array:
        """ln density of (K cos, K sin): modified Jeffreys in K, uniform in angle."""
        k = np.hypot(amplitude[:, 0], amplitude[:, 1])
        return np.asarray(
            self.priors[planet].amplitude.log_density(k)
            - np.log(2 * math.pi * np.maximum(k, 1e-300))
        )

    def orbit_prior(self, planet: int, orbit: Array) -> Array:
        inside = np.hypot(orbit[:, 1], orbit[:, 2]) < MAX_ECCENTRICITY
        return np.where(inside, self.priors[planet].log_density(*orbit.T), -np.inf)

    def phased_columns(self, orbit: Array) -> Array:
        """Rotated columns for the amplitudes (K cos(M + omega), K sin(M + omega))."""
        self.n_evaluations += orbit.shape[0]
        f, h, k = orbit.T
        plain = orbit_columns_batch(self.time, f, h, k)
        rotated = (plain.reshape(-1, self.time.size) @ self.basis).astype(float)
        c, s = rotated.reshape(plain.shape).swapaxes(0, 1)
        angle = np.arctan2(k, h)[:, None]
        cos_m, sin_m = np.cos(angle), np.sin(angle)
        return np.stack([c * cos_m - s * sin_m, c * sin_m + s * cos_m], axis=1)

    # ---- population

    def draw_prior(self, n: int) -> _State:
        rng, n_planets = self.rng, self.n_planets
        orbit, amplitude = np.empty((n, n_planets, 3)), np.empty((n, n_planets, 2))
        columns = np.empty((n, n_planets, 2, self.data.size))
        for j, prior in enumerate(self.priors):
            log_p = math.log(prior.period_min) + prior.log_period_span * rng.random(n)
            orbit[:, j, 0] = np.exp(-log_p)
            # the Rayleigh law by its inverse, truncated where the orbit opens
            edge = -math.expm1(-0.5 * (MAX_ECCENTRICITY / prior.eccentricity_scale) ** 2)
            ecc = prior.eccentricity_scale * np.sqrt(-2 * np.log1p(-edge * rng.random(n)))
            mean = rng.uniform(0, 2 * np.pi, n)
            orbit[:, j, 1:] = np.column_stack([ecc * np.cos(mean), ecc * np.sin(mean)])
            amplitude[:, j] = self._amplitude_from_prior(j, n)
            columns[:, j] = self.phased_columns(orbit[:, j])
        level = rng.random(n)
        residual = self.data - np.einsum("bja,bjan->bn", amplitude, columns)
        return _State(orbit, amplitude, level, columns, residual, self.likelihood(residual, level))

    def _amplitude_from_prior(self, planet: int, n: int) -> Array:
        k = self.priors[planet].amplitude.value(self.rng.random(n))
        angle = self.rng.uniform(0, 2 * np.pi, n)
        return np.column_stack([k * np.cos(angle), k * np.sin(angle)])

    # ---- moves

    def sweep(self, state: _State, power: float) -> float:
        """All moves once; returns the acceptance of the local ones."""
        accepted = []
        for first in range(0, state.level.size, _BLOCK):
            part = state.rows(slice(first, first + _BLOCK))
            for j in self.rng.permutation(self.n_planets):
                accepted.append(self._local(part, int(j), power))
                self._independent(part, int(j), power, new_orbit=True)
                self._independent(part, int(j), power, new_orbit=False)
                self._jitter_move(part, power)
        return float(np.mean(accepted))

    def _scale(self, state: _State, power: float) -> Array:
        """Expected error of an amplitude, shape (n,)."""
        variance = self.eigenvalues + self.jitter(state.level)[:, None] ** 2
        return np.asarray(np.sqrt(2 / (power * np.sum(1 / variance, axis=1))))

    def _widths(self, amplitude: Array, scale: Array) -> Array:
        """Expected errors of (frequency, e cos M, e sin M), shape (n, 3)."""
        ratio = np.hypot(amplitude[:, 0], amplitude[:, 1]) / scale
        f = math.sqrt(6) / (math.pi * self.problem.baseline * np.maximum(ratio, 1.0))
        ecc = 1 / np.sqrt(25.0 + ratio**2)
        return np.column_stack([f, ecc, ecc])

    def _local(self, state: _State, j: int, power: float) -> float:
        rng, n = self.rng, state.level.size
        length = self.step * np.exp(rng.uniform(-2.0, 0.7, size=(n, 1)))
        scale = self._scale(state, power)
        orbit, amplitude = state.orbit[:, j], state.amplitude[:, j]
        width = length * self._widths(amplitude, scale)
        new_amplitude = amplitude + length * scale[:, None] * rng.normal(size=(n, 2))
        new_orbit = orbit + width * rng.normal(size=(n, 3))
        back = length * self._widths(new_amplitude, scale)
        square = (new_orbit - orbit) ** 2
        log_ratio = np.sum(np.log(width / back) - 0.5 * square * (back**-2 - width**-2), axis=1)
        return self._decide(state, j, power, new_orbit, new_amplitude, log_ratio, None)

    def _independent(self, state: _State, j: int, power: float, new_orbit: bool) -> None:
        """Redraw the amplitudes near their conditional optimum, with or without a new orbit."""
        rng, n = self.rng, state.level.size
        inverse = 1 / (self.eigenvalues + self.jitter(state.level)[:, None] ** 2)
        old, amplitude, columns = state.orbit[:, j], state.amplitude[:, j], state.columns[:, j]
        target = state.residual + np.einsum("ba,ban->bn", amplitude, columns)
        log_ratio = np.zeros(n)
        orbit, trial = old, columns
        if new_orbit:
            orbit = self.combs[j].draw(n, rng)
            unbound = ~np.isfinite(self.orbit_prior(j, orbit))
            orbit[unbound] = old[unbound]
            trial = self.phased_columns(orbit)
            log_ratio += self.combs[j].log_density(old) - self.combs[j].log_density(orbit)
            log_ratio[unbound] = -np.inf  # stays where it is
        mean, factor = self._conditional(columns, target, inverse, power)
        log_ratio += self._log_amplitude(j, amplitude, mean, factor)
        if new_orbit:
            mean, factor = self._conditional(trial, target, inverse, power)
        fresh = self._amplitude_from_prior(j, n)
        z = rng.normal(size=(n, 2))
        # rows of the upper factor R with precision R^T R
        second = z[:, 1] / factor[2]
        first = (z[:, 0] - factor[1] * second) / factor[0]
        near = mean + np.column_stack([first, second])
        fresh = np.where(rng.random((n, 1)) < 0.25, fresh, near)
        log_ratio -= self._log_amplitude(j, fresh, mean, factor)
        self._decide(state, j, power, orbit, fresh, log_ratio, trial)

    def _conditional(
        self, columns: Array, target: Array, inverse: Array, power: float
    ) -> tuple[Array, tuple[Array, Array, Array]]:
        """Mean and precision factor of a normal close to the conditional of two amplitudes."""
        c, s = columns[:, 0], columns[:, 1]
        weighted_c, weighted_s = c * inverse, s * inverse
        cc, cs, ss = (
            np.einsum("bn,bn->b", *pair)
            for pair in ((weighted_c, c), (weighted_c, s), (weighted_s, s))
        )
        tc, ts = (
            np.einsum("bn,bn->b", weighted_c, target),
            np.einsum("bn,bn->b", weighted_s, target),
        )
        floor = 1e-6 * (cc + ss)
        cc, ss = cc + floor, ss + floor
        det = cc * ss - cs**2
        mean = np.column_stack([(ss * tc - cs * ts) / det, (cc * ts - cs * tc) / det])
        root = math.sqrt(power)
        r00 = np.sqrt(cc)
        return mean, (root * r00, root * cs / r00, root * np.sqrt(det / cc))

    def _log_amplitude(
        self, j: int, amplitude: Array, mean: Array, factor: tuple[Array, Array, Array]
    ) -> Array:
        """ln density from which ``_independent`` draws amplitudes."""
        x, y = (amplitude - mean).T
        a, b, c = factor
        near = np.log(a * c / (2 * math.pi)) - 0.5 * ((a * x + b * y) ** 2 + (c * y) ** 2)
        return np.asarray(
            np.logaddexp(
                math.log(0.25) + self.log_amplitude_prior(j, amplitude), math.log(0.75) + near
            )
        )

    def _decide(
        self,
        state: _State,
        j: int,
        power: float,
        orbit: Array,
        amplitude: Array,
        log_ratio: Array,
        columns: Array | None,
    ) -> float:
        """Metropolis-Hastings step for one planet; ``log_ratio`` is that of the proposals."""
        prior = self.orbit_prior(j, orbit) + self.log_amplitude_prior(j, amplitude)
        rows = np.flatnonzero(np.isfinite(prior) & np.isfinite(log_ratio))
        if columns is None:
            columns = np.empty_like(state.columns[:, j])
            columns[rows] = self.phased_columns(orbit[rows])
        old = np.einsum("ba,ban->bn", state.amplitude[rows, j], state.columns[rows, j])
        new = np.einsum("ba,ban->bn", amplitude[rows], columns[rows])
        residual = state.residual[rows] + old - new
        log_l = self.likelihood(residual, state.level[rows])
        before = self.orbit_prior(j, state.orbit[rows, j]) + self.log_amplitude_prior(
            j, state.amplitude[rows, j]
        )
        gain = power * (log_l - state.log_likelihood[rows]) + prior[rows] - before + log_ratio[rows]
        take = np.log(self.rng.random(rows.size)) < gain
        moved = rows[take]
        state.orbit[moved, j], state.amplitude[moved, j] = orbit[moved], amplitude[moved]
        state.columns[moved, j], state.residual[moved] = columns[moved], residual[take]
        state.log_likelihood[moved] = log_l[take]
        return moved.size / state.level.size

    def _jitter_move(self, state: _State, power: float) -> None:
        if self.problem.jitter is None:
            return
        n = state.level.size
        width = min(0.5, 0.06 / math.sqrt(power)) * np.exp(self.rng.uniform(-2, 0.7, n))
        level = state.level + width * self.rng.normal(size=n)
        inside = (level >= 0) & (level <= 1)
        level = np.where(inside, level, state.level)
        log_l = self.likelihood(state.residual, level)
        take = np.log(self.rng.random(n)) < power * (log_l - state.log_likelihood)
        take &= inside
        state.level[take], state.log_likelihood[take] = level[take], log_l[take]


def _next_power(log_likelihood: Array, power: float, keep: float) -> float:
    """The power up to one at which a share ``keep`` of the particles stays effective."""

    def share(step: float) -> float:
        w = step * (log_likelihood - log_likelihood.max())
        return float(np.exp(2 * logsumexp(w) - logsumexp(2 * w)) / w.size)

    if share(1 - power) >= keep:
        return 1.0
    low, high = math.log(1e-9), math.log(1 - power)
    for _ in range(40):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if share(math.exp(middle)) >= keep else (low, middle)
    return power + math.exp(low)


def _resample(log_weight: Array, rng: np.random.Generator) -> Array:
    """Systematic resampling within each island, log_weight (n_islands, n_particles)."""
    n_islands, n = log_weight.shape
    index = []
    for island in range(n_islands):
        w = np.exp(log_weight[island] - log_weight[island].max())
        ladder = np.cumsum(w)
        spot = (np.arange(n) + rng.random()) / n * ladder[-1]
        index.append(island * n + np.minimum(np.searchsorted(ladder, spot), n - 1))
    return np.concatenate(index)


def annealed_evidence(
    problem: EvidenceProblem,
    n_planets: int,
    rng: np.random.Generator,
    effort: AnnealingEffort | None = None,
) -> EvidenceEstimate:
    """ln Z of at least one planet by annealed populations."""
    if n_planets < 1:
        raise ValueError("annealing is for one planet or more")
    effort = AnnealingEffort() if effort is None else effort
    start = time.perf_counter()
    shape = (effort.islands, effort.particles)
    with threadpool_limits(1):
        annealer = _Annealer(problem, n_planets, jump_combs(problem, n_planets), rng)
        state = annealer.draw_prior(effort.islands * effort.particles)
        power, log_z = 0.0, np.zeros(effort.islands)
        while power < 1:
            new = _next_power(state.log_likelihood, power, effort.keep)
            log_weight = ((new - power) * state.log_likelihood).reshape(shape)
            log_z += logsumexp(log_weight, axis=1) - math.log(effort.particles)
            power = new
            state = state.rows(_resample(log_weight, rng))
            if power < 1:
                for _ in range(effort.sweeps):
                    rate = annealer.sweep(state, power)
                    annealer.step *= math.exp(np.clip(rate - _ACCEPT, -0.2, 0.2))
                    annealer.step = min(annealer.step, 1.5)
    top = float(log_z.max())
    weight = np.exp(log_z - top)
    mean = float(weight.mean())
    factor = float(student.ppf(0.975, effort.islands - 1))  # 95 %, of few islands
    error = factor * float(weight.std(ddof=1)) / math.sqrt(effort.islands) / mean
    return EvidenceEstimate(
        n_planets,
        top + math.log(mean),
        error,
        "annealed populations",
        float(effort.islands * effort.particles),
        annealer.n_evaluations,
        time.perf_counter() - start,
        converged=error < 1.0,
    )
