"""A rotating, limb-darkened star: what a small region on it does to its light and its lines.

A region is a patch of area ``a`` (a fraction of the visible hemisphere, 2 pi R^2) at one place of
the disc; it is small enough that everything is constant across it. The flux that it sends is

    phi = 2 a mu I(mu) / (1 - u1/3 - u2/6),   I(mu) = 1 - u1 (1 - mu) - u2 (1 - mu)^2

as a share of the light of the spotless disc (Dorren 1987, small-spot limit). A region that takes
away (spot) or adds (facula) light at the velocity of its place on the disc deforms the mean line
profile; centre, width, depth and bisector of the deformed line are what a Gaussian fit and a
bisector would measure, to first order in the deformation.

Velocities in m/s, positive away from us; angles in radians.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from screener.core import Array

__all__ = ["Disc", "LineResponse", "line_response", "place"]

_SUN_RADIUS_M = 6.957e8  # IAU 2015 resolution B3
_DAY_S = 86400.0
_FWHM = 2.0 * np.sqrt(2.0 * np.log(2.0))


@dataclass(frozen=True)
class Disc:
    """The star as a rotating disc.

    Attributes
    ----------
    inclination : float
        Of the rotation axis to the line of sight, rad; pi/2 is equator-on.
    rotation_period : float
        At the equator, d.
    radius : float
        Solar radii.
    shear : float
        Relative differential rotation: Omega(lat) = Omega_eq (1 - shear sin^2 lat).
    limb_darkening : tuple of float
        Quadratic coefficients u1, u2.
    blueshift : float
        Convective blueshift of the quiet photosphere seen face on, m/s (a positive number is a
        blueshift; what a magnetised region takes away).
    """

    inclination: float
    rotation_period: float
    radius: float = 1.0
    shear: float = 0.0
    limb_darkening: tuple[float, float] = (0.4, 0.25)
    blueshift: float = 300.0

    @property
    def equatorial_velocity(self) -> float:
        """Rotation velocity at the equator, m/s."""
        return 2.0 * np.pi * self.radius * _SUN_RADIUS_M / (self.rotation_period * _DAY_S)

    @property
    def vsini(self) -> float:
        """Projected rotation velocity, m/s."""
        return float(self.equatorial_velocity * np.sin(self.inclination))

    def angular_velocity(self, latitude: Array) -> Array:
        """Rotation rate at the latitudes, rad/d, same shape."""
        rate = 2.0 * np.pi / self.rotation_period
        return np.asarray(rate * (1.0 - self.shear * np.sin(latitude) ** 2), dtype=float)

    def intensity(self, mu: Array) -> Array:
        """Limb-darkened intensity in units of the disc centre, same shape as ``mu``."""
        u1, u2 = self.limb_darkening
        return np.asarray(1.0 - u1 * (1.0 - mu) - u2 * (1.0 - mu) ** 2, dtype=float)

    def flux_share(self, area: Array, mu: Array) -> Array:
        """Light of regions of quiet photosphere as a share of the disc's; 0 behind the limb."""
        u1, u2 = self.limb_darkening
        seen = np.maximum(mu, 0.0)
        norm = 1.0 - u1 / 3.0 - u2 / 6.0
        return np.asarray(2.0 * area * seen * self.intensity(seen) / norm, dtype=float)

    def mean_of(self, power: float) -> float:
        """Flux-weighted mean of mu**power over the disc (closed form of the integral)."""
        u1, u2 = self.limb_darkening

        def moment(q: float) -> float:  # int mu^(q+1) I(mu) dmu from 0 to 1
            full, first, second = 1.0 / (q + 2.0), 1.0 / (q + 3.0), 1.0 / (q + 4.0)
            return full - u1 * (full - first) - u2 * (full - 2.0 * first + second)

        return moment(power) / moment(0.0)

    def rotational_sigma(self) -> float:
        """Standard deviation of the rotation velocity over the disc, weighted by light, m/s.

        <x^2> over a round disc is half of <r^2> = <1 - mu^2>.
        """
        return float(self.vsini * np.sqrt(0.5 * (1.0 - self.mean_of(2.0))))


def place(disc: Disc, latitude: Array, longitude: Array) -> tuple[Array, Array]:
    """Where regions stand as seen by us.

    Parameters
    ----------
    latitude, longitude : Array
        Rad; longitude from the central meridian, growing with the rotation. Same shape.

    Returns
    -------
    mu : Array
        Cosine of the angle between normal and line of sight; negative behind the limb.
    velocity : Array
        Line-of-sight rotation velocity there, m/s, differential rotation included.
    """
    cos_lat = np.cos(latitude)
    mu = np.sin(latitude) * np.cos(disc.inclination) + cos_lat * np.cos(longitude) * np.sin(
        disc.inclination
    )
    slower = 1.0 - disc.shear * np.sin(latitude) ** 2
    velocity = disc.vsini * slower * cos_lat * np.sin(longitude)
    return mu, velocity


@dataclass(frozen=True, eq=False)
class LineResponse:
    """First-order change of the mean line per share of *lost* light, tabulated in velocity.

    ``velocity`` (m/s, shape (n,), increasing, symmetric about zero) is where the light is lost;
    ``centre``, ``fwhm`` and ``bisector`` (m/s) and ``depth`` (relative) have the same shape.
    """

    velocity: Array
    centre: Array
    fwhm: Array
    depth: Array
    bisector: Array
    width: float  # FWHM of the undisturbed line, m/s

    def at(self, velocity: Array) -> tuple[Array, Array, Array, Array]:
        """centre, fwhm, depth and bisector responses at the velocities, same shape."""
        grid = self.velocity
        return (
            np.interp(velocity, grid, self.centre),
            np.interp(velocity, grid, self.fwhm),
            np.interp(velocity, grid, self.depth),
            np.interp(velocity, grid, self.bisector),
        )


def line_response(disc: Disc, local_fwhm: float, n_grid: int = 121) -> LineResponse:
    """How the fitted Gaussian and the bisector answer to light lost at one velocity.

    The local line is a Gaussian of ``local_fwhm`` (m/s); rotation widens it to a Gaussian of
    variance local + rotational. Light lost at velocity v0 changes the normalised absorption
    profile M by -(g(v - v0) - M(v)). Centre, depth and width follow from a least-squares fit of
    the Gaussian, linearised; the bisector span is the velocity of the profile's top (10 to 40 per
    cent of its depth) less that of its bottom (55 to 85 per cent; Queloz et al. 2001).
    """
    local = local_fwhm / _FWHM
    total = float(np.hypot(local, disc.rotational_sigma()))
    reach = max(disc.vsini, 1.0)
    lost_at = np.linspace(-reach, reach, n_grid)
    v = np.linspace(-5.0 * total, 5.0 * total, 241)

    def gauss(x: Array, sigma: float) -> Array:
        return np.asarray(
            np.exp(-0.5 * (x / sigma) ** 2) / (sigma * np.sqrt(2.0 * np.pi)), dtype=float
        )

    def change(x: Array) -> Array:  # shape (n_grid, len(x))
        return -(gauss(x[None, :] - lost_at[:, None], local) - gauss(x, total)[None, :])

    line = gauss(v, total)
    # columns: relative depth, centre, sigma; area is not kept, so depth and width are both free
    design = np.stack([line, line * v / total**2, line * v**2 / total**3], axis=1)
    depth, centre, sigma = np.linalg.lstsq(design, change(v).T, rcond=None)[0]
    top = np.array([0.10, 0.20, 0.30, 0.40])
    bottom = np.array([0.55, 0.65, 0.75, 0.85])
    spans = []
    for levels in (top, bottom):
        half = total * np.sqrt(-2.0 * np.log(levels))
        slope = gauss(half, total) * half / total**2
        spans.append(((change(half) - change(-half)) / (2.0 * slope)).mean(axis=1))
    return LineResponse(lost_at, centre, _FWHM * sigma, depth, spans[0] - spans[1], _FWHM * total)
