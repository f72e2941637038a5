"""Scans over the period of one more planet, on a circular orbit, with the others refitted.

They only steer where the importance sampler looks: every number that enters an evidence is
evaluated afterwards with eccentric orbits and the full noise integral.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from screener.core import Array
from screener.models.evidence_integrals.collapsed import Collapsed
from screener.models.evidence_integrals.problem import EvidenceProblem, PlanetPrior
from screener.models.evidence_integrals.proposal import Comb

__all__ = ["CircularScan", "frequency_edges", "jump_combs"]

_LOG_STEP = 0.08  # largest cell in ln f: periods beyond the baseline blur over that


def frequency_edges(prior: PlanetPrior, baseline: float, oversampling: float) -> Array:
    """Edges (1/d, ascending) of cells no wider than 1 / (oversampling * baseline)."""
    low, high = 1 / prior.period_max, 1 / prior.period_min
    step = 1 / (oversampling * baseline)
    turn = min(max(low, step / _LOG_STEP), high)
    n_log = math.ceil(math.log(turn / low) / _LOG_STEP) if turn > low else 0
    n_linear = max(math.ceil((high - turn) / step), 8) if high > turn else 0
    parts = [np.geomspace(low, turn, n_log + 1)] if n_log else [np.array([low])]
    if n_linear:
        parts.append(np.linspace(turn, high, n_linear + 1)[1:])
    edges = np.concatenate(parts)
    edges[0], edges[-1] = low, high
    return edges


class CircularScan:
    """Marginal likelihood of one more circular orbit in each cell of a frequency grid.

    Parameters
    ----------
    collapsed : Collapsed
    prior : PlanetPrior
        Of the planet that is searched.
    oversampling : float
        Cells per 1 / baseline.
    node : int
        The jitter is fixed at this node.
    thin : int
        Use every ``thin``-th width of the amplitude mixture.
    """

    def __init__(
        self,
        collapsed: Collapsed,
        prior: PlanetPrior,
        oversampling: float,
        node: int,
        thin: int = 1,
    ) -> None:
        self.collapsed, self.prior, self.node = collapsed, prior, node
        self.edges = frequency_edges(prior, collapsed.problem.baseline, oversampling)
        self.centres = np.sqrt(self.edges[1:] * self.edges[:-1])
        self.log_mass = np.log(np.log(self.edges[1:] / self.edges[:-1]) / prior.log_period_span)
        zero = np.zeros((self.centres.size, 1))
        self.columns = self.whiten(collapsed.columns(self.centres[:, None], zero, zero))
        self.data = self.whiten(collapsed.nodes.data[None, None, :])[0, 0]
        self._mixture = collapsed.mixture(prior.amplitude)
        self._widths = slice(thin // 2, None, thin)
        self._log_thin = math.log(thin)

    @property
    def n_cells(self) -> int:
        return int(self.centres.size)

    def whiten(self, rotated: Array) -> Array:
        """Rows whose plain products are those of the noise metric, zero points projected out."""
        nodes = self.collapsed.nodes
        root = np.sqrt(nodes.inverse[:, self.node])
        unit = nodes.projection[:, self.node] / root[:, None]  # orthonormal columns
        white = rotated * root
        return np.asarray(white - (white @ unit) @ unit.T)

    def orthonormal(self, columns: Array) -> Array:
        """Orthonormal rows spanning whitened columns, shape (n_samples, n_columns, n_obs)."""
        q, _ = np.linalg.qr(columns.swapaxes(1, 2))
        return np.asarray(q.swapaxes(1, 2))

    def gains(self, fixed: Array | None = None) -> Array:
        """ln of the likelihood ratio of adding the planet, shape (n_samples, n_cells).

        Parameters
        ----------
        fixed : array, shape (n_samples, n_fixed, n_obs), optional
            Orthonormal rows of what is already in the model, with free amplitudes.
        """
        x, y = self.columns[:, 0], self.columns[:, 1]
        xx, xy, yy = (np.sum(p * q, axis=1)[None] for p, q in ((x, x), (x, y), (y, y)))
        xr, yr = (x @ self.data)[None], (y @ self.data)[None]
        if fixed is not None and fixed.shape[1]:
            n_samples, n_fixed, n_obs = fixed.shape
            flat = fixed.reshape(-1, n_obs)
            zx = (flat @ x.T).reshape(n_samples, n_fixed, -1)
            zy = (flat @ y.T).reshape(n_samples, n_fixed, -1)
            zr = (fixed @ self.data)[:, :, None]
            xx, yy = xx - np.sum(zx**2, axis=1), yy - np.sum(zy**2, axis=1)
            xy = xy - np.sum(zx * zy, axis=1)
            xr, yr = xr - np.sum(zx * zr, axis=1), yr - np.sum(zy * zr, axis=1)
        total = np.full(xx.shape, -np.inf)
        mixture = self._mixture
        for p, w in zip(
            mixture.precision[self._widths], mixture.log_weight[self._widths], strict=True
        ):
            a, b = np.maximum(xx, 0) + p, np.maximum(yy, 0) + p
            det = np.maximum(a * b - xy * xy, p * p)
            square = (b * xr * xr - 2 * xy * xr * yr + a * yr * yr) / det
            total = np.logaddexp(total, 0.5 * square - 0.5 * np.log(det) + math.log(p) + w)
        return np.asarray(total + self._log_thin)

    def fixed_rows(self, position: Array) -> Array:
        """Orthonormal rows for planets at ``position``, shape (n_samples, n_fixed, 3)."""
        columns = self.collapsed.columns(*np.moveaxis(position, 2, 0))
        return self.orthonormal(self.whiten(columns))

    def averaged(self, position: Array | None, temper: float = 1.0) -> Array:
        """Probability of each cell for one more planet, averaged over given others.

        ``position`` holds equally weighted draws, shape (n_samples, n_fixed, 3); None for no other
        planets. The likelihood ratio is raised to ``temper``.
        """
        rows = None if position is None else self.fixed_rows(position)
        log_p = temper * self.gains(rows) + self.log_mass
        log_p -= logsumexp(log_p, axis=1, keepdims=True)
        mean = np.exp(log_p).mean(axis=0)
        return np.asarray(mean / mean.sum())

    def pair_table(self, other: CircularScan, block: int = 64) -> NDArray[np.float32]:
        """ln of the mass of every pair of cells, shape (n_cells, other.n_cells), float32.

        Rows are cells of this scan (first planet), columns those of ``other`` (second planet).
        """
        first = self.gains()[0] + self.log_mass
        table = np.empty((self.n_cells, other.n_cells), dtype=np.float32)
        for start in range(0, self.n_cells, block):
            rows = slice(start, start + block)
            fixed = self.orthonormal(self.columns[rows])
            table[rows] = first[rows, None] + other.gains(fixed) + other.log_mass
        return table


def jump_combs(problem: EvidenceProblem, n_planets: int) -> list[Comb]:
    """Where long jumps in period go: the prior, and the peaks of successively cleaned scans.

    They change how fast the particles mix, not what is estimated; they reach the whole prior.
    """
    collapsed = Collapsed(problem)
    node = int(np.argmax(collapsed.nodes.log_zero))
    combs = []
    for prior in problem.planet_priors(n_planets):
        scan = CircularScan(collapsed, prior, 10.0, node)
        mass = np.exp(scan.log_mass)
        total, fixed = 0.4 * mass, None
        for _ in range(n_planets):
            gain = scan.gains(fixed)[0]
            for temper in (1.0, 0.3):
                log_p = temper * gain + scan.log_mass
                p = np.exp(log_p - log_p.max())
                total = total + 0.3 / n_planets * p / p.sum()
            best = scan.columns[int(np.argmax(gain))][None]
            rows = best if fixed is None else np.concatenate([fixed, best], axis=1)
            fixed = scan.orthonormal(rows)
        combs.append(Comb(scan.edges, total / total.sum(), prior.eccentricity_scale))
    return combs
