"""The truth of a synthetic star, for scoring, and the sidecar, for screening."""

from __future__ import annotations

from typing import Any

import numpy as np

from screener.core import Array
from screener.synthetic.activity import Activity
from screener.synthetic.disc import Disc
from screener.synthetic.kinds import Body
from screener.synthetic.observing import Campaign, Instrument
from screener.synthetic.orbits import Planet, near_rotation, orbit_velocity
from screener.synthetic.regions import Cycle

__all__ = ["sidecar_of", "truth_of"]


def truth_of(
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
    told = [_told_planet(p, clean, time, rotation[0]) for p in planets]
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


def _told_planet(p: Planet, clean: Array, time: Array, rotation: float) -> dict[str, Any]:
    """``snr`` is K / rms of everything else * sqrt(n)."""
    rest = float(np.std(clean - orbit_velocity(p, time)))
    return {
        "period_d": p.period,
        "k_m_s": p.semi_amplitude,
        "ecc": p.eccentricity,
        "omega_rad": p.omega_peri,
        "t_peri": p.time_peri,
        "snr": float(p.semi_amplitude / rest * np.sqrt(time.size)),
        "snr_alone": p.snr_alone,
        "near_rotation": near_rotation(p.period, rotation),
        "purpose": p.purpose,
    }


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


def sidecar_of(
    name: str, body: Body, disc: Disc, log_rhk: float, rng: np.random.Generator
) -> dict[str, Any]:
    """What a catalogue would know of the star, rounded and with errors."""
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
        star["log_rhk"] = round(log_rhk + 0.03 * float(rng.standard_normal()), 3)
    return {"star": star}
