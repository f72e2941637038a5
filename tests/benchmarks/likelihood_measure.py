"""Timing, ratios and the table of the likelihood benchmark."""

from __future__ import annotations

import importlib.util
import math
import platform
import statistics
import time
import warnings
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import threadpoolctl
from scipy.linalg import blas
from scipy.optimize import minimize

from screener.core import Array
from screener.models.joint import JointModel
from screener.models.long import rotation_term
from screener.models.long_noise import OSCILLATORS, LongJoint
from tests.benchmarks.likelihood_cases import (
    GeorgeOrbit,
    joint_case,
    orbit_case,
    single_case,
    times,
)

__all__ = ["measure"]

_SIZES = (50, 100, 200, 400, 800, 1600, 3200)
_LONG = (800, 1600, 3200, 6400)
_DENSE_GEORGE = 3200  # rows beyond which george's gradient (five matrices) is left out
_DENSE_JOINT = 800


def _seconds(call: Callable[[], object], repeats: int) -> float:
    start = time.thread_time()
    for _ in range(repeats):
        call()
    return (time.thread_time() - start) / repeats


def _in_turns(
    calls: Sequence[Callable[[], object]], rounds: int, at_least: float = 0.002
) -> list[list[float]]:
    """Seconds of each call in each round; short calls are repeated within a round."""
    repeats = [max(1, math.ceil(at_least / max(_seconds(call, 1), 1e-7))) for call in calls]
    out: list[list[float]] = [[] for _ in calls]
    for _ in range(rounds):
        for mine, call, n in zip(out, calls, repeats, strict=True):
            mine.append(_seconds(call, n))
    return out


def _ratio(above: Sequence[float], below: Sequence[float]) -> float:
    return statistics.median(a / b for a, b in zip(above, below, strict=True))


def _rounds(n: int) -> int:
    return 41 if n <= 200 else (15 if n <= 400 else (5 if n <= 800 else 1))


def _paths() -> dict[str, bool]:
    """Ways to the same number: name and whether it is compiled."""
    found = importlib.util.find_spec("numba") is not None
    return {"numpy": False, **({"numba": True} if found else {})}


def _single(n: int) -> dict[str, float]:
    """Likelihood and gradient of one series in five parameters against george's exact solver."""
    model, parameters, call, point = single_case(n)
    paths = {name: replace(model, compiled=flag) for name, flag in _paths().items()}
    value, expected = model.log_likelihood(parameters), call(point)[0]
    assert abs(value - expected) < 1e-5 * abs(expected), (value, expected)

    def run(one: JointModel) -> Callable[[], object]:
        return lambda: one.value_and_gradient(parameters)

    taken = _in_turns([lambda: call(point), *map(run, paths.values())], _rounds(n))
    return {name: _ratio(taken[0], t) for name, t in zip(paths, taken[1:], strict=True)}


def _celerite(n: int) -> dict[str, float]:
    """Likelihood and gradient of one series against celerite2, which has two damped oscillators.

    The numpy interface of celerite2 has no gradient: its likelihood is differenced in the five
    parameters, six evaluations in all. Ours: the long form (the same kernel, with linear terms)
    and the dense quasi-periodic one with its exact gradient (another kernel, the same use).
    """
    from celerite2 import GaussianProcess

    single, parameters, *_ = single_case(n)
    long = LongJoint(single.data, OSCILLATORS, (False,))
    point = np.array([math.log(23.0), math.log(50.0), math.log(0.5), 1.0, math.log(0.2)])
    time_, y, variance = single.data.time, single.data.value[0], single.data.variance[0]

    def likelihood(x: Array) -> float:
        period, decay, half = np.exp(x[:3]).tolist()
        process = GaussianProcess(rotation_term(period, decay, half, float(x[3])))
        process.compute(time_, diag=variance + math.exp(2 * x[4]), check_sorted=False)
        return float(process.log_likelihood(y))

    def reference() -> Array:
        value = likelihood(point)
        return np.array([(likelihood(point + step) - value) / 1e-6 for step in 1e-6 * np.eye(5)])

    value, gradient = long.value_and_gradient(point)
    assert abs(value - likelihood(point)) < 1e-5 * abs(value), (value, likelihood(point))
    assert np.allclose(gradient, reference(), rtol=1e-3, atol=1e-2), (gradient, reference())
    paths: dict[str, JointModel] = {"long form": long}
    if n <= _DENSE_JOINT:
        for name, flag in _paths().items():
            paths[f"dense {name}"] = replace(single, compiled=flag)
    points = [point] + [parameters] * (len(paths) - 1)

    def run(one: JointModel, x: Array) -> Callable[[], object]:
        return lambda: one.value_and_gradient(x)

    ours = [run(one, x) for one, x in zip(paths.values(), points, strict=True)]
    taken = _in_turns([reference, *ours], min(_rounds(n) + 4, 41))
    return {name: _ratio(taken[0], t) for name, t in zip(paths, taken[1:], strict=True)}


def _joint(n: int) -> dict[str, float]:
    """Three series jointly against the flop bound of the dense Cholesky factorisation."""
    model, parameters = joint_case(n)
    size = 3 * n
    rng = np.random.default_rng(0)
    a, b = (np.asfortranarray(rng.normal(size=(size, size))) for _ in range(2))
    c = np.zeros((size, size), order="F")
    calls: list[Callable[[], object]] = [lambda: blas.dgemm(1.0, a, b, 0.0, c, overwrite_c=1)]

    def likelihood(one: JointModel) -> Callable[[], object]:
        return lambda: one.log_likelihood(parameters)

    def gradient(one: JointModel) -> Callable[[], object]:
        return lambda: one.value_and_gradient(parameters)

    names = []
    for name, flag in _paths().items():
        one = replace(model, compiled=flag)
        calls += [likelihood(one), gradient(one)]
        names += [f"likelihood {name}", f"gradient {name}"]
    taken = _in_turns(calls, _rounds(n))
    # a product takes 2 size^3 operations, the factorisation size^3 / 3
    bound = [t / 6 for t in taken[0]]
    return {name: _ratio(t, bound) for name, t in zip(names, taken[1:], strict=True)}


def _optimum(
    objective: Callable[[Array], tuple[float, Array]], start: Array, bounds: Sequence[Any]
) -> Any:
    return minimize(
        lambda x: tuple(-part for part in objective(x)),
        start,
        jac=True,
        method="L-BFGS-B",
        bounds=bounds,
        options={"maxiter": 400, "ftol": 1e-11, "gtol": 1e-4, "maxcor": 25},
    )


def _map_fit(n: int) -> dict[str, float]:
    """One maximum a posteriori of twelve parameters, ours against george; same start, same end."""
    model, start = orbit_case(n)
    reference = GeorgeOrbit(model, start)
    prior_sd = np.array([0.3, 0.6, 0.4, 2.0, 1.2, 1.2, np.inf])
    walls = [(2.5, 3.7), (3.0, 6.5), (-1.9, 1.1), (1e-3, 20), (-5, 2), (-5, 2), (-6.3, 6.3)]

    def with_prior(
        evaluate: Callable[[Array], tuple[float, Array]],
    ) -> Callable[[Array], tuple[float, Array]]:
        def objective(x: Array) -> tuple[float, Array]:
            value, gradient = evaluate(x)
            z = (x[:7] - start) / prior_sd
            gradient = gradient.copy()
            gradient[:7] -= z / prior_sd
            return value - 0.5 * float(z @ z), gradient

        return objective

    free = [(None, None)] * 5
    # george starts with its linear terms at their best for the common start
    ends = [_optimum(with_prior(reference.value_and_gradient), reference.start, walls + free)]
    calls: list[Callable[[], object]] = [
        lambda: _optimum(with_prior(reference.value_and_gradient), reference.start, walls + free)
    ]
    names = list(_paths())

    def run(one: JointModel) -> Callable[[], Any]:
        return lambda: _optimum(with_prior(one.value_and_gradient), start, walls)

    for flag in _paths().values():
        one = replace(model, compiled=flag)
        calls.append(run(one))
        ends.append(run(one)())
    for end in ends[1:]:
        assert abs(end.fun - ends[0].fun) < 1e-3, (end.fun, ends[0].fun)
        assert np.allclose(end.x, ends[0].x[:7], atol=0.03), (end.x, ends[0].x)
    print(f"  evaluations: george {ends[0].nfev}, ours {', '.join(str(e.nfev) for e in ends[1:])}")
    taken = _in_turns(calls, 7, 0.0)
    return {name: _ratio(taken[0], t) for name, t in zip(names, taken[1:], strict=True)}


def _long() -> tuple[float | None, dict[int, float]]:
    """Exponent of growth of the long path's likelihood, and its gain over the dense form.

    The dense form is the quasi-periodic one with numpy: not the same kernel, the same use.
    """
    if importlib.util.find_spec("celerite2") is None:
        return None, {}
    from screener.models.long import LongModel

    calls: list[Callable[[], object]] = []
    for n in _LONG:
        time_, y = times(n), np.random.default_rng(2).normal(size=n)
        model = LongModel(time_, y, np.full(n, 0.3), np.ones((n, 1)), np.array([10.0]))
        point = np.log([23.0, 50.0, 0.5, 1.0, 0.2])
        calls.append(lambda model=model, point=point: model.log_likelihood(point))  # type: ignore[misc]
    taken = _in_turns(calls, 15, 0.01)
    typical = [statistics.median(t) for t in taken]
    exponent = float(np.polyfit(np.log(_LONG), np.log(typical), 1)[0])
    gain = {}
    for n in (200, 400, 800, 1600):
        single, parameters, *_ = single_case(n)
        time_ = single.data.time
        one = LongModel(
            time_, single.data.value[0], np.sqrt(single.data.variance[0]), np.ones((n, 1)),
            np.array([10.0]),
        )  # fmt: skip
        both = _in_turns(
            [
                lambda single=single, parameters=parameters: single.log_likelihood(parameters),  # type: ignore[misc]
                lambda one=one, point=point: one.log_likelihood(point),  # type: ignore[misc]
            ],
            _rounds(n) // 2 + 1,
        )
        gain[n] = _ratio(*both)
    return exponent, gain


def _hardware() -> str:
    model = platform.processor() or platform.machine()
    try:
        with Path("/proc/cpuinfo").open(encoding="utf-8") as lines:
            model = next(line.split(":")[1].strip() for line in lines if "model name" in line)
    except (OSError, StopIteration):
        pass
    pools = {
        f"{p['internal_api']} {p.get('architecture', '?')} x{p['num_threads']}"
        for p in threadpoolctl.threadpool_info()
    }
    return f"{model}; Python {platform.python_version()}, numpy {np.__version__}; {sorted(pools)}"


def measure() -> dict[str, float | None]:
    """Measure everything, print a table, return the named figures (None = not installed)."""
    warnings.simplefilter("ignore")
    print(_hardware())
    figures: dict[str, float | None] = {}
    print("likelihood + gradient, one series, 5 parameters: george's time / ours")
    for n in _SIZES:
        if n > _DENSE_GEORGE:
            print(f"  N={n:5d}  george left out: its gradient takes {5 * 8 * n * n / 1e9:.1f} GB")
            continue
        row = _single(n)
        print(f"  N={n:5d}  " + "  ".join(f"{k} {v:6.2f}" for k, v in row.items()), flush=True)
        if n == 200:
            for name in ("numpy", "numba"):
                figures[f"gradient_vs_george_n200_{name}"] = row.get(name)
    if importlib.util.find_spec("celerite2") is not None:
        print("likelihood + gradient, one series: celerite2's time (differences) / ours")
        for n in _SIZES:
            row = _celerite(n)
            print(f"  N={n:5d}  " + "  ".join(f"{k} {v:6.2f}" for k, v in row.items()), flush=True)
    print("three series jointly: our time / flop bound of the dense 3N Cholesky")
    for n in _SIZES:
        if n > _DENSE_JOINT:
            continue
        row = _joint(n)
        print(f"  N={n:5d}  " + "  ".join(f"{k} {v:5.2f}" for k, v in row.items()), flush=True)
        if n == 200:
            for what in ("likelihood", "gradient"):
                name, best = min(
                    ((k, v) for k, v in row.items() if k.startswith(what)), key=lambda kv: kv[1]
                )
                figures[f"joint_{what}_vs_flop_bound_n200"] = best
                print(f"           best: {name}")
    print("one maximum a posteriori, 12 parameters, N = 150: george's time / ours")
    fits = _map_fit(150)
    name, best = max(fits.items(), key=lambda kv: kv[1])
    print("  " + "  ".join(f"{k} {v:5.2f}" for k, v in fits.items()) + f"  best: {name}")
    figures["map_vs_george_n150"] = best
    exponent, gain = _long()
    figures["growth_exponent_long"] = exponent
    if exponent is None:
        print("long series: celerite2 is not installed")
    else:
        print(f"long series, N = {_LONG}: time grows as N^{exponent:.2f}; dense time / long time")
        print("  " + "  ".join(f"N={n}: {v:.1f}" for n, v in gain.items()))
    return figures
