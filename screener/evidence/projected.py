"""Velocities whitened by their noise, less zero points and slope: for tests that simulate."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from screener.core import Array, IntArray
from screener.evidence.case import Case
from screener.evidence.correlated import Noise, draw, fit_alike, whiten
from screener.evidence.lines import noise_beside_signal, signal_columns

__all__ = ["Projected", "each_with_its_noise", "gain", "project"]


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
    plain = Projected(noise, np.zeros((noise.time.size, 0)))
    basis, _ = np.linalg.qr(plain(noise.nuisance))
    return Projected(noise, basis)


def each_with_its_noise(
    case: Case, noise: Noise, values: Array, columns: Array
) -> Iterator[tuple[IntArray, Array, Array]]:
    """Simulated velocities, each whitened by the noise fitted to it, as is done with real ones.

    A test that knows the noise of its simulations but has to fit that of the data is not
    calibrated: what is looked for ends up partly in the fitted noise, and a fit that misses part
    of the red noise gives large deviations.

    Parameters
    ----------
    noise : Noise
        Of one series; gives times, pattern of the white noise, zero points and slope.
    values : Array
        Shape (n_obs, S), m/s.
    columns : Array
        Shape (n_obs, C).

    Yields
    ------
    For every kind of noise that was fitted: which series have it, the columns (n_obs, C) and
    those series whitened by it and free of zero points and slope. The series have unit variance
    where they are noise; the scale of the columns means nothing.
    """
    nuisance, white = noise.nuisance, noise.white
    beside = np.column_stack([nuisance, signal_columns(case)])
    tau, share, scale = fit_alike(noise.time, white[:, 0], beside, values)
    kinds, group = np.unique(np.stack([tau, share]), axis=1, return_inverse=True)
    group = group.ravel()
    joined = np.column_stack([nuisance, columns])[:, None, :]
    x, _ = whiten(noise.time, white, kinds[0][:, None], kinds[1][:, None], joined)
    scaled = (values / np.sqrt(scale))[:, :, None]
    y, _ = whiten(noise.time, np.repeat(white, tau.size, axis=1), tau[None], share[None], scaled)
    p = nuisance.shape[1]
    for kind in range(kinds.shape[1]):
        rows = np.flatnonzero(group == kind)
        basis, _ = np.linalg.qr(x[:, kind, 0, :p])
        both = np.concatenate([x[:, kind, 0, p:], y[:, 0, rows, 0]], axis=1)
        both -= basis @ (basis.T @ both)
        n_columns = columns.shape[1]
        yield rows, both[:, :n_columns], both[:, n_columns:]


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
