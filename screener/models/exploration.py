"""Finding the signals: in white noise and on top of the activity model, then both together.

The two searches miss different planets, so that both feed one list. Signals enter the activity
model one by one while the next is significant; each fit starts from its neighbours' solutions, so
that a model with one more orbit is never worse than the model without.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from screener.core import Array, Depth, KnownPlanet, TimeSeries
from screener.models.fitting import FREQUENCY_REACH, Fit
from screener.models.joint import OrbitTerm
from screener.models.noise import NoiseModel
from screener.search.false_alarm import (
    analytic,
    effective_baseline,
    gain_with_free_scale,
    resampled,
)
from screener.search.periodogram import (
    SHORTEST_PERIOD,
    Peak,
    frequency_grid,
    peaks,
    power,
)

__all__ = [
    "Found",
    "Search",
    "known_terms",
    "same_period",
    "search_activity",
    "search_white",
    "usable",
]

MOST_SIGNALS = 6
_ACCEPT = 0.01  # false-alarm probability below which a signal enters the list
_ECCENTRIC_GAIN = 5.0  # what two more parameters must bring
_STRONG = 40.0  # gain above which an orbit's shape can be told
_NEAR_BEST = 6.0  # peaks this close to the highest are tried as well
_RIVAL = 2.0  # an alias within this of the chosen period is fitted in full
_WORTH_SHUFFLING = 1e-4  # far below it no shuffled series would ever reach the signal
_SHUFFLES = 199
_ALIAS_REACH = 9.0  # daily aliases this close, since other signals distort the heights


@dataclass(frozen=True)
class Found:
    """A signal and the search that found it."""

    term: OrbitTerm
    false_alarm_probability: float
    found_by: str
    resampled: float | None = None  # the same probability by shuffling, where it was asked for


@dataclass(frozen=True, eq=False)
class Search:
    """Outcome of one search: the signals, the fit with all, and the traces for figures."""

    found: tuple[Found, ...]
    fit: Fit
    fits: tuple[Fit, ...]  # with 0, 1, 2, ... of the signals
    frequency: Array
    gains: tuple[Array, ...]  # periodogram on top of each of ``fits``
    bandwidth: float
    baseline: float  # effective, d


def same_period(first: float, second: float, baseline: float) -> bool:
    """Whether two periods cannot be told apart over the baseline."""
    return abs(1 / first - 1 / second) < 1.3 / baseline


def usable(frequency: Array, baseline: float) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]]:
    """Where a search may look: not within the resolution of one or two cycles per day.

    Nightly sampling turns slow drifts into periods of a day; nothing there can be told from them.
    """
    width = max(1.5 / baseline, 0.004)
    keep = np.ones(frequency.size, dtype=bool)
    for day in (1.0, 1.0027379):
        keep &= np.abs(frequency - day) > width
    return keep


def log_occurrence(period: float) -> float:
    """Natural logarithm of how common planets of that period are, against those of some days.

    Occurrence for each factor in period falls steeply below some ten days, while daily sampling
    throws the power of slower signals there (common practice, no source for the exact shape).
    """
    return min(0.0, 1.5 * math.log(period / 8.0))


def daily_aliases(frequency: float) -> list[float]:
    """Frequencies that nightly sampling confuses with this one, positive, itself not among them."""
    day = 1.0027379
    shifted = (frequency + day, frequency - day, frequency + 2 * day, frequency - 2 * day)
    return [abs(f) for f in shifted]


def _with_aliases(grid: Array, gain: Array, tops: Sequence[Peak], baseline: float) -> list[Peak]:
    """The highest peak's daily aliases where they rise nearly as high."""
    out = list(tops)
    for alias in daily_aliases(tops[0].frequency):
        near = np.flatnonzero(np.abs(grid - alias) < 1 / baseline)
        if near.size == 0:
            continue
        best = near[np.argmax(gain[near])]
        known = any(abs(grid[best] - p.frequency) < 1 / baseline for p in out)
        if not known and gain[best] > tops[0].power - _ALIAS_REACH:
            out.append(Peak(float(grid[best]), float(gain[best])))
    return out


def _best_peak(
    noise: NoiseModel, result: Fit, terms: Sequence[OrbitTerm], candidates: Sequence[Peak]
) -> tuple[OrbitTerm, Fit]:
    """Refit each of the candidate frequencies a little, then the best of them in full."""
    trials = []
    for peak in candidates:
        term = noise.term(1 / peak.frequency)
        glance = noise.glance([*terms, term], result)
        trials.append((glance.objective + log_occurrence(term.period), term, glance))
    _, term, start = max(trials, key=lambda item: item[0])
    best = noise.fit([*terms, term], near=[start])
    offset = best.model.orbit_parameters(best.parameters)[-1][0]
    if abs(offset) > 0.95 * FREQUENCY_REACH:  # the peak was only a flank: start from where it led
        moved = noise.term(noise.orbits(best)[-1].period)
        if _apart(np.array([1 / moved.period]), terms, noise.data.span)[0]:
            term, best = moved, noise.fit([*terms, moved], near=[best])
    return term, best


def _shape(noise: NoiseModel, terms: list[OrbitTerm], result: Fit) -> tuple[list[OrbitTerm], Fit]:
    """Let strong orbits be eccentric where that pays."""
    for i, term in enumerate(terms):
        if term.eccentric:
            continue
        orbit = noise.orbits(result)[i]
        error = orbit.semi_amplitude_err or math.inf
        if 0.25 * (orbit.semi_amplitude / error) ** 2 < _STRONG:
            continue
        trial = [*terms]
        trial[i] = OrbitTerm(term.period, term.amplitude_sd, True)
        model_fit = noise.fit(trial, near=[result])
        for angle in (2.1, 4.2):  # the periastron may lie anywhere
            start = noise.transfer(noise.model(trial), result)
            at = model_fit.model.slices["orbits"].start + sum(t.n_parameters for t in trial[:i])
            start[at + 1 : at + 3] = 0.4 * np.array([math.cos(angle), math.sin(angle)])
            model_fit = noise.improve(trial, start)
        if model_fit.objective > result.objective + _ECCENTRIC_GAIN:
            terms, result = trial, model_fit
    return terms, result


def known_terms(noise: NoiseModel, known: Sequence[KnownPlanet]) -> list[OrbitTerm]:
    """Orbits of the planets accepted already; eccentric where the sidecar says so."""
    return [noise.term(p.period, eccentric=(p.eccentricity or 0.0) > 0.05) for p in known]


def search_white(
    series: TimeSeries,
    noise: NoiseModel,
    known: Sequence[KnownPlanet],
    depth: Depth,
    forced: Sequence[float] = (),
    seed: int = 1,
) -> Search:
    """Signals one by one in white noise, each time refining all orbits together.

    ``seed`` is that of the shuffling that checks doubtful false-alarm probabilities.
    """
    return _search(series, noise, known, depth, forced, (), "white noise", seed)


def search_activity(
    series: TimeSeries,
    noise: NoiseModel,
    known: Sequence[KnownPlanet],
    depth: Depth,
    hints: Sequence[float],
) -> Search:
    """Signals one by one on top of the activity model; ``hints`` (periods) are tried as well."""
    return _search(series, noise, known, depth, (), hints, "activity model")


def _search(
    series: TimeSeries,
    noise: NoiseModel,
    known: Sequence[KnownPlanet],
    depth: Depth,
    forced: Sequence[float],
    hints: Sequence[float],
    name: str,
    seed: int = 1,
) -> Search:
    oversampling = 4.0 if depth is Depth.QUICK or series.baseline > 4000 else 6.0
    grid = frequency_grid(series.baseline, oversampling)
    grid = grid[usable(grid, series.baseline)]
    bandwidth = float(grid[-1] - grid[0])
    span = effective_baseline(series.time, 1 / series.rv_err**2)
    white = noise.kernel is None
    terms = known_terms(noise, known) + [noise.term(p) for p in forced]
    found = [Found(t, 0.0, "user") for t in terms[len(known) :]]
    result = noise.fit(terms, fresh=True)
    fits, gains = [result], []
    while True:
        precision = noise.precision(result)
        gain = power(series.time, precision, grid)
        highest = float(np.max(gain, where=_apart(grid, terms, series.baseline), initial=0.0))
        if white:
            n_free = series.n_obs - result.model.data.columns.shape[2] - 2 * len(terms)
            gain = gain_with_free_scale(gain, float(max(n_free, 2)), max(n_free, 2))
        gains.append(gain)
        gain = np.where(_apart(grid, terms, series.baseline), gain, 0.0)
        if len(found) >= MOST_SIGNALS or series.n_obs < 10 + 5 * len(terms):
            break
        tops = peaks(grid, gain, 3, series.baseline)
        if not tops:
            break
        tops = [p for p in tops if p.power > tops[0].power - _NEAR_BEST]
        tops = _with_aliases(grid, gain, tops, series.baseline)
        tops += _hinted(grid, gain, hints, tops, terms, series.baseline)
        term, better = _best_peak(noise, result, terms, tops)
        # the refit gain counts where it is smaller: peaks on a poor optimum look higher
        reached = max(p.power for p in tops)
        if not white:
            reached = max(reached, min(better.profile - result.profile, reached + 10))
        probability = analytic(reached, bandwidth, span)
        if probability > _ACCEPT:
            break
        shuffles = None
        if white and depth is not Depth.QUICK and probability > _WORTH_SHUFFLING:
            rng = np.random.default_rng(np.random.SeedSequence([seed, 31, len(found)]))
            shuffles = resampled(series.time, precision, grid, highest, _SHUFFLES, rng)
        found.append(Found(term, probability, name, shuffles))
        terms, result = _shape(noise, [*terms, term], better)
        found = [replace(f, term=t) for t, f in zip(terms[len(known) :], found, strict=True)]
        fits.append(result)
    if found and found[0].found_by == name:
        found, result = _settle_aliases(series, noise, found, result, len(known))
        found, result = _without_twins(noise, found, result, len(known))
        fits[-1] = result
    return Search(tuple(found), result, tuple(fits), grid, tuple(gains), bandwidth, span)


def _settle_aliases(
    series: TimeSeries, noise: NoiseModel, found: list[Found], result: Fit, n_known: int
) -> tuple[list[Found], Fit]:
    """Ask again, with all signals in the model, which member of its alias family each one is.

    A signal taken out early was chosen while the later ones still distorted the heights.
    """
    for i in range(len(found)):
        terms = list(result.model.orbits)
        term = terms[n_known + i]
        rest = [t for t in terms if t is not term]
        without = noise.known(rest) or noise.glance(rest, result)
        aliases = np.array(daily_aliases(1 / term.period))
        step = 1 / (6 * series.baseline)
        grid = (np.array([1 / term.period, *aliases])[:, None] + step * np.arange(-6, 7)).ravel()
        fine = (grid > 0.4 / series.baseline) & (grid < 1 / SHORTEST_PERIOD)
        fine &= usable(grid, series.baseline)
        fine &= _apart(grid, rest, series.baseline)
        gain = np.where(fine, power(series.time, noise.precision(without), np.abs(grid)), 0.0)
        heights = gain.reshape(-1, 13).max(axis=1)
        where = grid.reshape(-1, 13)[np.arange(heights.size), gain.reshape(-1, 13).argmax(axis=1)]
        heights += np.array([log_occurrence(1 / f) for f in np.maximum(where, 1e-9)])
        rival = 1 + int(np.argmax(heights[1:]))
        if heights[rival] < heights[0] - _RIVAL:
            continue
        other = noise.term(float(1 / where[rival]))
        trial_terms = [other if t is term else t for t in terms]
        trial = noise.fit(trial_terms, near=[noise.glance(trial_terms, result)])
        better = trial.objective + log_occurrence(other.period)
        if better > result.objective + log_occurrence(term.period):
            result = trial
            found[i] = replace(found[i], term=other)
    return found, result


def _without_twins(
    noise: NoiseModel, found: list[Found], result: Fit, n_known: int
) -> tuple[list[Found], Fit]:
    """Drop the later of two orbits that the fits have drawn together into a beat."""
    periods = [o.period for o in noise.orbits(result)]
    terms = list(result.model.orbits)
    twins = {
        later
        for later in range(n_known, len(terms))
        for earlier in range(later)
        if abs(1 / periods[later] - 1 / periods[earlier]) < 1 / noise.data.span
    }
    if not twins:
        return found, result
    keep = [t for i, t in enumerate(terms) if i not in twins]
    found = [f for i, f in enumerate(found) if i + n_known not in twins]
    return found, noise.fit(keep, near=[result])


def _apart(
    grid: Array, terms: Sequence[OrbitTerm], baseline: float
) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]]:
    """Frequencies that can be told from the orbits in the model.

    Two sinusoids closer than this imitate a beat with large and opposite amplitudes.
    """
    keep = np.ones(grid.size, dtype=bool)
    for term in terms:
        keep &= np.abs(grid - 1 / term.period) > 1.3 / baseline
    return keep


def _hinted(
    grid: Array,
    gain: Array,
    hints: Sequence[float],
    tops: Sequence[Peak],
    terms: Sequence[OrbitTerm],
    baseline: float,
) -> list[Peak]:
    """Peaks at the periods another search found, where this one has some power too."""
    out = []
    for period in hints:
        near = np.flatnonzero(np.abs(grid - 1 / period) < 0.5 / baseline)
        taken = [1 / p.frequency for p in tops] + [t.period for t in terms]
        if near.size == 0 or any(same_period(period, other, baseline) for other in taken):
            continue
        best = near[np.argmax(gain[near])]
        if gain[best] > tops[0].power - 2 * _NEAR_BEST and gain[best] > 6:
            out.append(Peak(float(grid[best]), float(gain[best])))
    return out
