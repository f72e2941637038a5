"""Keplerian velocities and the drawing of planets, apart from the code that fits them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array

__all__ = ["Planet", "PlanetPlan", "draw_planets", "near_rotation", "orbit_velocity"]


@dataclass(frozen=True)
class Planet:
    """One injected planet; ``snr_alone`` is the target against all but other planets."""

    period: float  # d
    semi_amplitude: float  # m/s
    eccentricity: float
    omega_peri: float  # rad
    time_peri: float  # d
    snr_alone: float
    purpose: str = "usual"


@dataclass(frozen=True)
class PlanetPlan:
    """How many planets of what kind; the shares are per star."""

    number: tuple[float, ...] = (0.55, 0.32, 0.095, 0.035)  # chances of 0, 1, 2, 3 planets
    at_rotation: float = 0.06  # share of planets put near rotation or a harmonic on purpose
    snr_range: tuple[float, float] = (5.4, 37.0)
    eccentric_giants: float = 0.0
    beyond_600_d: float = 0.0
    beyond_baseline: float = 0.0


def orbit_velocity(planet: Planet, time: Array) -> Array:
    """K [cos(nu + omega) + e cos(omega)], m/s, same shape as ``time``.

    Kepler's equation by Newton steps from Danby's starter E = M + 0.85 e sign(sin M).
    """
    e = planet.eccentricity
    mean = np.mod(2.0 * np.pi * (time - planet.time_peri) / planet.period, 2.0 * np.pi)
    anomaly = mean + 0.85 * e * np.sign(np.sin(mean))
    for _ in range(12):
        anomaly = anomaly - (anomaly - e * np.sin(anomaly) - mean) / (1.0 - e * np.cos(anomaly))
    true = 2.0 * np.arctan2(
        np.sqrt(1.0 + e) * np.sin(0.5 * anomaly), np.sqrt(1.0 - e) * np.cos(0.5 * anomaly)
    )
    omega = planet.omega_peri
    return np.asarray(
        planet.semi_amplitude * (np.cos(true + omega) + e * np.cos(omega)), dtype=float
    )


def near_rotation(period: float, rotation: float) -> bool:
    """Within 10 per cent of the rotation period, its half or its third."""
    return any(abs(period * k / rotation - 1.0) < 0.10 for k in (1, 2, 3))


def draw_planets(
    plan: PlanetPlan,
    rotation: float,
    baseline: float,
    noise_rms: float,
    n_obs: int,
    epoch: float,
    rng: np.random.Generator,
) -> tuple[Planet, ...]:
    """Planets whose amplitudes are set by K = snr * ``noise_rms`` / sqrt(``n_obs``)."""
    count = int(rng.choice(len(plan.number), p=plan.number))
    extra = rng.random(3)
    wanted = ["usual"] * count
    for chance, share, purpose in zip(
        extra,
        (plan.eccentric_giants, plan.beyond_600_d, plan.beyond_baseline),
        ("eccentric giant", "beyond 600 d", "beyond the baseline"),
        strict=True,
    ):
        if chance < share:
            wanted.append(purpose)
    planets: list[Planet] = []
    for purpose in wanted:
        for _ in range(40):  # until it keeps its distance from the others
            period = _draw_period(purpose, plan, rotation, baseline, rng)
            if all(abs(np.log(period / p.period)) > 0.35 for p in planets):
                break
        else:
            continue
        low, high = np.log(plan.snr_range)
        snr = float(np.exp(low + (high - low) * rng.random() ** 1.2))
        if purpose != "usual":
            snr *= 1.5
        if purpose == "eccentric giant":
            eccentricity = float(rng.uniform(0.25, 0.85))
        else:
            eccentricity = float(min(0.12 * np.sqrt(-2.0 * np.log(rng.random())) * 0.7, 0.4))
            if len(wanted) > 1:  # several planets on crossing orbits would not last
                eccentricity = min(eccentricity, 0.15)
        planets.append(
            Planet(
                period=period,
                semi_amplitude=snr * noise_rms / np.sqrt(n_obs),
                eccentricity=eccentricity,
                omega_peri=float(rng.uniform(0.0, 2.0 * np.pi)),
                time_peri=float(epoch + period * rng.random()),
                snr_alone=snr,
                purpose=purpose,
            )
        )
    return tuple(planets)


def _draw_period(
    purpose: str, plan: PlanetPlan, rotation: float, baseline: float, rng: np.random.Generator
) -> float:
    if purpose == "eccentric giant":
        low, high = 60.0, max(0.9 * baseline, 120.0)
    elif purpose == "beyond 600 d":
        low, high = 600.0, 2000.0
    elif purpose == "beyond the baseline":
        low, high = 1.1 * baseline, 4.0 * baseline
    elif rng.random() < plan.at_rotation:
        return float(rotation / rng.integers(1, 4) * rng.uniform(0.91, 1.09))
    else:
        low, high = 1.5, min(360.0, 0.38 * baseline)
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))
