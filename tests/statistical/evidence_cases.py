"""Made-up stars for the tests of the lines of evidence: each null and each effect."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, Depth, Indicator, Orbit, Rotation, Signal, Star, TimeSeries
from screener.evidence.case import Case
from screener.models.rotation import PeriodDensity

__all__ = ["Recipe", "fitted", "make_case", "nights", "red_noise"]


@dataclass(frozen=True)
class Recipe:
    """A star with one signal in its velocities, and what the indicators do about it.

    ``response`` is the indicators' amplitude at the signal's period in units of their own
    scatter; ``lag`` its phase (rad), None for random ones.
    """

    n: int = 100
    seasons: int = 3
    period: float = 17.3
    amplitude: float = 5.0
    error: float = 1.5
    red: float = 1.0
    red_tau: float = 5.0
    indicators: tuple[str, ...] = ("fwhm", "bis", "s_index")
    indicator_share: float = 0.5
    indicator_tau: float = 4.0
    common: float = 0.5
    response: float = 0.0
    lag: float | None = 0.0
    instruments: int = 1
    rotation: float | None = 11.0
    depth: Depth = Depth.QUICK


def nights(rng: np.random.Generator, n: int, seasons: int) -> Array:
    """n nights in seasons of 180 d, one a year."""
    free = np.arange(180 * seasons)
    chosen = np.sort(rng.choice(free, n, replace=False))
    return np.asarray(chosen + 185.0 * (chosen // 180) + rng.uniform(-0.15, 0.15, n))


def red_noise(rng: np.random.Generator, time: Array, tau: float) -> Array:
    """Unit Ornstein-Uhlenbeck noise by its dense covariance (not by the recursion under test)."""
    covariance = np.exp(-np.abs(time[:, None] - time[None, :]) / tau)
    root = np.linalg.cholesky(covariance + 1e-10 * np.eye(time.size))
    return np.asarray(root @ rng.standard_normal(time.size))


def make_case(seed: int, recipe: Recipe = Recipe(), rv_extra: Array | None = None) -> Case:
    """A case after the recipe; the orbit is fitted as the pipeline would, linearly."""
    rng = np.random.default_rng(seed)
    r = recipe
    time = nights(rng, r.n, r.seasons)
    phase = rng.uniform(0.0, 2.0 * np.pi)
    angle = 2.0 * np.pi * time / r.period + phase
    rv = r.amplitude * np.cos(angle) + r.red * red_noise(rng, time, r.red_tau)
    rv += r.error * rng.standard_normal(r.n) + (0.0 if rv_extra is None else rv_extra)
    instrument = (np.arange(r.n) * r.instruments // r.n).astype(np.intp)
    shared = red_noise(rng, time, r.indicator_tau)
    indicators = []
    for k, name in enumerate(r.indicators):
        own = red_noise(rng, time, r.indicator_tau)
        red = np.sqrt(r.common) * shared + np.sqrt(1.0 - r.common) * own
        value = np.sqrt(r.indicator_share) * red
        value += np.sqrt(1.0 - r.indicator_share) * rng.standard_normal(r.n)
        lag = rng.uniform(0.0, 2.0 * np.pi) if r.lag is None else r.lag
        value += r.response * np.cos(angle + lag)
        scale = 10.0 ** (1 - k)
        value = scale * value + 100.0 * scale * instrument
        error = np.full(r.n, scale * np.sqrt(max(1.0 - r.indicator_share, 0.01)))
        indicators.append(Indicator(name, value, error))
    series = TimeSeries(
        time,
        rv + 20.0 * instrument,
        np.full(r.n, r.error),
        instrument,
        tuple("ABCD"[: r.instruments]),
        tuple(indicators),
    )
    return fitted(series, r, seed)


def fitted(series: TimeSeries, recipe: Recipe, seed: int) -> Case:
    """The linear fit of the orbit to a series, and the case it makes."""
    time, r = series.time, recipe
    zero = (series.instrument[:, None] == np.unique(series.instrument)[None, :]).astype(float)
    slope = (time - time.mean())[:, None] / np.ptp(time)
    angle = 2.0 * np.pi * (time - time.mean()) / r.period
    design = np.column_stack([np.cos(angle), np.sin(angle), zero, slope])
    solution = np.linalg.lstsq(design, series.rv, rcond=None)[0]
    residual = series.rv - design @ solution
    target = residual + design[:, :2] @ solution[:2]
    variance = float(np.var(residual))
    amplitude = float(np.hypot(*solution[:2]))
    err = np.sqrt(2.0 * variance / series.n_obs)
    period_err = r.period**2 / np.ptp(time) * 0.3 * err / max(amplitude, err)
    orbit = Orbit(r.period, amplitude, period_err=float(period_err), semi_amplitude_err=float(err))
    known = r.rotation is not None
    return Case(
        star=Star("made-up"),
        series=series,
        signal=Signal("S1", orbit, 1e-4, ("white noise",)),
        others=(),
        target_rv=target,
        residual_rv=residual,
        rv_sd=np.full(series.n_obs, np.sqrt(max(variance, recipe.error**2))),
        rotation=Rotation(r.rotation, 0.5) if known else Rotation(None, None),
        rotation_density=(
            PeriodDensity.peak(r.rotation, 0.05).with_ambiguity(0.1).with_floor(0.1)
            if r.rotation is not None
            else None
        ),
        depth=r.depth,
        seed=seed,
    )
