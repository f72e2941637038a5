"""The joint likelihood against the explicit dense form, finite differences and george."""

from __future__ import annotations

import math

import george
import numpy as np
import pytest

from screener.core import Array, NumericalError
from screener.models.joint import JointData, JointModel, OrbitTerm
from screener.models.joint_data import orbit_columns
from screener.models.kernels import KERNELS, Lags

HYPER = {"period": math.log(20.0), "decay": math.log(40.0), "shape": math.log(0.5), "mix": 0.3}
CASES = [
    ("quasi-periodic", (True, False, True)),
    ("quasi-periodic", (False, False, False)),
    ("quasi-periodic", (True,)),
    ("quasi-periodic", (False,)),
    ("quasi-periodic with cosine", (True, True)),
    ("quasi-periodic with cosine", (False,)),
    ("matern 5/2", (True, True, True)),
    (None, (False, False)),
]


def _data(n: int, n_series: int, rng: np.random.Generator) -> JointData:
    """Random series with gaps, missing indicators, two instruments and a slope."""
    time = np.sort(rng.uniform(0, 300, n))
    instrument = (np.arange(n) > n // 2).astype(int)
    mask = np.ones((n_series, n), dtype=bool)
    mask[1:] = rng.random((n_series - 1, n)) > 0.2
    mask[1:, :4] = False  # times with velocities only
    columns = np.zeros((n_series, n, 2 * n_series + 1))
    jitter = np.zeros((n_series, n), dtype=np.intp)
    for s in range(n_series):
        for k in range(2):
            columns[s, instrument == k, 2 * s + k] = 1
        jitter[s] = 2 * s + instrument
    columns[0, :, -1] = (time - 150) / 150
    return JointData(
        time,
        rng.normal(size=(n_series, n)),
        rng.uniform(0.05, 0.2, (n_series, n)) ** 2,
        mask,
        jitter,
        2 * n_series,
        columns,
        np.full(2 * n_series + 1, 10.0),
    )


def _setup(kernel: str | None, derivative: tuple[bool, ...]) -> tuple[JointModel, Array]:
    rng = np.random.default_rng(5)
    n_series = len(derivative)
    model = JointModel(
        _data(25, n_series, rng),
        KERNELS[kernel] if kernel else None,
        derivative,
        (OrbitTerm(7.0, 2.0), OrbitTerm(33.0, 2.0, eccentric=True)),
    )
    parts: list[Array] = []
    if model.kernel is not None:
        parts.append(np.array([HYPER[name] for name in model.kernel.names]))
        parts.append(rng.normal(size=n_series + sum(derivative)))
    parts.append(np.log(rng.uniform(0.1, 0.4, 2 * n_series)))
    parts.append(np.array([0.2, -0.1, 0.3, 0.4]))
    return model, np.concatenate(parts)


def _dense(model: JointModel, parameters: Array) -> tuple[float, Array, Array]:
    """Log-likelihood, inverse covariance and weighted data by the obvious route."""
    data, n = model.data, model.data.n_obs
    covariance = np.zeros((data.n_series * n,) * 2)
    if model.kernel is not None:
        blocks = model.kernel.blocks(
            data.lags, parameters[model.slices["kernel"]], any(model.derivative)
        )
        loading = model._loadings(parameters)
        latent = blocks.gg
        if blocks.dg is not None and blocks.dd is not None:
            latent = np.block([[blocks.gg, blocks.dg.T], [blocks.dg, blocks.dd]])
        spread = np.concatenate([np.kron(c[:, None], np.eye(n)) for c in loading.T], axis=1)
        covariance = spread @ latent @ spread.T
    jitter = np.exp(2 * parameters[model.slices["jitter"]])[data.jitter]
    covariance += np.diag((data.variance + jitter).ravel())
    design = data.columns.reshape(data.n_series * n, -1)
    for term, values in zip(model.orbits, model.orbit_parameters(parameters), strict=True):
        columns = np.zeros((data.n_series, n, 2))
        columns[0] = orbit_columns(term, values, data, gradient=False)[0]
        design = np.concatenate([design, columns.reshape(-1, 2)], axis=1)
    covariance += (design * model.column_sd**2) @ design.T
    keep = data.mask.ravel()
    covariance, y = covariance[np.ix_(keep, keep)], data.value.ravel()[keep]
    inverse = np.linalg.inv(covariance)
    log_likelihood = -0.5 * (
        y @ inverse @ y + np.linalg.slogdet(covariance)[1] + y.size * math.log(2 * math.pi)
    )
    return float(log_likelihood), inverse[:n, :n], (inverse @ y)[:n]


@pytest.mark.parametrize(("kernel", "derivative"), CASES)
def test_against_the_dense_form(kernel: str | None, derivative: tuple[bool, ...]) -> None:
    model, parameters = _setup(kernel, derivative)
    expected, precision, weighted = _dense(model, parameters)
    assert model.log_likelihood(parameters) == pytest.approx(expected, abs=1e-8)
    solution = model.solve(parameters)
    assert np.allclose(solution.rv_precision, precision, atol=1e-9 * np.abs(precision).max())
    assert np.allclose(solution.rv_weighted, weighted, atol=1e-8)


@pytest.mark.parametrize(("kernel", "derivative"), CASES)
def test_gradient_against_finite_differences(
    kernel: str | None, derivative: tuple[bool, ...]
) -> None:
    model, parameters = _setup(kernel, derivative)
    value, gradient = model.value_and_gradient(parameters)
    assert value == pytest.approx(model.log_likelihood(parameters), abs=1e-9)
    step = 1e-6
    numeric = [
        (model.log_likelihood(parameters + step * e) - model.log_likelihood(parameters - step * e))
        / (2 * step)
        for e in np.eye(parameters.size)
    ]
    assert np.allclose(gradient, numeric, rtol=1e-5, atol=1e-5)


def test_against_george_where_the_models_coincide() -> None:
    rng = np.random.default_rng(2)
    n = 40
    time, y = np.sort(rng.uniform(0, 100, n)), rng.normal(size=n)
    error = rng.uniform(0.1, 0.3, n)
    period, decay, shape, amplitude = 11.0, 30.0, 0.6, 1.3
    # george: ExpSine2 = exp(-gamma sin^2(pi r / P)), ExpSquared = exp(-r^2 / (2 metric))
    kernel = amplitude**2 * george.kernels.ExpSine2Kernel(
        gamma=1 / (2 * shape**2), log_period=math.log(period)
    )
    kernel *= george.kernels.ExpSquaredKernel(metric=decay**2)
    process = george.GP(kernel)
    process.compute(time, np.sqrt(error**2 + 0.2**2))
    data = JointData(
        time, y[None], error[None] ** 2, np.ones((1, n), bool), np.zeros((1, n), np.intp), 1,
        np.ones((1, n, 1)), np.array([1e-7]),  # a zero point held at zero
    )  # fmt: skip
    model = JointModel(data, KERNELS["quasi-periodic"], (False,))
    parameters = np.log([period, decay, shape, 1.0, 0.2])
    parameters[3] = amplitude
    assert model.log_likelihood(parameters) == pytest.approx(process.log_likelihood(y), abs=1e-6)


@pytest.mark.parametrize("name", sorted(KERNELS))
def test_derivative_blocks_against_finite_differences(name: str) -> None:
    kernel = KERNELS[name]
    parameters = np.array([HYPER[key] for key in kernel.names])

    def k(lag: float) -> float:
        lags = Lags.of(np.array([0.0, lag]))
        return float(kernel.blocks(lags, parameters, derivative=False).gg[1, 0])

    lag, h = 7.3, 1e-4
    first = (k(lag + h) - k(lag - h)) / (2 * h)
    second = (k(lag + h) - 2 * k(lag) + k(lag - h)) / h**2
    scale2 = -1 / ((2 * k(h) - 2 * k(0.0)) / h**2)
    blocks = kernel.blocks(Lags.of(np.array([0.0, lag])), parameters, derivative=True)
    assert blocks.dg is not None and blocks.dd is not None
    assert blocks.dg[1, 0] == pytest.approx(first * math.sqrt(scale2), rel=1e-4)
    assert blocks.dd[1, 0] == pytest.approx(-second * scale2, rel=1e-3)
    assert blocks.dd[0, 0] == pytest.approx(1.0)


def test_a_failed_factorisation_says_so() -> None:
    model, parameters = _setup("quasi-periodic", (False, False, False))
    parameters[model.slices["a"]] = np.nan
    with pytest.raises(NumericalError):
        model.log_likelihood(parameters)


def test_draws_have_the_model_covariance() -> None:
    model, parameters = _setup("quasi-periodic", (True, False))
    draws = np.array(
        [model.draw(parameters, np.random.default_rng(seed))[0] for seed in range(3000)]
    )
    loading = model._loadings(parameters)[0]
    jitter = np.exp(2 * parameters[model.slices["jitter"]])[model.data.jitter[0]]
    expected = loading @ loading + model.data.variance[0] + jitter
    # the variance of 3000 draws has a relative error of sqrt(2 / 3000) = 2.6 %
    assert np.allclose(draws.var(axis=0) / expected, 1.0, atol=0.13)
