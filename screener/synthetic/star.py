"""One synthetic star from end to end: the star, its regions, the campaign, the planets, noise."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from screener.core import Array
from screener.synthetic.activity import Activity, Photosphere, activity_at
from screener.synthetic.disc import Disc, LineResponse, line_response
from screener.synthetic.kinds import KINDS, Body, Kind, body_of, calcium_of, draw_even, draw_log
from screener.synthetic.measure import (
    Column,
    draw_dropped,
    granulation,
    indicators,
    photometry,
    white_noise,
    with_outliers,
)
from screener.synthetic.observing import Campaign, Plan, draw_campaign
from screener.synthetic.orbits import Planet, PlanetPlan, draw_planets, orbit_velocity
from screener.synthetic.regions import Cycle, Habits, Regions, emerge
from screener.synthetic.truth import sidecar_of, truth_of

__all__ = ["Recipe", "SyntheticStar", "simulate"]

_MOST_COVERED = 0.2  # share of the disc under spots at most
_LEAST_SNR = 4.1  # planets are lifted to this much against all the rest


@dataclass(frozen=True)
class Recipe:
    """What may be fixed beforehand; ``None`` means drawn."""

    kind: str
    planets: PlanetPlan = field(default_factory=PlanetPlan)
    fixed_planets: tuple[Planet, ...] | None = None
    body_teff: float | None = None
    rotation: float | None = None
    inclination: float | None = None
    plan: Plan | None = None
    photometry: str | None = "draw"
    drop: tuple[str, ...] | None = None
    long_cycle: bool = False
    overrides: Mapping[str, Any] = field(default_factory=dict)  # fields of Kind


@dataclass(frozen=True, eq=False)
class SyntheticStar:
    """The star, its tables and its truth."""

    name: str
    kind: str
    body: Body
    disc: Disc
    campaign: Campaign
    rv: Array
    rv_err: Array
    indicators: dict[str, Column]
    photometry: tuple[Array, Array, Array] | None
    planets: tuple[Planet, ...]
    sidecar: dict[str, Any]
    truth: dict[str, Any]


def simulate(name: str, recipe: Recipe, rng: np.random.Generator) -> SyntheticStar:
    """Draw one star; everything comes from ``rng``, in a fixed order."""
    kind = replace(KINDS[recipe.kind], **dict(recipe.overrides))
    body = body_of(recipe.body_teff or draw_even(kind.teff, rng), rng)
    disc = _draw_disc(kind, body, recipe, rng)
    plan = recipe.plan or _draw_plan(kind, rng)
    campaign = draw_campaign(plan, rng)
    time = campaign.time
    cycle = _draw_cycle(kind, recipe.long_cycle, float(np.ptp(time)), rng)
    habits = _draw_habits(kind, rng)
    regions = emerge(habits, disc, float(time[0]) - 60.0, float(time[-1]) + 60.0, cycle, rng)
    skin = _draw_skin(kind, cycle, rng)
    line = line_response(disc, body.local_fwhm)
    activity, regions, skin = _tune(disc, line, regions, skin, cycle, time, draw_log(kind.rms, rng))
    grains = granulation(body, time, rng)
    white = white_noise(campaign, rng)
    rotation = _rotation(regions, disc, habits)
    stellar = activity.rv + grains
    planets = recipe.fixed_planets
    if planets is None:
        noise = float(np.std(stellar + white))
        planets = draw_planets(
            recipe.planets, rotation[0], float(np.ptp(time)), noise, time.size, 2459000.0, rng
        )
        planets = _lift_faint(planets, stellar + white, time)
    orbits = np.sum([orbit_velocity(p, time) for p in planets], axis=0) if planets else 0.0
    clean = stellar + orbits + white
    zero = np.array([i.zero_point for i in campaign.instruments])[campaign.instrument]
    rv, n_outliers = with_outliers(clean, campaign, rng)
    log_rhk, s_mean = calcium_of(body, rotation[0], 0.08 * float(rng.standard_normal()))
    columns = indicators(kind, body, line.width, activity, campaign, s_mean, rng)
    drop = draw_dropped(rng) if recipe.drop is None else recipe.drop
    light = recipe.photometry
    if light == "draw":
        light = (None, "ground", "space")[int(rng.choice(3, p=[0.56, 0.235, 0.205]))]
    flux = None if light is None else photometry(light, disc, regions, skin, campaign, rng)
    truth = truth_of(
        name, recipe.kind, rotation, cycle, planets, activity, grains, white, clean, campaign
    )
    truth |= {
        "inclination_deg": float(np.degrees(disc.inclination)),
        "vsini_km_s": disc.vsini / 1e3,
        "prot_equator_d": disc.rotation_period,
        "spot_life_d": habits.life,
        "active_longitude_share": habits.nest_share,
        "active_longitudes": habits.nests,
        "facula_ratio": habits.facula_ratio,
        "shear": disc.shear,
        "outliers": n_outliers,
        "dropped": [item for item in drop if item != "contrast"],
        "photometry": light,
    }
    sidecar = sidecar_of(name, body, disc, log_rhk, rng)
    kept = {item: column for item, column in columns.items() if item not in drop}
    return SyntheticStar(
        name, recipe.kind, body, disc, campaign, rv + zero, campaign.quoted, kept,
        flux, planets, sidecar, truth,
    )  # fmt: skip


def _draw_disc(kind: Kind, body: Body, recipe: Recipe, rng: np.random.Generator) -> Disc:
    rotation = draw_log(kind.rotation, rng)
    tilt = float(np.arccos(rng.uniform(0.0, np.cos(np.radians(25.0)))))
    dark = float(np.interp(body.teff, [3000, 4500, 6000], [0.55, 0.65, 0.45]))
    return Disc(
        inclination=recipe.inclination or tilt,
        rotation_period=recipe.rotation or rotation,
        radius=body.radius,
        shear=draw_even(kind.shear, rng),
        limb_darkening=(dark - 0.1, 0.15),
        blueshift=body.blueshift,
    )


def _draw_plan(kind: Kind, rng: np.random.Generator) -> Plan:
    return Plan(
        n_obs=int(np.clip(np.exp(rng.normal(np.log(108.0), 0.5)), 50, 295)),
        n_seasons=int(rng.choice([1, 2, 3, 4, 5], p=[0.16, 0.32, 0.23, 0.18, 0.11])),
        n_instruments=int(rng.choice([1, 2, 3], p=[0.46, 0.45, 0.09])),
        median_error=draw_log(kind.error, rng),
        exposures=float(rng.choice([1.0, 1.08, 1.55], p=[0.4, 0.35, 0.25])),
    )


def _draw_cycle(
    kind: Kind, long_cycle: bool, baseline: float, rng: np.random.Generator
) -> Cycle | None:
    period, phase = draw_log(kind.cycle, rng), float(rng.uniform(0.0, 2.0 * np.pi))
    depth, chance = draw_even(kind.cycle_depth, rng), rng.random()
    if long_cycle:
        period = max(period, baseline * float(rng.uniform(1.2, 3.0)))
    elif chance > kind.cycle_chance:
        return None
    return Cycle(period, phase, depth)


def _draw_habits(kind: Kind, rng: np.random.Generator) -> Habits:
    return Habits(
        number=draw_even(kind.number, rng),
        area=draw_log(kind.area, rng),
        area_spread=0.5,
        life=draw_log(kind.life, rng),
        life_spread=0.3,
        facula_ratio=draw_log(kind.facula_ratio, rng),
        facula_life=draw_even((1.0, 2.0), rng),
        nest_share=draw_even(kind.nest_share, rng),
        nests=1 if kind.one_nest else int(rng.integers(1, 3)),
        nest_width=draw_even((0.15, 0.4), rng),
        latitude=draw_even(kind.latitude, rng),
        latitude_spread=draw_even((0.08, 0.2), rng),
        drift=draw_even((0.1, 0.35), rng),
    )


def _draw_skin(kind: Kind, cycle: Cycle | None, rng: np.random.Generator) -> Photosphere:
    return Photosphere(
        spot_contrast=draw_even(kind.spot_contrast, rng),
        facula_contrast=draw_even((0.04, 0.12), rng),
        quenching=draw_even(kind.quenching, rng),
        spot_quenching=draw_even((0.5, 1.0), rng),
        zeeman=draw_log(kind.zeeman, rng),
        bisector_gain=draw_even((-0.5, 0.7), rng),
        network=draw_log(kind.network, rng) if cycle is not None else 0.0,
    )


def _tune(
    disc: Disc,
    line: LineResponse,
    regions: Regions,
    skin: Photosphere,
    cycle: Cycle | None,
    time: Array,
    rms: float,
) -> tuple[Activity, Regions, Photosphere]:
    """Scale all areas together until the velocities scatter by ``rms`` (m/s), within limits.

    The drawn areas fix the proportions; without this step the product of many drawn numbers would
    spread over two decades, far more than stars of one kind do.
    """
    activity = activity_at(disc, line, regions, skin, cycle, time)
    factor = rms / max(float(np.std(activity.rv)), 0.05 * rms)
    factor = float(np.clip(factor, 0.1, 10.0))
    factor = min(factor, _MOST_COVERED / max(activity.largest_cover, 1e-9))
    regions = replace(regions, area=regions.area * factor, facula=regions.facula * factor)
    skin = replace(skin, network=min(skin.network * factor, 0.12))
    return activity_at(disc, line, regions, skin, cycle, time), regions, skin


def _rotation(regions: Regions, disc: Disc, habits: Habits) -> tuple[float, float, float]:
    """Period at which the regions turn: median weighted by area times life, and its 10-90 %."""
    if regions.peak.size == 0:
        rate = float(disc.angular_velocity(np.array(habits.latitude)))
        return (2.0 * np.pi / rate,) * 3
    weight = (regions.area + 0.2 * regions.facula) * regions.life
    period = 2.0 * np.pi / regions.rate
    order = np.argsort(period)
    share = np.cumsum(weight[order]) / weight.sum()
    low, mid, high = (float(period[order][np.searchsorted(share, q)]) for q in (0.1, 0.5, 0.899))
    return mid, low, high


def _lift_faint(planets: tuple[Planet, ...], rest: Array, time: Array) -> tuple[Planet, ...]:
    """No planet stays hopelessly below its companions: each reaches the least snr."""
    curves = [orbit_velocity(p, time) for p in planets]
    out = list(planets)
    for _ in range(3):
        for i, p in enumerate(out):
            others = rest + sum((c for j, c in enumerate(curves) if j != i), np.zeros(time.size))
            least = _LEAST_SNR * float(np.std(others)) / np.sqrt(time.size)
            if p.semi_amplitude < least:
                curves[i] = curves[i] * (least / p.semi_amplitude)
                out[i] = replace(p, semi_amplitude=least)
    return tuple(out)
