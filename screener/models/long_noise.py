"""The activity model of long series: two damped oscillators under the velocities.

Where the joint process would need matrices of thousands of rows, ``LongModel`` takes its place:
a semi-separable kernel under the velocities. What the joint model learns from the indicators
enters in two ways: the rotation period and the decay time fitted to the best of them become the
prior, and every indicator is a linear term of the velocities. Gradients in the few parameters of
the noise are forward differences of the likelihood, those in the orbits are exact.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from importlib.util import find_spec

import numpy as np

from screener.core import Array, IntArray, NumericalError
from screener.models.dataset import Scaled
from screener.models.fitting import Fit, HyperPrior
from screener.models.joint import JointData, JointModel, OrbitTerm
from screener.models.joint_data import Solution, orbit_columns
from screener.models.kernels import Blocks, Lags
from screener.models.laplace import laplace
from screener.models.long import LongModel, LongPrecision
from screener.models.noise import NoiseModel, velocities_only
from screener.search.periodogram import Precision

__all__ = ["DENSE_UP_TO", "OSCILLATORS", "LongJoint", "LongNoise", "is_long", "long_processes"]

DENSE_UP_TO = 600  # velocities; beyond, the dense joint model takes many minutes a star
_STEP = 1e-6
_SIGNIFICANT = 10.0  # gain in log-likelihood by which an indicator's own process must show
_APPROXIMATION = (
    "The series is long ({n} velocities): the activity model is two damped oscillators, at the "
    "rotation period and at half of it, under the velocities alone. {guide} "
    "The joint process of velocities and indicators serves up to {most} velocities."
)


class _Oscillators:
    """Stands where a kernel of the dense form would: names of the parameters only."""

    names = ("period", "decay", "half")

    def blocks(self, lags: Lags, log_parameters: Array, derivative: bool) -> Blocks:
        raise NotImplementedError("long series have no dense form")

    def contract(
        self, lags: Lags, log_parameters: Array, blocks: Blocks, weights: tuple[Array, ...]
    ) -> Array:
        raise NotImplementedError("long series have no dense form")


OSCILLATORS = _Oscillators()


@dataclass(frozen=True, eq=False)
class LongSolution(Solution):
    """A solution whose precision matrix is an operator; ``rv_precision`` is empty."""

    precision: LongPrecision | None = None

    def velocity_block(self, rows: IntArray) -> Array:
        assert self.precision is not None
        return self.precision.block(rows)


@dataclass(frozen=True, eq=False)
class LongJoint(JointModel):
    """``JointModel`` of one series with the kernel of ``LongModel``; same parameters and calls."""

    @cached_property
    def _base(self) -> tuple[Array, Array]:
        data = self.data
        return data.value[0], np.sqrt(data.variance[0])

    def _long(self, parameters: Array, gradient: bool) -> tuple[LongModel, list[list[Array]]]:
        columns, slopes = [self.data.columns[0]], []
        for term, values in zip(self.orbits, self.orbit_parameters(parameters), strict=True):
            own, by_parameter = orbit_columns(term, values, self.data, gradient)
            columns.append(own)
            slopes.append(by_parameter)
        value, error = self._base
        model = LongModel(
            self.data.time, value, error, np.concatenate(columns, axis=1), self.column_sd,
            self.data.jitter[0],
        )  # fmt: skip
        return model, slopes

    def _own(self, parameters: Array) -> Array:
        """Parameters as ``LongModel`` takes them."""
        start = self.slices["orbits"].start
        out = parameters[:start].copy()
        out[3] = math.log(max(abs(parameters[3]), 1e-9))
        return out

    def log_likelihood(self, parameters: Array) -> float:
        """As ``JointModel.log_likelihood``."""
        return self._long(parameters, False)[0].log_likelihood(self._own(parameters))

    def value_and_gradient(self, parameters: Array) -> tuple[float, Array]:
        """As ``JointModel.value_and_gradient``."""
        value, gradient, _ = self._look(parameters)
        return value, gradient

    def gradient_and_linear_mean(self, parameters: Array) -> tuple[Array, Array]:
        """As ``JointModel.gradient_and_linear_mean``."""
        _, gradient, beta = self._look(parameters)
        return gradient, beta

    def linear_terms(self, parameters: Array) -> tuple[float, Array, Array]:
        """As ``JointModel.linear_terms``."""
        solved = self._long(parameters, False)[0].solution(self._own(parameters))
        return (
            solved.log_likelihood,
            solved.beta,
            np.asarray(np.linalg.inv(solved.inverse_small), dtype=np.float64),
        )

    def _look(self, parameters: Array) -> tuple[float, Array, Array]:
        model, slopes = self._long(parameters, True)
        solved = model.solution(self._own(parameters))
        out = np.zeros(parameters.size)
        start = self.slices["orbits"].start
        for i in range(start):
            moved = parameters.copy()
            moved[i] += _STEP
            out[i] = (model.log_likelihood(self._own(moved)) - solved.log_likelihood) / _STEP
        # derivative in a column: K^-1 (y - A beta) beta^T - K^-1 A N^-1
        by_column = np.outer(solved.precision.weighted, solved.beta)
        assert solved.precision.low_rank is not None
        by_column -= solved.precision.low_rank @ solved.inverse_small
        column, at = self.data.columns.shape[2], start
        for own in slopes:
            for slope in own:
                out[at] = float(np.vdot(slope, by_column[:, column : column + 2]))
                at += 1
            column += 2
        return solved.log_likelihood, out, solved.beta

    def solve(self, parameters: Array, velocities: bool = True) -> Solution:
        """As ``JointModel.solve``, with an operator for the precision matrix."""
        model, _ = self._long(parameters, False)
        solved = model.solution(self._own(parameters))
        rest = model.value - model.columns @ solved.beta
        activity = np.zeros(rest.size)
        if velocities:
            activity = np.asarray(solved.precision.process.predict(rest))
        return LongSolution(
            solved.log_likelihood,
            solved.beta,
            solved.inverse_small.T @ solved.inverse_small,
            np.zeros((0, 0)),
            solved.precision.weighted,
            activity,
            solved.precision,
        )

    def predict_activity(self, parameters: Array, time: Array) -> tuple[Array, Array]:
        """As ``JointModel.predict_activity``."""
        model, _ = self._long(parameters, False)
        solved = model.solution(self._own(parameters))
        rest = model.value - model.columns @ solved.beta
        mean, variance = solved.precision.process.predict(rest, t=time, return_var=True)
        return np.asarray(mean), np.sqrt(np.maximum(variance, 0.0))

    def draw(self, parameters: Array, rng: np.random.Generator, orbits: bool = False) -> Array:
        """As ``JointModel.draw``."""
        model, _ = self._long(parameters, False)
        solved = model.solution(self._own(parameters))
        out = np.asarray(solved.precision.process.dot_tril(rng.standard_normal(model.time.size)))
        if orbits:
            out = out + model.columns @ solved.beta
        return out[None]


@dataclass(eq=False)
class LongNoise(NoiseModel):
    """``NoiseModel`` on ``LongJoint``."""

    def model(self, orbits: Sequence[OrbitTerm]) -> JointModel:
        """The long form with these orbits."""
        return LongJoint(self.data, OSCILLATORS, self.derivative, tuple(orbits))

    def precision(self, result: Fit) -> Precision:
        """What a periodogram on top of this fit needs."""
        solution = result.model.solve(result.parameters, velocities=False)
        assert isinstance(solution, LongSolution) and solution.precision is not None
        return solution.precision


def is_long(n_obs: int) -> bool:
    """Whether a series of this length gets the long form (celerite2 must be installed)."""
    return n_obs > DENSE_UP_TO and find_spec("celerite2") is not None


def long_processes(scaled: Scaled, prior: HyperPrior) -> tuple[LongNoise, LongNoise]:
    """What stands for the velocity process and for the joint process of a long series."""
    scale = float(scaled.scale[0])
    alone = LongNoise(
        "velocity process", velocities_only(scaled.data, 0), OSCILLATORS, (False,), prior, scale
    )
    informed, name = _informed(scaled, prior)
    guide = (
        f"Its rotation period and decay time are guided by a fit to {name}; the indicators are "
        "linear terms of the velocities."
        if name
        else "No indicator shows a process of its own that could guide it."
    )
    words = _APPROXIMATION.format(n=scaled.data.n_obs, guide=guide, most=DENSE_UP_TO)
    data = velocities_only(scaled.data, scaled.cycle_columns)
    if scaled.data.n_series > 1:
        extra = np.where(scaled.data.mask[1:], scaled.data.value[1:], 0.0).T[None]
        data = replace(
            data,
            columns=np.concatenate([data.columns, extra], axis=2),
            column_sd=np.concatenate([data.column_sd, np.full(extra.shape[2], 2.0)]),
        )
    together = LongNoise(
        "joint process", data, OSCILLATORS, (False,), informed, scale, approximation=words
    )
    return alone, together


def _informed(scaled: Scaled, prior: HyperPrior) -> tuple[HyperPrior, str]:
    """Prior of period and decay from the indicator that tells the period best; its name."""
    best, chosen = prior, ""
    narrowest = prior.log_period_sd
    for s in range(1, scaled.data.n_series):
        noise = LongNoise(
            scaled.names[s], _series(scaled.data, s), OSCILLATORS, (False,), prior, 1.0
        )
        white = NoiseModel(scaled.names[s], noise.data, None, (False,), prior, 1.0)
        try:
            result = noise.fit([], fresh=True)
            quiet = white.fit([], fresh=True)
            errors = laplace(noise, result).kernel_log_err
        except NumericalError:  # an indicator that cannot be fitted guides nobody
            continue
        if result.log_likelihood < quiet.log_likelihood + _SIGNIFICANT:
            continue
        if "period" in errors and errors["period"] < narrowest:
            narrowest, chosen = errors["period"], scaled.names[s]
            period, decay = result.parameters[:2]
            best = replace(
                prior,
                log_period=float(period),
                # the velocities' process need not be the indicator's to the last digit
                log_period_sd=math.hypot(errors["period"], 0.03),
                decay_in_periods=float(np.exp(decay - period)),
                log_decay_sd=math.hypot(errors.get("decay", prior.log_decay_sd), 0.3),
            )
    return best, chosen


def _series(data: JointData, s: int) -> JointData:
    """One indicator where it was measured."""
    rows = data.mask[s]
    used = np.any(data.columns[s] != 0, axis=0)
    labels, jitter = np.unique(data.jitter[s][rows], return_inverse=True)
    return JointData(
        data.time[rows],
        data.value[s : s + 1, rows],
        data.variance[s : s + 1, rows],
        np.ones((1, int(rows.sum())), dtype=bool),
        jitter[None].astype(np.intp),
        int(labels.size),
        np.ascontiguousarray(data.columns[s : s + 1][:, rows][:, :, used]),
        data.column_sd[used],
    )
