"""Correlated noise of indicators and velocities for the tests: red plus white, in linear time.

Each series is an Ornstein-Uhlenbeck process (covariance exp(-|dt| / tau)) plus white noise with
the pattern of the measurement errors. The process is Markov, so the innovations of a Kalman filter
are the values whitened by the Cholesky factor of the covariance, at a cost linear in their number.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, IntArray
from screener.core.errors import NumericalError

__all__ = ["ABSENT", "Noise", "draw", "fit_alike", "fit_noise", "whiten", "zero_points"]

#: White variance that stands for "not measured", in units of the series' mean white variance.
ABSENT = 1e10
# the shares reach up to noise that is all but red: where the grid ended short of it, persistence
# was not calibrated for stars whose red noise is ten times the errors
_TAUS = (0.7, 2.0, 5.0, 12.0, 30.0, 80.0)
_SHARES = (0.2, 0.4, 0.6, 0.8, 0.95, 0.99)
_GRID = np.array([(1.0, 0.0), *((t, s) for t in _TAUS for s in _SHARES)])


@dataclass(frozen=True, eq=False)
class Noise:
    """Fitted noise of K series on common times, variance scale * ((1-share) white + share red).

    ``tau`` (d), ``share``, ``scale`` and ``dof`` have shape (K,); ``white`` has shape (n_obs, K)
    and mean 1 over the measured values; ``nuisance`` has shape (n_obs, p): zero points and slope.
    """

    time: Array
    white: Array
    tau: Array
    share: Array
    scale: Array
    dof: Array
    nuisance: Array

    @property
    def measured(self) -> Array:
        """True where a value exists, shape (n_obs, K)."""
        return np.asarray(self.white < 0.5 * ABSENT)


def zero_points(time: Array, instrument: IntArray, slope: bool = True) -> Array:
    """Columns for a zero point per instrument and (with ``slope``) a straight line in time."""
    labels = np.unique(instrument)
    columns: Array = (instrument[:, None] == labels[None, :]).astype(np.float64)
    if slope and time.size > 3:
        scaled = (time - time.mean()) / max(float(np.ptp(time)), 1e-9)
        columns = np.column_stack([columns, scaled])
    return columns


def whiten(
    time: Array, white: Array, tau: Array, share: Array, columns: Array
) -> tuple[Array, Array]:
    """Columns times the inverse Cholesky factor of (1-share) diag(white) + share exp(-|dt|/tau).

    Parameters
    ----------
    time : Array
        Shape (n_obs,), sorted.
    white : Array
        Shape (n_obs, K).
    tau, share : Array
        Shape (G, K): G trial parameters for each of K series.
    columns : Array
        Shape (n_obs, K, C).

    Returns
    -------
    Whitened columns of shape (n_obs, G, K, C), and the log-determinant of the factor, (G, K).
    """
    n_obs = time.size
    decay = np.exp(-np.diff(time)[:, None, None] / tau)
    # the variances do not depend on the values: one scan for them, one for the means
    gain = np.empty((n_obs, *tau.shape))
    total = np.empty((n_obs, *tau.shape))
    noise = (1.0 - share) * white[:, None, :]
    state = share.astype(float)
    for n in range(n_obs):
        if n:
            state = share + decay[n - 1] ** 2 * (state - share)
        spread = state + noise[n]
        total[n] = spread
        gain[n] = state / spread
        state = state * (1.0 - gain[n])
    if not bool(np.all(total > 0.0)):
        raise NumericalError(f"a noise variance is not positive: {float(np.min(total))!r}")
    out = np.empty((n_obs, *tau.shape, columns.shape[2]))
    mean = np.zeros((*tau.shape, columns.shape[2]))
    for n in range(n_obs):
        if n:
            mean *= decay[n - 1][..., None]
        np.subtract(columns[n], mean, out=out[n])
        mean += gain[n][..., None] * out[n]
    root = np.sqrt(total)
    out /= root[..., None]
    return out, np.sum(np.log(root), axis=0)


def fit_noise(time: Array, values: Array, white_sd: Array, nuisance: Array) -> Noise:
    """Restricted maximum likelihood over a grid of (tau, share), the scale profiled out.

    Parameters
    ----------
    time : Array
        Shape (n_obs,), sorted.
    values, white_sd : Array
        Shape (n_obs, K), NaN where not measured; only the pattern of ``white_sd`` matters.
    nuisance : Array
        Shape (n_obs, p).
    """
    known = np.isfinite(values) & np.isfinite(white_sd) & (white_sd > 0.0)
    variance = np.where(known, white_sd, 1.0) ** 2
    mean = np.sum(variance * known, axis=0) / np.maximum(known.sum(axis=0), 1)
    # an error far below the others is not believed: nothing may hang on one value
    white = np.where(known, np.clip(variance / mean, 0.05, 1e3), ABSENT)
    n_series = values.shape[1]
    tau = np.repeat(_GRID[:, :1], n_series, axis=1)
    share = np.repeat(_GRID[:, 1:], n_series, axis=1)
    filled = np.where(known, values, 0.0)
    p = nuisance.shape[1]
    columns = np.concatenate(
        [np.repeat(nuisance[:, None, :], n_series, axis=1), filled[:, :, None]], axis=2
    )
    whitened, log_det = whiten(time, white, tau, share, columns)
    gram = np.einsum("ngki,ngkj->gkij", whitened, whitened)
    inner = gram[..., :p, :p] + 1e-9 * np.eye(p) * np.trace(gram[..., :p, :p], axis1=2, axis2=3)[
        ..., None, None
    ] / max(p, 1)
    cross = gram[..., :p, p]
    rss = gram[..., p, p] - np.einsum(
        "gki,gki->gk", cross, np.linalg.solve(inner, cross[..., None])[..., 0]
    )
    used = np.array([np.linalg.matrix_rank(nuisance[known[:, k]]) for k in range(n_series)])
    dof = np.maximum(known.sum(axis=0) - used, 1).astype(float)
    rss = np.maximum(rss, 1e-300)
    objective = -0.5 * dof * np.log(rss) - log_det - 0.5 * np.linalg.slogdet(inner)[1]
    best = np.argmax(objective, axis=0)
    rows = np.arange(n_series)
    return Noise(
        time, white, tau[best, rows], share[best, rows], rss[best, rows] / dof, dof, nuisance
    )


def fit_alike(
    time: Array, white: Array, nuisance: Array, values: Array
) -> tuple[Array, Array, Array]:
    """``fit_noise`` for many complete series with the same pattern of white noise.

    Parameters
    ----------
    time, white : Array
        Shape (n_obs,); ``white`` is a variance of mean 1.
    nuisance, values : Array
        Shapes (n_obs, p) and (n_obs, S).

    Returns
    -------
    ``tau`` (d), ``share`` and ``scale`` of each series, shape (S,). The nuisance columns are
    whitened once for all, which makes this the faster the more series there are.
    """
    n_obs, p = nuisance.shape
    dof = max(n_obs - int(np.linalg.matrix_rank(nuisance)), 1)
    per_chunk = max(1, 4_000_000 // (_GRID.shape[0] * n_obs))
    tau, share = _GRID[:, :1], _GRID[:, 1:]
    found = []
    for start in range(0, values.shape[1], per_chunk):
        columns = np.column_stack([nuisance, values[:, start : start + per_chunk]])
        whitened, log_det = whiten(time, white[:, None], tau, share, columns[:, None, :])
        w = np.ascontiguousarray(np.moveaxis(whitened[:, :, 0], 1, 0))  # (G, n_obs, p + S)
        x, y = w[..., :p], w[..., p:]
        inner = np.swapaxes(x, 1, 2) @ x
        size = np.trace(inner, axis1=1, axis2=2)[:, None, None] / max(p, 1)
        inner += 1e-9 * size * np.eye(p)
        cross = np.swapaxes(x, 1, 2) @ y
        rss = np.einsum("gns,gns->gs", y, y)
        rss -= np.einsum("gis,gis->gs", cross, np.linalg.solve(inner, cross))
        rss = np.maximum(rss, 1e-300)
        penalty = log_det + 0.5 * np.linalg.slogdet(inner)[1][:, None]
        best = np.argmax(-0.5 * dof * np.log(rss) - penalty, axis=0)
        found.append(np.stack([*_GRID[best].T, rss[best, np.arange(best.size)] / dof]))
    tau_found, share_found, scale = np.concatenate(found, axis=1)
    return tau_found, share_found, scale


def draw(noise: Noise, rng: np.random.Generator, n: int, correlation: Array | None = None) -> Array:
    """n draws of the noise, shape (n_obs, K, n); NaN where a series was not measured.

    ``correlation``, shape (K, K), is the correlation of the series' innovations with each other.
    """
    n_obs, n_series = noise.white.shape
    normal = rng.standard_normal((2, n_obs, n_series, n))
    if correlation is not None and n_series > 1:
        value, vector = np.linalg.eigh(correlation)
        root = vector * np.sqrt(np.maximum(value, 0.0))
        normal = np.einsum("ij,anjs->anis", root, normal)
    decay = np.exp(-np.diff(noise.time)[:, None] / noise.tau)
    fresh = np.sqrt(1.0 - decay**2)
    red = np.empty((n_obs, n_series, n))
    red[0] = normal[0, 0]
    for i in range(1, n_obs):
        red[i] = decay[i - 1][:, None] * red[i - 1] + fresh[i - 1][:, None] * normal[0, i]
    white = np.where(noise.measured, noise.white, np.nan)
    total = np.sqrt(noise.share)[:, None] * red
    total += np.sqrt((1.0 - noise.share) * white)[..., None] * normal[1]
    return np.asarray(np.sqrt(noise.scale)[:, None] * total)
