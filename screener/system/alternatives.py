"""One eccentric planet, or two on circular orbits?

A circular pair in 2:1 has nearly the velocity of one eccentric orbit (Anglada-Escude, Lopez-Morales
& Chambers 2010, ApJ 709, 168; Kuerster et al. 2015, A&A 577, A103), and a second, unrelated planet
can also hide in an eccentricity.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from screener.core import Array, Orbit
from screener.models.kepler import orbit_columns

__all__ = ["eccentric_or_two"]

_DECISIVE = 10.0  # difference in BIC: "very strong", Kass & Raftery (1995, JASA 90, 773)
_MAX_FREQUENCIES = 4000


@dataclass(frozen=True, eq=False)
class _Data:
    """Whitened velocities and the nuisance columns, with the columns' span taken out."""

    time: Array
    weight: Array  # 1 / sd
    rv: Array
    basis: Array  # orthonormal, (n_obs, n_nuisance)

    def whiten(self, columns: Array) -> Array:
        """Columns (n_obs, n) or stacks of them, whitened and cleared of the nuisance."""
        scaled = columns * self.weight[:, None]
        return np.asarray(scaled - self.basis @ (self.basis.T @ scaled))

    def chi2(self, columns: Array) -> tuple[float, Array]:
        """Least chi-square over the coefficients of ``columns`` and those coefficients."""
        clean = self.whiten(columns)
        coefficients, *_ = np.linalg.lstsq(clean, self.rv, rcond=1e-9)
        rest = self.rv - clean @ coefficients
        return float(rest @ rest), np.asarray(coefficients)


def _prepare(time: Array, rv: Array, sd: Array, nuisance: Array | None) -> _Data:
    weight = 1.0 / sd
    columns = np.ones((time.size, 1)) if nuisance is None else nuisance
    # the singular vectors span the columns even where two of them are the same
    u, s, _ = np.linalg.svd(columns * weight[:, None], full_matrices=False)
    basis = u[:, s > 1e-9 * s[0]]
    scaled = rv * weight
    return _Data(time, weight, scaled - basis @ (basis.T @ scaled), basis)


def _circle(time: Array, period: float) -> Array:
    phase = 2 * np.pi * (time - time[0]) / period
    return np.stack([np.cos(phase), np.sin(phase)], axis=1)


def _minimise(function: Any, start: Array, step: Array) -> tuple[float, Array]:
    """Nelder-Mead from a start with steps of the right size for each coordinate."""
    from scipy.optimize import minimize

    simplex = np.vstack([start, start + np.diag(step)])
    result = minimize(
        function,
        start,
        method="Nelder-Mead",
        options={"initial_simplex": simplex, "maxfev": 220, "xatol": 1e-5, "fatol": 1e-3},
    )
    return float(result.fun), np.asarray(result.x)


def _fit_eccentric(data: _Data, period: float, step: float) -> tuple[float, Array]:
    """chi2 and (ln P, e, mean anomaly at the first time) of the best single Keplerian."""

    def columns(x: Array) -> Array:
        p = math.exp(x[0])
        return orbit_columns(data.time, p, x[1], data.time[0] - p * x[2] / (2 * np.pi))

    def cost(x: Array) -> float:
        if not 0 <= x[1] < 0.95:
            return float(1e12 * (1 + abs(x[1])))
        return data.chi2(columns(x))[0]

    starts = [
        np.array([math.log(period), e, m])
        for e in (0.1, 0.3, 0.5, 0.7)
        for m in np.linspace(0, 2 * np.pi, 8, endpoint=False)
    ]
    ranked = sorted(starts, key=cost)[:3]
    fits = [_minimise(cost, s, np.array([step, 0.1, 0.4])) for s in ranked]
    return min(fits, key=lambda f: f[0])


def _fit_circles(data: _Data, periods: list[float], step: float) -> tuple[float, Array]:
    """chi2 and periods of circular orbits near the given ones."""

    def cost(x: Array) -> float:
        columns = [_circle(data.time, math.exp(v)) for v in x]
        return data.chi2(np.concatenate(columns, axis=1))[0]

    chi2, x = _minimise(cost, np.log(periods), np.full(len(periods), step))
    return chi2, np.exp(x)


def _second_period(data: _Data, period: float) -> tuple[float, int] | None:
    """The best period for a second circle beside the first, and how many were tried."""
    first = data.whiten(_circle(data.time, period))
    q, _ = np.linalg.qr(first)
    rest = data.rv - q @ (q.T @ data.rv)
    baseline = data.time[-1] - data.time[0]
    low, high = 1.0 / baseline, 0.9
    n = int(min(_MAX_FREQUENCIES, max(50, 4 * baseline * (high - low))))
    frequency = np.linspace(low, high, n)
    # not the first orbit again, and not its half, which is a hypothesis of its own
    for taken in (1 / period, 2 / period):
        frequency = frequency[np.abs(frequency - taken) > 1.5 / baseline]
    if frequency.size == 0:
        return None
    phase = 2 * np.pi * np.outer(data.time - data.time[0], frequency)
    projector = np.concatenate([data.basis, q], axis=1)
    parts = []
    for column in (np.cos(phase), np.sin(phase)):
        scaled = column * data.weight[:, None]
        parts.append(scaled - projector @ (projector.T @ scaled))
    c, s = parts
    cc, ss, cs = np.sum(c * c, 0), np.sum(s * s, 0), np.sum(c * s, 0)
    yc, ys = c.T @ rest, s.T @ rest
    determinant = np.maximum(cc * ss - cs * cs, 1e-12 * (cc + ss + 1e-300) ** 2)
    gain = (yc**2 * ss - 2 * yc * ys * cs + ys**2 * cc) / determinant
    best = int(np.argmax(gain))
    return float(1 / frequency[best]), int(frequency.size)


def eccentric_or_two(
    time: Array,
    rv: Array,
    sd: Array,
    orbit: Orbit,
    *,
    nuisance: Array | None = None,
    other_period: bool = True,
) -> dict[str, Any]:
    """Compare one circular, one eccentric, two circular in 2:1, and two circular orbits.

    Parameters
    ----------
    time, rv, sd : Array, shape (n_obs,)
        Days, velocities less all other orbits (m/s), total white noise (m/s).
    orbit : Orbit
        The signal; its period starts the fits.
    nuisance : Array, shape (n_obs, n), optional
        Columns fitted along with every hypothesis (zero points, slope); a constant by default.
    other_period : bool
        Also look for a second circular orbit at any period; its period counts as one parameter
        and the search as ln(number tried) in its BIC.

    Returns
    -------
    dict
        ``hypotheses``: for each name chi2, n_parameters, bic, and its numbers; ``preferred``: the
        least BIC; ``delta_bic`` of the runner-up; ``decided``: whether that is 10 or more;
        ``sentence``. With fewer than twelve velocities only ``sentence``.

    Notes
    -----
    BIC = chi2 + k ln n at fixed ``sd``. Circular orbits at exactly 2:1 are not required: the inner
    period is free near P/2.
    """
    n = time.size
    if n < 12 or not math.isfinite(orbit.period) or np.ptp(time) <= 0:
        return {"sentence": "Too few velocities to tell one eccentric orbit from two circular."}
    return _conclude(_compare(_prepare(time, rv, sd, nuisance), orbit, other_period))


def _compare(data: _Data, orbit: Orbit, other_period: bool) -> dict[str, dict[str, Any]]:
    """chi2, number of parameters, BIC and periods of every hypothesis."""
    n, baseline = data.time.size, float(np.ptp(data.time))
    step = min(0.05, 0.1 * orbit.period / baseline)
    hypotheses: dict[str, dict[str, Any]] = {}

    def record(name: str, chi2: float, k: int, penalty: float = 0.0, **numbers: float) -> None:
        parameters = k + data.basis.shape[1]
        hypotheses[name] = {
            "chi2": chi2,
            "n_parameters": parameters,
            "bic": chi2 + parameters * math.log(n) + penalty,
            **numbers,
        }

    def record_two(name: str, second: float, step: float, penalty: float = 0.0) -> None:
        chi2, pair = _fit_circles(data, [period, second], step)
        record(name, chi2, 6, penalty, period_d=float(pair[0]), second_d=float(pair[1]))

    chi2, periods = _fit_circles(data, [orbit.period], step)
    period = float(periods[0])
    record("one circular", chi2, 3, period_d=period)
    chi2, x = _fit_eccentric(data, period, step)
    record("one eccentric", chi2, 5, period_d=math.exp(x[0]), eccentricity=float(x[1]))
    record_two("two circular in 2:1", period / 2, step)
    if other_period and (found := _second_period(data, period)) is not None:
        second, tried = found
        fine = min(step, 0.1 * second / baseline)
        record_two("two circular", second, fine, 2 * math.log(tried))
    return hypotheses


def _conclude(hypotheses: dict[str, dict[str, Any]]) -> dict[str, Any]:
    order = sorted(hypotheses, key=lambda h: float(hypotheses[h]["bic"]))
    first, second = order[0], order[1]
    gap = float(hypotheses[second]["bic"] - hypotheses[first]["bic"])
    decided = gap >= _DECISIVE
    described = _describe(first, hypotheses[first])
    if decided:
        sentence = f"The velocities prefer {described} (BIC lower by {gap:.1f} than {second})."
    else:
        sentence = (
            f"The velocities do not decide between {described} and "
            f"{_describe(second, hypotheses[second])} (BIC differs by {gap:.1f})."
        )
    if first == "one eccentric" and not decided and second.startswith("two"):
        sentence += " Velocities near periastron would tell most."
    return {
        "hypotheses": hypotheses,
        "preferred": first,
        "runner_up": second,
        "delta_bic": gap,
        "decided": decided,
        "sentence": sentence,
    }


def _describe(name: str, numbers: dict[str, Any]) -> str:
    if name == "one eccentric":
        return f"one eccentric orbit (e = {numbers['eccentricity']:.2f})"
    if name == "one circular":
        return "one circular orbit"
    kind = "two circular orbits in 2:1" if "2:1" in name else "two circular orbits"
    return f"{kind} ({numbers['period_d']:.4g} and {numbers['second_d']:.4g} d)"
