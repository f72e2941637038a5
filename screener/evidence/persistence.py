"""Does the signal keep its amplitude and phase, as a planet must?

Null: a strictly periodic signal in the fitted noise (red plus white) at the real times; a small
p-value speaks against a planet. Three looks at what the strict signal leaves over, which under
the null do not depend on its amplitude. Each is calibrated by simulation, with the noise fitted
anew to every simulated series; they are joined by their largest deviation, which is the
statistic, in standard deviations of the simulations:

- the log-likelihood gain of an amplitude and phase for each season over common ones;
- the gain of a further wave at the period under a Gaussian envelope of free place and width
  (after Gregory 2016; Hara et al. 2022);
- the growth of the signal as data accumulate: with whitened columns x, velocities y and common
  amplitudes b, U(n) = sum over the first n of x (y - x b) is how far the score runs ahead of or
  behind a coherent signal's; the look is the largest U' I^-1 U / 2 with the information I
  (after Mortier & Collier Cameron 2017, as a cumulative score).

The power is the chance of p < 0.05 for a signal of the same size whose amplitude and phase wander
with a life of two rotation periods (or three times its own period).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, Finding, IntArray, Outcome
from screener.evidence.case import Case
from screener.evidence.lines import n_draws, signal_columns
from screener.evidence.projected import Projected, each_with_its_noise, gain, project

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "parts_of", "run"]

ID = "persistence"
QUESTION = "Does the signal keep its amplitude and phase over the years?"
REQUIRES = ("at least 30 velocities over two periods",)
REFERENCES = ("gregory2016", "hara2022", "mortier2017", "phipson2010")

_FEWEST = 30
_ALPHA = 0.05
_PLACES = 6
_WIDTHS = (0.1, 0.2, 0.4, 1.0)


def parts_of(time: Array, period: float) -> IntArray:
    """Label of the part of each time: seasons, or stretches where one season covers all.

    Every part spans at least a period (or is joined to its neighbour) and holds 8 points.
    """
    label = np.append(0, np.cumsum(np.diff(time) > 60.0)).astype(np.intp)
    if label[-1] == 0:
        n_parts = int(np.clip((time[-1] - time[0]) / max(1.5 * period, 1e-9), 1, 4))
        label = np.minimum(np.arange(time.size) * n_parts // time.size, n_parts - 1)
    joined = np.zeros(time.size, dtype=np.intp)
    current, start = 0, 0
    for part in range(int(label[-1]) + 1):
        end = int(np.searchsorted(label, part, side="right"))
        joined[start:end] = current
        if end - start >= 8 and time[end - 1] - time[start] >= period:
            current, start = current + 1, end
    # what is left at the end belongs to the last full part
    return np.minimum(joined, max(current - 1, 0)).astype(np.intp)


@dataclass(frozen=True, eq=False)
class _Looks:
    """Whitened columns of the three looks."""

    strict: Array  # (n_obs, 2), orthonormal
    by_part: Array  # (n_obs, m), orthonormal, free of the strict signal
    envelopes: Array  # (n_obs, G, 2), free of the strict signal

    def __call__(self, values: Array) -> Array:
        """The three statistics of whitened series, shape (3, S)."""
        rest = values - self.strict @ (self.strict.T @ values)
        uneven = 0.5 * np.sum((self.by_part.T @ rest) ** 2, axis=0)
        best = np.max(gain(self.envelopes, rest), axis=0)
        # the columns are orthonormal, so the information is the unit matrix
        score = [np.cumsum(column[:, None] * rest, axis=0) for column in self.strict.T]
        ahead = np.max(0.5 * (score[0] ** 2 + score[1] ** 2), axis=0)
        return np.stack([uneven, best, ahead])


def _columns(case: Case) -> tuple[Array, int]:
    """The signal, the signal in each part but the last, and under each envelope, as columns.

    Shape (n_obs, 2 + 2 parts + 2 envelopes), and the number of such parts.
    """
    time = case.series.time
    wave = signal_columns(case)
    label = parts_of(time, case.signal.orbit.period)
    n_parts = int(label[-1])
    pieces = [wave * (label == part)[:, None] for part in range(n_parts)]
    span = time[-1] - time[0]
    envelopes = [
        np.exp(-0.5 * ((time - place) / (width * span)) ** 2)[:, None] * wave
        for width in _WIDTHS
        for place in time[0] + span * (np.arange(_PLACES) + 0.5) / _PLACES
    ]
    return np.concatenate([wave, *pieces, *envelopes], axis=1), n_parts


def _looks(columns: Array, n_parts: int) -> _Looks:
    """The looks for the columns of ``_columns`` once they are whitened."""
    strict, _ = np.linalg.qr(columns[:, :2])
    rest = columns[:, 2:]
    rest = rest - strict @ (strict.T @ rest)
    if n_parts:
        left, size, _ = np.linalg.svd(rest[:, : 2 * n_parts], full_matrices=False)
        by_part = left[:, size > 1e-6 * size[0]]
    else:
        by_part = np.zeros((columns.shape[0], 0))
    return _Looks(strict, by_part, rest[:, 2 * n_parts :].reshape(columns.shape[0], -1, 2))


def _wandering(case: Case, rng: np.random.Generator, n: int) -> Array:
    """n velocity curves of a signal whose amplitude and phase wander, shape (n_obs, n)."""
    time, orbit = case.series.time, case.signal.orbit
    life = max(2.0 * (case.rotation.period or 0.0), 3.0 * orbit.period)
    decay = np.exp(-np.diff(time) / life)
    state = rng.standard_normal((2, n))
    states = np.empty((time.size, 2, n))
    for i in range(time.size):
        if i:
            fresh = np.sqrt(1.0 - decay[i - 1] ** 2)
            state = decay[i - 1] * state + fresh * rng.standard_normal((2, n))
        states[i] = state
    wave = signal_columns(case)
    # each component has half the variance of the amplitude squared
    return np.asarray(orbit.semi_amplitude / np.sqrt(2.0) * np.einsum("nc,ncs->ns", wave, states))


def _looks_at(
    case: Case, projected: Projected, values: Array, columns: Array, n_parts: int
) -> Array:
    """The three statistics of simulated velocities of shape (n_obs, n), shape (3, n)."""
    result = np.empty((3, values.shape[1]))
    for rows, x, y in each_with_its_noise(case, projected.noise, values, columns):
        result[:, rows] = _looks(x, n_parts)(y)
    return result


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable to few points or less than two periods."""
    time, period = case.series.time, case.signal.orbit.period
    if time.size < _FEWEST or case.series.baseline < 2.0 * period:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            "Too few velocities, or less than two periods of them, to see a signal change.",
            references=REFERENCES,
        )
    projected, rng, n = project(case), case.rng(ID), n_draws(case)
    columns, n_parts = _columns(case)
    seen = _looks(projected(columns), n_parts)(projected(case.target_rv[:, None]))
    n_wanderers = max(40, n // 5)
    fakes = projected.fakes(rng, n + n_wanderers)
    fakes[:, n:] += _wandering(case, rng, n_wanderers)
    simulated = _looks_at(case, projected, fakes, columns, n_parts)
    null, wandering = simulated[:, :n], simulated[:, n:]
    centre = np.mean(null, axis=1, keepdims=True)
    spread = np.maximum(np.std(null, axis=1, keepdims=True), 1e-9)
    statistic = float(np.max((seen - centre) / spread))
    deviation = np.max((null - centre) / spread, axis=0)
    p_value = float((1 + np.count_nonzero(deviation >= statistic)) / (1 + n))
    critical = np.quantile(deviation, 1.0 - _ALPHA)
    power = float(np.mean(np.max((wandering - centre) / spread, axis=0) > critical))
    each = (1 + np.sum(null >= seen, axis=1)) / (1 + n)
    parameters: dict[str, float | int] = {
        "n_parts": n_parts + 1,
        "parts_p": float(each[0]),
        "envelope_gain": float(seen[1, 0]),
        "envelope_p": float(each[1]),
        "score_ahead": float(seen[2, 0]),
        "growth_p": float(each[2]),
        "n_draws": n,
    }
    if p_value < 0.01 or (p_value < 0.02 and n < 200):
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The signal does not keep its amplitude and phase (p = {p_value:.2g} for a strictly "
            "periodic one)."
        )
    elif p_value > 0.1 and power > 0.8:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"Amplitude and phase stay the same (p = {p_value:.2g}); a wandering signal of this "
            f"size would have shown with {power:.0%}."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"Amplitude and phase show no clear change (p = {p_value:.2g}); a wandering signal "
            f"would have shown with {power:.0%}."
        )
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
