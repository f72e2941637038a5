"""A maximum a posteriori of ours against the same problem solved through george.

Source: george (Ambikasaran et al. 2015, IEEE TPAMI 38, 252), exact solver; scipy's Nelder-Mead,
so that neither likelihood, gradient nor optimiser are shared.
"""

from __future__ import annotations

import functools
import math

import george
import numpy as np
import pytest
from scipy.optimize import minimize

from screener.core import Array
from screener.models.fitting import Fit, HyperPrior, fit, prior_terms, starting_point
from screener.models.joint import JointData, JointModel
from screener.models.kernels import KERNELS

PRIOR = HyperPrior(math.log(12.0), 0.2)


def george_likelihood(parameters: Array, time: Array, y: Array, error: Array) -> float:
    """The same parameters in george's terms."""
    period, decay, shape = np.exp(parameters[:3])
    kernel = parameters[3] ** 2 * george.kernels.ExpSine2Kernel(
        gamma=1 / (2 * shape**2), log_period=math.log(period)
    )
    kernel *= george.kernels.ExpSquaredKernel(metric=decay**2)
    process = george.GP(kernel)
    process.compute(time, np.hypot(error, math.exp(parameters[4])))
    return float(process.log_likelihood(y, quiet=True))


@functools.cache
def problem() -> tuple[JointModel, Array, Array, Array]:
    rng = np.random.default_rng(9)
    n = 45
    time, error = np.sort(rng.uniform(0, 90, n)), rng.uniform(0.1, 0.3, n)
    data = JointData(
        time, np.zeros((1, n)), error[None] ** 2, np.ones((1, n), bool),
        np.zeros((1, n), np.intp), 1, np.ones((1, n, 1)), np.array([1e-6]),
    )  # fmt: skip
    model = JointModel(data, KERNELS["quasi-periodic"], (False,))
    truth = np.array([math.log(11.0), math.log(25.0), math.log(0.5), 1.0, math.log(0.15)])
    y = model.draw(truth, rng)
    full = JointData(
        time, y, data.variance, data.mask, data.jitter, 1, data.columns, data.column_sd
    )
    return JointModel(full, model.kernel, (False,)), time, y[0], error


@functools.cache
def ours() -> Fit:
    model = problem()[0]
    return fit(model, PRIOR, [starting_point(model, PRIOR)], 300)


def test_both_give_the_same_likelihood_at_our_optimum() -> None:
    model, time, y, error = problem()
    theirs = george_likelihood(ours().parameters, time, y, error)
    assert ours().log_likelihood == pytest.approx(theirs, abs=1e-4)
    assert model.log_likelihood(ours().parameters) == pytest.approx(theirs, abs=1e-4)


def test_both_find_the_same_optimum() -> None:
    model, time, y, error = problem()
    mean, sd, lower, upper = prior_terms(model, PRIOR)

    def objective(parameters: Array) -> float:
        z = (parameters - mean) / sd
        return -george_likelihood(parameters, time, y, error) + 0.5 * float(z @ z)

    run = minimize(
        objective, starting_point(model, PRIOR), method="Nelder-Mead",
        bounds=list(zip(lower, upper, strict=True)),
        options={"xatol": 1e-5, "fatol": 1e-7, "maxiter": 3000, "maxfev": 3000, "adaptive": True},
    )  # fmt: skip
    assert run.success
    assert ours().converged
    assert ours().objective == pytest.approx(-run.fun, abs=2e-3)
    # flat directions: parameters agree to a small part of their errors (about 0.1 to 0.5)
    assert np.allclose(ours().parameters, run.x, atol=0.02)
