"""The models that are timed, ours and the same in reference libraries."""

from __future__ import annotations

import math
from collections.abc import Callable

import george
import numpy as np
from george.modeling import Model

from screener.core import Array
from screener.models.joint import JointData, JointModel, OrbitTerm
from screener.models.kernels import KERNELS

__all__ = ["GeorgeOrbit", "joint_case", "orbit_case", "single_case", "times"]

_GROUPS = ("one", "two")  # instruments


def times(n: int, seed: int = 3) -> Array:
    """Irregular nights: two in three, with the Sun in the way for part of each year."""
    rng = np.random.default_rng(seed)
    nights = np.arange(3 * n + 400)
    nights = nights[(nights % 365 < 230) & (rng.random(nights.size) < 0.67)][:n]
    return np.sort(nights + rng.uniform(-0.15, 0.15, nights.size))


def _signal(time: Array, period: float) -> Array:
    angle = 2 * math.pi * time / period
    return np.asarray(np.sin(angle) + 0.4 * np.sin(2 * angle + 1))


def single_case(n: int) -> tuple[JointModel, Array, Callable[[Array], tuple[float, Array]], Array]:
    """One series, quasi-periodic, five parameters: ours, its point, george's call, its point.

    The zero point is held at zero in both.
    """
    time = times(n)
    rng = np.random.default_rng(1)
    y = _signal(time, 23.0) + rng.normal(0, 0.3, n)
    error = rng.uniform(0.2, 0.3, n)
    data = JointData(
        time, y[None], error[None] ** 2, np.ones((1, n), bool), np.zeros((1, n), np.intp), 1,
        np.ones((1, n, 1)), np.array([1e-7]),
    )  # fmt: skip
    model = JointModel(data, KERNELS["quasi-periodic"], (False,))
    period, decay, shape, amplitude, jitter = 23.0, 50.0, 0.5, 1.0, 0.2
    process = george.GP(
        _george_kernel(period, decay, shape, amplitude),
        white_noise=2 * math.log(jitter),
        fit_white_noise=True,
        solver=george.BasicSolver,
    )

    def call(point: Array) -> tuple[float, Array]:
        process.set_parameter_vector(point)
        process.compute(time, error)
        return process.log_likelihood(y), process.grad_log_likelihood(y)

    parameters = np.array(
        [math.log(period), math.log(decay), math.log(shape), amplitude, math.log(jitter)]
    )
    return model, parameters, call, process.get_parameter_vector()


def _george_kernel(
    period: float, decay: float, shape: float, amplitude: float
) -> george.kernels.Kernel:
    kernel = amplitude**2 * george.kernels.ExpSquaredKernel(metric=decay**2)
    return kernel * george.kernels.ExpSine2Kernel(
        gamma=1 / (2 * shape**2), log_period=math.log(period)
    )


def joint_case(n: int) -> tuple[JointModel, Array]:
    """Velocities and two indicators, the derivative under the velocities and one of them."""
    time = times(n)
    rng = np.random.default_rng(1)
    value = np.stack([_signal(time, 23.0), _signal(time + 3, 23.0), _signal(time + 1, 23.0)])
    value += rng.normal(0, 0.3, value.shape)
    columns = np.zeros((3, n, 3))
    for s in range(3):
        columns[s, :, s] = 1
    data = JointData(
        time, value, rng.uniform(0.2, 0.3, (3, n)) ** 2, np.ones((3, n), bool),
        np.repeat(np.arange(3)[:, None], n, axis=1), 3, columns, np.full(3, 10.0),
    )  # fmt: skip
    model = JointModel(data, KERNELS["quasi-periodic"], (True, False, True))
    hyper = np.log([23.0, 50.0, 0.5])
    return model, np.concatenate([hyper, [0.5, 0.8, 0.4], [0.6, -0.4], np.log([0.2] * 3)])


def orbit_case(n: int) -> tuple[JointModel, Array]:
    """A circular orbit on a quasi-periodic process, two instruments and a slope.

    Twelve parameters: period, decay, shape and amplitude of the process, two jitters, two zero
    points, a slope, and frequency and two amplitudes of the orbit. ``profile`` makes the optimum
    that of all twelve at once. The start is a little off.
    """
    time = times(n)
    rng = np.random.default_rng(4)
    instrument = (np.arange(n) > n // 2).astype(np.intp)
    y = _signal(time, 23.0) + 0.8 * np.cos(2 * math.pi * time / 7.3) + 0.3 * instrument
    y += rng.normal(0, 0.3, n)
    lever = (time - time.mean()) / np.ptp(time)
    columns = np.stack([instrument == 0, instrument == 1, lever], axis=1)[None].astype(float)
    data = JointData(
        time, y[None], np.full((1, n), 0.25**2), np.ones((1, n), bool), instrument[None], 2,
        columns, np.full(3, 10.0),
    )  # fmt: skip
    model = JointModel(
        data, KERNELS["quasi-periodic"], (False,), (OrbitTerm(7.3, 3.0),), profile=True
    )
    start = np.concatenate([np.log([21.0, 60.0, 0.7]), [0.7], np.log([0.1, 0.1]), [0.3]])
    return model, start


class _OrbitMean(Model):  # type: ignore[misc]
    """Zero points, slope and a circular orbit."""

    parameter_names = ("one", "two", "slope", "frequency", "cos", "sin")

    def __init__(self, data: JointData, term: OrbitTerm, **values: float) -> None:
        self._columns = data.columns[0]
        self._lever = data.time - data.mid_time
        self._span = data.span
        self._base = 1 / term.period
        super().__init__(**values)

    def _angle(self) -> Array:
        rate = 2 * math.pi * self._base + self.frequency / self._span
        return np.asarray(rate * self._lever)

    def get_value(self, x: Array) -> Array:
        angle = self._angle()
        linear = self._columns @ np.array([self.one, self.two, self.slope])
        return np.asarray(linear + self.cos * np.cos(angle) - self.sin * np.sin(angle))

    def compute_gradient(self, x: Array) -> Array:
        angle = self._angle()
        cos, sin = np.cos(angle), np.sin(angle)
        by_angle = -self.cos * sin - self.sin * cos
        return np.stack([*self._columns.T, by_angle * self._lever / self._span, cos, -sin])


class _Jitters(Model):  # type: ignore[misc]
    """ln of the added variance, one parameter for each instrument."""

    parameter_names = _GROUPS

    def __init__(self, group: Array, **values: float) -> None:
        self._group = group
        super().__init__(**values)

    def get_value(self, x: Array) -> Array:
        return np.where(self._group == 0, self.one, self.two)

    def compute_gradient(self, x: Array) -> Array:
        return np.stack([self._group == 0, self._group == 1]).astype(float)


class GeorgeOrbit:
    """``orbit_case`` through george: the twelve parameters, with its own gradient.

    Parameters in our units and order: ours, then the linear terms.
    """

    def __init__(self, model: JointModel, parameters: Array) -> None:
        data = model.data
        self._data = data
        self._sd = model.column_sd
        names = _OrbitMean.parameter_names
        self._process = george.GP(
            _george_kernel(1.0, 1.0, 1.0, 1.0),
            mean=_OrbitMean(data, model.orbits[0], **dict.fromkeys(names, 0.0)),
            fit_mean=True,
            white_noise=_Jitters(data.jitter[0], one=0.0, two=0.0),
            fit_white_noise=True,
            solver=george.BasicSolver,
        )
        self.start = np.concatenate([parameters, model.solve(parameters).linear_mean])

    def value_and_gradient(self, point: Array) -> tuple[float, Array]:
        """Log-likelihood plus the Gaussian prior of the linear terms, and its gradient."""
        period, decay, shape, amplitude, one, two, frequency, *linear = point
        gamma = 0.5 * math.exp(-2 * shape)
        # george's order: mean, white noise, then constant, metric, gamma, log period
        self._process.set_parameter_vector(
            [
                *linear[:3], frequency, *linear[3:], 2 * one, 2 * two,
                2 * math.log(abs(amplitude)), 2 * decay, gamma, period,
            ]
        )  # fmt: skip
        self._process.compute(self._data.time, np.sqrt(self._data.variance[0]))
        y = self._data.value[0]
        value = self._process.log_likelihood(y)
        g = self._process.grad_log_likelihood(y)
        scaled = np.array(linear) / self._sd
        by_linear = np.concatenate([g[:3], g[4:6]]) - scaled / self._sd
        gradient = [
            g[11], 2 * g[9], -2 * gamma * g[10], 2 / amplitude * g[8], 2 * g[6], 2 * g[7], g[3],
        ]  # fmt: skip
        return value - 0.5 * float(scaled @ scaled), np.concatenate([gradient, by_linear])
