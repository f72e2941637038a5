"""Do the velocities go along with the indicators, and does that end when the signal is removed?

Null: the velocities have nothing to do with the indicators, which are correlated noise (red plus
white, correlated among each other). Everything is compared with surrogate indicators drawn from
their fitted noise, so that slow drifts common to both by chance do not count as evidence.

Statistic: the largest drop of Pearson's |r| over the indicators when the signal is taken out of
the velocities: where the signal itself follows the indicator, r falls with it. The p-value is the
share of surrogates with a drop at least as large, the power the share of surrogates with the line
that ``indicator_power`` expects whose drop would count at p = 0.01. The p-value of the
correlation as such (the largest of Pearson, Spearman and Kendall over the indicators) is the
parameter ``correlation_p``.

Spots move the velocities with the time derivative of what the indicators see, and so with a lag.
Where a joint model was fitted, its latent activity G and derivative G' are found from the
indicators (and from each surrogate) alone; ``latent_*`` are the correlations of the velocities
with both, the multiple correlation with its p-value, and the phase by which G lags behind.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import stats

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.correlated import draw
from screener.evidence.indicator_power import ALPHA, MUTE, NODES, SPREAD, WEIGHTS, expected
from screener.evidence.lines import (
    Channels,
    channels_of,
    fit_columns,
    n_draws,
    residual_correlation,
    signal_columns,
    velocity_channel,
)

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "kendall", "pearson", "ranks", "run"]

ID = "correlation"
QUESTION = "Do the velocities follow an indicator, and less so once the signal is removed?"
REQUIRES = ("at least one indicator",)
REFERENCES = ("queloz2001", "theiler1992", "phipson2010", "aigrain2012", "rajpaul2015")

_KENDALL_ROWS = 100  # pairs grow with the square; beyond this a regular subset is used


def pearson(x: Array, y: Array) -> Array:
    """Pearson's r of x, shape (n,), with each column of y, shape (n, m)."""
    dx, dy = x - x.mean(), y - y.mean(axis=0)
    size = np.sqrt(np.sum(dx**2) * np.sum(dy**2, axis=0))
    return np.asarray((dx @ dy) / np.maximum(size, 1e-300))


def ranks(y: Array) -> Array:
    """Ranks along the first axis; ties are shared only where the values are equal."""
    return np.asarray(stats.rankdata(y, axis=0))


def kendall(x: Array, y: Array) -> Array:
    """Kendall's tau (a, ties count as neither) of x, shape (n,), with each column of y."""
    i, j = np.triu_indices(x.size, 1)
    sign = np.sign(x[i] - x[j]).astype(np.float32)
    result = np.empty(y.shape[1])
    for first in range(0, y.shape[1], 64):
        part = y[:, first : first + 64].astype(np.float32)
        result[first : first + 64] = sign @ np.sign(part[i] - part[j]) / sign.size
    return result


def _less_nuisance(values: Array, nuisance: Array) -> Array:
    """Values, shape (n,) or (n, m), less their least-squares zero points and slope."""
    inverse = np.linalg.pinv(nuisance)
    return np.asarray(values - nuisance @ (inverse @ values))


def _coefficients(x: Array, y: Array, thin: int) -> Array:
    """Pearson, Spearman and Kendall of x with the columns of y, shape (3, m)."""
    sparse = slice(None, None, thin)
    return np.stack([pearson(x, y), pearson(ranks(x), ranks(y)), kendall(x[sparse], y[sparse])])


def _phase_lag(case: Case, channels: Channels, k: int) -> tuple[float, float]:
    """Phase of the indicator behind the velocities at the signal's period and its error, rad."""
    columns = signal_columns(case)
    velocity = fit_columns(velocity_channel(case, case.target_rv), columns)
    indicator = fit_columns(channels, columns)
    phases, variances = [], []
    for value, covariance in (
        (velocity.value[0], velocity.covariance[0]),
        (indicator.value[k], indicator.covariance[k]),
    ):
        size2 = float(value @ value)
        tangent = np.array([-value[1], value[0]]) / max(size2, 1e-300)
        phases.append(math.atan2(value[1], value[0]))
        variances.append(float(tangent @ covariance @ tangent))
    lag = (phases[1] - phases[0] + math.pi) % (2.0 * math.pi) - math.pi
    return lag, min(math.sqrt(sum(variances)), math.pi)


def _coherence(case: Case, channels: Channels, k: int) -> float | None:
    """Magnitude-squared coherence of velocities and indicator at the signal's period.

    Over stretches of at least two periods and twelve points; None with fewer than four.
    """
    time, period = case.series.time, case.signal.orbit.period
    cell = np.floor((time - time[0]) / max(2.0 * period, 20.0)).astype(np.intp)
    wave = np.exp(-2j * np.pi * time / period)
    known = channels.noise.measured[:, k]
    cross, size_a, size_b, n_used = 0j, 0.0, 0.0, 0
    for label in np.unique(cell):
        rows = (cell == label) & known
        if np.count_nonzero(rows) < 8:
            continue
        a = np.sum(wave[rows] * (case.target_rv[rows] - case.target_rv[rows].mean()))
        b = np.sum(wave[rows] * (channels.values[rows, k] - channels.values[rows, k].mean()))
        cross += complex(a * np.conj(b))
        size_a, size_b = size_a + abs(a) ** 2, size_b + abs(b) ** 2
        n_used += 1
    if n_used < 4:
        return None
    return float(abs(cross) ** 2 / max(size_a * size_b, 1e-300))


def _with_latent(case: Case, channels: Channels, fakes: Array) -> dict[str, float]:
    """Correlations with the latent activity and its derivative; empty where it is not known."""
    activity = case.activity
    if activity is None or not set(activity.names) <= set(channels.names):
        return {}
    which = [channels.names.index(name) for name in activity.names]
    values = np.concatenate([channels.values[:, which, None], fakes[:, which]], axis=2)
    basis = channels.noise.nuisance
    x, rest = _less_nuisance(case.target_rv, basis), _less_nuisance(case.residual_rv, basis)
    g, d = (_less_nuisance(part, basis) for part in activity(values))
    with_g, with_d = pearson(x, g), pearson(x, d)
    size = np.sqrt(np.sum(g**2, axis=0) * np.sum(d**2, axis=0))
    cross = np.sum(g * d, axis=0) / np.maximum(size, 1e-300)
    square = with_g**2 + with_d**2 - 2.0 * with_g * with_d * cross
    square /= np.maximum(1.0 - cross**2, 1e-9)
    columns = signal_columns(case)
    a, b = np.linalg.lstsq(columns, np.column_stack([x, g[:, 0]]), rcond=None)[0]
    lag = math.atan2(b[1], a[1]) - math.atan2(b[0], a[0])

    def chance(values: Array) -> float:
        return float((1 + np.count_nonzero(values[1:] >= values[0])) / values.size)

    return {
        "latent_pearson": float(with_g[0]),
        "latent_pearson_p": chance(np.abs(with_g)),
        "latent_pearson_without_signal": float(pearson(rest, g[:, :1])[0]),
        "latent_derivative_pearson": float(with_d[0]),
        "latent_derivative_pearson_p": chance(np.abs(with_d)),
        "latent_derivative_pearson_without_signal": float(pearson(rest, d[:, :1])[0]),
        "latent_multiple": math.sqrt(max(float(square[0]), 0.0)),
        "latent_p": chance(square),
        "latent_phase_lag_rad": (lag + math.pi) % (2.0 * math.pi) - math.pi,
    }


def _spoken(case: Case, channels: Channels, fakes: Array, rng: np.random.Generator) -> Array:
    """Surrogates with the line that the star would put into them, shape as ``fakes``.

    Amplitudes and their scatter are those of ``indicator_power``, phases are random.
    """
    n = fakes.shape[2]
    columns = signal_columns(case)
    factor = np.exp(SPREAD * rng.choice(NODES, size=n, p=WEIGHTS))
    result = fakes.copy()
    for k, size in enumerate(expected(case, channels)):
        phase = rng.uniform(0.0, 2.0 * np.pi, n)
        loud = size * factor * (rng.random(n) >= MUTE)
        result[:, k] += columns @ (loud * np.stack([np.cos(phase), np.sin(phase)]))
    return result


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable without a usable indicator."""
    channels = channels_of(case)
    if channels is None:
        return Finding(
            ID, Outcome.NOT_APPLICABLE, "No indicator was measured.", references=REFERENCES
        )
    noise, rng, n = channels.noise, case.rng(ID), n_draws(case)
    whitened = fit_columns(channels, np.zeros((case.series.n_obs, 0)))
    fakes = draw(noise, rng, n, residual_correlation(whitened))
    spoken = _spoken(case, channels, fakes, rng)
    n_series = len(channels.names)
    seen, after, raw = np.empty((n_series, 3)), np.empty(n_series), np.empty(n_series)
    trials, drops = np.empty((n_series, 3, n)), np.empty((n_series, 2, n))
    for k in range(n_series):
        rows = noise.measured[:, k]
        basis = noise.nuisance[rows]
        with_all = _less_nuisance(case.series.rv[rows], basis)
        x = _less_nuisance(case.target_rv[rows], basis)
        rest = _less_nuisance(case.residual_rv[rows], basis)
        y = np.column_stack([channels.values[rows, k], fakes[rows, k], spoken[rows, k]])
        y = _less_nuisance(y, basis)
        thin = max(1, math.ceil(x.size / _KENDALL_ROWS))
        both = _coefficients(x, y[:, : n + 1], thin)
        without = pearson(rest, y)
        drop = np.abs(pearson(x, y)) - np.abs(without)
        seen[k], trials[k] = both[:, 0], both[:, 1:]
        after[k], raw[k] = without[0], pearson(with_all, y[:, :1])[0]
        drops[k] = drop[1:].reshape(2, n)
    sd = np.sqrt(np.mean(trials**2, axis=2))
    deviation = float(np.max(np.abs(seen) / sd))
    largest = np.max(np.abs(trials) / sd[..., None], axis=(0, 1))
    correlation_p = float((1 + np.count_nonzero(largest >= deviation)) / (1 + n))
    each = (1 + np.sum(np.abs(trials) >= np.abs(seen)[..., None], axis=2)) / (1 + n)
    drop = np.abs(seen[:, 0]) - np.abs(after)
    best = int(np.argmax(drop))
    statistic = float(drop[best])
    false_drops, true_drops = np.max(drops, axis=0)
    p_value = float((1 + np.count_nonzero(false_drops >= statistic)) / (1 + n))
    # p <= ALPHA leaves room for so many false drops above
    allowed = max(int(ALPHA * (n + 1)) - 1, 0)
    critical = float(np.sort(false_drops)[-1 - allowed])
    power = float(np.mean(true_drops > critical))
    lag, lag_err = _phase_lag(case, channels, best)
    parameters: dict[str, float | int | str | None] = {
        "best": channels.names[best],
        "pearson": float(seen[best, 0]),
        "spearman": float(seen[best, 1]),
        "kendall": float(seen[best, 2]),
        "pearson_without_signal": float(after[best]),
        "pearson_with_all_signals": float(raw[best]),
        "largest_pearson": float(np.max(np.abs(seen[:, 0]))),
        "correlation_p": correlation_p,
        "largest_deviation": deviation,
        "phase_lag_rad": lag,
        "phase_lag_err_rad": lag_err,
        "coherence": _coherence(case, channels, best),
        "n_draws": n,
        **_with_latent(case, channels, fakes),
    }
    for k, name in enumerate(channels.names):
        parameters[f"{name}_pearson"] = float(seen[k, 0])
        parameters[f"{name}_pearson_p"] = float(each[k, 0])
        parameters[f"{name}_pearson_without_signal"] = float(after[k])
    name, r = channels.names[best], seen[best, 0]
    if p_value <= ALPHA and statistic > 0.05:
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The velocities follow {name} (r = {r:.2f}), and less so without this signal "
            f"(r = {after[best]:.2f}); such a drop has a chance of p = {p_value:.2g}."
        )
    elif p_value > 0.1 and power > 0.8 and statistic < 0.05:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"No indicator's correlation owes anything to this signal (largest drop of r: "
            f"{statistic:.2f}, p = {p_value:.2g}); {power:.0%} of such signals of the star's "
            "would show."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The correlation with {name} is r = {r:.2f}, without the signal "
            f"r = {after[best]:.2f} (p = {p_value:.2g}): no clear word on this signal."
        )
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
