"""The noise models under which a signal must stand, and fits of orbits on top of each."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from screener.core import Array, Orbit
from screener.models.dataset import Scaled
from screener.models.fitting import Fit, HyperPrior, fit, starting_points
from screener.models.joint import JointData, JointModel, OrbitTerm
from screener.models.joint_data import orbit_columns
from screener.models.kernels import KERNELS, Kernel
from screener.search.periodogram import Precision

__all__ = ["NoiseModel", "indicators_only", "joint_process", "velocities_only", "white_noise"]

_AMPLITUDE_SD = 3.0  # prior of K cos omega and K sin omega, in units of the velocities' scatter
_DERIVATIVE_UP_TO = 400  # velocities


@dataclass(eq=False)
class NoiseModel:
    """One description of everything in the velocities but the orbits.

    Fits are remembered: the key of an orbit is its period and whether it is eccentric.
    """

    name: str
    data: JointData
    kernel: Kernel | None
    derivative: tuple[bool, ...]
    prior: HyperPrior
    scale: float  # m/s per scaled unit of the velocities
    max_iterations: int = 120
    n_evaluations: int = 0
    n_starts: int = 2  # of a fresh fit; with 2 a poor optimum stays in one star of thirty
    approximation: str = ""  # what a reader must know where this stands for another model
    _fits: dict[tuple[OrbitTerm, ...], Fit] = field(default_factory=dict)

    def term(self, period: float, eccentric: bool = False) -> OrbitTerm:
        """An orbit of this model."""
        return OrbitTerm(period, _AMPLITUDE_SD, eccentric)

    def model(self, orbits: Sequence[OrbitTerm]) -> JointModel:
        return JointModel(self.data, self.kernel, self.derivative, tuple(orbits))

    def fit(
        self, orbits: Sequence[OrbitTerm], near: Sequence[Fit] = (), fresh: bool = False
    ) -> Fit:
        """Maximum a posteriori with these orbits.

        ``near``: fits of the same noise model with other orbits; each lends its noise parameters
        and what it knows of shared orbits as a start. ``fresh`` adds a start from the priors.
        """
        key = tuple(orbits)
        known = self._fits.get(key)
        model = self.model(key)
        starts = [self.transfer(model, other) for other in near]
        if fresh or not starts:
            starts += starting_points(model, self.prior, self._signs(), self.n_starts)
        result = fit(model, self.prior, starts, self.max_iterations)
        self.n_evaluations += result.n_evaluations
        if known is None or result.objective > known.objective:
            self._fits[key] = result
        return self._fits[key]

    @property
    def kernel_name(self) -> str:
        """The kernel's key in ``KERNELS``, "" in white noise."""
        return next((name for name, kernel in KERNELS.items() if kernel is self.kernel), "")

    def known(self, orbits: Sequence[OrbitTerm]) -> Fit | None:
        """The fit with these orbits if there was one already."""
        return self._fits.get(tuple(orbits))

    def glance(self, orbits: Sequence[OrbitTerm], near: Fit, iterations: int = 8) -> Fit:
        """A few steps from a neighbour's solution: enough to rank trials, not remembered."""
        model = self.model(orbits)
        result = fit(model, self.prior, [self.transfer(model, near)], iterations)
        self.n_evaluations += result.n_evaluations
        return result

    def improve(self, orbits: Sequence[OrbitTerm], start: Array) -> Fit:
        """The known fit of these orbits, or a better one reached from ``start``."""
        key = tuple(orbits)
        result = fit(self.model(key), self.prior, [start], self.max_iterations)
        self.n_evaluations += result.n_evaluations
        known = self._fits.get(key)
        if known is None or result.objective > known.objective:
            self._fits[key] = result
        return self._fits[key]

    def _signs(self) -> Array:
        """Signs of the series' correlation with the first indicator-like one."""
        data = self.data
        signs = np.ones(data.n_series)
        for s in range(1, data.n_series):
            both = data.mask[0] & data.mask[s]
            if both.sum() > 5:
                signs[s] = math.copysign(
                    1.0, float(np.sum((data.value[0] * data.value[s])[both])) or 1.0
                )
        return signs

    def transfer(self, model: JointModel, other: Fit) -> Array:
        out = np.zeros(model.n_parameters)
        noise = model.slices["orbits"].start
        out[:noise] = other.parameters[:noise]
        given = dict(
            zip(other.model.orbits, other.model.orbit_parameters(other.parameters), strict=True)
        )
        start = noise
        for term in model.orbits:
            values = given.get(term)
            if values is None and term.eccentric:
                circular = given.get(replace(term, eccentric=False))
                values = np.array([circular[0] if circular is not None else 0.0, 0.1, 0.0])
            if values is None and not term.eccentric:
                twin = given.get(replace(term, eccentric=True))
                values = twin[:1] if twin is not None else np.zeros(1)
            assert values is not None
            out[start : start + term.n_parameters] = values
            start += term.n_parameters
        return out

    def precision(self, result: Fit) -> Precision:
        """What a periodogram on top of this fit needs."""
        model, x = result.model, result.parameters
        if self.kernel is not None:
            solution = model.solve(x)
            return Precision(solution.rv_weighted, solution.rv_precision)
        # white noise: diagonal less a few columns, which spares long series the dense matrix
        data = model.data
        jitter2 = np.exp(2 * x[model.slices["jitter"]])[data.jitter[0]]
        weight = 1 / (data.variance[0] + jitter2)
        columns = [data.columns[0]]
        for term, values in zip(model.orbits, model.orbit_parameters(x), strict=True):
            columns.append(orbit_columns(term, values, data, False)[0])
        design = np.concatenate(columns, axis=1)
        normal = design.T @ (weight[:, None] * design) + np.diag(1 / model.column_sd**2)
        half = np.linalg.solve(np.linalg.cholesky(normal), (weight[:, None] * design).T).T
        y = data.value[0]
        return Precision(weight * y - half @ (half.T @ y), None, weight, half)

    def orbits(self, result: Fit) -> list[Orbit]:
        """The fitted orbits in physical units, with Laplace errors of the amplitude."""
        solution = result.model.solve(result.parameters, velocities=False)
        out = []
        column = result.model.data.columns.shape[2]
        data = self.data
        for term, values in zip(
            result.model.orbits, result.model.orbit_parameters(result.parameters), strict=True
        ):
            a, b = solution.linear_mean[column : column + 2]
            covariance = solution.linear_covariance[column : column + 2, column : column + 2]
            amplitude = math.hypot(a, b)
            direction = np.array([a, b]) / amplitude if amplitude > 0 else np.array([1.0, 0.0])
            error = math.sqrt(float(direction @ covariance @ direction))
            frequency = 1 / term.period + values[0] / (2 * math.pi * data.span)
            period = 1 / frequency
            ecc, phase = 0.0, 0.0
            if term.eccentric:
                size = math.hypot(values[1], values[2])
                ecc, phase = size / math.sqrt(1 + size * size), math.atan2(values[2], values[1])
            # sigma_f of a sinusoid (Montgomery & O'Donoghue 1999, DSSN 13, 28)
            frequency_err = math.sqrt(6) / (math.pi * data.span) * error / max(amplitude, 1e-12)
            out.append(
                Orbit(
                    period=period,
                    semi_amplitude=amplitude * self.scale,
                    eccentricity=ecc,
                    omega_peri=math.atan2(b, a),
                    time_peri=data.mid_time + period * phase / (2 * math.pi),
                    period_err=period * period * frequency_err,
                    semi_amplitude_err=error * self.scale,
                    eccentricity_err=None,
                )
            )
            column += 2
        return out


def velocities_only(data: JointData, keep_cycle: int) -> JointData:
    """Only series 0; ``keep_cycle`` of its last linear columns (the cycle's) stay."""
    return _subset(data, slice(0, 1), data.columns.shape[2] - keep_cycle)


def indicators_only(data: JointData) -> JointData:
    """Everything but the velocities."""
    return _subset(data, slice(1, None), data.columns.shape[2])


def _subset(data: JointData, rows: slice, last_column: int) -> JointData:
    mask = data.mask[rows]
    used = [c for c in range(last_column) if np.any(data.columns[rows, :, c])]
    labels = np.unique(data.jitter[rows][mask])
    lookup = np.zeros(data.n_jitter, dtype=np.intp)
    lookup[labels] = np.arange(labels.size)
    return JointData(
        data.time,
        data.value[rows],
        data.variance[rows],
        mask,
        lookup[data.jitter[rows]],
        int(labels.size),
        np.ascontiguousarray(data.columns[rows][:, :, used]),
        data.column_sd[used],
    )


def white_noise(scaled: Scaled, decorrelate: bool = False) -> NoiseModel:
    """Independent noise with a jitter per instrument.

    With ``decorrelate`` the velocities are also linear in every indicator and in the cycle.
    """
    data = velocities_only(scaled.data, 0 if decorrelate else scaled.cycle_columns)
    if decorrelate:
        full = scaled.data
        extra = np.where(full.mask[1:], full.value[1:], 0.0).T[None]
        data = replace(
            data,
            columns=np.concatenate([data.columns, extra], axis=2),
            column_sd=np.concatenate([data.column_sd, np.full(extra.shape[2], 2.0)]),
        )
    prior = HyperPrior(math.log(25.0), 0.7)
    name = "white noise and indicators" if decorrelate else "white noise"
    return NoiseModel(name, data, None, (False,), prior, float(scaled.scale[0]))


def joint_process(
    scaled: Scaled, prior: HyperPrior, kernel: str = "quasi-periodic", joint: bool = True
) -> NoiseModel:
    """Correlated activity: under all series with its derivative, or under the velocities alone."""
    if joint:
        # the derivative doubles the matrix; long series of quiet stars do without it
        with_derivative = scaled.data.n_obs <= _DERIVATIVE_UP_TO
        return NoiseModel(
            "joint process",
            scaled.data,
            KERNELS[kernel],
            scaled.derivative if with_derivative else (False,) * len(scaled.derivative),
            prior,
            float(scaled.scale[0]),
        )
    data = velocities_only(scaled.data, 0)
    return NoiseModel(
        "velocity process", data, KERNELS[kernel], (False,), prior, float(scaled.scale[0])
    )
