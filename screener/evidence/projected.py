"""Velocities whitened by their noise, less zero points and slope: for tests that simulate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array
from screener.evidence.case import Case
from screener.evidence.correlated import Noise, draw, whiten
from screener.evidence.lines import noise_beside_signal

__all__ = ["Projected", "gain", "project", "with_noise"]


@dataclass(frozen=True, eq=False)
class Projected:
    """The noise of the velocities, found from the residuals, and its whitening.

    ``basis``, shape (n_obs, p), spans the whitened zero points and slope.
    """

    noise: Noise
    basis: Array

    def __call__(self, columns: Array) -> Array:
        """Columns of shape (n_obs, m), whitened and free of zero points and slope.

        Unit variance where the columns are noise.
        """
        noise = self.noise
        out, _ = whiten(
            noise.time, noise.white, noise.tau[None], noise.share[None], columns[:, None, :]
        )
        flat = out[:, 0, 0] / np.sqrt(noise.scale[0])
        return np.asarray(flat - self.basis @ (self.basis.T @ flat))

    def fakes(self, rng: np.random.Generator, n: int) -> Array:
        """n draws of the noise as velocities, shape (n_obs, n)."""
        return draw(self.noise, rng, n)[:, 0]


def project(case: Case) -> Projected:
    """The projection for a case; the noise is that of the residuals."""
    noise = noise_beside_signal(case, case.residual_rv[:, None], case.rv_sd[:, None])
    return with_noise(noise)


def with_noise(noise: Noise) -> Projected:
    """The projection for a given noise of one series."""
    plain = Projected(noise, np.zeros((noise.time.size, 0)))
    basis, _ = np.linalg.qr(plain(noise.nuisance))
    return Projected(noise, basis)


def gain(columns: Array, values: Array) -> Array:
    """Log-likelihood gain of G pairs of columns for S series, shape (G, S).

    Parameters
    ----------
    columns : Array
        Whitened, shape (n_obs, G, 2).
    values : Array
        Whitened, shape (n_obs, S).
    """
    gram = np.einsum("ngi,ngj->gij", columns, columns)
    gram += 1e-9 * np.trace(gram, axis1=1, axis2=2)[:, None, None] * np.eye(2) + 1e-12 * np.eye(2)
    n_obs, n_pairs, _ = columns.shape
    product = (columns.reshape(n_obs, 2 * n_pairs).T @ values).reshape(n_pairs, 2, -1)
    solved = np.linalg.solve(gram, product)
    return np.asarray(0.5 * np.sum(product * solved, axis=1))
