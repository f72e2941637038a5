"""Which planets would have been seen: detection limits at the real times.

The gain of a sinusoid fitted at the injected period follows a noncentral chi-square law with two
degrees of freedom whose noncentrality grows as K^2; so the recovery rate of a whole grid of periods
and amplitudes follows from one Fisher matrix a period. True injections check it at a few points.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import linalg, stats

from screener.core import Array
from screener.models.kepler import minimum_mass

__all__ = ["DetectionLimits", "detection_limits", "injection_check", "sensitivity_summary"]

_N_PHASES = 24
_LEVELS = (0.5, 0.9, 0.99)


@dataclass(frozen=True, eq=False)
class DetectionLimits:
    """Amplitudes (m/s) that would be found with 50, 90 and 99 per cent chance.

    ``period`` has shape (n_periods,), d; ``limit`` (3, n_periods); ``threshold`` is the gain in
    chi-square asked for, at a false-alarm probability ``fap`` over ``n_frequencies`` independent
    ones.
    """

    period: Array
    limit: Array
    threshold: float
    fap: float
    n_frequencies: float


def _whitened(
    time: Array, sd: Array, covariance: Array | None, nuisance: Array | None
) -> tuple[Array, Array]:
    """W with W^T W = C^-1 (as diagonal or triangle applied on the left) and the nuisance basis.

    Returned as (lower Cholesky factor or sd, orthonormal whitened nuisance columns).
    """
    columns = np.ones((time.size, 1)) if nuisance is None else nuisance
    factor: Array
    if covariance is None:
        factor = sd
    else:
        factor = np.asarray(linalg.cholesky(covariance + np.diag(sd**2), lower=True))
    u, s, _ = np.linalg.svd(_apply(factor, columns), full_matrices=False)
    return factor, np.asarray(u[:, s > 1e-9 * s[0]])


def _apply(factor: Array, columns: Array) -> Array:
    if factor.ndim == 1:
        return np.asarray(columns / (factor[:, None] if columns.ndim == 2 else factor))
    return np.asarray(linalg.solve_triangular(factor, columns, lower=True))


def _fisher(
    time: Array, period: Array, factor: Array, basis: Array
) -> tuple[Array, Array, Array, Array, Array]:
    """Cleared cos and sin columns (n_obs, n_periods) and the three entries of the Fisher matrix."""
    phase = 2 * np.pi * np.outer(time - time.mean(), 1 / period)
    clean = []
    for column in (np.cos(phase), np.sin(phase)):
        white = _apply(factor, column)
        clean.append(white - basis @ (basis.T @ white))
    c, s = clean
    return c, s, np.sum(c * c, 0), np.sum(s * s, 0), np.sum(c * s, 0)


def _recovery(threshold: float, noncentrality: Array) -> Array:
    """P(chi2_2(lambda) > threshold), by interpolation in sqrt(lambda)."""
    grid = np.linspace(0.0, math.sqrt(threshold) + 7.0, 400)
    chance = stats.ncx2.sf(threshold, 2, np.maximum(grid**2, 1e-12))
    return np.asarray(np.interp(np.sqrt(noncentrality), grid, chance))


def _phase_information(cc: Array, ss: Array, cs: Array) -> Array:
    """Noncentrality for K = 1 m/s at phases spread evenly, shape (n_phases, n_periods)."""
    angle = np.pi * (np.arange(_N_PHASES) + 0.5)[:, None] / _N_PHASES
    u, v = np.cos(angle), np.sin(angle)
    return np.asarray(np.maximum(u * u * cc + 2 * u * v * cs + v * v * ss, 0.0))


def detection_limits(
    time: Array,
    sd: Array,
    period: Array,
    *,
    covariance: Array | None = None,
    nuisance: Array | None = None,
    fap: float = 0.01,
) -> DetectionLimits:
    """Amplitudes found with 50, 90 and 99 per cent chance over random phases, circular orbits.

    Parameters
    ----------
    time, sd : Array, shape (n_obs,)
        Days and the white noise in m/s.
    period : Array, shape (n_periods,)
        Periods in days.
    covariance : Array, shape (n_obs, n_obs), optional
        Correlated noise (activity) in m^2/s^2, added to ``sd`` squared.
    nuisance : Array, shape (n_obs, n), optional
        Columns fitted along (zero points, slope); a constant by default.
    fap : float
        False-alarm probability of a detection. With M independent frequencies the gain in
        chi-square must exceed 2 ln(M / fap).

    Notes
    -----
    M = baseline x the highest frequency of the grid (common practice, no source). Amplitudes where
    a period cannot be told from the nuisance come out as infinite.
    """
    baseline = float(np.ptp(time))
    n_frequencies = max(baseline / float(period.min()), 10.0)
    threshold = 2 * math.log(n_frequencies / fap)
    factor, basis = _whitened(time, sd, covariance, nuisance)
    _, _, cc, ss, cs = _fisher(time, period, factor, basis)
    information = _phase_information(cc, ss, cs)
    limit = np.full((len(_LEVELS), period.size), np.inf)
    usable = np.mean(information, axis=0) > 1e-9 * time.size
    inside = information[:, usable]
    for row, level in enumerate(_LEVELS):
        low = np.log(1e-3 / np.sqrt(inside.mean(0)))
        high = np.log(1e4 / np.sqrt(inside.mean(0)))
        for _ in range(40):
            middle = 0.5 * (low + high)
            chance = _recovery(threshold, inside * np.exp(2 * middle)).mean(0)
            low, high = (
                np.where(chance < level, middle, low),
                np.where(chance < level, high, middle),
            )
        limit[row, usable] = np.exp(0.5 * (low + high))
    return DetectionLimits(period, limit, threshold, fap, n_frequencies)


def injection_check(
    time: Array,
    residual: Array,
    sd: Array,
    limits: DetectionLimits,
    rng: np.random.Generator,
    *,
    nuisance: Array | None = None,
    n_points: int = 3,
    n_phases: int = 60,
) -> list[dict[str, float]]:
    """Inject sinusoids into the real residuals at the 50 and 90 per cent amplitudes.

    Each is sought within 1/baseline of its frequency; ``recovered`` is the share whose best gain
    there exceeds the threshold. Real residuals are not white, so it shows how far the predicted
    rate is to be believed.
    """
    factor, basis = _whitened(time, sd, None, nuisance)
    finite = np.flatnonzero(np.all(np.isfinite(limits.limit), axis=0))
    if finite.size == 0:
        return []
    chosen = finite[np.linspace(0, finite.size - 1, n_points + 2).astype(int)[1:-1]]
    white = _apply(factor, residual)
    white = white - basis @ (basis.T @ white)
    baseline = float(np.ptp(time))
    rows = []
    for index in chosen:
        period = float(limits.period[index])
        shift = np.linspace(-1, 1, 9) / baseline
        near = np.maximum(1 / period + shift, 0.2 / baseline)
        c, s, cc, ss, cs = _fisher(time, 1 / near, factor, basis)
        determinant = np.maximum(cc * ss - cs * cs, 1e-12 * (cc + ss) ** 2)
        phase = rng.uniform(0, 2 * np.pi, n_phases)
        wave = np.cos(2 * np.pi * (time - time.mean())[:, None] / period + phase[None, :])
        wave = _apply(factor, wave)
        wave = wave - basis @ (basis.T @ wave)
        for level, amplitude in zip(_LEVELS[:2], limits.limit[:2, index], strict=True):
            y = white[:, None] + amplitude * wave
            yc, ys = c.T @ y, s.T @ y
            gain = (
                yc**2 * ss[:, None] - 2 * yc * ys * cs[:, None] + ys**2 * cc[:, None]
            ) / determinant[:, None]
            rows.append(
                {
                    "period_d": period,
                    "k_m_s": float(amplitude),
                    "predicted": level,
                    "recovered": float(np.mean(gain.max(0) > limits.threshold)),
                    "n": float(n_phases),
                }
            )
    return rows


def sensitivity_summary(
    time: Array,
    residual: Array,
    sd: Array,
    *,
    seed: int,
    stellar_mass: float | None = None,
    nuisance: Array | None = None,
    n_curve: int = 40,
    oversample: int = 12,
) -> dict[str, Any] | None:
    """Detection limits as a curve and a coarse table, ready for JSON; None where it has no sense.

    The noise is raised to the scatter of the residuals where that is larger than ``sd`` says. Each
    point of the curve is the median over ``oversample`` periods of its stretch, ``worst`` the
    largest, since single periods fall into gaps of the sampling.
    """
    baseline = float(np.ptp(time)) if time.size else 0.0
    if time.size < 8 or baseline < 4:
        return None
    excess = float(np.sum((residual / sd) ** 2)) / max(time.size - 2, 1)
    noise = sd * math.sqrt(max(1.0, excess))
    edges = np.geomspace(1.1, baseline, n_curve * oversample)
    limits = detection_limits(time, noise, edges, nuisance=nuisance)
    checks = injection_check(
        time, residual, noise, limits, np.random.default_rng(seed), nuisance=nuisance
    )
    shaped = limits.limit.reshape(len(_LEVELS), n_curve, oversample)
    centre = np.exp(np.log(edges).reshape(n_curve, oversample).mean(1))
    median, worst = np.median(shaped, axis=2), np.max(shaped, axis=2)
    curve = [
        {
            "period_d": float(centre[i]),
            "k50_m_s": _finite(median[0, i]),
            "k90_m_s": _finite(median[1, i]),
            "k99_m_s": _finite(median[2, i]),
            "k90_worst_m_s": _finite(worst[1, i]),
            "m90_sin_i_mjup": _mass(float(centre[i]), median[1, i], stellar_mass),
        }
        for i in range(n_curve)
    ]
    return {
        "false_alarm_probability": limits.fap,
        "noise_inflation": math.sqrt(max(1.0, excess)),
        "curve": curve,
        "table": _table(time, noise, limits, nuisance),
        "checks": checks,
        "sentence": _sentence(curve),
    }


def _table(
    time: Array, noise: Array, limits: DetectionLimits, nuisance: Array | None
) -> dict[str, Any]:
    """Recovery rates on a coarse grid of period and amplitude."""
    period = np.geomspace(limits.period[0], limits.period[-1], 10)
    finite = limits.limit[1][np.isfinite(limits.limit[1])]
    if finite.size == 0:
        return {}
    amplitude = float(np.median(finite)) * 2.0 ** np.arange(-3, 4)
    factor, basis = _whitened(time, noise, None, nuisance)
    _, _, cc, ss, cs = _fisher(time, period, factor, basis)
    information = _phase_information(cc, ss, cs)
    rates = [
        [float(x) for x in _recovery(limits.threshold, information * k * k).mean(0)]
        for k in amplitude
    ]
    return {
        "period_d": [float(p) for p in period],
        "k_m_s": [float(k) for k in amplitude],
        "recovered": rates,
    }


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _mass(period: float, amplitude: float, stellar_mass: float | None) -> float | None:
    if stellar_mass is None or not math.isfinite(amplitude):
        return None
    return minimum_mass(period, float(amplitude), 0.0, stellar_mass)


def _sentence(curve: list[dict[str, float | None]]) -> str:
    parts = []
    for wanted in (3.0, 30.0, 300.0):
        row = min(curve, key=lambda r: abs(math.log((r["period_d"] or 1.0) / wanted)))
        period, k, mass = row["period_d"], row["k90_m_s"], row["m90_sin_i_mjup"]
        if period is None or k is None or abs(math.log(period / wanted)) > 0.5:
            continue
        text = f"{k:.2g} m/s at {wanted:.0f} d"
        if mass is not None:
            text += f" ({mass * 317.8:.2g} Earth masses)" if mass < 0.3 else f" ({mass:.2g} Mjup)"
        parts.append(text)
    if not parts:
        return "The baseline is too short for detection limits."
    return "Circular orbits found with 90 % chance: " + ", ".join(parts) + "."
