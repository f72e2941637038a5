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


def rotation_kernel(disc: Disc, n: int = 41) -> tuple[Array, Array]:
    """Light of the disc by strips of equal velocity.

    Returns the strips' velocities (m/s) and shares of the light (sum 1), both of shape (n,).
    """
    x = (np.arange(n) + 0.5) * 2.0 / n - 1.0
    half = np.sqrt(1.0 - x**2)
    # Gauss-Legendre along each strip
    node, weight = np.polynomial.legendre.leggauss(12)
    mu = np.sqrt(np.maximum((half[:, None] ** 2) * (1.0 - node[None, :] ** 2), 0.0))
    light = half * (disc.intensity(mu) * weight).sum(axis=1)
    return disc.vsini * x, light / light.sum()


def line_response(disc: Disc, local_fwhm: float, n_grid: int = 81) -> LineResponse:
    """How the fitted Gaussian and the bisector answer to light lost at one velocity.

    The local line is a Gaussian g of ``local_fwhm`` (m/s); the disc's line M is the sum of g over
    the strips of the rotating disc. Light lost at velocity v0 changes the normalised absorption
    profile M by g(v - v0) - M(v), downwards. Centre, depth and width follow from a least-squares
    fit of a Gaussian to M, linearised about the best fit; the bisector span is the velocity of the
    profile's top (10 to 40 per cent of its depth) less that of its bottom (55 to 85 per cent;
    Queloz et al. 2001).
    """
    local = local_fwhm / _FWHM
    strips, light = rotation_kernel(disc)
    reach = max(disc.vsini, 1.0)
    lost_at = np.linspace(-reach, reach, n_grid)
    guess = float(np.hypot(local, disc.rotational_sigma()))
    v = np.linspace(-4.5 * guess, 4.5 * guess, 241)

    def local_line(x: Array) -> Array:
        return np.asarray(np.exp(-0.5 * (x / local) ** 2), dtype=float)

    line = local_line(v[:, None] - strips[None, :]) @ light
    depth, sigma = _fit_gaussian(v, line, guess)
    model = np.exp(-0.5 * (v / sigma) ** 2)
    change = line[None, :] - local_line(v[None, :] - lost_at[:, None])
    # derivatives by relative depth, centre and sigma
    design = depth * np.stack([model, model * v / sigma**2, model * v**2 / sigma**3], axis=1)
    d_depth, d_centre, d_sigma = np.linalg.lstsq(design, change.T, rcond=None)[0]
    span = _bisector_shift(v, line, change, np.array([0.10, 0.20, 0.30, 0.40]))
    span -= _bisector_shift(v, line, change, np.array([0.55, 0.65, 0.75, 0.85]))
    return LineResponse(lost_at, d_centre, _FWHM * d_sigma, d_depth, span, _FWHM * sigma)


def _fit_gaussian(v: Array, line: Array, sigma: float) -> tuple[float, float]:
    """Depth and sigma of the Gaussian about zero that fits ``line`` best (Gauss-Newton)."""
    depth = float(line.max())
    for _ in range(12):
        model = np.exp(-0.5 * (v / sigma) ** 2)
        design = np.stack([model, depth * model * v**2 / sigma**3], axis=1)
        step = np.linalg.lstsq(design, line - depth * model, rcond=None)[0]
        depth, sigma = depth + float(step[0]), sigma + float(step[1])
    return depth, sigma


def _bisector_shift(v: Array, line: Array, change: Array, levels: Array) -> Array:
    """Mean shift of the bisector at ``levels`` (of the depth) per unit ``change``, (n_grid,).

    To first order each flank moves by change / |slope|; the bisector is the mean of both.
    """
    right = v >= 0.0
    half = np.interp(levels * line.max(), line[right][::-1], v[right][::-1])
    slope = np.abs(np.interp(half, v, np.gradient(line, v)))
    moved = np.zeros(change.shape[0])
    for w, steep in zip(half, slope, strict=True):
        at = np.array([np.interp([w, -w], v, row) for row in change])
        moved += (at[:, 0] - at[:, 1]) / (2.0 * steep * levels.size)
    return moved
