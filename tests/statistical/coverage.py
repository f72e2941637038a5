"""Do the intervals cover the truth? Series drawn from the joint model, fitted by it.

Each star: velocities and two indicators (a width on the process, a bisector on the process and its
derivative) at about 70 nights of two seasons, with hyper-parameters drawn from the prior of the
fit, loadings, zero points and jitters at random, and a planet whose K is 5 to 10 times its error.
The search is not part of this: the fit starts within a quarter of the resolution of the true
frequency. An interval of 68.27 % or 95.45 % reaches 1 or 2 sigma from the estimate (of the
rotation: in its logarithm). The check: the count of stars whose truth lies inside has a two-sided
binomial p-value above 1 % under the nominal rate.

Run: python -m tests.statistical.coverage [--series N] [--seed N] [--eccentric] [--json FILE]
"""

from __future__ import annotations

import argparse
import json
import math
import sys
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from scipy import stats
from threadpoolctl import threadpool_limits

from screener.core import Array, NumericalError
from screener.models.fitting import HyperPrior, prior_terms
from screener.models.joint import JointData, OrbitTerm
from screener.models.kepler import orbit_columns
from screener.models.kernels import KERNELS
from screener.models.noise import NoiseModel
from screener.models.reweighting import reweighted

__all__ = ["RATES", "Pull", "Row", "draw_star", "main", "pulls", "table"]

PRIOR = HyperPrior(math.log(22.0), 0.15)
DERIVATIVE = (True, False, True)  # velocities, width, bisector
ERROR = 0.15  # of every value, in units of a series' scatter
RATES = {1: math.erf(1 / math.sqrt(2)), 2: math.erf(2 / math.sqrt(2))}
LEAST_P = 0.01
STARTS = 4  # as at standard depth


@dataclass(frozen=True)
class Pull:
    """(estimate - truth) / error of one quantity of one series."""

    quantity: str
    pull: float


@dataclass(frozen=True)
class Row:
    """One line of the table: how often the truth lay inside."""

    quantity: str
    rate: float
    inside: int
    total: int
    p_value: float

    @property
    def agrees(self) -> bool:
        return self.p_value > LEAST_P


def draw_star(rng: np.random.Generator, eccentric: bool) -> tuple[NoiseModel, Array, OrbitTerm]:
    """A star with its planet: noise model with data, true parameters, the orbit to start from."""
    n, span = int(rng.integers(60, 81)), 400.0
    nights = np.concatenate([np.arange(0, 150), np.arange(250, 400)])
    time = np.sort(rng.choice(nights, n, replace=False) + rng.uniform(-0.15, 0.15, n))
    data = JointData(
        time, np.zeros((3, n)), np.full((3, n), ERROR**2), np.ones((3, n), bool),
        np.repeat(np.arange(3)[:, None], n, axis=1), 3, np.repeat(np.eye(3)[:, None, :], n, 1),
        np.full(3, 1e3),
    )  # fmt: skip
    noise = NoiseModel(
        "joint process", data, KERNELS["quasi-periodic"], DERIVATIVE, PRIOR, 1.0, n_starts=STARTS
    )
    # between rotation harmonics or on them: any period that the baseline holds four times
    true_period = math.exp(rng.uniform(math.log(2.0), math.log(span / 4)))
    offset = rng.uniform(-0.25, 0.25) / data.span
    term = noise.term(1 / (1 / true_period - offset), eccentric)
    model = noise.model([term])
    mean, sd, lower, upper = prior_terms(model, PRIOR)
    truth = np.zeros(model.n_parameters)
    kernel, jitter = model.slices["kernel"], model.slices["jitter"]
    for part in (kernel, jitter):
        truth[part] = stats.truncnorm.rvs(
            (lower[part] - mean[part]) / sd[part], (upper[part] - mean[part]) / sd[part],
            mean[part], sd[part], random_state=rng,
        )  # fmt: skip
    signs = rng.choice([-1.0, 1.0], 5)
    truth[model.slices["a"]] = signs[:3] * rng.uniform(0.4, 1.2, 3)
    truth[model.slices["b"]] = signs[3:] * rng.uniform(0.1, 0.8, 2)
    orbit = model.slices["orbits"]
    truth[orbit.start] = 2 * math.pi * data.span * offset
    if eccentric:
        truth[orbit.start + 1 : orbit.stop] = rng.normal(0, 0.3, 2)
    value = model.draw(truth, rng) + rng.normal(0, 1, (3, 1))
    # the error of K at the truth does not depend on the values
    covariance = model.solve(truth).linear_covariance[3:, 3:]
    angle = rng.uniform(0, 2 * math.pi)
    along = np.array([math.cos(angle), math.sin(angle)])
    size = rng.uniform(5, 10) * math.sqrt(float(along @ covariance @ along))
    if eccentric:
        vector = truth[orbit][1:]
        ecc, phase = float(np.hypot(*vector)), math.atan2(vector[1], vector[0])
        ecc /= math.hypot(1, ecc)
    else:
        ecc, phase = 0.0, 0.0
    time_peri = data.mid_time + true_period * phase / (2 * math.pi)
    value[0] += orbit_columns(time, true_period, ecc, time_peri) @ (size * along)
    return replace(noise, data=replace(data, value=value)), np.append(truth, size), term


def pulls(rng: np.random.Generator, eccentric: bool = False) -> list[Pull]:
    """The pulls of one star; of a quantity at a wall there is none.

    Raises
    ------
    NumericalError
        Where no fit succeeds.
    """
    noise, truth, term = draw_star(rng, eccentric)
    without = noise.fit([], fresh=True)
    result = noise.fit([term], near=[without], fresh=True)
    errors, orbit = reweighted(noise, result), noise.orbits(result)[0]
    own = errors.orbits[0]
    start = result.model.slices["orbits"].start
    frequency = 1 / term.period + truth[start] / (2 * math.pi * noise.data.span)
    out = [Pull("K", (orbit.semi_amplitude - truth[-1]) / own.semi_amplitude)]
    if own.period is not None:
        out.append(Pull("period", (orbit.period - 1 / frequency) / own.period))
    if "period" in errors.kernel_log_err:
        pull = (result.parameters[0] - truth[0]) / errors.kernel_log_err["period"]
        out.append(Pull("rotation", float(pull)))
    return out


def table(found: list[Pull]) -> list[Row]:
    """Counts inside one and two sigma, by quantity."""
    rows = []
    for quantity in ("period", "K", "rotation"):
        values = np.array([p.pull for p in found if p.quantity == quantity])
        for reach, rate in RATES.items():
            inside = int(np.count_nonzero(np.abs(values) < reach))
            p_value = float(stats.binomtest(inside, values.size, rate).pvalue)
            rows.append(Row(quantity, rate, inside, int(values.size), p_value))
    return rows


def main(argv: list[str] | None = None) -> int:
    """Print the table; exit status 1 where a rate is not met."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--series", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--eccentric", action="store_true", help="fit and draw eccentric orbits")
    parser.add_argument("--json", type=Path)
    arguments = parser.parse_args(argv)
    found: list[Pull] = []
    failed = 0
    with threadpool_limits(1):
        for child in np.random.SeedSequence(arguments.seed).spawn(arguments.series):
            try:
                own = pulls(np.random.default_rng(child), arguments.eccentric)
            except NumericalError:
                failed += 1
                continue
            except KeyboardInterrupt:  # the table of what is done
                break
            found += own
            done = sum(p.quantity == "K" for p in found)
            words = "  ".join(f"{p.quantity} {p.pull:+.2f}" for p in own)
            print(f"{done:4d}  pulls: {words}", file=sys.stderr, flush=True)
    rows = table(found)
    done = sum(p.quantity == "K" for p in found)
    print(f"{done} series, {failed} more whose fits failed")
    print(f"{'quantity':10s} {'nominal':>8s} {'covered':>8s} {'+-':>6s} {'count':>10s} {'p':>7s}")
    for row in rows:
        error = math.sqrt(row.rate * (1 - row.rate) / row.total)
        print(
            f"{row.quantity:10s} {row.rate:8.3f} {row.inside / row.total:8.3f} {error:6.3f} "
            f"{row.inside:5d}/{row.total:4d} {row.p_value:7.3f} {'' if row.agrees else 'OFF'}"
        )
    for quantity in ("period", "K", "rotation"):
        values = [p.pull for p in found if p.quantity == quantity]
        median, spread = float(np.median(values)), float(np.std(values))
        print(f"{quantity:10s} pulls: median {median:+.2f}, sd {spread:.2f}")
    if arguments.json:
        arguments.json.write_text(json.dumps([vars(r) for r in rows], indent=1))
    return int(failed > 0.02 * arguments.series or not all(r.agrees for r in rows))


if __name__ == "__main__":
    raise SystemExit(main())
