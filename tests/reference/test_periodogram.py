"""Periodogram, false-alarm probabilities and window against astropy, numpy and simulations.

Sources: astropy.timeseries.LombScargle (normalisation "psd" is half the reduction of chi-squared);
Baluev (2008, MNRAS 385, 1279); Delisle, Hara & Segransan (2020, A&A 635, A83) for correlated noise.
"""

from __future__ import annotations

import functools
import math

import numpy as np
import pytest
from astropy.timeseries import LombScargle
from scipy import stats

from screener.core import Array
from screener.models.fitting import HyperPrior
from screener.models.joint import JointData
from screener.models.noise import NoiseModel
from screener.search.false_alarm import (
    analytic,
    effective_baseline,
    gain_with_free_scale,
    level,
    resampled,
)
from screener.search.periodogram import Precision, frequency_grid, peaks, power, window

SHORTEST = 2.0  # d, of the simulations below: a short grid is enough for a rate
N_NULL = 400


def nights(n: int, span: float, rng: np.random.Generator) -> Array:
    """Irregular nights with unequal hours."""
    return np.sort(rng.choice(int(span), n, replace=False) + rng.uniform(-0.2, 0.2, n))


def white(y: Array, error: Array, floating_mean: bool) -> Precision:
    """The precision of independent noise, with the mean projected out or not."""
    weight = 1 / error**2
    if not floating_mean:
        return Precision(y * weight, None, weight, np.zeros((y.size, 0)))
    column = (weight / math.sqrt(weight.sum()))[:, None]
    return Precision(weight * y - column[:, 0] * (column[:, 0] @ y), None, weight, column)


def dense(y: Array, covariance: Array) -> Precision:
    """The precision of any noise, with the mean projected out."""
    inverse = np.linalg.inv(covariance)
    row = inverse.sum(axis=0)
    matrix = inverse - np.outer(row, row) / row.sum()
    return Precision(matrix @ y, matrix)


def sample(seed: int = 1, n: int = 70) -> tuple[Array, Array, Array]:
    rng = np.random.default_rng(seed)
    time, error = nights(n, 200.0, rng), rng.uniform(0.5, 2.0, n)
    return time, 3.0 + np.sin(2 * np.pi * time / 13.0) + rng.normal(0, error), error


@pytest.mark.parametrize("floating_mean", [False, True])
def test_power_is_that_of_astropy(floating_mean: bool) -> None:
    time, y, error = sample()
    frequency = frequency_grid(float(np.ptp(time)))
    ours = power(time, white(y, error, floating_mean), frequency)
    theirs = LombScargle(time, y, error, fit_mean=floating_mean, center_data=False).power(
        frequency, method="slow", normalization="psd"
    )
    assert np.allclose(ours, theirs, rtol=1e-7, atol=1e-7)


def test_power_on_a_diagonal_covariance_is_the_same_again() -> None:
    time, y, error = sample()
    frequency = frequency_grid(float(np.ptp(time)))
    ours = power(time, dense(y, np.diag(error**2)), frequency)
    assert np.allclose(ours, power(time, white(y, error, True), frequency), atol=1e-8)


def test_power_on_a_fitted_noise_model_is_that_of_astropy_with_its_errors() -> None:
    """The whole way: joint data, jitter fitted, periodogram on its precision."""
    time, y, error = sample()
    n = y.size
    data = JointData(
        time, y[None], error[None] ** 2, np.ones((1, n), bool), np.zeros((1, n), np.intp), 1,
        np.ones((1, n, 1)), np.array([1e4]),
    )  # fmt: skip
    noise = NoiseModel("white", data, None, (False,), HyperPrior(math.log(25.0), 0.5), 1.0)
    result = noise.fit(())
    total = np.hypot(error, math.exp(result.parameters[0]))
    frequency = frequency_grid(float(np.ptp(time)))
    ours = power(time, noise.precision(result), frequency)
    theirs = LombScargle(time, y, total).power(frequency, method="slow", normalization="psd")
    assert np.allclose(ours, theirs, rtol=1e-5, atol=1e-5)


def test_the_highest_peak_is_the_injected_period() -> None:
    time, y, error = sample()
    frequency = frequency_grid(float(np.ptp(time)))
    best = peaks(frequency, power(time, white(y, error, True), frequency), 1, 200.0)[0]
    assert best.frequency == pytest.approx(1 / 13.0, abs=0.2 / 200.0)


@pytest.mark.parametrize("gain", [3.0, 8.0, 12.0, 20.0])
def test_false_alarm_probability_is_that_of_astropy(gain: float) -> None:
    time, y, error = sample()
    theirs = LombScargle(time, y, error, normalization="psd").false_alarm_probability(
        gain, method="baluev", maximum_frequency=1.8
    )
    # their band starts at zero
    ours = analytic(gain, 1.8, effective_baseline(time, 1 / error**2))
    # nor do we keep gamma(N) = 1 - 3 / (4 N) of small samples, which belongs to unknown noise
    assert ours == pytest.approx(float(theirs), rel=0.02)


def test_with_the_noise_level_refitted_it_is_close_to_that_of_astropy() -> None:
    """z_3 of Baluev; we use the chi-square row of his table for it, exact as N grows."""
    time, y, error = sample(n=150)
    search = LombScargle(time, y, error, normalization="log")
    frequency = np.linspace(0.01, 1.8, 900)
    theirs = search.power(frequency, method="slow")
    gain = power(time, white(y, error, True), frequency)
    chi2 = float(np.sum(((y - np.average(y, weights=error**-2)) / error) ** 2))
    ours = gain_with_free_scale(gain, chi2, 147)
    assert np.allclose(ours, 0.5 * 147 * theirs, rtol=1e-6, atol=1e-8)
    for z in (8.0, 11.0, 14.0):
        fap = search.false_alarm_probability(
            z / (0.5 * 147), method="baluev", maximum_frequency=1.8
        )
        own = analytic(z, 1.8, effective_baseline(time, 1 / error**2))
        assert own == pytest.approx(float(fap), rel=0.3)


def test_level_is_the_inverse() -> None:
    assert analytic(level(0.01, 1.8, 500.0), 1.8, 500.0) == pytest.approx(0.01, rel=1e-6)


@functools.cache
def null_probabilities(red: bool, told: bool) -> Array:
    """Analytic probabilities of the highest peak of noise alone.

    ``red``: the noise is correlated over five days; ``told``: and the periodogram knows it.
    """
    rng = np.random.default_rng(17)
    n, span = 40, 90.0
    time = nights(n, span, rng)
    error = rng.uniform(0.8, 1.4, n)
    covariance = np.diag(error**2)
    if red:
        covariance = 0.3 * covariance + 1.5 * np.exp(-np.abs(time[:, None] - time) / 5.0)
    factor = np.linalg.cholesky(covariance)
    frequency = frequency_grid(span, 4.0, SHORTEST)
    assumed = covariance if told else np.diag(np.diagonal(covariance))
    base = effective_baseline(time, 1 / np.diagonal(covariance))
    template = dense(np.zeros(n), assumed)
    assert template.matrix is not None
    out = []
    for _ in range(N_NULL):
        y = factor @ rng.normal(size=n)
        top = power(time, Precision(template.matrix @ y, template.matrix), frequency).max()
        out.append(analytic(float(top), float(np.ptp(frequency)), base))
    return np.array(out)


@pytest.mark.parametrize("red", [False, True])
@pytest.mark.parametrize("alpha", [0.01, 0.05, 0.1])
def test_false_alarms_are_no_more_frequent_than_stated(red: bool, alpha: float) -> None:
    """Baluev's formula is an upper bound, sharp where it is small."""
    count = int(np.count_nonzero(null_probabilities(red, True) < alpha))
    assert stats.binomtest(count, N_NULL, alpha, alternative="greater").pvalue > 1e-3
    # and not so cautious that it would be of no use: at least a third of the nominal rate
    assert stats.binomtest(count, N_NULL, alpha / 3, alternative="less").pvalue > 1e-3


def test_red_noise_taken_for_white_gives_false_alarms() -> None:
    """The negative control: the check above can fail."""
    count = int(np.count_nonzero(null_probabilities(True, False) < 0.05))
    assert stats.binomtest(count, N_NULL, 0.05, alternative="greater").pvalue < 1e-6


@pytest.mark.parametrize("wanted", [0.3, 0.05])
def test_resampled_agrees_with_analytic(wanted: float) -> None:
    rng = np.random.default_rng(5)
    time = nights(60, 120.0, rng)
    error = np.full(60, 1.3)
    y = rng.normal(0, error)
    # shuffling keeps the scatter of this very draw: give it the nominal one
    y *= 1.3 / float(np.std(y))
    frequency = frequency_grid(120.0, 4.0, SHORTEST)
    bandwidth = float(np.ptp(frequency))
    gain = level(wanted, bandwidth, effective_baseline(time, 1 / error**2))
    found = resampled(time, white(y, error, True), frequency, gain, 200, rng)
    error_of_count = math.sqrt(wanted * (1 - wanted) / 200)
    assert found < wanted + 3 * error_of_count
    assert found > wanted / 3 - 3 * error_of_count


def test_resampled_probabilities_are_uniform_under_the_null() -> None:
    rng = np.random.default_rng(23)
    time, error = nights(25, 40.0, rng), rng.uniform(0.7, 1.4, 25)
    frequency = frequency_grid(40.0, 4.0, 3.0)
    out = []
    for _ in range(80):
        y = rng.normal(0, error)
        precision = white(y, error, True)
        top = float(power(time, precision, frequency).max())
        out.append(resampled(time, precision, frequency, top, 19, rng))
    steps = np.array(out) * 20  # each of 1 ... 20 equally likely
    assert stats.kstest((steps - rng.uniform(0, 1, steps.size)) / 20, "uniform").pvalue > 0.01


def test_window_is_the_fourier_transform_of_the_sampling() -> None:
    """On whole days with gaps numpy's FFT gives the same sum."""
    rng = np.random.default_rng(2)
    seen = rng.random(256) < 0.4
    time = np.flatnonzero(seen).astype(float)
    k = np.arange(128)
    expected = np.abs(np.fft.fft(seen.astype(float)))[k] / seen.sum()
    assert np.allclose(window(time, k / 256.0), expected, atol=1e-10)


def test_window_shows_the_night() -> None:
    rng = np.random.default_rng(3)
    time = nights(80, 300.0, rng)
    assert window(time, np.array([0.0, 1.0])) == pytest.approx([1.0, 1.0], abs=0.5)
    assert window(time, np.array([1.0]))[0] > 0.7 > 0.4 > window(time, np.array([0.513]))[0]
