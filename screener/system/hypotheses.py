"""What the live hypotheses predict, and how far apart their predictions lie.

Each hypothesis (orbit, star, orbit at an alias) is a Gaussian process of zero mean: conditioned on
the velocities at hand it predicts any set of new ones as a multivariate normal. Distances between
those normals say what new velocities would tell.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from scipy import linalg

from screener.core import Array, NumericalError, Orbit
from screener.models.kepler import orbit_columns

__all__ = [
    "SLOWEST_ROTATION",
    "Forecast",
    "Hypothesis",
    "Velocities",
    "activity_hypothesis",
    "alias_orbits",
    "bhattacharyya",
    "divergence",
    "forecast",
    "information_deficit",
    "log_likelihood",
    "orbit_hypothesis",
    "orbit_process",
    "quasi_periodic",
]

_SIDEREAL_DAY = 1.0027379  # cycles per day
_YEAR = 365.25
_MONTH = 29.530589
SLOWEST_ROTATION = 150.0  # d: what recurs more slowly is a magnetic cycle, not spots
_SPOT_TURNS, _SPOT_SPREAD = 1.5, 0.7  # lifetime of a pattern in turns, and its spread in ln
_LIVE = math.log(1000.0)  # an alias that fits worse by more is dead


@dataclass(frozen=True, eq=False)
class Velocities:
    """Velocities that hold one signal, activity and noise: ``time``, ``rv``, ``sd``, (n_obs,)."""

    time: Array
    rv: Array
    sd: Array

    def latest(self, n: int) -> Velocities:
        """The last ``n`` of them: older ones say little about the nights to come."""
        return Velocities(self.time[-n:], self.rv[-n:], self.sd[-n:])


@dataclass(frozen=True, eq=False)
class Hypothesis:
    """A name, a prior weight, the covariance (m^2/s^2) of the velocities, and the period (d)."""

    name: str
    weight: float
    covariance: Callable[[Array, Array], Array]
    period: float
    log_likelihood: float = 0.0


@dataclass(frozen=True, eq=False)
class Forecast:
    """Predicted velocities: ``mean`` (n_new,) and ``covariance`` (n_new, n_new), noise included."""

    mean: Array
    covariance: Array


def quasi_periodic(
    amplitude: float, period: float, decay: float, smoothness: float
) -> Callable[[Array, Array], Array]:
    """A^2 exp[-tau^2 / (2 l^2) - sin^2(pi tau / P) / (2 Gamma^2)] (Haywood et al. 2014,
    MNRAS 443, 2517, with the factor 2 in the second term)."""

    def covariance(one: Array, two: Array) -> Array:
        lag = one[:, None] - two[None, :]
        exponent = (lag / decay) ** 2 + (np.sin(np.pi * lag / period) / smoothness) ** 2
        return np.asarray(amplitude**2 * np.exp(-0.5 * exponent))

    return covariance


def _factor(
    covariance: Callable[[Array, Array], Array], data: Velocities, offset: float
) -> tuple[Array, bool]:
    matrix = covariance(data.time, data.time) + offset**2
    matrix[np.diag_indices_from(matrix)] += data.sd**2
    try:
        return linalg.cho_factor(matrix, lower=True)  # type: ignore[no-any-return]
    except linalg.LinAlgError as error:
        raise NumericalError(
            f"the covariance of {data.time.size} velocities is not positive definite "
            f"(smallest error {data.sd.min():.3g} m/s, offset {offset:.3g} m/s)"
        ) from error


def _offset(data: Velocities) -> float:
    """Width of the prior on the zero point: wide against the scatter, mild for the algebra."""
    return 10.0 * float(np.std(data.rv)) + float(np.median(data.sd))


def log_likelihood(covariance: Callable[[Array, Array], Array], data: Velocities) -> float:
    """Normal log-likelihood of the velocities with a free zero point.

    Raises
    ------
    NumericalError
        Where the covariance cannot be factorised.
    """
    lower, flag = _factor(covariance, data, _offset(data))
    solved = linalg.cho_solve((lower, flag), data.rv)
    return float(
        -0.5 * data.rv @ solved
        - np.sum(np.log(np.diag(lower)))
        - 0.5 * data.time.size * math.log(2 * math.pi)
    )


def forecast(hypothesis: Hypothesis, data: Velocities, time: Array, sd: Array) -> Forecast:
    """What ``hypothesis`` expects at ``time`` (n_new,) with errors ``sd``, given the data."""
    offset = _offset(data)
    factor = _factor(hypothesis.covariance, data, offset)
    cross = hypothesis.covariance(time, data.time) + offset**2
    mean = cross @ linalg.cho_solve(factor, data.rv)
    half = linalg.solve_triangular(factor[0], cross.T, lower=True)
    matrix = hypothesis.covariance(time, time) + offset**2 - half.T @ half
    matrix = 0.5 * (matrix + matrix.T)
    # rounding may leave variances of the size of 1e-16 offset^2 below nil
    matrix[np.diag_indices_from(matrix)] += sd**2 + 1e-10 * offset**2
    return Forecast(np.asarray(mean), matrix)


def orbit_process(orbit: Orbit, baseline: float) -> Callable[[Array, Array], Array]:
    """Covariance of the velocities of an orbit whose elements are known about as well as fitted.

    The two coefficients in which the velocity is linear have a width of K, the first harmonic one
    of K sigma_e (at least 0.1 K). An error of the frequency makes the phase forgotten as
    exp[-(2 pi sigma_f tau)^2 / 2], the mean of cos(2 pi delta_f tau) over the error: unlike a
    linear expansion in the period it stays bounded when a whole turn is lost between seasons.
    """
    ecc = min(orbit.eccentricity, 0.9)
    ecc_err = min(max(orbit.eccentricity_err or 0.0, 0.1), 0.3)
    if orbit.period_err:
        frequency_err = min(orbit.period_err / orbit.period**2, 0.3 / baseline)
    else:
        frequency_err = 0.1 / baseline

    def columns(time: Array) -> Array:
        phase = 4 * np.pi * (time - orbit.time_peri)[:, None] / orbit.period
        harmonic = np.concatenate([np.cos(phase), np.sin(phase)], axis=1) * ecc_err
        linear = orbit_columns(time, orbit.period, ecc, orbit.time_peri)
        return np.asarray(orbit.semi_amplitude * np.concatenate([linear, harmonic], axis=1))

    def covariance(one: Array, two: Array) -> Array:
        lag = one[:, None] - two[None, :]
        memory = np.exp(-0.5 * (2 * np.pi * frequency_err * lag) ** 2)
        return np.asarray(memory * (columns(one) @ columns(two).T))

    return covariance


def activity_hypothesis(
    data: Velocities, periods: Sequence[float], *, weight: float = 0.5
) -> tuple[Hypothesis, tuple[float, float, float, float]]:
    """The star alone: the likeliest quasi-periodic process over a small grid.

    ``periods`` (d) are tried with decay times of 0.7 to 6 periods (10 to 300 d for a rotation,
    longer for a cycle), two degrees of smoothness and three amplitudes about the scatter. Spots
    live for one to a few turns (Giles, Collier Cameron & Haywood 2017, MNRAS 472, 1618), so decay
    times carry a lognormal prior about 1.5 turns, without which every planet is matched best by a
    star that never changes. Returns the hypothesis (prior included in its likelihood) and
    amplitude, period, decay time, smoothness.
    """
    scatter = float(np.std(data.rv))
    excess = math.sqrt(max(scatter**2 - float(np.median(data.sd)) ** 2, 0.1 * scatter**2))
    best: tuple[float, tuple[float, float, float, float]] | None = None
    for period, turns, smooth, scale in product(
        periods, (0.7, 1.5, 3.0, 6.0), (0.4, 0.9), (0.75, 1.1, 1.6)
    ):
        decay = max(turns * period, 10.0)
        if period < SLOWEST_ROTATION:
            decay = min(decay, 300.0)
        shape = (scale * excess, period, decay, smooth)
        value = log_likelihood(quasi_periodic(*shape), data)
        value -= 0.5 * (math.log(turns / _SPOT_TURNS) / _SPOT_SPREAD) ** 2
        if best is None or value > best[0]:
            best = (value, shape)
    if best is None:
        raise ValueError("at least one period is needed")
    value, shape = best
    return Hypothesis("activity", weight, quasi_periodic(*shape), shape[1], value), shape


def orbit_hypothesis(
    name: str,
    orbit: Orbit,
    data: Velocities,
    shape: tuple[float, float, float, float],
    *,
    weight: float = 0.5,
) -> Hypothesis:
    """An orbit, and under it as much activity (of the given shape) as is likeliest.

    ``shape`` is (amplitude, period, decay time, smoothness) of the process that would explain the
    velocities without the orbit; none, a quarter and a half of its amplitude are tried. More would
    no longer be the hypothesis that the orbit makes the signal.
    """
    wave = orbit_process(orbit, max(float(np.ptp(data.time)), orbit.period))
    best: Hypothesis | None = None
    for share in (0.0, 0.25, 0.5):
        star = quasi_periodic(share * shape[0], *shape[1:])

        def covariance(
            one: Array, two: Array, star: Callable[[Array, Array], Array] = star
        ) -> Array:
            return np.asarray(star(one, two) + wave(one, two))

        value = log_likelihood(covariance, data)
        if best is None or value > best.log_likelihood:
            best = Hypothesis(name, weight, covariance, orbit.period, value)
    assert best is not None
    return best


def alias_orbits(orbit: Orbit, data: Velocities, n_aliases: int = 2) -> list[Orbit]:
    """Circular orbits at the daily, monthly and yearly aliases that fit nearly as well.

    Dawson & Fabrycky (2010, ApJ 722, 937): aliases stand at f +- n f_window. Those that lose more
    than ln 1000 in log-likelihood of a least-squares sinusoid, or lie within 1.5 / baseline of the
    signal or of a better alias, are left out.
    """
    frequency = 1.0 / orbit.period
    resolution = 1.5 / max(float(np.ptp(data.time)), 1.0)
    candidates: list[tuple[float, float]] = []
    for spacing in (1.0, _SIDEREAL_DAY, 2.0, 1 / _YEAR, 2 / _YEAR, 1 / _MONTH):
        for trial in (frequency - spacing, frequency + spacing):
            folded = abs(trial)
            if resolution < folded < 2.0 and abs(folded - frequency) > resolution:
                candidates.append((_sinusoid_gain(folded, data), folded))
    own = _sinusoid_gain(frequency, data)
    chosen: list[float] = []
    for gain, trial in sorted(candidates, reverse=True):
        apart = all(abs(trial - other) > resolution for other in chosen)
        if own - gain < _LIVE and apart and len(chosen) < n_aliases:
            chosen.append(trial)
    frequency_err = (orbit.period_err or 0.0) * frequency**2
    return [
        replace(
            orbit,
            period=1 / f,
            eccentricity=0.0,
            period_err=frequency_err / f**2 or None,
            eccentricity_err=None,
        )
        for f in chosen
    ]


def _sinusoid_gain(frequency: float, data: Velocities) -> float:
    """Gain in log-likelihood of a sinusoid over a constant, white noise."""
    phase = 2 * np.pi * frequency * (data.time - data.time[0])
    columns = np.stack([np.ones(phase.size), np.cos(phase), np.sin(phase)], axis=1)
    w = 1 / data.sd
    rest = []
    for part in (columns[:, :1], columns):
        solution, *_ = np.linalg.lstsq(part * w[:, None], data.rv * w, rcond=None)
        rest.append(float(np.sum((data.rv * w - (part * w[:, None]) @ solution) ** 2)))
    return 0.5 * (rest[0] - rest[1])


def bhattacharyya(mean_1: Array, covariance_1: Array, mean_2: Array, covariance_2: Array) -> Array:
    """Bhattacharyya distance of two normals; leading axes are broadcast.

    1/8 d^T S^-1 d + 1/2 ln(|S| / sqrt(|S_1| |S_2|)), S the mean covariance (Bhattacharyya 1943).
    The best decision between the two errs with a chance of at most exp(-distance) / 2.
    """
    middle = 0.5 * (covariance_1 + covariance_2)
    d = mean_1 - mean_2
    solved = np.linalg.solve(middle, d[..., None])[..., 0]
    logs = [np.linalg.slogdet(m)[1] for m in (middle, covariance_1, covariance_2)]
    return np.asarray(np.sum(d * solved, axis=-1) / 8 + 0.5 * (logs[0] - 0.5 * (logs[1] + logs[2])))


def divergence(mean_1: Array, covariance_1: Array, mean_2: Array, covariance_2: Array) -> float:
    """Kullback-Leibler divergence: expected log-odds of 1 against 2 when 1 is true."""
    d = mean_2 - mean_1
    inverse = np.linalg.inv(covariance_2)
    return float(
        0.5
        * (
            np.trace(inverse @ covariance_1)
            + d @ inverse @ d
            - d.size
            + np.linalg.slogdet(covariance_2)[1]
            - np.linalg.slogdet(covariance_1)[1]
        )
    )


def information_deficit(weights: Array, distances: Array) -> Array:
    """Upper bound (nat) on what stays unknown about which hypothesis is true.

    ``distances`` (n_hyp, n_hyp, ...) are the pairwise Bhattacharyya distances; the entropy of the
    weights less this is a lower bound on the mutual information between hypothesis and data
    (Kolchinsky & Tracey 2017, Entropy 19, 361): sum_i w_i ln sum_j (w_j / w_i) exp(-B_ij).
    """
    total = np.zeros(distances.shape[2:])
    for i, w in enumerate(weights):
        rest = np.zeros(distances.shape[2:])
        for j, v in enumerate(weights):
            if j != i:
                rest = rest + v / w * np.exp(-distances[i, j])
        total = total + w * np.log1p(rest)
    return np.asarray(total)
