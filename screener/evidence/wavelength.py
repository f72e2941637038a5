"""Is the amplitude the same at all wavelengths, as an orbit's must be?

Null: the signal is grey. With velocities per band the amplitude and phase of each band are
compared with the common ones; the bands' noise is correlated, because the star's own jitter is
in all of them, and that is taken from their residuals. Without bands the chromatic index is
fitted with the signal's curve and the same a quarter period later. Statistic: relative change of
the amplitude per unit ln(wavelength); spots give some -1 (contrast falls to the red, roughly as
1/wavelength; common practice), which the power assumes up to a factor of two.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import stats

from screener.core import Array, Band, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.indicator_power import ALPHA, NODES, SPREAD, WEIGHTS
from screener.evidence.line_shape import power_of_two, velocity_curves
from screener.evidence.lines import (
    Channels,
    channels_of,
    fit_columns,
    noise_beside_signal,
    residual_correlation,
)

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "wavelength"
QUESTION = "Is the amplitude the same at all wavelengths?"
REQUIRES = ("velocities in two or more bands, or a chromatic index (crx)",)
REFERENCES = ("saar1997",)
_FEWEST = 15


def _usable(band: Band) -> bool:
    return int(np.count_nonzero(np.isfinite(band.rv) & np.isfinite(band.rv_err))) >= _FEWEST


def _from_bands(case: Case, bands: list[Band]) -> tuple[float, float | None, float, float | None]:
    """Bands against each other: (slope or spread, its error, p, power).

    The covariance of the 2 B coefficients is that of each pair of bands times the correlation of
    their residuals.
    """
    values = np.column_stack([b.rv for b in bands])
    errors = np.column_stack([b.rv_err for b in bands])
    # the other orbits are in every band alike: subtract what was subtracted from the velocities
    common = case.series.rv - case.target_rv
    values = values - common[:, None]
    curves, size, _ = velocity_curves(case)
    noise = noise_beside_signal(case, values, errors)
    channels = Channels(tuple(b.name for b in bands), values, noise)
    found = fit_columns(channels, curves)
    n = len(bands)
    r = residual_correlation(found)
    sd = np.sqrt(np.einsum("kii->ki", found.covariance))
    covariance: Array = np.zeros((2 * n, 2 * n))
    for c in range(2):
        rows = slice(c * n, (c + 1) * n)
        covariance[rows, rows] = r * np.outer(sd[:, c], sd[:, c])
    covariance += 1e-9 * np.trace(covariance) / (2 * n) * np.eye(2 * n)
    y = np.concatenate([found.value[:, 0], found.value[:, 1]])
    grey = np.kron(np.eye(2), np.ones((n, 1)))
    inverse = np.linalg.inv(covariance)
    solution = np.linalg.solve(grey.T @ inverse @ grey, grey.T @ inverse @ y)
    rest = y - grey @ solution
    dof = 2 * (n - 1)
    chi2 = float(rest @ inverse @ rest)
    free = max(float(np.min(channels.noise.dof)) - 2.0, 4.0)
    p_value = float(stats.f.sf(chi2 / dof, dof, free))
    wavelengths = [b.wavelength for b in bands]
    if any(w is None or w <= 0.0 for w in wavelengths):
        return float(np.ptp(found.value[:, 0]) / size), None, p_value, None
    x = np.log(np.array([w for w in wavelengths if w is not None]))
    x -= x.mean()
    design = np.column_stack([np.ones(n), x])
    along = np.linalg.inv(covariance[:n, :n])
    normal = np.linalg.inv(design.T @ along @ design)
    slope = float((normal @ design.T @ along @ y[:n])[1] / size)
    slope_err = float(math.sqrt(normal[1, 1]) / size)
    # spots: amplitude changes by -size per unit ln(wavelength)
    effect = np.concatenate([-size * x, np.zeros(n)])
    bent = effect - grey @ np.linalg.solve(grey.T @ inverse @ grey, grey.T @ inverse @ effect)
    lam = float(bent @ inverse @ bent) * np.exp(2.0 * SPREAD * NODES)
    critical = float(stats.f.isf(ALPHA, dof, free))
    chance = stats.ncf.sf(critical, dof, free, np.minimum(lam, 1e4))
    return slope, slope_err, p_value, float(WEIGHTS @ chance)


def _from_index(case: Case) -> tuple[float, float | None, float, float | None] | None:
    """The chromatic index at the signal: (slope, its error, p, power); None without one."""
    channels = channels_of(case, ("crx",))
    if channels is None:
        return None
    curves, size, size_err = velocity_curves(case)
    found = fit_columns(channels, curves)
    value, covariance = found.value[0], found.covariance[0]
    slope = float(value[0] / size)
    slope_err = math.sqrt(float(covariance[0, 0]) + (slope * size_err) ** 2) / size
    variance = math.sqrt(max(float(np.linalg.det(covariance)), 1e-300))
    dof = max(float(channels.noise.dof[0]) - 2.0, 1.0)
    return slope, slope_err, float(found.p_value[0]), power_of_two(size, variance, dof)


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable without bands or a chromatic index."""
    bands = [b for b in case.series.bands if _usable(b)]
    source = "bands"
    result: tuple[float, float | None, float, float | None] | None
    if len(bands) >= 2:
        result = _from_bands(case, bands)
    else:
        source, result = "chromatic index", _from_index(case)
    if result is None:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            "Neither velocities per band nor a chromatic index were measured.",
            references=REFERENCES,
        )
    slope, slope_err, p_value, power = result
    if p_value < ALPHA:
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The amplitude depends on wavelength ({source}: {slope:+.2f} of itself per unit "
            f"ln(wavelength), p = {p_value:.2g}), which an orbit cannot do."
        )
    elif p_value > 0.05 and power is not None and power > 0.8:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"The amplitude is grey ({source}: p = {p_value:.2g}); spots would have shown with "
            f"{power:.0%}."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = f"The {source} cannot tell whether the amplitude is grey (p = {p_value:.2g})."
    parameters = {"slope": slope, "slope_err": slope_err, "from_bands": source == "bands"}
    return Finding(ID, outcome, sentence, slope, p_value, power, parameters, REFERENCES)
