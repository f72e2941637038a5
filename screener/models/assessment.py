"""How one signal stands under every noise model: gains, amplitudes, predictions."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from screener.core import Array, IntArray, Orbit, TimeSeries
from screener.models.exploration import same_period
from screener.models.fitting import Fit
from screener.models.joint import OrbitTerm
from screener.models.noise import NoiseModel
from screener.search.periodogram import power

__all__ = ["Assessment", "assess", "gain_of", "merge", "prediction_gain", "time_blocks"]

_SIDEREAL_DAY, _YEAR = 0.99726957, 365.25
_HOPELESS = 4.0  # gain at a glance below which no refit can make a signal
_DOUBTFUL = 12.0  # gain below which the order of nested models is checked again


@dataclass(frozen=True)
class Assessment:
    """One signal under the noise models.

    Gains are differences of profile log-likelihood (amplitudes at their best, noise re-fitted)
    between the models with and without the orbit. ``log_bayes`` marginalises the amplitudes.
    """

    gains: dict[str, float]
    orbit: Orbit  # under the joint process (or the best model there is)
    white_orbit: Orbit
    log_bayes: float
    prediction: float
    prediction_err: float
    n_blocks: int
    dominance: float  # gain over the best other period, aliases apart
    rival_period: float
    converged: bool
    in_activity_set: bool


def gain_of(
    noise: NoiseModel, terms: Sequence[OrbitTerm], term: OrbitTerm, near: Sequence[Fit]
) -> tuple[float, Fit, Fit]:
    """Profile gain of ``term`` in company of ``terms`` (which hold it), and both fits.

    Each fit is also started from the other's solution; a gain below zero can then only be
    rounding and is reported as zero.
    """
    rest = [t for t in terms if t is not term]
    known = noise.known(list(terms))
    if known is None and noise.kernel is not None:
        # not part of the activity model's set: a glance tells whether it could ever matter
        without = noise.known(rest) or noise.fit(rest, near=near)
        full = noise.glance(list(terms), without)
        if full.profile - without.profile < _HOPELESS:
            return max(full.profile - without.profile, 0.0), full, without
    full = known or noise.fit(list(terms), near=near)
    without = noise.fit(rest, near=[full, *near])
    if full.profile - without.profile < _DOUBTFUL:
        # the larger model may sit on a poorer optimum: start it from the smaller one's
        full = noise.improve(list(terms), noise.transfer(noise.model(terms), without))
    return max(full.profile - without.profile, 0.0), full, without


def time_blocks(time: Array, fewest: int = 8) -> list[IntArray]:
    """Rows of each observing season; a long or single season is cut, a short one joined."""
    edges = np.flatnonzero(np.diff(time) > 60) + 1
    seasons = np.split(np.arange(time.size, dtype=np.intp), edges)
    blocks: list[IntArray] = []
    for season in seasons:
        if blocks and (season.size < fewest or blocks[-1].size < fewest):
            blocks[-1] = np.concatenate([blocks[-1], season])
        else:
            blocks.append(season)
    pieces = max(1, math.ceil(4 / len(blocks)))
    return [part for block in blocks for part in np.array_split(block, pieces) if part.size >= 2]


def prediction_gain(
    with_orbit: Fit, without: Fit, blocks: Sequence[IntArray]
) -> tuple[float, float]:
    """Sum over left-out blocks of the log predictive score with less without the orbit.

    All other velocities and all indicators are given; linear terms, the orbit's amplitudes among
    them, are learnt from the rest. With the precision matrix P of the velocities the block's
    predictive density is N(mean, (P_JJ)^-1) with (P y)_J = P_JJ (y_J - mean) (Rasmussen &
    Williams 2006, sect. 5.4.2, for blocks). Returns the sum and its error from the scatter
    between blocks.
    """
    scores = []
    solutions = [f.model.solve(f.parameters) for f in (with_orbit, without)]
    for rows in blocks:
        values = []
        for solution in solutions:
            block = solution.velocity_block(rows)
            weighted = solution.rv_weighted[rows]
            _, log_det = np.linalg.slogdet(block)
            values.append(0.5 * log_det - 0.5 * float(weighted @ np.linalg.solve(block, weighted)))
        scores.append(values[0] - values[1])
    score = np.array(scores)
    error = math.sqrt(score.size) * float(np.std(score, ddof=1)) if score.size > 1 else math.inf
    return float(score.sum()), error


def _alias_or_same(
    frequency: Array, own: float, width: float
) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]]:
    """Frequencies within ``width`` of the signal's own, its daily or yearly aliases."""
    near = np.abs(frequency - own) < width
    for shift in (1.0, 1 / _SIDEREAL_DAY, 2 / _SIDEREAL_DAY, 1 / _YEAR, 2 / _YEAR):
        for sign in (-1, 1):
            near |= np.abs(frequency - abs(own + sign * shift)) < width
            near |= np.abs(frequency - abs(own + sign * shift + 1 / _YEAR)) < width
            near |= np.abs(frequency - abs(own + sign * shift - 1 / _YEAR)) < width
    return near


def _dominance(
    series: TimeSeries, noise: NoiseModel, without: Fit, period: float, grid: Array
) -> tuple[float, float]:
    """Gain at the period less the highest gain elsewhere, and the period of that rival."""
    gain = power(series.time, noise.precision(without), grid)
    width = 1.5 / series.baseline
    own = np.abs(grid - 1 / period) < width
    elsewhere = ~_alias_or_same(grid, 1 / period, width)
    if not own.any() or not elsewhere.any():
        return 0.0, math.nan
    rival = int(np.argmax(np.where(elsewhere, gain, -np.inf)))
    return float(gain[own].max() - gain[rival]), float(1 / grid[rival])


def assess(
    series: TimeSeries,
    term: OrbitTerm,
    activity_terms: Sequence[OrbitTerm],
    all_terms: Sequence[OrbitTerm],
    models: Sequence[NoiseModel],
    fits: dict[str, Fit],
    grid: Array,
) -> Assessment:
    """Put one signal to every noise model.

    ``activity_terms`` are the orbits of the activity model, ``all_terms`` every signal found: in
    white noise, where rotation must be described by sinusoids, the company is everyone. The last
    of ``models`` is the reference for amplitude, prediction and dominance.
    """
    gains: dict[str, float] = {}
    own_set = any(t is term for t in activity_terms)
    white_orbit = orbit = None
    full = without = None
    company = list(activity_terms) if own_set else [*activity_terms, term]
    for noise in models:
        terms = list(all_terms) if noise.kernel is None else company
        gain, full, without = gain_of(noise, terms, term, [fits[noise.name]])
        gains[noise.name] = gain
        orbit = noise.orbits(full)[[t is term for t in terms].index(True)]
        white_orbit = white_orbit or orbit
    assert full is not None and without is not None and orbit is not None
    assert white_orbit is not None
    reference = models[-1]
    blocks = time_blocks(series.time)
    prediction, prediction_err = prediction_gain(full, without, blocks)
    dominance, rival = _dominance(series, reference, without, orbit.period, grid)
    return Assessment(
        gains=gains,
        orbit=orbit,
        white_orbit=white_orbit,
        log_bayes=full.objective - without.objective,
        prediction=prediction,
        prediction_err=prediction_err,
        n_blocks=len(blocks),
        dominance=dominance,
        rival_period=rival,
        converged=full.converged and without.converged,
        in_activity_set=own_set,
    )


def merge(
    activity: Sequence[OrbitTerm],
    white: Sequence[OrbitTerm],
    fitted: Mapping[OrbitTerm, float],
    baseline: float,
) -> list[OrbitTerm]:
    """Both lists as one: of two that cannot be told apart the activity model's stays.

    ``fitted`` holds the period of each after its fit.
    """

    def known(term: OrbitTerm) -> bool:
        return any(same_period(fitted[term], fitted[a], baseline) for a in activity)

    return [*activity, *(t for t in white if not known(t))]
