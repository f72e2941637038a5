"""The compiled likelihood equals the numpy one, and speed-ups of algebra change no number."""

from __future__ import annotations

import sys
from dataclasses import replace

import numpy as np
import pytest

from screener.core import NumericalError, ScreenerError
from screener.models import linear_algebra
from screener.models.joint import JointModel, OrbitTerm
from screener.models.kernels import KERNELS
from screener.models.latent import NumpyEngine, engine
from tests.unit.test_joint import _data, _setup


@pytest.mark.parametrize("profile", [False, True])
@pytest.mark.parametrize(
    "derivative", [(False,), (True,), (False, False, False), (True, False, True)]
)
def test_compiled_equals_numpy(derivative: tuple[bool, ...], profile: bool) -> None:
    pytest.importorskip("numba")
    model, parameters = _setup("quasi-periodic", derivative)
    model = replace(model, profile=profile)
    for shift in (0.0, -2.0, 1.5):  # short periods and decays, then long ones
        parameters = parameters.copy()
        parameters[:2] += shift
        expected, by_numpy = replace(model, compiled=False).value_and_gradient(parameters)
        value, gradient = replace(model, compiled=True).value_and_gradient(parameters)
        assert value == pytest.approx(expected, rel=1e-10)
        assert np.allclose(gradient, by_numpy, rtol=1e-10, atol=1e-10 * np.abs(by_numpy).max())


@pytest.mark.parametrize("loading", [0.8, -0.8])
@pytest.mark.parametrize("n", [40, 300])
def test_a_series_alone_compiled_equals_numpy(n: int, loading: float) -> None:
    """Both sides of the size at which algebra changes; a circle among the eccentric orbits."""
    pytest.importorskip("numba")
    rng = np.random.default_rng(n)
    model = JointModel(
        _data(n, 1, rng),
        KERNELS["quasi-periodic"],
        (False,),
        (OrbitTerm(7.0, 2.0), OrbitTerm(33.0, 2.0, True), OrbitTerm(4.1, 2.0, True)),
    )
    hyper = [np.log(20.0), np.log(40.0), np.log(0.5), loading, -1.5, -2.0]
    parameters = np.array([*hyper, 0.2, -0.1, 0.3, 1.4, 0.3, 0.0, 0.0])
    expected, by_numpy = replace(model, compiled=False).value_and_gradient(parameters)
    fast = replace(model, compiled=True)
    assert fast._single is not None
    value, gradient = fast.value_and_gradient(parameters)
    assert value == pytest.approx(expected, rel=1e-11)
    assert np.allclose(gradient, by_numpy, rtol=1e-9, atol=1e-9 * np.abs(by_numpy).max())


def test_a_series_alone_names_its_failure() -> None:
    pytest.importorskip("numba")
    model, parameters = _setup("quasi-periodic", (False,))
    parameters[3] = np.inf
    with pytest.raises(NumericalError):
        replace(model, compiled=True).value_and_gradient(parameters)


def test_environment_and_argument_choose(monkeypatch: pytest.MonkeyPatch) -> None:
    kernel = KERNELS["quasi-periodic"]
    monkeypatch.delenv("SCREENER_NUMBA", raising=False)
    assert isinstance(engine(kernel, None), NumpyEngine)
    assert isinstance(engine(KERNELS["matern 5/2"], True), NumpyEngine)
    monkeypatch.setenv("SCREENER_NUMBA", "1")
    assert isinstance(engine(kernel, False), NumpyEngine)
    pytest.importorskip("numba")
    assert not isinstance(engine(kernel, None), NumpyEngine)


def test_a_missing_compiler_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "screener.models.compiled", None)
    with pytest.raises(ScreenerError, match="extra 'fast'"):
        engine(KERNELS["quasi-periodic"], True)


@pytest.mark.parametrize("n", [1, 63, 64, 65, 131, 301])
def test_inverse_by_halves(n: int) -> None:
    rng = np.random.default_rng(n)
    root = rng.normal(size=(n, n))
    matrix = root @ root.T + n * np.eye(n)
    columns = rng.normal(size=(n, 3))
    factor = linear_algebra.cholesky(matrix.copy(order="F"), "a test")
    assert np.allclose(factor @ factor.T, matrix, rtol=1e-12)
    inverse = np.linalg.inv(matrix)
    assert np.allclose(
        linear_algebra.gram_of_inverse(linear_algebra.inverse_triangle(factor)),
        np.tril(inverse),
        atol=1e-13,
    )
    triangle = linear_algebra.inverse_triangle(factor)
    both = linear_algebra.gram_of_inverse(triangle, np.asfortranarray(columns))
    assert np.allclose(both, np.tril(columns @ columns.T - inverse), atol=1e-12)


def test_profile_is_the_best_of_the_linear_terms() -> None:
    model, parameters = _setup("quasi-periodic", (True, False))
    best: JointModel = replace(model, profile=True)
    solution = model.solve(parameters)
    # the marginal is the profile times the width of the posterior over that of the prior
    _, log_det = np.linalg.slogdet(solution.linear_covariance)
    occam = 0.5 * log_det - np.log(model.column_sd).sum()
    assert best.log_likelihood(parameters) + occam == pytest.approx(
        model.log_likelihood(parameters), abs=1e-9
    )
    value, gradient = best.value_and_gradient(parameters)
    step = 1e-6
    numeric = [
        (best.log_likelihood(parameters + step * e) - best.log_likelihood(parameters - step * e))
        / (2 * step)
        for e in np.eye(parameters.size)
    ]
    assert value == pytest.approx(best.log_likelihood(parameters), abs=1e-9)
    assert np.allclose(gradient, numeric, rtol=1e-5, atol=1e-5)
