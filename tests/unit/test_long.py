"""The path for long series against the dense form of the same kernel."""

from __future__ import annotations

import math
import sys

import numpy as np
import pytest

from screener.core import Array, NumericalError, ScreenerError
from screener.models.long import LongModel, rotation_term
from screener.search.periodogram import Precision, frequency_grid, power

POINT = np.log([12.0, 30.0, 0.4, 1.5, 0.2, 0.4])


def _model(n: int = 120) -> LongModel:
    rng = np.random.default_rng(8)
    time = np.sort(rng.uniform(0, 200, n))
    group = (np.arange(n) > n // 3).astype(np.intp)
    columns = np.stack([group == 0, group == 1, (time - 100) / 100], axis=1).astype(float)
    value = rng.normal(size=n) + 1.5 * np.sin(2 * math.pi * time / 5.1)
    return LongModel(time, value, rng.uniform(0.1, 0.4, n), columns, np.full(3, 8.0), group)


def _kernel(lag: Array) -> Array:
    """Two damped oscillators, written out (Foreman-Mackey et al. 2017, eq. 23)."""
    period, decay, half, amplitude = np.exp(POINT[:4])
    out = np.zeros_like(lag)
    for own, part in ((period, 1 / (1 + half)), (period / 2, half / (1 + half))):
        omega0, quality = 2 * math.pi / own, math.pi * decay / own
        eta = math.sqrt(1 - 1 / (4 * quality**2))
        angle = eta * omega0 * np.abs(lag)
        envelope = np.exp(-omega0 * np.abs(lag) / (2 * quality))
        out += part * envelope * (np.cos(angle) + np.sin(angle) / (2 * eta * quality))
    return np.asarray(amplitude**2 * out)


def _dense(model: LongModel) -> tuple[float, Precision]:
    jitter = np.exp(POINT[4:])[model.jitter]
    covariance = _kernel(model.time[:, None] - model.time[None, :])
    covariance += np.diag(model.error**2 + jitter**2)
    covariance += (model.columns * model.column_sd**2) @ model.columns.T
    inverse = np.linalg.inv(covariance)
    weighted = inverse @ model.value
    log_likelihood = -0.5 * (
        model.value @ weighted
        + np.linalg.slogdet(covariance)[1]
        + model.time.size * math.log(2 * math.pi)
    )
    return float(log_likelihood), Precision(weighted, matrix=inverse)


def test_likelihood_against_the_dense_form() -> None:
    pytest.importorskip("celerite2")
    model = _model()
    expected, _ = _dense(model)
    assert model.log_likelihood(POINT) == pytest.approx(expected, abs=1e-8)


def test_periodogram_against_the_dense_form() -> None:
    pytest.importorskip("celerite2")
    model = _model()
    _, dense = _dense(model)
    operator = model.precision(POINT)
    assert np.allclose(operator.weighted, dense.weighted, atol=1e-9)
    frequency = frequency_grid(200.0, oversampling=2)
    gain = power(model.time, operator, frequency)
    assert np.allclose(gain, power(model.time, dense, frequency), atol=1e-7)
    assert 1 / frequency[np.argmax(gain)] == pytest.approx(5.1, rel=0.02)


def test_decay_is_that_of_the_amplitude() -> None:
    pytest.importorskip("celerite2")
    term = rotation_term(10.0, 25.0, 1e-12, 2.0)
    at = np.array([0.0, 25.0])
    assert np.allclose(_peaks(term, at), [4.0, 4.0 / math.e], rtol=0.01)


def _peaks(term: object, at: Array) -> Array:
    """Upper envelope of the kernel near each lag: its maximum within half a period."""
    near = np.abs(at[:, None] + np.linspace(-5, 5, 4001)[None, :])
    value = term.get_value(near)  # type: ignore[attr-defined]
    # undo the decay within the window so that the maximum belongs to the lag asked for
    return np.asarray((value * np.exp((near - at[:, None]) / 25.0)).max(axis=1))


def test_failures_are_named(monkeypatch: pytest.MonkeyPatch) -> None:
    model = _model(20)
    monkeypatch.setitem(sys.modules, "celerite2", None)
    with pytest.raises(ScreenerError, match="extra 'long'"):
        model.log_likelihood(POINT)
    monkeypatch.undo()
    pytest.importorskip("celerite2")
    with pytest.raises(NumericalError, match="cannot be factorised"):
        LongModel(
            model.time[::-1].copy(), model.value, model.error, model.columns, model.column_sd,
            model.jitter,
        ).log_likelihood(POINT)  # fmt: skip
