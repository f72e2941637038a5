"""One synthetic star from end to end: the star, its regions, the campaign, the planets, noise."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from screener.core import Array
from screener.synthetic.activity import (
    Activity,
    Photosphere,
    activity_at,
    correlated_noise,
    flux_at,
)
from screener.synthetic.disc import Disc, LineResponse, line_response
from screener.synthetic.kinds import KINDS, Body, Kind, body_of, calcium_of, draw_even, draw_log
from screener.synthetic.observing import (
    Campaign,
    Instrument,
    Plan,
    draw_campaign,
    photometry_times,
)
from screener.synthetic.orbits import (
    Planet,
    PlanetPlan,
    draw_planets,
    near_rotation,
    orbit_velocity,
)
from screener.synthetic.regions import Cycle, Habits, Regions, emerge

__all__ = ["Column", "Recipe", "SyntheticStar", "simulate"]

_MOST_COVERED = 0.2  # share of the disc under spots at most
_LEAST_SNR = 4.1  # planets are lifted to this much against all the rest


@dataclass(frozen=True, eq=False)
class Column:
    """An indicator with its errors, shape (n_obs,)."""

    value: Array
    error: Array


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
    granulation = _granulation(body, time, rng)
    white = _white_noise(campaign, rng)
    rotation = _rotation(regions, disc, habits)
    stellar = activity.rv + granulation
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
    rv, n_outliers = _with_outliers(clean, campaign, rng)
    indicators, dropped, levels = _indicators(
        kind, body, disc, line.width, activity, campaign, recipe, rotation[0], rng
    )
    photometry, photometry_kind = _photometry(disc, regions, skin, campaign, recipe, rng)
    truth = _truth(
        name, recipe.kind, rotation, cycle, planets, activity, granulation, white, clean, campaign
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
        "dropped": dropped,
        "photometry": photometry_kind,
    }
    sidecar = _sidecar(name, body, disc, levels, rng)
    return SyntheticStar(
        name, recipe.kind, body, disc, campaign, rv + zero, campaign.quoted, indicators,
        photometry, planets, sidecar, truth,
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


def _granulation(body: Body, time: Array, rng: np.random.Generator) -> Array:
    """Granulation (an hour) and supergranulation (most of a day), m/s."""
    warm = float(np.interp(body.teff, [3000, 4500, 6000], [0.32, 0.42, 0.62]))
    level = warm * float(np.exp(0.25 * rng.standard_normal()))
    quick = correlated_noise(time, 0.04, 0.6 * level, rng)
    slow = correlated_noise(time, float(rng.uniform(0.3, 0.8)), 0.8 * level, rng)
    return quick + slow


def _white_noise(campaign: Campaign, rng: np.random.Generator) -> Array:
    jitter = np.array([i.jitter for i in campaign.instruments])[campaign.instrument]
    draw = rng.standard_normal(campaign.time.size)
    return np.asarray(np.hypot(campaign.quoted, jitter) * draw, dtype=float)


def _with_outliers(rv: Array, campaign: Campaign, rng: np.random.Generator) -> tuple[Array, int]:
    """A few wild velocities (guiding, cosmics), now and then."""
    n = int(min(rng.poisson(0.55), 4))
    rows = rng.choice(rv.size, n, replace=False)
    size = rng.uniform(6.0, 15.0, n) * rng.choice([-1.0, 1.0], n)
    out = rv.copy()
    out[rows] += size * np.maximum(np.std(rv), campaign.quoted[rows])
    return out, n


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


def _indicators(
    kind: Kind,
    body: Body,
    disc: Disc,
    line_width: float,
    activity: Activity,
    campaign: Campaign,
    recipe: Recipe,
    rotation: float,
    rng: np.random.Generator,
) -> tuple[dict[str, Column], list[str], dict[str, float]]:
    """Line shapes and chromospheric lines, each with its own response, noise and zero points."""
    n = campaign.time.size
    tools = campaign.instrument
    log_rhk, s_mean = calcium_of(body, rotation, 0.08 * float(rng.standard_normal()))
    red = body.teff < 3950.0
    quality = campaign.quoted

    def finish(signal: Array, error: Array, zero_sd: float, extra: float) -> Column:
        zeros = zero_sd * rng.standard_normal(len(campaign.instruments))
        noise = np.hypot(error, extra * np.median(error)) * rng.standard_normal(n)
        return Column(signal + zeros[tools] + noise, error)

    plage = activity.plage
    gain = draw_log(kind.plage_gain, rng)
    shape = gain * (plage - plage.mean())
    size = float(np.std(shape))
    # emergence, small flares and active-network flicker, over within a day or so
    flicker = correlated_noise(campaign.time, float(rng.uniform(0.3, 1.2)), 1.0, rng)
    s_signal = s_mean * (1.0 + shape + (0.003 + rng.uniform(0.5, 1.3) * size) * flicker)
    s_error = s_mean * rng.uniform(0.004, 0.013) * quality / np.median(quality)
    # H-alpha: plages fill the line in, filaments deepen it, so its tie to calcium varies
    filaments = correlated_noise(campaign.time, float(rng.uniform(1, 6)), 1.0, rng)
    ha_mean = float(rng.uniform(0.45, 0.88)) if red else float(rng.uniform(0.165, 0.235))
    ha_signal = ha_mean * (
        1.0
        + rng.uniform(-0.15, 0.38) * shape
        + (0.002 + rng.uniform(0.15, 0.4) * size) * filaments
        + (0.002 + rng.uniform(0.05, 0.3) * size) * flicker
    )
    if red:  # flares lift both lines for single exposures
        flare = np.where(rng.random(n) < 0.03, rng.exponential(0.08, n), 0.0)
        s_signal = s_signal * (1.0 + flare)
        ha_signal = ha_signal * (1.0 + 0.8 * flare)
    ha_error = ha_mean * rng.uniform(0.004, 0.010) * quality / np.median(quality)
    columns = {
        "fwhm": finish(
            line_width + activity.fwhm, rng.uniform(2.0, 2.5) * quality, 40.0, rng.uniform(0.4, 1.3)
        ),
        "bis": finish(
            rng.uniform(-40, 40) + activity.bis, 2.0 * quality, 8.0, rng.uniform(0.1, 0.4)
        ),
        "contrast": finish(
            45.0 * (1.0 + activity.contrast), 45.0 * 3e-4 * quality, 0.2, rng.uniform(0.2, 0.8)
        ),
        "s_index": finish(s_signal, s_error, 0.025 * s_mean, 0.3),
        "halpha": finish(ha_signal, ha_error, 0.01 * ha_mean, 0.3),
    }
    drop = _draw_drop(rng) if recipe.drop is None else recipe.drop
    for name in drop:
        columns.pop(name, None)
    told = [d for d in drop if d != "contrast"]
    return columns, told, {"log_rhk": log_rhk, "s_mean": s_mean}


def _draw_drop(rng: np.random.Generator) -> tuple[str, ...]:
    """Which indicators are missing; the line depth is seldom published."""
    dropped = []
    if rng.random() < 0.85:
        dropped.append("contrast")
    draw = rng.random()
    if draw < 0.12:
        dropped.append("halpha")
    elif draw < 0.20:
        dropped += ["fwhm", "bis", "contrast"]
    elif draw < 0.235:
        dropped.append("s_index")
    elif draw < 0.25:
        dropped += ["fwhm", "bis", "contrast", "halpha"]
    return tuple(dict.fromkeys(dropped))


def _photometry(
    disc: Disc,
    regions: Regions,
    skin: Photosphere,
    campaign: Campaign,
    recipe: Recipe,
    rng: np.random.Generator,
) -> tuple[tuple[Array, Array, Array] | None, str | None]:
    kind = recipe.photometry
    if kind == "draw":
        kind = (None, "ground", "space")[int(rng.choice(3, p=[0.56, 0.235, 0.205]))]
    if kind is None:
        return None, None
    time = photometry_times(kind, campaign, rng)
    level = draw_log((7e-5, 4e-4) if kind == "space" else (1.2e-3, 3.8e-3), rng)
    error = level * np.exp(0.15 * rng.standard_normal(time.size))
    flux = flux_at(disc, regions, skin, time)
    flux = flux * (1.0 + 0.3 * level * correlated_noise(time, 3.0, 1.0, rng))
    return (time, flux + error * rng.standard_normal(time.size), error), kind


def _sidecar(
    name: str, body: Body, disc: Disc, levels: dict[str, float], rng: np.random.Generator
) -> dict[str, Any]:
    star: dict[str, Any] = {
        "name": name,
        "spectral_type": body.spectral_type,
        "teff_k": round(body.teff),
        "mass_msun": round(body.mass, 3),
        "radius_rsun": round(body.radius, 3),
        "b_minus_v": round(body.b_minus_v, 3),
    }
    knows_vsini, knows_calcium = rng.random() < 0.77, rng.random() < 0.73
    measured = np.hypot(disc.vsini / 1e3, 0.3) + 0.2 * rng.standard_normal()
    if knows_vsini:
        star["vsini_km_s"] = round(float(max(measured, 0.3)), 1)
    if knows_calcium:
        star["log_rhk"] = round(levels["log_rhk"] + 0.03 * float(rng.standard_normal()), 3)
    return {"star": star}


def _truth(
    name: str,
    kind: str,
    rotation: tuple[float, float, float],
    cycle: Cycle | None,
    planets: tuple[Planet, ...],
    activity: Activity,
    granulation: Array,
    white: Array,
    clean: Array,
    campaign: Campaign,
) -> dict[str, Any]:
    """What the scoring needs, and what went into the star; velocities in m/s, times in d."""
    time = campaign.time
    root_n = np.sqrt(time.size)
    told = []
    for p in planets:
        rest = float(np.std(clean - orbit_velocity(p, time)))
        told.append(
            {
                "period_d": p.period,
                "k_m_s": p.semi_amplitude,
                "ecc": p.eccentricity,
                "omega_rad": p.omega_peri,
                "t_peri": p.time_peri,
                "snr": p.semi_amplitude / rest * root_n,
                "snr_alone": p.snr_alone,
                "near_rotation": near_rotation(p.period, rotation[0]),
                "purpose": p.purpose,
            }
        )
    periods = [
        {"period_d": rotation[0] / k, "kind": "rotation" if k == 1 else f"rotation/{k}"}
        for k in (1, 2, 3)
    ]
    if cycle is not None:
        periods.append({"period_d": cycle.period, "kind": "cycle"})
    return {
        "name": name,
        "archetype": kind,
        "prot_d": rotation[0],
        "prot_range_d": [rotation[1], rotation[2]],
        "planets": told,
        "stellar_periods": periods,
        "cycle_d": None if cycle is None else cycle.period,
        "activity_rms_m_s": float(np.std(activity.rv)),
        "spot_rms_m_s": float(np.std(activity.rv_contrast)),
        "convective_rms_m_s": float(np.std(activity.rv_convective)),
        "network_rms_m_s": float(np.std(activity.rv_network)),
        "granulation_rms_m_s": float(np.std(granulation)),
        "white_noise_m_s": float(np.std(white)),
        "n": int(time.size),
        "n_nights": campaign.n_nights,
        "baseline_d": float(np.ptp(time)),
        "seasons": int(1 + np.count_nonzero(np.diff(time) > 100.0)),
        "total_rms_m_s": float(np.std(clean)),
        "stellar_only": not planets,
        "max_spot_cover": activity.largest_cover,
        "instruments": [_told_instrument(i) for i in campaign.instruments],
        **_peaks(time, clean, campaign.quoted, "gls", "gls_detectable"),
        **_peaks(
            time, activity.rv + granulation + white, campaign.quoted, "activity_gls",
            "activity_detectable",
        ),
    }  # fmt: skip


def _told_instrument(tool: Instrument) -> dict[str, Any]:
    return {
        "name": tool.name,
        "offset": tool.zero_point,
        "jitter": tool.jitter,
        "site": tool.site.name,
    }


def _peaks(time: Array, rv: Array, error: Array, prefix: str, flag: str) -> dict[str, Any]:
    """Highest peak of a periodogram with a floating mean (Zechmeister & Kürster 2009)."""
    from astropy.timeseries import LombScargle

    top = 0.95
    scan = LombScargle(time, rv, error)
    frequency, power = scan.autopower(
        minimum_frequency=1.0 / np.ptp(time), maximum_frequency=top, samples_per_peak=5
    )
    best = int(np.argmax(power))
    chance = float(
        scan.false_alarm_probability(power[best], method="baluev", maximum_frequency=top)
    )
    return {
        f"{prefix}_peak_d": float(1.0 / frequency[best]),
        f"{prefix}_fap": chance,
        flag: chance < 1e-3,
    }
