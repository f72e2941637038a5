"""Made-up stars that are what the joint model says, for the lines of evidence that ask that model.

Small on purpose (50 nights, one indicator): every one of them is fitted several times over.
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import lru_cache

import numpy as np

from screener.core import Depth, Grade, Indicator, Orbit, Signal, Star, TimeSeries
from screener.evidence import own_null
from screener.evidence.case import Case
from screener.evidence.latent import latent_activity
from screener.judging import _judge_draw, judge
from screener.models.assessment import assess
from screener.models.dataset import choose_indicators, scaled_data
from screener.models.fitting import Fit, HyperPrior, starting_point
from screener.models.kernels import KERNELS, Lags
from screener.models.noise import joint_process, white_noise
from screener.models.nulls import NullDraws, draw_series
from screener.models.portrait import paint, rotation_prior
from screener.models.rotation import PeriodDensity, estimate_rotation
from screener.rules import load_rules
from tests.statistical.evidence_cases import Recipe, fitted, nights

__all__ = ["N_DRAWS", "assessed", "drawn_star", "in_company", "ranked", "with_latent"]

_TURN = 21.0
_NIGHTS = 50
N_DRAWS = 19


def drawn_star(seed: int, planet: tuple[float, float] | None = None) -> TimeSeries:
    """Velocities (a G + b G') and a width (G), and a planet of that period and amplitude."""
    rng = np.random.default_rng([seed, 101])
    time = nights(rng, _NIGHTS, 2)
    turn = _TURN * math.exp(0.05 * rng.standard_normal())
    log_kernel = np.log([turn, turn * rng.uniform(1.5, 3.0), rng.uniform(0.4, 0.7)])
    blocks = KERNELS["quasi-periodic"].blocks(Lags.of(time), log_kernel, True)
    assert blocks.dg is not None and blocks.dd is not None
    covariance = np.block([[blocks.gg, blocks.dg.T], [blocks.dg, blocks.dd]])
    root = np.linalg.cholesky(covariance + 1e-8 * np.eye(2 * time.size))
    g, derivative = (root @ rng.standard_normal(2 * time.size)).reshape(2, -1)
    a, b = rng.uniform(0.5, 2.5, 2)
    rv = a * g + b * derivative + rng.standard_normal(time.size)
    width = 10.0 * g + 3.0 * rng.standard_normal(time.size)
    if planet is not None:
        period, size = planet
        rv = rv + size * np.cos(2 * np.pi * time / period + rng.uniform(0, 2 * np.pi))
    return TimeSeries(
        time,
        rv,
        np.full(time.size, 1.0),
        np.zeros(time.size, dtype=np.intp),
        ("A",),
        (Indicator("fwhm", width, np.full(time.size, 3.0)),),
    )


def _period(seed: int) -> float:
    """Anywhere between 2.5 and 70 d."""
    return float(np.exp(np.random.default_rng([seed, 103]).uniform(np.log(2.5), np.log(70.0))))


@lru_cache(maxsize=2000)
def assessed(seed: int, size: float) -> Case:
    """A period put to all noise models, with a planet of ``size`` m/s there or without (0)."""
    period = _period(seed)
    series = drawn_star(seed, (period, size) if size else None)
    scaled = scaled_data(series, choose_indicators(series, 1), 1e4)
    prior = rotation_prior(PeriodDensity.peak(_TURN, 0.05))
    models = [white_noise(scaled), white_noise(scaled, decorrelate=True)]
    models += [joint_process(scaled, prior, joint=False), joint_process(scaled, prior)]
    term = models[-1].term(period)
    fits = {m.name: m.fit([term] if m.kernel is None else [], fresh=True) for m in models}
    grid = np.arange(0.5 / series.baseline, 0.5, 0.2 / series.baseline)
    result = assess(series, term, [], [term], models, fits, grid)
    return replace(fitted(series, Recipe(period=period, error=1.0), seed), assessment=result)


def with_latent(seed: int) -> Case:
    """A planet beside a star whose width has nothing to do with the velocities; latent activity."""
    period = _period(seed)
    series, other = drawn_star(seed, (period, 3.0)), drawn_star(seed + 1_000_000)
    series = replace(series, time=other.time, indicators=other.indicators)
    scaled = scaled_data(series, choose_indicators(series, 1), 1e4)
    prior = HyperPrior(math.log(_TURN), 0.05)
    noise = joint_process(scaled, prior)
    model = noise.model(())
    x = starting_point(model, prior, np.ones(2), 0.3)
    activity = latent_activity(Fit(model, x, 0.0, 0.0, 0.0, 0, True), scaled)
    return replace(fitted(series, Recipe(period=period, error=1.0), seed), activity=activity)


def in_company(seed: int, periods: tuple[float, ...], sizes: tuple[float, ...]) -> Case:
    """A signal (the first) with others; nothing but periods and amplitudes matters."""
    case = fitted(drawn_star(seed), Recipe(period=periods[0], error=1.0), seed)
    signals = [
        Signal(f"S{i}", Orbit(p, k), 1e-4, ("white noise",))
        for i, (p, k) in enumerate(zip(periods, sizes, strict=True), start=1)
    ]
    return replace(case, signal=signals[0], others=tuple(signals[1:]))


def ranked(seed: int) -> tuple[float, float, bool]:
    """A star without planets against its own null: p-value, stated power, whether it was silent.

    The star is screened, its activity model drawn 19 times and every draw screened. The p-value
    is that of its best signal, 1 where none was found.
    """
    star = Star("made-up", rotation_period=_TURN, rotation_period_err=1.0)
    series, rules = drawn_star(seed), load_rules()
    rotation, density = estimate_rotation(star, series)
    portrait = paint(star, series, (), density, Depth.QUICK)
    judged, _ = judge(star, series, portrait, rotation, density, rules, Depth.QUICK, seed)
    draws = tuple(
        tuple(_judge_draw(star, rules, draw_series(series, portrait, rng), i))
        for i, rng in enumerate(np.random.default_rng([seed, 107]).spawn(N_DRAWS))
    )
    best = max(judged, key=lambda j: j.graded.score, default=None)
    case = best.case if best is not None else fitted(series, Recipe(error=1.0), seed)
    score = best.graded.score if best is not None else 0.0
    finding = own_null.run(replace(case, nulls=NullDraws(draws, {}), score=score))
    assert finding.p_value is not None and finding.power is not None
    silent = not any(j.graded.grade is Grade.PLANETARY for j in judged)
    return finding.p_value if best is not None else 1.0, finding.power, silent
