"""Does a long-period signal follow the star's activity cycle?

Null: the indicators are correlated noise without a long-term change that goes with the signal.
The orbit's own velocity curve (one column: phase fixed, sign free) is fitted to each indicator
under its noise; the p-values are joined with their correlation taken into account. This asks for
the same shape and phase, not only the same period. Statistic: the largest correlation of the
orbit's curve with an indicator binned to a tenth of the period.

Only signals longer than 150 d and three rotation periods are asked.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import stats

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.indicator_power import ALPHA, NODES, SPREAD, WEIGHTS, expected
from screener.evidence.lines import (
    Channels,
    channels_of,
    combined_p,
    fit_columns,
    signal_columns,
)

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "long_period", "run"]

ID = "cycle"
QUESTION = "Does the signal follow the long-term activity cycle in phase?"
REQUIRES = ("at least one indicator", "a period above 150 d")
REFERENCES = ("zechmeister2009", "brown1975")

_SHORTEST = 150.0


def long_period(case: Case, channels: Channels) -> tuple[float, float]:
    """Strongest period (d) above 150 d in the indicators jointly, and its chi-squared gain.

    White noise with the scatter found; zero points stay free, a slope does not (it would swallow
    cycles longer than the baseline). Trials are nowhere more than a sixth of a resolution apart
    in frequency, however long the baseline, nor by much in ln(period), up to two baselines.
    """
    time, labels = case.series.time, case.series.instrument
    longest = max(2.0 * case.series.baseline, 2.0 * _SHORTEST)
    slowest, fastest = 1.0 / longest, 1.0 / _SHORTEST
    n_even = 1 + math.ceil(6.0 * case.series.baseline * (fastest - slowest))
    even = np.linspace(slowest, fastest, max(n_even, 2))
    period: Array = 1.0 / np.union1d(even, np.geomspace(slowest, fastest, 60))
    total = np.zeros(period.size)
    for k in range(len(channels.names)):
        rows = channels.noise.measured[:, k]
        zero = (labels[rows][:, None] == np.unique(labels[rows])[None, :]).astype(float)
        basis, _ = np.linalg.qr(zero)
        y = channels.values[rows, k]
        y = y - basis @ (basis.T @ y)
        scale = float(np.var(y))
        if not scale > 0.0:
            continue
        angle = 2.0 * np.pi * (time[rows] - time[0])[:, None] / period[None, :]
        cos, sin = np.cos(angle), np.sin(angle)
        cos -= basis @ (basis.T @ cos)
        sin -= basis @ (basis.T @ sin)
        cc, ss, cs = np.sum(cos**2, 0), np.sum(sin**2, 0), np.sum(cos * sin, 0)
        yc, ys = y @ cos, y @ sin
        det = np.maximum(cc * ss - cs**2, 1e-9 * cc * ss + 1e-300)
        total += (ss * yc**2 - 2.0 * cs * yc * ys + cc * ys**2) / det / scale
    best = int(np.argmax(total))
    return float(period[best]), float(total[best])


def _binned_correlation(case: Case, channels: Channels, curve: Array, k: int) -> float:
    """Correlation of the curve with an indicator, both in bins of a tenth of the period."""
    rows = channels.noise.measured[:, k]
    period = case.signal.orbit.period
    labels = case.series.instrument[rows]
    y = channels.values[rows, k].copy()
    for label in np.unique(labels):
        y[labels == label] -= np.mean(y[labels == label])
    cell = np.floor(case.series.time[rows] / (0.1 * period)).astype(np.intp)
    _, group = np.unique(cell, return_inverse=True)
    count = np.bincount(group)
    a = np.bincount(group, curve[rows]) / count
    b = np.bincount(group, y) / count
    if count.size < 4:
        return 0.0
    a = a - np.average(a, weights=count)
    b = b - np.average(b, weights=count)
    size = math.sqrt(float(np.sum(count * a**2) * np.sum(count * b**2)))
    return float(np.sum(count * a * b) / size) if size > 0.0 else 0.0


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable to short periods or without an indicator."""
    period = case.signal.orbit.period
    shortest = max(_SHORTEST, 3.0 * (case.rotation.period or 0.0))
    if period < shortest:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            f"The period is too short for a cycle (below {shortest:.0f} d).",
            references=REFERENCES,
        )
    channels = channels_of(case)
    if channels is None:
        return Finding(
            ID, Outcome.NOT_APPLICABLE, "No indicator was measured.", references=REFERENCES
        )
    curve = case.target_rv - case.residual_rv
    size = float(np.std(curve))
    if not size > 0.0:
        # no orbit was subtracted: its best sine serves
        columns = signal_columns(case)
        curve = columns @ np.linalg.lstsq(columns, case.target_rv, rcond=None)[0]
        size = max(float(np.std(curve)), 1e-12)
    found = fit_columns(channels, (curve / size)[:, None])
    p_value, factor, dof = combined_p(found, 1)
    # the curve has unit scatter, a sine of that scatter an amplitude of root two
    wanted = expected(case, channels) / math.sqrt(2.0)
    lam = (wanted**2 / found.covariance[:, 0, 0])[:, None] * np.exp(2.0 * SPREAD * NODES)
    critical = float(stats.chi2.isf(ALPHA, dof))
    power = float(WEIGHTS @ stats.ncx2.sf(critical, dof, np.sum(lam, axis=0) / factor))
    r = np.array([_binned_correlation(case, channels, curve, k) for k in range(len(wanted))])
    best = int(np.argmax(np.abs(r)))
    cycle, gain = long_period(case, channels)
    parameters: dict[str, float | int | str] = {
        "best": channels.names[best],
        "correlation": float(r[best]),
        "cycle_period": cycle,
        "cycle_gain": gain,
        "ln_ratio_to_cycle": abs(math.log(period / cycle)),
        "smallest_p": float(np.min(found.p_value)),
    }
    name = channels.names[best]
    if p_value < ALPHA and abs(r[best]) > 0.4:
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"{name} goes through the same long-term change in phase (p = {p_value:.2g}, "
            f"r = {r[best]:.2f}): the signal may be the activity cycle."
        )
    elif p_value > 0.05 and power > 0.8:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"No indicator follows the signal in the long term (p = {p_value:.2g}), and a cycle "
            f"of this size would have shown with {power:.0%}."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The indicators' long-term change neither follows the signal clearly "
            f"(p = {p_value:.2g}) nor excludes it."
        )
    return Finding(
        ID, outcome, sentence, float(abs(r[best])), p_value, power, parameters, REFERENCES
    )
