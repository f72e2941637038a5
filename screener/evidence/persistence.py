"""Does the signal keep its amplitude and phase, as a planet must?

Null: a strictly periodic signal in the fitted noise (red plus white) at the real times; a small
p-value speaks against a planet. Three looks at what the strict signal leaves over, which under
the null do not depend on its amplitude. Each is calibrated by simulation; they are joined by
their largest deviation, which is the statistic, in standard deviations of the simulations:

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

from dataclasses import dataclass, replace

import numpy as np

from screener.core import Array, Finding, IntArray, Outcome
from screener.evidence.case import Case
from screener.evidence.lines import n_draws, noise_beside_signal, signal_columns
from screener.evidence.projected import Projected, gain, project, with_noise

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


def _looks(case: Case, projected: Projected) -> _Looks:
    time = case.series.time
    wave = signal_columns(case)
    strict, _ = np.linalg.qr(projected(wave))
    label = parts_of(time, case.signal.orbit.period)
    n_parts = int(label[-1]) + 1
    pieces = [wave * (label == part)[:, None] for part in range(n_parts - 1)]
    if pieces:
        columns = projected(np.concatenate(pieces, axis=1))
        columns -= strict @ (strict.T @ columns)
        left, size, _ = np.linalg.svd(columns, full_matrices=False)
        by_part = left[:, size > 1e-6 * size[0]]
    else:
        by_part = np.zeros((time.size, 0))
    span = time[-1] - time[0]
    envelopes = [
        np.exp(-0.5 * ((time - place) / (width * span)) ** 2)
        for width in _WIDTHS
        for place in time[0] + span * (np.arange(_PLACES) + 0.5) / _PLACES
    ]
    columns = np.stack([e[:, None] * wave for e in envelopes], axis=1)
    flat = projected(columns.reshape(time.size, -1))
    flat -= strict @ (strict.T @ flat)
    return _Looks(strict, by_part, flat.reshape(columns.shape))


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


def _looks_at_wanderers(
    case: Case, projected: Projected, rng: np.random.Generator, n: int
) -> Array:
    """The three statistics of n wandering signals in noise, shape (3, n).

    The noise is fitted anew to each, for what wanders ends up partly in the noise.
    """
    values = _wandering(case, rng, n) + projected.fakes(rng, n)
    wave = np.column_stack([projected.noise.nuisance, signal_columns(case)])
    rest = values - wave @ np.linalg.lstsq(wave, values, rcond=None)[0]
    noise = noise_beside_signal(case, rest, np.repeat(case.rv_sd[:, None], n, axis=1))
    result = np.empty((3, n))
    kinds, group = np.unique(np.stack([noise.tau, noise.share]), axis=1, return_inverse=True)
    for kind in range(kinds.shape[1]):
        rows = np.flatnonzero(group.ravel() == kind)
        one = replace(
            projected.noise,
            tau=noise.tau[rows[:1]],
            share=noise.share[rows[:1]],
            scale=np.ones(1),
        )
        own = with_noise(one)
        scaled = values[:, rows] / np.sqrt(noise.scale[rows])
        result[:, rows] = _looks(case, own)(own(scaled))
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
    looks = _looks(case, projected)
    series = np.column_stack([case.target_rv, projected.fakes(rng, n)])
    seen_and_null = looks(projected(series))
    seen, null = seen_and_null[:, :1], seen_and_null[:, 1:]
    centre = np.mean(null, axis=1, keepdims=True)
    spread = np.maximum(np.std(null, axis=1, keepdims=True), 1e-9)
    statistic = float(np.max((seen - centre) / spread))
    deviation = np.max((null - centre) / spread, axis=0)
    p_value = float((1 + np.count_nonzero(deviation >= statistic)) / (1 + n))
    critical = np.quantile(deviation, 1.0 - _ALPHA)
    wandering = _looks_at_wanderers(case, projected, rng, max(40, n // 5))
    power = float(np.mean(np.max((wandering - centre) / spread, axis=0) > critical))
    each = (1 + np.sum(null >= seen, axis=1)) / (1 + n)
    n_parts = int(parts_of(time, period)[-1]) + 1
    parameters: dict[str, float | int] = {
        "n_parts": n_parts,
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
