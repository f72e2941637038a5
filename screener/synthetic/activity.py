"""Everything a star's activity does to what is measured: velocities, line shape, light, lines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array
from screener.synthetic.disc import Disc, LineResponse, place
from screener.synthetic.regions import Cycle, Regions, alive_pairs

__all__ = ["Activity", "Photosphere", "activity_at", "correlated_noise", "flux_at"]


@dataclass(frozen=True)
class Photosphere:
    """Contrasts and couplings of a star's regions.

    Attributes
    ----------
    spot_contrast : float
        1 - spot intensity over quiet intensity.
    facula_contrast : float
        Extra brightness of faculae at the limb; it grows as 1 - mu from the centre outwards.
    quenching : float
        Share of the convective blueshift that a magnetised region loses.
    spot_quenching : float
        The same of the light that is left of a spot.
    zeeman : float
        Extra FWHM of the line formed in magnetised regions, m/s.
    bisector_gain : float
        Bisector span per m/s of lost blueshift.
    network : float
        Network area at cycle maximum, share of the disc.
    """

    spot_contrast: float
    facula_contrast: float
    quenching: float
    spot_quenching: float
    zeeman: float
    bisector_gain: float
    network: float


@dataclass(frozen=True, eq=False)
class Activity:
    """Noise-free activity at the exposures; every array has shape (n_obs,)."""

    flux: Array  # relative, 1 without regions
    rv_contrast: Array  # m/s, light lost or added at the regions' velocities
    rv_convective: Array  # m/s, blueshift lost in regions
    rv_network: Array  # m/s, blueshift lost in the network
    fwhm: Array  # m/s
    bis: Array  # m/s
    contrast: Array  # relative change of the line depth
    plage: Array  # chromospheric filling factor of plages, network included
    spots: Array  # projected spot area, share of the disc
    largest_cover: float  # largest share of the disc under spots

    @property
    def rv(self) -> Array:
        """Sum of the three velocities, m/s."""
        return self.rv_contrast + self.rv_convective + self.rv_network


def flux_at(disc: Disc, regions: Regions, skin: Photosphere, time: Array) -> Array:
    """Relative flux (1 without regions) at sorted times, shape (n_obs,)."""
    which, row = alive_pairs(regions, time)
    age = time[row] - regions.peak[which]
    mu, _ = place(
        disc, regions.latitude[which], regions.longitude[which] + regions.rate[which] * age
    )
    dark = disc.flux_share(regions.spot_area(age, which), mu) * skin.spot_contrast
    bright = disc.flux_share(regions.facula_area(age, which), mu) * (
        skin.facula_contrast * (1.0 - np.maximum(mu, 0.0))
    )
    return np.asarray(1.0 + np.bincount(row, bright - dark, time.size), dtype=float)


def activity_at(
    disc: Disc,
    line: LineResponse,
    regions: Regions,
    skin: Photosphere,
    cycle: Cycle | None,
    time: Array,
) -> Activity:
    """Activity at sorted times (d), shape (n_obs,).

    Light lost at a region's velocity acts through ``line``. A magnetised region also lacks the
    convective blueshift: its light arrives redshifted by quenching * blueshift * mu (Meunier,
    Desort & Lagrange 2010).
    """
    which, row = alive_pairs(regions, time)
    age = time[row] - regions.peak[which]
    longitude = regions.longitude[which] + regions.rate[which] * age
    mu, velocity = place(disc, regions.latitude[which], longitude)
    seen = np.maximum(mu, 0.0)
    spot, facula = regions.spot_area(age, which), regions.facula_area(age, which)
    spot_light, facula_light = disc.flux_share(spot, mu), disc.flux_share(facula, mu)
    lost = spot_light * skin.spot_contrast - facula_light * skin.facula_contrast * (1.0 - seen)
    quenched = (
        facula_light * skin.quenching
        + spot_light * (1.0 - skin.spot_contrast) * skin.spot_quenching
    )
    redshift = quenched * disc.blueshift * seen
    centre, fwhm, depth, bisector = line.at(velocity)

    def total(weights: Array) -> Array:
        return np.asarray(np.bincount(row, weights, time.size), dtype=float)

    flux = 1.0 - total(lost)
    network = skin.network * (np.zeros(time.size) if cycle is None else cycle.level(time))
    rv_network = network * skin.quenching * disc.blueshift * disc.mean_of(1.0)
    rv_convective = total(redshift) / flux
    magnetic = total(facula_light + spot_light) / flux + network
    spots = total(2.0 * spot * seen)
    return Activity(
        flux=flux,
        rv_contrast=total(lost * centre) / flux,
        rv_convective=rv_convective,
        rv_network=rv_network,
        fwhm=total(lost * fwhm) / flux + skin.zeeman * magnetic,
        bis=total(lost * bisector) / flux + skin.bisector_gain * (rv_convective + rv_network),
        contrast=total(lost * depth) / flux - skin.zeeman / line.width * magnetic,
        # the chromosphere is optically thin towards the limb: little limb darkening
        plage=total(2.0 * facula * seen) + 0.5 * spots + network,
        spots=spots,
        largest_cover=float(spots.max(initial=0.0)),
    )


def correlated_noise(time: Array, scale: float, sd: float, rng: np.random.Generator) -> Array:
    """An exponentially correlated Gaussian process at sorted times, shape (n_obs,).

    ``scale`` (d) is the correlation time. Granulation and supergranulation last from minutes to
    about a day (Dumusque et al. 2011).
    """
    draw = rng.standard_normal(time.size)
    out = np.empty(time.size)
    memory = np.exp(-np.diff(time, prepend=-np.inf) / scale)
    state = 0.0
    for i, (keep, kick) in enumerate(zip(memory, draw, strict=True)):
        state = keep * state + np.sqrt(1.0 - keep * keep) * kick
        out[i] = state
    return sd * out
