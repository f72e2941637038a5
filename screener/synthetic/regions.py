"""Active regions: when and where they come up, how they grow and fade.

Regions emerge as a Poisson process whose rate follows the magnetic cycle; their latitudes drift
towards the equator as a cycle goes on (the butterfly diagram), a share of them comes up in active
longitudes ("nests") that turn with the star, and each carries a spot and, usually, a larger and
longer-lived facula.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array, IntArray
from screener.synthetic.disc import Disc

__all__ = ["Cycle", "Habits", "Regions", "alive_pairs", "emerge"]


@dataclass(frozen=True)
class Cycle:
    """Magnetic cycle; level(t) runs from 0 (minimum) to 1 (maximum)."""

    period: float  # d
    phase: float  # rad, at time zero
    depth: float  # 0: no modulation of the number of regions; 1: none at minimum

    def level(self, time: Array) -> Array:
        """Level of the cycle, same shape as ``time``."""
        turn = 2.0 * np.pi * time / self.period + self.phase
        # real cycles rise faster than they fall: shift the phase with itself
        return np.asarray(0.5 + 0.5 * np.sin(turn + 0.35 * np.sin(turn)), dtype=float)

    def progress(self, time: Array) -> Array:
        """Share of the present cycle that is over, from minimum to minimum, 0 to 1."""
        turn = 2.0 * np.pi * time / self.period + self.phase + 0.5 * np.pi
        return np.asarray(np.mod(turn / (2.0 * np.pi), 1.0), dtype=float)


@dataclass(frozen=True)
class Habits:
    """How a star grows its regions.

    Attributes
    ----------
    number : float
        Regions alive at one time, on the whole sphere, at cycle maximum.
    area, area_spread : float
        Median of the largest spot area (share of the visible hemisphere) and the standard
        deviation of its natural logarithm.
    life, life_spread : float
        Median life of a spot, d, likewise.
    facula_ratio : float
        Facula area over spot area.
    facula_life : float
        Life of a facula over that of its spot.
    nest_share, nests, nest_width : float, int, float
        Share of regions that come up in active longitudes, how many of those (0 to 2), their
        standard deviation in longitude, rad.
    latitude, latitude_spread : float
        Mean latitude at mid-cycle and standard deviation, rad.
    drift : float
        Latitude lost from start to end of a cycle, rad.
    """

    number: float
    area: float
    area_spread: float
    life: float
    life_spread: float
    facula_ratio: float
    facula_life: float
    nest_share: float
    nests: int
    nest_width: float
    latitude: float
    latitude_spread: float
    drift: float


@dataclass(frozen=True, eq=False)
class Regions:
    """A star's regions, every array of shape (n_regions,)."""

    peak: Array  # time of the largest area, d
    life: Array  # d, spot
    area: Array  # largest spot area, share of the visible hemisphere
    facula: Array  # largest facula area
    facula_life: Array  # d
    latitude: Array  # rad
    longitude: Array  # rad, from the central meridian at ``peak``
    rate: Array  # rotation rate there, rad/d

    def spot_area(self, age: Array, which: IntArray) -> Array:
        """Spot area at ``age`` days after the peak; ``which`` names the region of each age."""
        return _evolve(self.area[which], age, self.life[which])

    def facula_area(self, age: Array, which: IntArray) -> Array:
        """Facula area likewise."""
        return _evolve(self.facula[which], age, self.facula_life[which])


_REACH = 2.6  # areas below exp(-2.6^2 * ...) of the peak are left out, see _evolve


def _evolve(largest: Array, age: Array, life: Array) -> Array:
    """Fast growth, slow decay: two half Gaussians of scales 0.2 and 0.5 lives."""
    scale = np.where(age < 0.0, 0.2, 0.5) * life
    return np.asarray(largest * np.exp(-((age / scale) ** 2)), dtype=float)


def emerge(
    habits: Habits,
    disc: Disc,
    start: float,
    end: float,
    cycle: Cycle | None,
    rng: np.random.Generator,
) -> Regions:
    """Draw the regions that matter between ``start`` and ``end`` (d).

    Returns regions sorted by the time of their peak; possibly none.
    """
    longest = 2.0 * habits.life * max(1.0, habits.facula_life)
    first, last = start - _REACH * 0.5 * longest, end + longest * 0.6
    # a region's area stays above half its peak for about 0.6 of a life
    expected = habits.number * (last - first) / (0.6 * habits.life)
    n = int(rng.poisson(expected))
    peak = np.sort(rng.uniform(first, last, n))
    keep_draw = rng.random(n)
    if cycle is not None:
        level = 1.0 - cycle.depth * (1.0 - cycle.level(peak))
        peak = peak[keep_draw < level]
        n = peak.size
    life = habits.life * np.exp(habits.life_spread * np.clip(rng.standard_normal(n), -2, 2))
    area = habits.area * np.exp(habits.area_spread * np.clip(rng.standard_normal(n), -3, 2.5))
    area = np.minimum(area, 0.06)  # larger than anything seen on one star at one place
    # larger groups live longer (Gnevyshev-Waldmeier), softened
    life = life * np.clip(area / habits.area, 0.3, 3.0) ** 0.3
    drift = 0.0 if cycle is None else habits.drift * (0.5 - cycle.progress(peak))
    latitude = habits.latitude + drift + habits.latitude_spread * rng.standard_normal(n)
    latitude = np.clip(np.abs(latitude), 0.01, 1.45) * np.where(rng.random(n) < 0.5, -1.0, 1.0)
    rate = disc.angular_velocity(latitude)
    longitude = _longitudes(habits, disc, peak, rng)
    scatter = np.exp(0.35 * rng.standard_normal(n))
    return Regions(
        peak=peak,
        life=life,
        area=area,
        facula=np.minimum(habits.facula_ratio * area * scatter, 0.25),
        facula_life=habits.facula_life * life,
        latitude=latitude,
        longitude=longitude,
        rate=rate,
    )


def _longitudes(habits: Habits, disc: Disc, peak: Array, rng: np.random.Generator) -> Array:
    """Longitude at the peak, from the central meridian: free or in a nest."""
    n = peak.size
    free = rng.uniform(0.0, 2.0 * np.pi, n)
    if habits.nests == 0:
        return free
    centres = rng.uniform(0.0, 2.0 * np.pi) + np.array([0.0, np.pi + 0.5 * rng.standard_normal()])
    weight = rng.uniform(0.5, 0.8)
    second = (rng.random(n) > weight) & (habits.nests > 1)
    nest_rate = disc.angular_velocity(np.array(habits.latitude))
    nested = (
        centres[second.astype(int)]
        + habits.nest_width * rng.standard_normal(n)
        + nest_rate * (peak - (peak[0] if n else 0.0))
    )
    return np.asarray(np.where(rng.random(n) < habits.nest_share, nested, free), dtype=float)


def alive_pairs(regions: Regions, time: Array) -> tuple[IntArray, IntArray]:
    """Pairs (region, exposure) at which a region has any area worth counting.

    ``time`` (shape (n_obs,)) must be sorted. Returns two index arrays of the same length.
    """
    life = np.maximum(regions.life, regions.facula_life)
    first = np.searchsorted(time, regions.peak - _REACH * 0.2 * life)
    last = np.searchsorted(time, regions.peak + _REACH * 0.5 * life)
    count = last - first
    which = np.repeat(np.arange(count.size), count)
    within = np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    return which.astype(np.intp), (first[which] + within).astype(np.intp)
