"""Probability densities of a period on a logarithmic grid."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from screener.core import Array
from screener.core.errors import NumericalError

__all__ = ["PERIOD_GRID", "PeriodDensity"]

#: The grid on which every density lives, days; evenly spaced in ln(period).
PERIOD_GRID: Array = np.geomspace(0.3, 300.0, 2001)
_LOG_GRID: Array = np.log(PERIOD_GRID)
_STEP = float(_LOG_GRID[1] - _LOG_GRID[0])
# no line is drawn narrower than this: differential rotation and the grid itself
_MIN_WIDTH = 2.0 * _STEP


@dataclass(frozen=True, eq=False)
class PeriodDensity:
    """A density in ln(period): ``density`` integrates to one over ``log_period``.

    Both have shape (n_grid,); periods are in days.
    """

    log_period: Array
    density: Array

    @classmethod
    def from_values(cls, values: Array) -> PeriodDensity:
        """From values on the grid, shape (n_grid,), not yet normalised.

        Raises
        ------
        NumericalError
            When the values do not add up to a positive finite number.
        """
        values = np.asarray(values, dtype=float)
        total = float(np.sum(values)) * _STEP
        if not (math.isfinite(total) and total > 0.0) or bool(np.any(values < 0.0)):
            raise NumericalError(f"a period density needs positive values, the sum was {total!r}")
        return cls(_LOG_GRID, values / total)

    @classmethod
    def from_log(cls, log_values: Array) -> PeriodDensity:
        """From unnormalised log-densities on the grid, shape (n_grid,)."""
        return cls.from_values(np.exp(log_values - np.max(log_values)))

    @classmethod
    def flat(cls) -> PeriodDensity:
        """The same density in every interval of ln(period)."""
        return cls.from_values(np.ones_like(_LOG_GRID))

    @classmethod
    def peak(cls, period: float, relative_err: float) -> PeriodDensity:
        """A log-normal peak at ``period`` (days) of relative width ``relative_err``."""
        return cls.peaks([(period, relative_err, 1.0)])

    @classmethod
    def peaks(cls, items: Iterable[tuple[float, float, float]]) -> PeriodDensity:
        """Log-normal peaks, each (period in days, relative error, weight)."""
        values = np.zeros_like(_LOG_GRID)
        for period, width, weight in items:
            width = max(width, _MIN_WIDTH)
            offset = (_LOG_GRID - math.log(period)) / width
            values += weight / width * np.exp(-0.5 * offset**2)
        return cls.from_values(values)

    def with_floor(self, share: float) -> PeriodDensity:
        """The same, with ``share`` of it spread evenly: the source may be wrong altogether."""
        level = share / (_LOG_GRID.size * _STEP)
        return PeriodDensity.from_values((1.0 - share) * self.density + level)

    def with_ambiguity(self, share: float) -> PeriodDensity:
        """The same, with ``share`` of it split between twice and half the period.

        Two spotted longitudes make a star look as if it turned in half its period; seasons and
        weak data make it look twice as slow.
        """
        double = np.interp(_LOG_GRID - math.log(2.0), _LOG_GRID, self.density, 0.0, 0.0)
        half = np.interp(_LOG_GRID + math.log(2.0), _LOG_GRID, self.density, 0.0, 0.0)
        return PeriodDensity.from_values(
            (1.0 - share) * self.density + 0.5 * share * (double + half)
        )

    def combine(self, *others: PeriodDensity) -> PeriodDensity:
        """The product with other densities, taken as independent."""
        log_values = np.log(np.maximum(self.density, 1e-300))
        for other in others:
            log_values = log_values + np.log(np.maximum(other.density, 1e-300))
        return PeriodDensity.from_log(log_values)

    def mixed(self, other: PeriodDensity, share: float) -> PeriodDensity:
        """The average with another density of the same data, which gets ``share``."""
        return PeriodDensity.from_values((1.0 - share) * self.density + share * other.density)

    def chance(self, low: float, high: float) -> float:
        """Probability that the period lies between ``low`` and ``high``, days."""
        if not high > low > 0.0:
            return 0.0
        edges = np.append(_LOG_GRID - 0.5 * _STEP, _LOG_GRID[-1] + 0.5 * _STEP)
        cumulative = np.append(0.0, np.cumsum(self.density) * _STEP)
        ends = np.interp(np.log([low, high]), edges, cumulative)
        return float(np.clip(ends[1] - ends[0], 0.0, 1.0))

    def at(self, period: Array) -> Array:
        """The density per ln(period) at ``period`` (days, any shape); 0 off the grid."""
        return np.asarray(np.interp(np.log(period), _LOG_GRID, self.density, 0.0, 0.0))

    @property
    def mode(self) -> float:
        """The most probable period, days, of the peak that holds most of the probability.

        Peaks are compared by what lies within 10 %, so that a narrow spike of little weight
        does not win over a broad peak of much.
        """
        half = max(1, round(0.10 / _STEP))
        mass = np.convolve(self.density, np.ones(2 * half + 1), mode="same")
        best = int(np.argmax(mass))
        low, high = max(0, best - half), min(mass.size, best + half + 1)
        window = self.density[low:high]
        # the top of the window unless that is only the flank of a neighbour
        inner = int(np.argmax(window))
        if inner in (0, window.size - 1):
            inner = best - low
        return float(np.exp(_LOG_GRID[low + inner]))

    def interval(self, level: float = 0.683) -> tuple[float, float]:
        """The interval (days) around the mode that holds ``level``.

        It grows outwards from the mode to the side where the density is higher.
        """
        n = self.density.size
        low = high = int(np.argmin(np.abs(_LOG_GRID - math.log(self.mode))))
        mass = float(self.density[low]) * _STEP
        while mass < level and (low > 0 or high < n - 1):
            left = self.density[low - 1] if low > 0 else -1.0
            right = self.density[high + 1] if high < n - 1 else -1.0
            if left >= right:
                low -= 1
                mass += float(left) * _STEP
            else:
                high += 1
                mass += float(right) * _STEP
        return (
            float(np.exp(_LOG_GRID[low] - 0.5 * _STEP)),
            float(np.exp(_LOG_GRID[high] + 0.5 * _STEP)),
        )

    def local_err(self) -> float:
        """Standard deviation (days) of the peak at the mode, within 25 % of it."""
        mode = self.mode
        near = np.abs(_LOG_GRID - math.log(mode)) < 0.25
        weight = self.density[near]
        # cut at a tenth of the top: what is left is the peak, not the floor
        weight = np.where(weight > 0.1 * np.max(weight), weight, 0.0)
        centre = float(np.average(_LOG_GRID[near], weights=weight))
        variance = float(np.average((_LOG_GRID[near] - centre) ** 2, weights=weight))
        return mode * max(math.sqrt(variance), 0.5 * _MIN_WIDTH)
