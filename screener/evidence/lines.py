"""Amplitudes at a given frequency in several correlated series, and p-values for them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from screener.core import Array, Indicator
from screener.evidence.case import Case
from screener.evidence.correlated import Noise, fit_noise, whiten, zero_points

__all__ = [
    "Amplitudes",
    "Channels",
    "amplitudes",
    "channels_of",
    "combined_p",
    "fit_columns",
    "n_draws",
    "noise_beside_signal",
    "residual_correlation",
    "signal_columns",
    "velocity_channel",
]

_FEWEST = 15


@dataclass(frozen=True, eq=False)
class Channels:
    """Series of one star on common times with their noise; ``values`` is (n_obs, K)."""

    names: tuple[str, ...]
    values: Array
    noise: Noise


@dataclass(frozen=True, eq=False)
class Amplitudes:
    """Coefficients of C columns in each of K series.

    ``value`` (K, C), ``covariance`` (K, C, C), ``chi2`` (K,): squared length in units of the
    errors; ``p_value`` (K,) from the F distribution; ``residual`` (n_obs, K): whitened residuals,
    0 where not measured.
    """

    names: tuple[str, ...]
    value: Array
    covariance: Array
    chi2: Array
    p_value: Array
    residual: Array


def n_draws(case: Case) -> int:
    """Number of random draws at the case's depth."""
    return {"quick": 100, "standard": 500, "deep": 2000}[case.depth.value]


def signal_columns(case: Case) -> Array:
    """Cosine and sine at the signal's period, shape (n_obs, 2)."""
    angle = 2.0 * np.pi / case.signal.orbit.period * (case.series.time - case.series.time.mean())
    return np.column_stack([np.cos(angle), np.sin(angle)])


def _usable(item: Indicator) -> Array | None:
    """The indicator's values less gross outliers; None with fewer than 15 or no spread."""
    value = np.where(np.isfinite(item.value) & np.isfinite(item.error), item.value, np.nan)
    if np.count_nonzero(np.isfinite(value)) < _FEWEST:
        return None
    centre = np.nanmedian(value)
    spread = 1.4826 * float(np.nanmedian(np.abs(value - centre)))
    if not spread > 0.0:
        return None
    # zero points differ between instruments by many times the scatter: only absurd values go
    value[np.abs(value - centre) > 1e3 * spread] = np.nan
    return np.asarray(value)


def channels_of(case: Case, names: tuple[str, ...] | None = None) -> Channels | None:
    """All usable indicators (or those of ``names``) with their noise fitted; None without any."""
    kept, values, errors = [], [], []
    for item in case.series.indicators:
        if names is not None and item.name not in names:
            continue
        value = _usable(item)
        if value is not None:
            kept.append(item.name)
            values.append(value)
            errors.append(np.where(item.error > 0.0, item.error, np.nan))
    if not kept:
        return None
    stacked = np.column_stack(values)
    noise = noise_beside_signal(case, stacked, np.column_stack(errors))
    return Channels(tuple(kept), stacked, noise)


def noise_beside_signal(case: Case, values: Array, errors: Array) -> Noise:
    """Noise of series of shape (n_obs, K), a sinusoid at the signal's period left aside.

    Fitted without it, the noise would take in a true line (and hide it), or, on residuals, lack
    what the signal took from it. Zero points and slope are the nuisance terms of the result.
    """
    series = case.series
    nuisance = zero_points(series.time, series.instrument)
    full = np.column_stack([nuisance, signal_columns(case)])
    noise = fit_noise(series.time, values, errors, full)
    return replace(noise, nuisance=nuisance, dof=noise.dof + 2.0)


def velocity_channel(case: Case, rv: Array) -> Channels:
    """Velocities (m/s, shape (n_obs,)) as a channel; zero points and slope stay free."""
    noise = noise_beside_signal(case, rv[:, None], case.rv_sd[:, None])
    return Channels(("rv",), rv[:, None], noise)


def fit_columns(channels: Channels, columns: Array) -> Amplitudes:
    """Least squares of ``columns`` in each series under its noise, nuisance terms free.

    Parameters
    ----------
    channels : Channels
        K series.
    columns : Array
        Shape (n_obs, C), or (n_obs, K, C) where each series has columns of its own.
    """
    noise = channels.noise
    n_series = channels.values.shape[1]
    if columns.ndim == 2:
        columns = np.repeat(columns[:, None, :], n_series, axis=1)
    c, p = columns.shape[2], noise.nuisance.shape[1]
    filled = np.where(noise.measured, channels.values, 0.0)[:, :, None]
    block = np.concatenate(
        [columns, np.repeat(noise.nuisance[:, None, :], n_series, axis=1), filled], axis=2
    )
    whitened, _ = whiten(noise.time, noise.white, noise.tau[None], noise.share[None], block)
    w = np.moveaxis(whitened[:, 0], 0, 1)  # (K, n_obs, C + p + 1)
    x, y = w[..., : c + p], w[..., c + p]
    gram = np.einsum("kni,knj->kij", x, x)
    scale = np.sqrt(np.maximum(np.einsum("kii->ki", gram), 1e-300))
    gram = gram / scale[:, :, None] / scale[:, None, :] + 1e-10 * np.eye(c + p)
    inverse = np.linalg.inv(gram) / scale[:, :, None] / scale[:, None, :]
    solution = np.einsum("kij,kj->ki", inverse, np.einsum("kni,kn->ki", x, y))
    residual = y - np.einsum("kni,ki->kn", x, solution)
    rss = np.sum(residual**2, axis=1)
    dof = np.maximum(noise.dof - c, 1.0)
    variance = rss / dof
    covariance = inverse[:, :c, :c] * variance[:, None, None]
    value = solution[:, :c]
    if c:
        chi2 = np.einsum("ki,kij,kj->k", value, np.linalg.inv(covariance), value)
        p_value = np.asarray(stats.f.sf(chi2 / c, c, dof))
    else:
        chi2, p_value = np.zeros(n_series), np.ones(n_series)
    return Amplitudes(
        channels.names,
        value,
        covariance,
        chi2,
        p_value,
        (residual / np.sqrt(variance)[:, None]).T,
    )


def amplitudes(case: Case, channels: Channels) -> Amplitudes:
    """Cosine and sine amplitudes at the signal's period in each series."""
    return fit_columns(channels, signal_columns(case))


def combined_p(found: Amplitudes, c: int) -> tuple[float, float, float]:
    """One p-value for all series, whose residuals are correlated: (p, factor, dof).

    Each p-value becomes the chi-squared value of ``c`` degrees of freedom it stands for; their
    sum over correlated series is close to ``factor`` times chi-squared of ``dof`` (Brown 1975):
    two such values have covariance 2 c r^2 where the residuals have correlation r.
    """
    equivalent = stats.chi2.isf(np.clip(found.p_value, 1e-300, 1.0), c)
    r = residual_correlation(found)
    mean = c * equivalent.size
    variance = 2.0 * c * float(np.sum(r**2))
    factor = variance / (2.0 * mean)
    dof = 2.0 * mean**2 / variance
    total = float(np.sum(equivalent))
    return float(stats.chi2.sf(total / factor, dof)), factor, dof


def residual_correlation(found: Amplitudes) -> Array:
    """Correlation matrix of the whitened residuals of the series, shape (K, K)."""
    size = np.sqrt(np.maximum(np.sum(found.residual**2, axis=0), 1e-300))
    return np.asarray((found.residual.T @ found.residual) / size[:, None] / size[None, :])
