"""One density for the rotation period from every source at hand."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from screener.core import Rotation, RotationSource, Star, TimeSeries
from screener.models.rotation.density import PeriodDensity
from screener.models.rotation.periodic import PeriodicSource, from_indicators, from_photometry
from screener.models.rotation.relations import activity_density, vsini_density

__all__ = ["ExtraSource", "estimate_rotation"]

#: A further source: its name and its density (not yet mixed with a floor).
ExtraSource = tuple[str, PeriodDensity]

# Share of each source's density that is spread evenly: it may be wrong altogether.
_FLOOR_RELATION = 0.1
_FLOOR_VSINI = 0.03
_FLOOR_SIDECAR = 0.01
_FLOOR_EXTRA = 0.1
_AMBIGUOUS_EXTRA = 0.08
# Field dwarfs turn in some days to some months (the bulk of McQuillan et al. 2014, broadened).
_POPULATION = (22.0, 0.9)


def _mean_log_rhk(star: Star, series: TimeSeries) -> float | None:
    """The level of activity: the catalogue's, or the median of the measured series."""
    if star.log_rhk is not None:
        return star.log_rhk
    for item in series.indicators:
        if item.name == "log_rhk" and np.any(np.isfinite(item.value)):
            median = float(np.nanmedian(item.value))
            return median if -6.5 < median < -3.5 else None
    return None


def _listed(source: PeriodicSource) -> list[RotationSource]:
    """A periodic source as the dossier lists it, if it says anything."""
    if source.significance < 3.0:
        return []
    density = source.density.combine(PeriodDensity.peak(*_POPULATION))
    result = [RotationSource(source.name, density.mode, density.local_err())]
    # the autocorrelation is listed where it confirms a candidate; alone it is too easily fooled
    check = source.cross_check
    if check is not None and any(abs(check / p - 1.0) < 0.2 for p, _ in source.candidates[:3]):
        name = f"{source.name}, autocorrelation"
        result.append(RotationSource(name, check, 0.1 * check))
    return result


def estimate_rotation(
    star: Star, series: TimeSeries, extra_sources: Sequence[ExtraSource] = ()
) -> tuple[Rotation, PeriodDensity | None]:
    """The star's rotation period from indicators, photometry, activity level, v sin i, sidecar.

    The density is the product of the sources' densities, each mixed with a floor, and of a broad
    density of field dwarfs. Velocities are never used, because they hold the planets.

    Parameters
    ----------
    star, series
        What is known of the star and what was measured.
    extra_sources
        Further (name, density) pairs, taken as periodic: they get a floor and a share at twice
        and half the period.

    Returns
    -------
    Rotation and density. The error is the width of the leading peak, or half the 68 % interval
    where the density is spread wider. The period is None when no source says anything worth
    listing (the density may still lean somewhere), the density None when there is no source.
    """
    parts: list[PeriodDensity] = []
    listed: list[RotationSource] = []
    if star.rotation_period is not None:
        err = star.rotation_period_err or 0.05 * star.rotation_period
        density = PeriodDensity.peak(star.rotation_period, err / star.rotation_period)
        parts.append(density.with_floor(_FLOOR_SIDECAR))
        listed.append(RotationSource("sidecar", star.rotation_period, err))
    for source in (from_indicators(series), from_photometry(series)):
        if source is not None:
            parts.append(source.density)
            listed += _listed(source)
    for name, density in extra_sources:
        parts.append(density.with_ambiguity(_AMBIGUOUS_EXTRA).with_floor(_FLOOR_EXTRA))
        listed.append(RotationSource(name, density.mode, density.local_err()))
    relations = activity_density(star, _mean_log_rhk(star, series))
    if relations:
        density = relations[0][3]
        for n, item in enumerate(relations[1:], start=2):
            density = density.mixed(item[3], 1.0 / n)
        parts.append(density.with_floor(_FLOOR_RELATION))
        listed += [RotationSource(name, p, p * width) for name, p, width, _ in relations]
    limit = vsini_density(star)
    if limit is not None:
        parts.append(limit[2].with_floor(_FLOOR_VSINI))
        listed.append(RotationSource("v sin i (upper limit)", limit[0], limit[0] * limit[1]))
    if not parts:
        return Rotation(None, None), None
    density = PeriodDensity.peak(*_POPULATION).combine(*parts)
    if not listed:
        return Rotation(None, None), density
    low, high = density.interval()
    mode = density.mode
    err = max(density.local_err(), 0.5 * (high - low)) if math.isfinite(high) else mode
    return Rotation(mode, err, tuple(listed)), density
