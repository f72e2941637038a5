"""From the star to the tables: noise of the velocities, indicators, photometry."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array
from screener.synthetic.activity import Activity, Photosphere, correlated_noise, flux_at
from screener.synthetic.disc import Disc
from screener.synthetic.kinds import Body, Kind, draw_log
from screener.synthetic.observing import Campaign, photometry_times
from screener.synthetic.regions import Regions

__all__ = [
    "Column",
    "draw_dropped",
    "granulation",
    "indicators",
    "photometry",
    "white_noise",
    "with_outliers",
]


@dataclass(frozen=True, eq=False)
class Column:
    """An indicator with its errors, shape (n_obs,)."""

    value: Array
    error: Array


def granulation(body: Body, time: Array, rng: np.random.Generator) -> Array:
    """Granulation (an hour) and supergranulation (most of a day), m/s."""
    warm = float(np.interp(body.teff, [3000, 4500, 6000], [0.32, 0.42, 0.62]))
    level = warm * float(np.exp(0.25 * rng.standard_normal()))
    quick = correlated_noise(time, 0.04, 0.6 * level, rng)
    slow = correlated_noise(time, float(rng.uniform(0.3, 0.8)), 0.8 * level, rng)
    return quick + slow


def white_noise(campaign: Campaign, rng: np.random.Generator) -> Array:
    """Photon noise as quoted, and the instruments' jitter on top, m/s."""
    jitter = np.array([i.jitter for i in campaign.instruments])[campaign.instrument]
    draw = rng.standard_normal(campaign.time.size)
    return np.asarray(np.hypot(campaign.quoted, jitter) * draw, dtype=float)


def with_outliers(rv: Array, campaign: Campaign, rng: np.random.Generator) -> tuple[Array, int]:
    """A few wild velocities (guiding, cosmics), now and then."""
    n = int(min(rng.poisson(0.55), 4))
    rows = rng.choice(rv.size, n, replace=False)
    size = rng.uniform(6.0, 15.0, n) * rng.choice([-1.0, 1.0], n)
    out = rv.copy()
    out[rows] += size * np.maximum(np.std(rv), campaign.quoted[rows])
    return out, n


def indicators(
    kind: Kind,
    body: Body,
    line_width: float,
    activity: Activity,
    campaign: Campaign,
    s_mean: float,
    rng: np.random.Generator,
) -> dict[str, Column]:
    """Line shapes (m/s, per cent) and chromospheric lines, each with its response and noise."""
    quality = campaign.quoted
    n_tools = len(campaign.instruments)

    def finish(signal: Array, error: Array, zero_sd: float, extra: float) -> Column:
        zeros = zero_sd * rng.standard_normal(n_tools)
        noise = np.hypot(error, extra * np.median(error)) * rng.standard_normal(error.size)
        return Column(signal + zeros[campaign.instrument] + noise, error)

    calcium, halpha, ha_mean = _chromosphere(kind, body, activity, campaign.time, rng)
    relative = quality / np.median(quality)
    s_error = s_mean * rng.uniform(0.004, 0.013) * relative
    ha_error = ha_mean * rng.uniform(0.004, 0.010) * relative
    fwhm = line_width + activity.fwhm
    bis = rng.uniform(-40, 40) + activity.bis
    contrast = 45.0 * (1.0 + activity.contrast)
    return {
        "fwhm": finish(fwhm, rng.uniform(2.0, 2.5) * quality, 40.0, rng.uniform(0.4, 1.3)),
        "bis": finish(bis, 2.0 * quality, 8.0, rng.uniform(0.1, 0.4)),
        "contrast": finish(contrast, 0.0135 * quality, 0.2, rng.uniform(0.2, 0.8)),
        "s_index": finish(s_mean * calcium, s_error, 0.025 * s_mean, 0.3),
        "halpha": finish(ha_mean * halpha, ha_error, 0.01 * ha_mean, 0.3),
    }


def _chromosphere(
    kind: Kind, body: Body, activity: Activity, time: Array, rng: np.random.Generator
) -> tuple[Array, Array, float]:
    """Calcium and H-alpha emission relative to their means, and the mean of H-alpha."""
    plage = activity.plage
    shape = draw_log(kind.plage_gain, rng) * (plage - plage.mean())
    size = float(np.std(shape))
    # emergence, small flares and active-network flicker, over within a day or so
    flicker = correlated_noise(time, float(rng.uniform(0.3, 1.2)), 1.0, rng)
    calcium = 1.0 + shape + (0.003 + rng.uniform(0.5, 1.3) * size) * flicker
    # H-alpha: plages fill the line in, filaments deepen it, so its tie to calcium varies
    # (Meunier & Delfosse 2009)
    filaments = correlated_noise(time, float(rng.uniform(1, 6)), 1.0, rng)
    halpha = (
        1.0
        + rng.uniform(-0.15, 0.5) * shape
        + (0.002 + rng.uniform(0.15, 0.4) * size) * filaments
        + (0.002 + rng.uniform(0.05, 0.3) * size) * flicker
    )
    if body.is_red:  # flares lift both lines for single exposures
        flare = np.where(rng.random(time.size) < 0.03, rng.exponential(0.08, time.size), 0.0)
        calcium, halpha = calcium * (1.0 + flare), halpha * (1.0 + 0.8 * flare)
        return calcium, halpha, float(rng.uniform(0.45, 0.88))
    return calcium, halpha, float(rng.uniform(0.165, 0.235))


def draw_dropped(rng: np.random.Generator) -> tuple[str, ...]:
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


def photometry(
    kind: str,
    disc: Disc,
    regions: Regions,
    skin: Photosphere,
    campaign: Campaign,
    rng: np.random.Generator,
) -> tuple[Array, Array, Array]:
    """Times (d), relative fluxes and errors of "space" or "ground" photometry, (n_flux,)."""
    time = photometry_times(kind, campaign, rng)
    level = draw_log((7e-5, 4e-4) if kind == "space" else (1.2e-3, 3.8e-3), rng)
    error = level * np.exp(0.15 * rng.standard_normal(time.size))
    flux = flux_at(disc, regions, skin, time)
    flux = flux * (1.0 + 0.3 * level * correlated_noise(time, 3.0, 1.0, rng))
    return time, flux + error * rng.standard_normal(time.size), error
