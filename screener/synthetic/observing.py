"""When a survey looks at a star, with what, and how well."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, IntArray

__all__ = ["Campaign", "Instrument", "Plan", "SITES", "Site", "draw_campaign", "photometry_times"]

_YEAR = 365.25
_SYNODIC_MONTH = 29.530589
_SIDEREAL_GAIN = 1.0 / 365.25  # a star culminates this much earlier each night, d
FIRST_DAY = 2458000.0


@dataclass(frozen=True)
class Site:
    """An invented mountain; longitude east in degrees sets the hour of its nights."""

    name: str
    longitude: float
    clear: float  # share of clear nights
    spell: float  # mean length of a bad spell, d


SITES = (
    Site("dry ridge", -70.0, 0.80, 2.0),
    Site("island cone", -17.5, 0.72, 3.0),
    Site("high saddle", 10.0, 0.55, 3.5),
    Site("red plateau", 149.0, 0.62, 3.0),
    Site("sea summit", -155.0, 0.70, 3.0),
    Site("mesa", -111.0, 0.68, 2.5),
)


@dataclass(frozen=True)
class Instrument:
    """One spectrograph as it is used for one star."""

    name: str
    site: Site
    zero_point: float  # m/s
    jitter: float  # m/s, on top of the quoted errors
    error: float  # median quoted error, m/s
    share: float  # of the nights
    start: float  # first and last day of use, d
    end: float
    shuns_moon: bool
    exposures: float  # mean number per night


@dataclass(frozen=True)
class Plan:
    """What is wanted of a campaign."""

    n_obs: int
    n_seasons: int
    n_instruments: int
    median_error: float
    exposures: float  # per night


@dataclass(frozen=True, eq=False)
class Campaign:
    """When and with what; ``time`` sorted, ``instrument`` indexes ``instruments``, (n_obs,)."""

    time: Array
    instrument: IntArray
    quoted: Array  # velocity errors as quoted, m/s
    instruments: tuple[Instrument, ...]
    first_season: float  # middle of the first season, d
    season_length: float

    @property
    def n_nights(self) -> int:
        return int(1 + np.count_nonzero(np.diff(self.time) > 0.4))


def draw_campaign(plan: Plan, rng: np.random.Generator) -> Campaign:
    """Seasons, weather, Moon and allocation give the nights; each star culminates its own way."""
    length = float(rng.uniform(150.0, 235.0))
    middle = FIRST_DAY + float(rng.uniform(200.0, 1300.0))
    start = middle - 0.5 * length
    end = middle + (plan.n_seasons - 1) * _YEAR + 0.5 * length
    instruments = _draw_instruments(plan, start, end, rng)
    in_runs = rng.random() < 0.3
    times: list[Array] = []
    labels: list[IntArray] = []
    used: list[Instrument] = []
    for tool in instruments:
        wanted = max(round(plan.n_obs * tool.share), 8)
        nights = _nights(tool, middle, length, plan.n_seasons, in_runs, rng)
        if nights.size == 0:
            continue
        exposures = _exposures(tool, nights, wanted, middle, rng)
        times.append(exposures)
        labels.append(np.full(exposures.size, len(used), dtype=np.intp))
        used.append(tool)
    time, label = np.concatenate(times), np.concatenate(labels)
    order = np.argsort(time)
    order = order[np.diff(time[order], prepend=-np.inf) > 0.003]  # no two within five minutes
    time, label = time[order], label[order]
    seeing = np.exp(0.2 * rng.standard_normal(time.size))
    poor = rng.random(time.size) < 0.04  # cirrus, high airmass
    seeing[poor] *= rng.uniform(1.4, 2.5, int(poor.sum()))
    quoted = np.array([i.error for i in used])[label] * seeing
    return Campaign(np.round(time, 5), label, quoted, tuple(used), middle, length)


_FAMILIES = (
    ("FERN", "MOSS", "REED"),
    ("ALPHA-1", "ALPHA-2", "ALPHA-3"),
    ("VESPER", "MATIN", "NOON"),
)


def _draw_instruments(
    plan: Plan, start: float, end: float, rng: np.random.Generator
) -> tuple[Instrument, ...]:
    names = _FAMILIES[int(rng.integers(len(_FAMILIES)))]
    n = plan.n_instruments
    share = rng.dirichlet(np.full(n, 3.0))
    # one after the other (an upgrade, a successor), overlapping a little, or side by side
    in_turn = n > 1 and rng.random() < 0.5
    edges = np.concatenate([[0.0], np.cumsum(share)])
    same_site = rng.random() < 0.5
    first = SITES[int(rng.integers(len(SITES)))]
    out = []
    for k in range(n):
        site = first if same_site else SITES[int(rng.integers(len(SITES)))]
        overlap = float(rng.uniform(-0.02, 0.06)) if in_turn else 0.0
        low = edges[k] - (overlap if k else 0.0) if in_turn else 0.0
        high = edges[k + 1] if in_turn else 1.0
        out.append(
            Instrument(
                name=names[k],
                site=site,
                zero_point=float(rng.uniform(-20.0, 20.0)),
                jitter=float(
                    np.exp(rng.normal(np.log(0.45), 0.6)) * max(1.0, 0.4 * plan.median_error)
                ),
                error=float(plan.median_error * np.exp(rng.normal(0.0, 0.25 if n > 1 else 0.0))),
                share=float(share[k]),
                start=start + max(low, 0.0) * (end - start),
                end=start + high * (end - start),
                shuns_moon=bool(rng.random() < 0.4),
                exposures=plan.exposures,
            )
        )
    return tuple(out)


def _nights(
    tool: Instrument,
    middle: float,
    length: float,
    n_seasons: int,
    in_runs: bool,
    rng: np.random.Generator,
) -> Array:
    """Days (local midnight, whole numbers of the calendar) on which the tool could look."""
    days = np.arange(
        np.floor(middle - 0.5 * length), middle + (n_seasons - 1) * _YEAR + 0.5 * length + 1.0
    )
    offset = np.mod(days - middle + 0.5 * _YEAR, _YEAR) - 0.5 * _YEAR
    usable = (np.abs(offset) <= 0.5 * length) & (days >= tool.start) & (days <= tool.end + 1.0)
    usable &= _clear(tool.site, days.size, rng)
    if tool.shuns_moon:
        age = np.mod(days - 2451550.1, _SYNODIC_MONTH)  # since new Moon of 2000 January 6
        usable &= np.abs(age - 0.5 * _SYNODIC_MONTH) > rng.uniform(2.0, 4.5)
    if in_runs:
        turn, run = rng.uniform(24.0, 36.0), rng.uniform(9.0, 17.0)
        usable &= np.mod(days - rng.uniform(0.0, turn), turn) < run
    return days[usable]


def _clear(site: Site, n: int, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Clear nights as a two-state chain with the site's share and mean bad spell."""
    leave_bad = 1.0 / site.spell
    leave_clear = leave_bad * (1.0 - site.clear) / site.clear
    draw = rng.random(n)
    out = np.empty(n, dtype=bool)
    state = bool(rng.random() < site.clear)
    for i in range(n):
        out[i] = state
        state = (draw[i] >= leave_clear) if state else (draw[i] < leave_bad)
    return out


def _exposures(
    tool: Instrument, nights: Array, wanted: int, middle: float, rng: np.random.Generator
) -> Array:
    """Mid-exposure times; a few per night where asked for, 1 to 5 hours apart."""
    count = max(round(wanted / tool.exposures), 1)
    if count < nights.size:
        # interest comes and goes: nights are drawn with slowly varying weight
        wave = 1.0 + 0.6 * np.sin(2.0 * np.pi * (nights / rng.uniform(60, 200) + rng.random()))
        nights = np.sort(rng.choice(nights, count, replace=False, p=wave / wave.sum()))
    midnight = nights + 0.5 - tool.site.longitude / 360.0
    offset = np.mod(nights - middle + 0.5 * _YEAR, _YEAR) - 0.5 * _YEAR
    culmination = np.clip(-offset * _SIDEREAL_GAIN, -0.17, 0.17)
    base = midnight + np.clip(culmination + 0.03 * rng.standard_normal(nights.size), -0.2, 0.2)
    again = np.flatnonzero(rng.random(nights.size) < tool.exposures - 1.0)
    second = base[again] + rng.uniform(0.04, 0.18, again.size)
    return np.concatenate([base, second])


def photometry_times(kind: str, campaign: Campaign, rng: np.random.Generator) -> Array:
    """Times of photometry, shape (n_flux,): "space" (2 h bins, months) or "ground" (nightly)."""
    last = float(campaign.time[-1])
    first = float(campaign.time[0])
    if kind == "space":
        sector = 26.7
        n = int(rng.choice([1, 2, 3], p=[0.55, 0.25, 0.20]))
        start = rng.uniform(first, max(last - n * sector, first + 1.0))
        times = start + np.arange(0.0, n * sector, 1.0 / 12.0)
        gap = np.abs(np.mod(times - start, 0.5 * sector) - 0.0) < rng.uniform(0.3, 1.2)
        return np.asarray(np.round(times[~gap | (n == 1)], 5), dtype=float)
    seasons = int(rng.choice([1, 2]))
    year = int(rng.integers(0, max(round((last - first) / _YEAR), 0) + 1))
    middle = campaign.first_season + year * _YEAR
    days = np.arange(
        np.floor(middle - 0.5 * campaign.season_length),
        middle + (seasons - 1) * _YEAR + 0.5 * campaign.season_length,
    )
    offset = np.mod(days - middle + 0.5 * _YEAR, _YEAR) - 0.5 * _YEAR
    site = SITES[int(rng.integers(len(SITES)))]
    usable = (np.abs(offset) < 0.5 * campaign.season_length) & _clear(site, days.size, rng)
    days = days[usable]
    times = np.sort(days + 0.5 + 0.04 * rng.standard_normal(days.size))
    return np.asarray(np.round(times, 5), dtype=float)
