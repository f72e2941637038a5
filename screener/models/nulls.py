"""The star's own null: its activity model drawn at the real times and screened again.

If draws without any planet give a signal as convincing as the one seen, the signal proves
nothing. The counter-experiment puts the signal into such draws at other phases, to say how often a
true planet of this size would be recognised here.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from joblib import Parallel, delayed

from screener.core import Array, Depth, Grade, Indicator, Orbit, TimeSeries
from screener.models.exploration import same_period
from screener.models.kepler import orbit_velocity
from screener.models.portrait import Portrait

__all__ = ["DrawnSignal", "NullDraws", "draw_series", "injections", "n_draws", "null_draws"]

_DRAWS = {Depth.QUICK: 0, Depth.STANDARD: 50, Depth.DEEP: 400}
_INJECTIONS = {Depth.QUICK: 0, Depth.STANDARD: 10, Depth.DEEP: 60}
_BATCH = 10
_FEWEST_DRAWS = 10  # fewer say nothing
_FULL_DRAWS_UP_TO = 150  # velocities; the cost of a draw grows with the third power


@dataclass(frozen=True)
class DrawnSignal:
    """One graded signal of one draw."""

    period: float
    semi_amplitude: float
    score: float
    grade: Grade


@dataclass(frozen=True)
class NullDraws:
    """The signals of every draw, and what became of injected planets by signal id."""

    draws: tuple[tuple[DrawnSignal, ...], ...]
    injected: dict[str, tuple[Grade | None, ...]]


Judge = Callable[[TimeSeries, int], Sequence[DrawnSignal]]


def n_draws(depth: Depth, n_obs: int) -> int:
    """How many draws a star gets: fewer for long series, so that a run stays within minutes.

    Depends on the input alone, never on the clock, so that the same input gives the same verdict.
    """
    share = min(1.0, (_FULL_DRAWS_UP_TO / n_obs) ** 3)
    number = math.ceil(_DRAWS[depth] * share)
    return number if number >= _FEWEST_DRAWS else 0


def draw_series(
    series: TimeSeries, portrait: Portrait, rng: np.random.Generator, orbit: Orbit | None = None
) -> TimeSeries:
    """Velocities and indicators of the activity model without any planet, or with ``orbit``."""
    result, scaled = portrait.activity.fit, portrait.scaled
    model = result.model
    values = model.draw(result.parameters, rng) * scaled.scale[:, None]
    values += scaled.centre[:, None] + scaled.slow
    if scaled.cycle_columns:
        solution = model.solve(result.parameters)
        n_base = model.data.columns.shape[2]
        cycle = slice(n_base - scaled.cycle_columns, n_base)
        values[0] += model.data.columns[0][:, cycle] @ solution.linear_mean[cycle] * scaled.scale[0]
    rv = values[0] if orbit is None else values[0] + orbit_velocity(orbit, series.time)
    indicators = tuple(
        _redrawn(series.indicator(name), values[s], scaled.data.mask[s])
        for s, name in enumerate(scaled.names)
        if s > 0
    )
    return replace(series, rv=rv, indicators=indicators, bands=(), photometry=None)


def _redrawn(item: Indicator, value: Array, mask: np.ndarray[Any, np.dtype[np.bool_]]) -> Indicator:
    return replace(item, value=np.where(mask, value, np.nan))


def null_draws(
    series: TimeSeries,
    portrait: Portrait,
    judge: Judge,
    scores: Sequence[float],
    *,
    depth: Depth,
    seed: int,
    workers: int,
    progress: Callable[[str, float], None],
) -> tuple[tuple[DrawnSignal, ...], ...]:
    """Screen draws of the star without planets, in batches, until the answer cannot change.

    ``scores`` are those of the signals at stake. Draws end early once more than a fifth of all
    planned draws has matched every one of them.
    """
    total = n_draws(depth, series.n_obs)
    if not scores:  # nothing to hold against the draws: a first batch says how the star behaves
        total = min(total, _BATCH)
    children = np.random.SeedSequence([seed, 13]).spawn(total)
    drawn = [draw_series(series, portrait, np.random.default_rng(c)) for c in children]
    out: list[tuple[DrawnSignal, ...]] = []
    with Parallel(n_jobs=workers, backend="loky" if workers > 1 else "sequential") as pool:
        for start in range(0, total, _BATCH):
            progress(f"drawing the star without planets: {start} of {total}", start / total)
            batch = drawn[start : start + _BATCH]
            jobs = (delayed(_quietly)(judge, item, start + i) for i, item in enumerate(batch))
            out.extend(tuple(r) for r in pool(jobs))
            if scores and all(_matches(out, s) > 0.2 * total for s in scores):
                break
    return tuple(out)


def _matches(draws: Sequence[tuple[DrawnSignal, ...]], score: float) -> int:
    return sum(any(s.score >= score for s in draw) for draw in draws)


def _quietly(judge: Judge, series: TimeSeries, seed: int) -> Sequence[DrawnSignal]:
    from screener.core import NumericalError

    try:
        return judge(series, seed)
    except NumericalError:  # a draw that cannot be fitted shows no planet
        return ()


def injections(
    series: TimeSeries,
    portrait: Portrait,
    judge: Judge,
    orbit: Orbit,
    *,
    depth: Depth,
    seed: int,
    workers: int,
) -> tuple[Grade | None, ...]:
    """Grades of the orbit put into draws at other phases and neighbouring periods.

    None where no search found it.
    """
    share = n_draws(depth, series.n_obs) / max(_DRAWS[depth], 1)
    total = math.ceil(_INJECTIONS[depth] * share)
    children = np.random.SeedSequence([seed, 14]).spawn(total)
    periods, drawn = [], []
    for child in children:
        rng = np.random.default_rng(child)
        period = orbit.period * rng.uniform(0.93, 1.07)
        moved = replace(
            orbit, period=period, time_peri=orbit.time_peri + rng.uniform(0, 1) * period
        )
        periods.append(period)
        drawn.append(draw_series(series, portrait, rng, moved))
    with Parallel(n_jobs=workers, backend="loky" if workers > 1 else "sequential") as pool:
        results = pool(delayed(_quietly)(judge, item, i) for i, item in enumerate(drawn))
    out: list[Grade | None] = []
    for period, found in zip(periods, results, strict=True):
        hits = [s for s in found if same_period(s.period, period, series.baseline)]
        out.append(max(hits, key=lambda s: s.score).grade if hits else None)
    return tuple(out)
