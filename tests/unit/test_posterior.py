"""Posterior samples: known answer, and the gate that refuses short chains."""

from __future__ import annotations

import math

import numpy as np
import pytest

pytest.importorskip("emcee")

from screener.core import Indicator, TimeSeries
from screener.models.dataset import scaled_data
from screener.models.fitting import HyperPrior
from screener.models.noise import joint_process, white_noise
from screener.models.posterior import sample, split_r_hat


def _series(rng: np.random.Generator, n: int = 50) -> TimeSeries:
    time = np.sort(rng.uniform(0, 120, n))
    rv = 4 * np.sin(2 * np.pi * time / 9.0) + rng.normal(0, 1.0, n)
    other = Indicator("fwhm", rng.normal(0, 3, n), np.full(n, 3.0))
    return TimeSeries(time, rv, np.full(n, 0.4), np.zeros(n, dtype=np.intp), ("A",), (other,))


@pytest.mark.slow
def test_amplitude_and_period_of_a_known_orbit() -> None:
    rng = np.random.default_rng(3)
    noise = white_noise(scaled_data(_series(rng), (), 1000.0))
    best = noise.fit([noise.term(9.0)], fresh=True)
    result = sample(noise, best, np.full(best.parameters.size, 0.1), rng, n_steps=2400)
    assert result.converged
    assert result.r_hat < 1.05
    amplitude, period = result.semi_amplitudes[0], result.periods[0]
    width = 0.5 * (amplitude.high - amplitude.low)
    # sigma_K = sigma sqrt(2 / N) = 0.2 m/s for 50 velocities of 1 m/s (least squares, exact)
    assert width == pytest.approx(1.05 * math.sqrt(2 / 50), rel=0.3)
    assert abs(amplitude.median - 4) < 3 * width
    assert abs(period.median - 9) < 3 * (period.high - period.low)


def test_a_chain_too_short_is_marked() -> None:
    rng = np.random.default_rng(4)
    series = _series(rng, 30)
    scaled = scaled_data(series, series.indicators, 1000.0)
    noise = joint_process(scaled, HyperPrior(math.log(20.0), 0.2))
    best = noise.fit([noise.term(9.0)], fresh=True)
    result = sample(noise, best, np.full(best.parameters.size, 0.1), rng, n_steps=60)
    assert not result.converged


def test_r_hat_sees_chains_that_disagree() -> None:
    rng = np.random.default_rng(5)
    together = rng.normal(size=(400, 8, 2))
    assert np.all(split_r_hat(together) < 1.02)
    apart = together + np.array([0.0, 3.0])[None, None, :] * (np.arange(8) % 2)[None, :, None]
    assert split_r_hat(apart)[0] < 1.02 < 1.5 < split_r_hat(apart)[1]
