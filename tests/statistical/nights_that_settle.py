"""Do the nights ranked first settle more than random ones? Simulated ambiguous signals.

Each star has a few dozen velocities in two seasons. Half of the stars have a planet (its period
near the rotation, or anywhere; over weaker activity), the others activity alone. The signal is the
best period of a least-squares search, so it may be an alias. A star is ambiguous when no hypothesis
of the tool (planet, aliases, activity) has odds of 20 to 1 against the rest. Then ten nights of the
coming year are observed from a real site: the ten that the ranking puts first, or ten random usable
ones at the hour of best altitude. The decision is the same for both: with all velocities, and the
activity fitted again, the true hypothesis has odds of 100 to 1 against the rest (resolved), or a
wrong one has (misled).

Run: python -m tests.statistical.nights_that_settle [--stars N] [--seed N]
"""

from __future__ import annotations

import argparse
import functools
import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar

from screener.core import Array, Orbit, Star
from screener.models.kepler import orbit_velocity
from screener.system.hypotheses import (
    Velocities,
    activity_hypothesis,
    alias_orbits,
    orbit_hypothesis,
    quasi_periodic,
)
from screener.system.observability import NightTimes, find_site, nights_from_site
from screener.system.schedule import rank_nights

OPEN, SETTLED = math.log(20.0), math.log(100.0)
N_NIGHTS = 10
START = 2459580.5  # of the coming year; two years of nights lie before it
STAR = Star("simulated", ra_deg=150.0, dec_deg=-25.0)
SITE = "la silla"


@dataclass(frozen=True, eq=False)
class Case:
    """What was seen, the orbits that are live, which is true (None: the star), and the future."""

    kind: str
    data: Velocities
    orbits: tuple[Orbit, ...]
    truth: int | None
    rotation_period: float
    later: Array  # times of all slots
    observed: Array  # velocities there


@functools.lru_cache(maxsize=2)
def nights(start: float, days: int) -> NightTimes:
    """Usable nights of the one star that all simulations share."""
    return nights_from_site(STAR, find_site(SITE), start, days)


def posterior(case: Case, data: Velocities) -> Array:
    """Posterior of (orbits..., star), half of the prior to the star, the activity fitted anew."""
    periods = {case.rotation_period, case.orbits[0].period, 2 * case.orbits[0].period}
    star, shape = activity_hypothesis(data, sorted(periods))
    logs = [orbit_hypothesis("o", o, data, shape).log_likelihood for o in case.orbits]
    n = len(logs)
    values = np.array([*(v + math.log(0.5 / n) for v in logs), star.log_likelihood + math.log(0.5)])
    weights = np.exp(values - values.max())
    return np.asarray(weights / weights.sum())


def fitted_orbit(data: Velocities, frequency: float, step: float) -> Orbit:
    """Circular orbit of least chi-square near ``frequency``, with errors of white noise."""

    def solve(f: float) -> tuple[float, Array]:
        phase = 2 * np.pi * (data.time - START) * f
        columns = np.stack([np.cos(phase), -np.sin(phase), np.ones_like(phase)], axis=1)
        x, *_ = np.linalg.lstsq(columns / data.sd[:, None], data.rv / data.sd, rcond=None)
        return float(np.sum(((data.rv - columns @ x) / data.sd) ** 2)), x

    found = minimize_scalar(
        lambda f: solve(f)[0], bounds=(frequency - step, frequency + step), method="bounded"
    )
    f = float(found.x)
    chi2, x = solve(f)
    amplitude = math.hypot(x[0], x[1])
    scatter = float(np.median(data.sd)) * math.sqrt(max(1.0, chi2 / data.time.size))
    error = scatter * math.sqrt(2 / data.time.size)
    # sigma_f = sqrt(6) sigma / (pi T K sqrt(n)): Montgomery & O'Donoghue (1999)
    frequency_err = math.sqrt(6 / data.time.size) / math.pi * scatter / amplitude
    frequency_err /= float(np.ptp(data.time))
    omega = math.atan2(x[1], x[0])
    return Orbit(1 / f, amplitude, 0.0, omega, START, frequency_err / f**2, error)


def search(data: Velocities) -> Orbit:
    """The best sinusoid between 2 and 60 d."""
    step = 0.2 / float(np.ptp(data.time))
    grid = np.arange(1 / 60, 1 / 2, step)
    phase = 2 * np.pi * np.outer(data.time - START, grid)
    y = data.rv - data.rv.mean()
    c, s = np.cos(phase), np.sin(phase)
    c, s = c - c.mean(0), s - s.mean(0)
    cc, ss, cs = np.sum(c * c, 0), np.sum(s * s, 0), np.sum(c * s, 0)
    yc, ys = y @ c, y @ s
    gain = (yc**2 * ss - 2 * yc * ys * cs + ys**2 * cc) / (cc * ss - cs**2)
    return fitted_orbit(data, float(grid[int(np.argmax(gain))]), step)


def simulate(rng: np.random.Generator, kind: str) -> Case | None:
    """One star, None where the signal found is not one that the tool has a true hypothesis for."""
    past = nights(START - 730, 730)
    coming = nights(START, 365)
    usual = past.time[past.best]
    rotation = float(rng.uniform(15, 35))
    period = {
        "near rotation": rotation * float(rng.uniform(0.9, 1.1)),
        "elsewhere": float(np.exp(rng.uniform(math.log(4), math.log(40)))),
        "star": rotation,
    }[kind]
    noise = 2.0
    amplitude = noise * float(rng.uniform(1.0, 2.0))
    n = int(rng.integers(15, 40))
    time = np.sort(rng.choice(usual, n, replace=False))
    everything = np.concatenate([time, coming.time])
    share = 1 / math.sqrt(2) if kind == "star" else float(rng.uniform(0.1, 0.4))
    covariance = quasi_periodic(
        share * amplitude,
        rotation,
        rotation * float(rng.uniform(1.0, 2.5)),
        float(rng.uniform(0.5, 1.0)),
    )(everything, everything)
    covariance[np.diag_indices_from(covariance)] += 1e-6
    truth = np.linalg.cholesky(covariance) @ rng.standard_normal(everything.size)
    if kind != "star":
        phase = float(rng.uniform(0, 2 * math.pi))
        truth = truth + orbit_velocity(Orbit(period, amplitude, 0.0, phase, START), everything)
    observed = truth + rng.normal(0, noise, everything.size)
    data = Velocities(time, observed[:n], np.full(n, noise))
    found = search(data)
    orbits = (found, *alias_orbits(found, data))
    near = [abs(1 / o.period - 1 / period) < 1 / float(np.ptp(time)) for o in orbits]
    if kind != "star" and not any(near):
        return None
    true = None if kind == "star" else near.index(True)
    return Case(kind, data, orbits, true, rotation, coming.time, observed[n:])


def after(case: Case, rows: Array) -> Array:
    """Posterior with the velocities of those slots added."""
    noise = np.full(rows.size, float(case.data.sd[0]))
    return posterior(
        case,
        Velocities(
            np.concatenate([case.data.time, case.later[rows]]),
            np.concatenate([case.data.rv, case.observed[rows]]),
            np.concatenate([case.data.sd, noise]),
        ),
    )


def outcomes(case: Case, rng: np.random.Generator) -> dict[str, tuple[bool, bool]]:
    """(resolved, misled) for ranked and for random nights."""
    plan = rank_nights(
        STAR,
        case.data.time,
        case.data.rv,
        case.data.sd,
        case.orbits[0],
        rotation_period=case.rotation_period,
        site=SITE,
        start=START,
        n_ranked=N_NIGHTS,
    )
    ranked = np.searchsorted(case.later, np.sort([n.time for n in plan.nights]) - 1e-6)
    usual = np.flatnonzero(nights(START, 365).best)
    choices = {"ranked": ranked, "random": np.sort(rng.choice(usual, N_NIGHTS, replace=False))}
    result = {}
    for name, rows in choices.items():
        chances = after(case, rows)
        true = chances.size - 1 if case.truth is None else case.truth
        odds = np.log(chances / np.maximum(1 - chances, 1e-300) + 1e-300)
        resolved = bool(odds[true] > SETTLED)
        result[name] = (resolved, bool(odds.max() > SETTLED) and not resolved)
    return result


def run(n_stars: int, seed: int) -> list[tuple[str, dict[str, tuple[bool, bool]]]]:
    """Outcomes of ``n_stars`` ambiguous stars, half of them without a planet."""
    rng = np.random.default_rng(seed)
    kinds = ("near rotation", "star", "elsewhere", "star")
    results: list[tuple[str, dict[str, tuple[bool, bool]]]] = []
    while len(results) < n_stars:
        case = simulate(rng, kinds[len(results) % 4])
        if case is None or posterior(case, case.data).max() > 20 / 21:
            continue
        label = case.kind if case.truth in (None, 0) else "alias found first"
        results.append((label, outcomes(case, rng)))
    return results


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--stars", type=int, default=100)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    results = run(options.stars, options.seed)
    print(f"{'truth':20}{'n':>5}{'ranked':>10}{'random':>10}{'misled':>10}{'misled (random)':>18}")
    for label in ("near rotation", "elsewhere", "alias found first", "star", "all"):
        rows = [r for name, r in results if label in (name, "all")]
        if not rows:
            continue
        share = [
            float(np.mean([r[how][what] for r in rows]))
            for how, what in (("ranked", 0), ("random", 0), ("ranked", 1), ("random", 1))
        ]
        print(
            f"{label:20}{len(rows):5d}{share[0]:10.2f}{share[1]:10.2f}{share[2]:10.2f}"
            f"{share[3]:18.2f}"
        )
    ranked = sum(r["ranked"][0] for _, r in results)
    random = sum(r["random"][0] for _, r in results)
    print(
        f"resolved correctly: {ranked} ranked, {random} random, ratio {ranked / max(random, 1):.2f}"
    )


if __name__ == "__main__":
    main()
