"""Batches of orbits: the two columns in which each Keplerian velocity is linear.

Evidence integrals need these columns for 10^5 to 10^6 trial orbits, so they are computed in
single precision: the phase is reduced in double precision first, and the columns are then right to
about 1e-6 of the amplitude, far below any noise. ``screener.models.kepler`` stays the reference.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from screener.core import Array

__all__ = ["MAX_ECCENTRICITY", "orbit_columns_batch"]

MAX_ECCENTRICITY = 0.98  # beyond it single precision loses digits; the prior mass there is nil

_C1 = np.float32(3.0 * np.pi**2 / (np.pi**2 - 6.0))
_C2 = np.float32(1.6 * np.pi / (np.pi**2 - 6.0))
_PI = np.float32(np.pi)
_CHUNK = 128  # rows at a time, so that the temporaries stay in the cache

Single = NDArray[np.float32]


def _eccentric_anomaly(mean: Single, ecc: Single) -> tuple[Single, Single]:
    """sin E and cos E for mean anomalies in [-pi, pi], by Markley (1995, CeMDA 63, 101)."""
    m = np.abs(mean)
    alpha = _C1 + (_C2 / (1 + ecc)) * (_PI - m)
    d = 3 * (1 - ecc) + alpha * ecc
    alpha_d = alpha * d
    r = (3 * alpha_d * (d - (1 - ecc)) + m * m) * m
    q = 2 * alpha_d * (1 - ecc) - m * m
    w = np.cbrt(r + np.sqrt(np.maximum(q * q * q + r * r, 0)))
    w *= w
    start = (2 * r * w / (w * w + w * q + q * q) + m) / d
    sin_s, cos_s = np.sin(start), np.cos(start)
    f0 = start - ecc * sin_s - m
    f2 = ecc * sin_s
    f3 = ecc * cos_s
    f1 = 1 - f3
    step = -f0 / (f1 - 0.5 * f0 * f2 / f1)
    step = -f0 / (f1 + 0.5 * step * f2 + step * step * f3 / 6)
    # the correction is small: rotate by it with its series rather than call sin and cos again
    half = step * step * np.float32(0.5)
    sin_step = step * (1 - half * np.float32(1 / 3))
    cos_step = 1 - half + half * half * np.float32(1 / 6)
    sin_e = sin_s * cos_step + cos_s * sin_step
    cos_e = cos_s * cos_step - sin_s * sin_step
    return np.copysign(sin_e, mean), cos_e


def orbit_columns_batch(time: Array, frequency: Array, ecc_cos: Array, ecc_sin: Array) -> Single:
    """Columns [cos(nu) + e, -sin(nu)] of many orbits at once.

    Parameters
    ----------
    time : array, shape (n_obs,)
        Days, counted from the epoch to which the mean anomalies refer.
    frequency : array, shape (n_orbits,)
        1/d.
    ecc_cos, ecc_sin : array, shape (n_orbits,)
        e cos(M) and e sin(M) with the mean anomaly M at time zero; e up to ``MAX_ECCENTRICITY``.

    Returns
    -------
    array of float32, shape (n_orbits, 2, n_obs)
        The velocity is K cos(omega) times the first plus K sin(omega) times the second column.
        Where e is zero the periastron is taken at the direction of M given by ``arctan2``.
    """
    out = np.empty((frequency.size, 2, time.size), dtype=np.float32)
    ecc_all = np.minimum(np.hypot(ecc_cos, ecc_sin), MAX_ECCENTRICITY)
    phase_all = np.arctan2(ecc_sin, ecc_cos) / (2 * np.pi)
    for first in range(0, frequency.size, _CHUNK):
        rows = slice(first, first + _CHUNK)
        turns = frequency[rows, None] * time + phase_all[rows, None]
        turns -= np.rint(turns)
        mean = turns.astype(np.float32) * np.float32(2 * np.pi)
        ecc = ecc_all[rows, None].astype(np.float32)
        sin_e, cos_e = _eccentric_anomaly(mean, ecc)
        shrink = 1 / (1 - ecc * cos_e)
        out[rows, 0] = (cos_e - ecc) * shrink + ecc
        out[rows, 1] = -np.sqrt(1 - ecc * ecc) * sin_e * shrink
    return out
