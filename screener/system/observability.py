"""Which nights can be used: darkness, altitude, Moon; offline."""

from __future__ import annotations

import contextlib
import difflib
import warnings
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, InputFault, IntArray, Star

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
    """Usable nights, up to three times in each: early, best, late. Arrays of shape (n_slots,).

    ``time`` is in days (JD, UTC; BJD to within ten minutes), ``night`` the number of the night,
    ``best`` whether it is the best time of its night. ``altitude`` (deg), ``moon_distance`` (deg)
    and ``moon_lit`` (0 to 1) are NaN where unknown.
    """

    time: Array
    night: IntArray
    best: NDArray[np.bool_]
    altitude: Array
    moon_distance: Array
    moon_lit: Array
    sentence: str

    def select(self, rows: NDArray[Any]) -> NightTimes:
        """The same with only the rows of a mask or index array."""
        return replace(
            self,
            time=self.time[rows],
            night=self.night[rows],
            best=self.best[rows],
            altitude=self.altitude[rows],
            moon_distance=self.moon_distance[rows],
            moon_lit=self.moon_lit[rows],
        )


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

    The best time of a night is that of the greatest altitude while the Sun is below -18 deg; the
    first and the last usable time come along where they differ by an hour or more. Nights on which
    a Moon more than a third lit is nearer than 20 deg are left out.

    Raises
    ------
    ValueError
        Where the star has no coordinates.
    """
    if star.ra_deg is None or star.dec_deg is None:
        raise ValueError("the star's coordinates are needed")
    # local midnight: Julian dates begin at noon in Greenwich
    midnight = np.floor(start) + 0.5 - site.longitude / 360.0 + np.arange(-1, days + 1)
    midnight = midnight[(midnight + _HALF_NIGHT > start) & (midnight < start + days)]
    steps = np.arange(-_HALF_NIGHT, _HALF_NIGHT + 1e-9, _STEP)
    grid = midnight[:, None] + steps[None, :]
    with _offline():
        altitude, apart, lit = _sky(star.ra_deg, star.dec_deg, site, midnight, grid)
    altitude[grid < start] = -90.0
    altitude[(apart < _MOON_APART) & (lit > 1 / 3)] = -90.0
    rows: list[tuple[int, int, bool]] = []
    for night in np.flatnonzero(altitude.max(axis=1, initial=-90.0) > _STAR_ABOVE).tolist():
        up = np.flatnonzero(altitude[night] > _STAR_ABOVE)
        best = int(np.argmax(altitude[night]))
        early, late = int(up[0]), int(up[-1])
        apart_enough = round(1 / 24 / _STEP)
        rows += [(night, early, False)] if best - early >= apart_enough else []
        rows.append((night, best, True))
        rows += [(night, late, False)] if late - best >= apart_enough else []
    which = np.array([r[:2] for r in rows], dtype=np.intp).reshape(-1, 2)
    return NightTimes(
        grid[which[:, 0], which[:, 1]],
        which[:, 0],
        np.array([r[2] for r in rows], dtype=bool),
        altitude[which[:, 0], which[:, 1]],
        apart[which[:, 0]],
        lit[which[:, 0]],
        f"Nights at {site.name}: Sun below -18 deg, star above 30 deg, away from the Moon.",
    )


def _sky(
    ra_deg: float, dec_deg: float, site: Site, midnight: Array, grid: Array
) -> tuple[Array, Array, Array]:
    """Altitude in the dark (deg, -90 by day) on the grid; distance and phase of the Moon a night.

    The Sun moves by less than 0.4 deg in half a night and the Moon by 5: their places at midnight
    will do.
    """
    from astropy import units as u
    from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body, get_sun
    from astropy.coordinates.erfa_astrom import ErfaAstromInterpolator, erfa_astrom
    from astropy.time import Time

    place = EarthLocation.from_geodetic(
        site.longitude * u.deg, site.latitude * u.deg, site.height * u.m
    )
    middle = Time(midnight, format="jd", scale="utc")
    sun, moon = get_sun(middle), get_body("moon", middle, place)
    n = grid.shape[1]
    frame = AltAz(obstime=Time(grid.ravel(), format="jd", scale="utc"), location=place)
    sun_sky = SkyCoord(np.repeat(sun.ra.deg, n) * u.deg, np.repeat(sun.dec.deg, n) * u.deg)
    target = SkyCoord(ra_deg * u.deg, dec_deg * u.deg)
    # precession and aberration hardly change in three hours; the Earth's turn is not interpolated
    with erfa_astrom.set(ErfaAstromInterpolator(3 * u.hour)):
        altitude = np.array(target.transform_to(frame).alt.deg).reshape(grid.shape)
        depression = np.array(sun_sky.transform_to(frame).alt.deg).reshape(grid.shape)
    altitude[depression > _SUN_BELOW] = -90.0
    moon_at, sun_at = _unit(moon.ra.rad, moon.dec.rad), _unit(sun.ra.rad, sun.dec.rad)
    star_at = _unit(np.radians(ra_deg), np.radians(dec_deg))
    apart = np.degrees(np.arccos(np.clip(moon_at @ star_at, -1, 1)))
    elongation = np.arccos(np.clip(np.sum(moon_at * sun_at, axis=1), -1, 1))
    return altitude, apart, 0.5 * (1 - np.cos(elongation))


def nights_from_data(times: Array, start: float, days: int) -> NightTimes:
    """Nights after ``start`` in the seasons that the data show, for a star without coordinates.

    A night counts when its day of the year lies within 15 d of one that was observed; its times
    are the median time of day of the data and the tenth and ninetieth hundredths, where these
    differ from it by an hour or more.
    """
    # times of day may straddle the change of date: measured from their circular mean
    middle = float(np.angle(np.mean(np.exp(2j * np.pi * times))) / (2 * np.pi))
    early, best, late = np.quantile((times - middle + 0.5) % 1.0 - 0.5, [0.1, 0.5, 0.9]) + middle
    offsets = [(float(best), True)]
    offsets += [(float(t), False) for t in (early, late) if abs(t - best) >= 1 / 24]
    first = np.floor(start - best) + np.arange(0, days + 2)
    gap = np.abs((first[:, None] + best - times[None, :] + 182.625) % 365.25 - 182.625).min(axis=1)
    nights = first[gap <= _SEASON]
    time = np.concatenate([nights + t for t, _ in offsets])
    unknown = np.full(time.size, np.nan)
    found = NightTimes(
        time,
        np.tile(np.arange(nights.size), len(offsets)),
        np.repeat([b for _, b in offsets], nights.size),
        unknown,
        unknown,
        unknown,
        "Coordinates unknown: nights in the seasons in which the star was observed so far.",
    )
    found = found.select(np.argsort(time, kind="stable"))
    return found.select((found.time > start) & (found.time <= start + days))
