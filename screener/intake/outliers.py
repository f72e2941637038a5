"""Marking of outliers: cautious with velocities, because planets make far values too.

A velocity is marked only if it stands alone: it lies far from its neighbours in time *and* far from
the range in which nearly all velocities of its instrument lie, no other exposure of the same night
and no neighbour on the flank agrees with it, and a wide empty stretch parts it (with at most a
few others) from the rest. Hot Jupiters fail the second test; passages through periastron of
eccentric orbits have flanks and fill the stretch. What is far but not alone is kept and said.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, IntArray
from screener.intake.checks import robust_scatter

__all__ = ["FAR", "far_indicator_values", "isolated_velocities", "odd_exposures"]

FAR = 8.0  # robust scatters
_GLOBAL = 5.0
_ALONE = 3.5  # robust scatters about the neighbours, for a velocity beyond an empty stretch
_EMPTY = 1.8  # the nearest of the glitches is this much further out than the last of the rest
_FLANK_D = 10.0
_MIN_POINTS = 12


def _local_residuals(value: Array, half: int = 3) -> Array:
    """Each value less the median of its (up to six) neighbours in time."""
    out = np.full(value.size, np.nan)
    for i in range(value.size):
        low, high = max(0, i - half), min(value.size, i + half + 1)
        around = np.concatenate([value[low:i], value[i + 1 : high]])
        out[i] = value[i] - np.median(around)
    return out


def _deviations(value: Array, error: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Local deviation in units of the robust scatter, and where it is far in both senses."""
    residual = _local_residuals(value)
    local = 1.4826 * float(np.median(np.abs(residual)))
    deviation = residual / np.sqrt(local**2 + error**2)
    spread = np.sqrt(robust_scatter(value) ** 2 + error**2)
    far = (np.abs(deviation) > FAR) & (np.abs(value - np.median(value)) > _GLOBAL * spread)
    return deviation, far


def isolated_velocities(
    time: Array, rv: Array, rv_err: Array, instrument: IntArray
) -> tuple[NDArray[np.bool_], Array, int]:
    """Velocities (sorted by time) that stand alone.

    Returns
    -------
    marked : array of bool, shape (n_obs,)
    deviation : Array, shape (n_obs,)
        In units of the robust scatter about the neighbours; NaN for instruments with fewer than
        12 velocities, of which none is ever marked.
    n_kept : int
        How many are far but not alone, and were kept.
    """
    marked = np.zeros(time.size, dtype=bool)
    deviation = np.full(time.size, np.nan)
    kept = 0
    for k in np.unique(instrument):
        mine = np.flatnonzero(instrument == k)
        if mine.size < _MIN_POINTS:
            continue
        d, far = _deviations(rv[mine], rv_err[mine])
        deviation[mine] = d
        most = max(3, int(0.05 * mine.size))
        apart = _beyond_gap(rv[mine], robust_scatter(rv[mine]), most) & (np.abs(d) > _ALONE)
        alone = apart & ~_supported(time[mine], d)
        marked[mine[alone]] = True
        kept += int(np.count_nonzero((far | apart) & ~alone))
    return marked, deviation, kept


def _supported(time: Array, deviation: Array) -> NDArray[np.bool_]:
    """Whether a neighbour within ten days deviates to the same side by three scatters or more."""
    out = np.zeros(time.size, dtype=bool)
    for i in np.flatnonzero(np.abs(deviation) > _ALONE):
        near = np.abs(time - time[i]) <= _FLANK_D
        near[i] = False
        out[i] = bool(np.any(near & (deviation * np.sign(deviation[i]) > 3.0)))
    return out


def _beyond_gap(value: Array, spread: float, most: int) -> NDArray[np.bool_]:
    """The at most ``most`` values that an empty stretch parts from the rest.

    Distances are from the median. A glitch stands off from the rest; the largest of a tail, as
    eccentric orbits make it, does not.
    """
    distance = np.abs(value - np.median(value))
    order = np.argsort(distance)[::-1]
    out = np.zeros(value.size, dtype=bool)
    for count in range(min(most, value.size - 1), 0, -1):
        inner = max(distance[order[count]], 2.0 * spread)
        if distance[order[count - 1]] > max(_EMPTY * inner, _GLOBAL * spread):
            out[order[:count]] = True
            break
    return out


def far_indicator_values(
    value: Array, error: Array, instrument: IntArray
) -> tuple[NDArray[np.bool_], Array]:
    """Indicator values far from their neighbours and from the rest of their instrument.

    Unlike velocities they need no period kept, so a whole night may go (a spectrum reduced with
    another star's mask, say). If more than 5 % are far, only those twice as far go; if these are
    more than 15 %, the tail belongs to the star and none is marked. NaN values are skipped.
    """
    marked = np.zeros(value.size, dtype=bool)
    deviation = np.full(value.size, np.nan)
    for k in np.unique(instrument):
        mine = np.flatnonzero((instrument == k) & np.isfinite(value) & np.isfinite(error))
        if mine.size < _MIN_POINTS:
            continue
        d, far = _deviations(value[mine], error[mine])
        deviation[mine] = d
        for limit, share in ((FAR, 0.05), (2.0 * FAR, 0.15)):
            beyond = far & (np.abs(d) > limit)
            if np.count_nonzero(beyond) <= max(1, share * mine.size):
                marked[mine[beyond]] = True
                break
    return marked, deviation


def odd_exposures(value: Array, error: Array, bins: IntArray) -> tuple[NDArray[np.bool_], Array]:
    """Exposures that disagree with the others of their bin (three or more), shape (n_obs,).

    The yardstick is the exposure's error and the scatter inside bins, pooled over all bins.
    """
    marked = np.zeros(value.size, dtype=bool)
    deviation = np.full(value.size, np.nan)
    groups = [np.flatnonzero((bins == b) & np.isfinite(value)) for b in np.unique(bins)]
    groups = [g for g in groups if g.size >= 3]
    if not groups:
        return marked, deviation
    inside = np.concatenate([value[g] - np.median(value[g]) for g in groups])
    # a median of few points hugs them: n = 3 has one deviation of zero, so use the nonzero ones
    nonzero = np.abs(inside[inside != 0.0])
    pooled = 1.4826 * float(np.median(nonzero)) if nonzero.size else 0.0
    for g in groups:
        others = np.array([np.median(np.delete(value[g], i)) for i in range(g.size)])
        scale = np.sqrt(pooled**2 + np.nan_to_num(error[g]) ** 2)
        d = (value[g] - others) / np.where(scale > 0.0, scale, np.inf)
        deviation[g] = d
        far = np.abs(d) > FAR
        if np.count_nonzero(far) <= g.size // 3:
            marked[g[far]] = True
    return marked, deviation
