"""Which nights can be used: darkness, altitude, Moon; offline."""

from __future__ import annotations

import contextlib
import difflib
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from screener.core import Array, InputFault, Star

__all__ = ["SITES", "NightTimes", "Site", "find_site", "nights_from_data", "nights_from_site"]


@dataclass(frozen=True)
class Site:
    """An observatory: latitude and longitude (east) in degrees, height in metres."""

    name: str
    latitude: float
    longitude: float
    height: float


@dataclass(frozen=True, eq=False)
class NightTimes:
    """Usable nights: one time each (JD, UTC within a minute of BJD's cousins), shape (n_nights,).

    ``altitude`` (deg), ``moon_distance`` (deg) and ``moon_lit`` (0 to 1) are NaN where unknown.
    """

    time: Array
    altitude: Array
    moon_distance: Array
    moon_lit: Array
    sentence: str


# geographic positions to about an arcminute, which is all that darkness and altitude need
SITES: dict[str, Site] = {
    key: Site(name, *where)
    for key, name, where in (
        ("calar alto", "Calar Alto", (37.224, -2.546, 2168.0)),
        ("haute-provence", "Haute-Provence", (43.931, 5.713, 650.0)),
        ("kitt peak", "Kitt Peak", (31.958, -111.597, 2096.0)),
        ("la palma", "La Palma", (28.754, -17.889, 2370.0)),
        ("la silla", "La Silla", (-29.261, -70.732, 2400.0)),
        ("las campanas", "Las Campanas", (-29.015, -70.692, 2380.0)),
        ("lick", "Lick", (37.341, -121.643, 1283.0)),
        ("mauna kea", "Mauna Kea", (19.826, -155.475, 4145.0)),
        ("mcdonald", "McDonald", (30.672, -104.022, 2070.0)),
        ("palomar", "Palomar", (33.356, -116.865, 1712.0)),
        ("paranal", "Paranal", (-24.627, -70.404, 2635.0)),
        ("siding spring", "Siding Spring", (-31.273, 149.064, 1165.0)),
        ("sutherland", "Sutherland", (-32.378, 20.811, 1798.0)),
    )
}

_SUN_BELOW = -18.0  # deg, astronomical darkness
_STAR_ABOVE = 30.0  # deg, airmass 2
_MOON_APART = 20.0  # deg, while more than a third lit
_STEP = 1.0 / 72  # d, 20 minutes
_HALF_NIGHT = 0.34  # d
_SEASON = 15.0  # d: a day of the year counts as usable this near one that was used


def find_site(text: str) -> Site:
    """A site by name (any case) or by "latitude,longitude[,height]" in degrees (east) and metres.

    Raises
    ------
    InputFault
        Where it is neither; it names the nearest known site.
    """
    key = text.strip().lower().replace("_", " ")
    if key in SITES:
        return SITES[key]
    parts = key.split(",")
    if len(parts) in (2, 3):
        with contextlib.suppress(ValueError):
            numbers = [float(p) for p in parts]
            height = numbers[2] if len(numbers) == 3 else 0.0
            if abs(numbers[0]) <= 90 and abs(numbers[1]) <= 360 and abs(height) < 9000:
                return Site(text.strip(), numbers[0], numbers[1], height)
    close = difflib.get_close_matches(key, SITES, n=1)
    hint = f'Did you mean "{close[0]}"? ' if close else ""
    raise InputFault(
        f"site {text!r}",
        "neither a known observatory nor latitude,longitude[,height]",
        f"{hint}Known: {', '.join(SITES)}.",
    )


def site_for(star: Star) -> Site:
    """A site from which a star of that declination culminates well, where none was named."""
    return SITES["la palma" if (star.dec_deg or 0.0) > 10 else "la silla"]


@contextlib.contextmanager
def _offline() -> Iterator[None]:
    """Earth orientation from the tables at hand; predictions good to seconds are good enough."""
    from astropy.utils import iers

    with (
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("iers_degraded_accuracy", "ignore"),
        warnings.catch_warnings(),
    ):
        warnings.simplefilter("ignore")
        yield


def _unit(longitude: Any, latitude: Any) -> Array:
    """Unit vectors, last axis 3."""
    parts = [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude)]
    return np.stack([*parts, np.sin(latitude)], axis=-1)


def nights_from_site(star: Star, site: Site, start: float, days: int) -> NightTimes:
    """Nights after ``start`` (JD) on which the star stands above 30 deg in the dark.

    The time of a night is that of the greatest altitude while the Sun is below -18 deg. Nights on
    which a Moon more than a third lit is nearer than 20 deg are left out.
    """
    if star.ra_deg is None or star.dec_deg is None:
        raise ValueError("the star's coordinates are needed")
    from astropy import units as u
    from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body, get_sun
    from astropy.coordinates.erfa_astrom import ErfaAstromInterpolator, erfa_astrom
    from astropy.time import Time

    # local midnight: Julian dates begin at noon in Greenwich
    midnight = np.floor(start) + 0.5 - site.longitude / 360.0 + np.arange(-1, days + 1)
    midnight = midnight[(midnight + _HALF_NIGHT > start) & (midnight < start + days)]
    steps = np.arange(-_HALF_NIGHT, _HALF_NIGHT + 1e-9, _STEP)
    grid = midnight[:, None] + steps[None, :]
    # precession and aberration hardly change in three hours; the Earth's turn is never interpolated
    with _offline(), erfa_astrom.set(ErfaAstromInterpolator(3 * u.hour)):
        place = EarthLocation.from_geodetic(
            site.longitude * u.deg, site.latitude * u.deg, site.height * u.m
        )
        target = SkyCoord(star.ra_deg * u.deg, star.dec_deg * u.deg)
        moments = Time(grid.ravel(), format="jd", scale="utc")
        frame = AltAz(obstime=moments, location=place)
        high = np.asarray(target.transform_to(frame).alt.deg).reshape(grid.shape)
        # the Sun moves by less than 0.4 deg in half a night: its place at midnight will do
        sun_place = get_sun(Time(midnight, format="jd", scale="utc"))
        sun_sky = SkyCoord(
            np.repeat(sun_place.ra.deg, steps.size) * u.deg,
            np.repeat(sun_place.dec.deg, steps.size) * u.deg,
        )
        sun = np.asarray(sun_sky.transform_to(frame).alt.deg).reshape(grid.shape)
        usable = (sun < _SUN_BELOW) & (grid >= start)
        high = np.where(usable, high, -90.0)
        best = np.argmax(high, axis=1)
        rows = np.flatnonzero(high[np.arange(best.size), best] > _STAR_ABOVE)
        where = f"Nights at {site.name}: Sun below -18 deg, star above 30 deg, away from the Moon."
        if rows.size == 0:
            none = np.zeros(0)
            return NightTimes(none, none, none, none, where)
        time, altitude = grid[rows, best[rows]], high[rows, best[rows]]
        chosen = Time(time, format="jd", scale="utc")
        moon = get_body("moon", chosen, place)
        sun_then = get_sun(chosen)
        moon_at = _unit(moon.ra.rad, moon.dec.rad)
        sun_at = _unit(sun_then.ra.rad, sun_then.dec.rad)
    star_at = _unit(np.radians(star.ra_deg), np.radians(star.dec_deg))
    apart = np.degrees(np.arccos(np.clip(moon_at @ star_at, -1, 1)))
    elongation = np.arccos(np.clip(np.sum(moon_at * sun_at, axis=1), -1, 1))
    lit = 0.5 * (1 - np.cos(elongation))
    keep = ~((apart < _MOON_APART) & (lit > 1 / 3))
    return NightTimes(time[keep], altitude[keep], apart[keep], lit[keep], where)


def nights_from_data(times: Array, start: float, days: int) -> NightTimes:
    """Nights after ``start`` in the seasons that the data show, for a star without coordinates.

    A night counts when its day of the year lies within 15 d of one that was observed; its time is
    the median time of day of the data.
    """
    # the circular mean: times of day may straddle the change of date
    angle = np.angle(np.mean(np.exp(2j * np.pi * times)))
    of_day = float(angle / (2 * np.pi)) % 1.0
    nights = np.floor(start) + of_day + np.arange(0, days + 1)
    nights = nights[(nights > start) & (nights <= start + days)]
    gap = np.abs((nights[:, None] - times[None, :] + 182.625) % 365.25 - 182.625).min(axis=1)
    nights = nights[gap <= _SEASON]
    unknown = np.full(nights.size, np.nan)
    return NightTimes(
        nights,
        unknown,
        unknown,
        unknown,
        "Coordinates unknown: nights in the seasons in which the star was observed so far.",
    )
