"""What would settle it: nights ranked by what they tell between the live hypotheses."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from screener.core import Array, Indicator, IntArray, Orbit, Star
from screener.system.hypotheses import (
    Forecast,
    Hypothesis,
    Velocities,
    activity_hypothesis,
    alias_orbits,
    divergence,
    forecast,
    information_deficit,
    orbit_hypothesis,
)
from screener.system.measurements import ExtraMeasurement, extra_measurements
from screener.system.observability import (
    NightTimes,
    find_site,
    nights_from_data,
    nights_from_site,
    site_for,
)

__all__ = [
    "THRESHOLD",
    "Night",
    "NightPlan",
    "live_hypotheses",
    "order_nights",
    "rank_nights",
]

THRESHOLD = math.log(100.0)  # natural log-odds at which a question counts as settled
_MAX_DATA = 400
_MAX_SOUGHT = 30
_RECENT = 20
_MIN_WEIGHT = 1e-3


@dataclass(frozen=True)
class Night:
    """One night of the plan.

    ``information`` (nat) is what this night alone would tell at least; ``log_odds`` what the nights
    up to and including this rank are expected to bring, in the less favourable of the two cases
    (planet true, star true). ``velocity_planet`` and ``velocity_star`` are the predictions, m/s.
    """

    rank: int
    time: float
    information: float
    log_odds: float
    velocity_planet: float
    velocity_star: float
    altitude: float | None
    moon_distance: float | None
    moon_lit: float | None


@dataclass(frozen=True)
class NightPlan:
    """Ranked nights and what they would achieve.

    ``nights_needed`` is the number of ranked nights whose expected log-odds pass ``threshold``
    whichever of planet and star is true, None if thirty do not.
    """

    nights: tuple[Night, ...]
    nights_needed: int | None
    threshold: float
    hypotheses: tuple[tuple[str, float, float], ...]  # name, weight, period
    extra: tuple[ExtraMeasurement, ...]
    site: str | None
    sentence: str


def live_hypotheses(
    data: Velocities, orbit: Orbit, rotation_period: float | None
) -> tuple[list[Hypothesis], tuple[float, float, float, float]]:
    """Planet, activity, and the aliases of the planet, with weights that sum to one.

    Star and orbits get a half each; the orbits share theirs by their likelihoods. The second value
    is the shape of the activity process (amplitude, period, decay time, smoothness).
    """
    periods = {orbit.period, 2 * orbit.period}
    if rotation_period:
        periods.add(rotation_period)
    # a process with a turn longer than the data is not rotation
    usable = sorted(p for p in periods if p < max(float(np.ptp(data.time)), orbit.period * 1.01))
    star, shape = activity_hypothesis(data, usable or [orbit.period])
    orbits = [orbit_hypothesis("planet", orbit, data, shape)]
    for label, alias in zip("AB", alias_orbits(orbit, data), strict=False):
        orbits.append(orbit_hypothesis(f"alias {label}", alias, data, shape))
    logs = np.array([o.log_likelihood for o in orbits])
    share = np.exp(logs - logs.max())
    # the period that was found stays live: it is the question
    share[0] = max(share[0], _MIN_WEIGHT)
    share = 0.5 * share / share.sum()
    live = [
        Hypothesis(o.name, float(w), o.covariance, o.period, o.log_likelihood)
        for o, w in zip(orbits, share, strict=True)
        if w >= 0.5 * _MIN_WEIGHT
    ]
    total = 0.5 + sum(h.weight for h in live)
    return [
        Hypothesis(h.name, h.weight / total, h.covariance, h.period, h.log_likelihood)
        for h in (*live, star)
    ], shape


class _Growing:
    """A normal restricted to a growing set of rows: what each further row would add.

    A pivoted Cholesky factor is extended by one row at a time, so that a step costs n_slots times
    the number of rows chosen instead of a factorisation for every candidate.
    """

    def __init__(self, covariance: Array, difference: Array | None = None) -> None:
        self.covariance = covariance
        self.variance = np.diag(covariance).copy()  # of each row given those chosen
        self.rest = np.zeros_like(self.variance) if difference is None else difference.copy()
        self.rows = np.zeros((0, self.variance.size))
        self.log_det = 0.0
        self.square = 0.0  # d^T S^-1 d over the rows chosen

    def add(self, row: int) -> None:
        scale = math.sqrt(self.variance[row])
        new = (self.covariance[row] - self.rows[:, row] @ self.rows) / scale
        step = self.rest[row] / scale
        self.log_det += math.log(self.variance[row])
        self.square += step**2
        self.rest = self.rest - step * new
        self.variance = np.maximum(self.variance - new**2, 1e-12 * self.covariance[row, row])
        self.rows = np.vstack([self.rows, new])

    def log_dets(self) -> Array:
        return np.asarray(self.log_det + np.log(self.variance))

    def squares(self) -> Array:
        return np.asarray(self.square + self.rest**2 / self.variance)


def order_nights(
    forecasts: Sequence[Forecast], weights: Array, n_ranked: int, night: IntArray | None = None
) -> tuple[list[int], Array]:
    """Indices of slots, each the one that leaves least unknown given those before it.

    Greedy in the bound of ``information_deficit``, one slot a night (``night`` numbers them, each
    slot its own night by default). The second value is the information of every slot alone (nat),
    shape (n_slots,).
    """
    n_slots, n_hyp = forecasts[0].mean.size, len(forecasts)
    night = np.arange(n_slots) if night is None else night
    single = [_Growing(f.covariance) for f in forecasts]
    pairs = {
        (i, j): _Growing(
            0.5 * (forecasts[i].covariance + forecasts[j].covariance),
            forecasts[i].mean - forecasts[j].mean,
        )
        for i in range(n_hyp)
        for j in range(i)
    }
    free = np.ones(n_slots, dtype=bool)
    chosen: list[int] = []
    alone = np.zeros(n_slots)
    while free.any() and len(chosen) < n_ranked:
        distances = np.zeros((n_hyp, n_hyp, n_slots))
        for (i, j), pair in pairs.items():
            own = 0.5 * (single[i].log_dets() + single[j].log_dets())
            distances[i, j] = pair.squares() / 8 + 0.5 * (pair.log_dets() - own)
            distances[j, i] = distances[i, j]
        deficit = information_deficit(weights, distances)
        if not chosen:
            alone = -float(np.sum(weights * np.log(weights))) - deficit
        best = int(np.argmin(np.where(free, deficit, np.inf)))
        chosen.append(best)
        free &= night != night[best]
        for part in (*single, *pairs.values()):
            part.add(best)
    return chosen, np.maximum(alone, 0.0)


def _expected_log_odds(
    planet: Forecast, star: Forecast, chosen: list[int], log_odds: float
) -> list[float]:
    """Expected log-odds for the truth after 1, 2, ... nights: the worse of the two truths."""
    values = []
    for k in range(1, len(chosen) + 1):
        rows = np.array(chosen[:k])
        square = np.ix_(rows, rows)
        p = (planet.mean[rows], planet.covariance[square])
        s = (star.mean[rows], star.covariance[square])
        values.append(min(log_odds + divergence(*p, *s), -log_odds + divergence(*s, *p)))
    return values


def rank_nights(
    star: Star,
    time: Array,
    rv: Array,
    sd: Array,
    orbit: Orbit,
    *,
    rotation_period: float | None = None,
    site: str | None = None,
    start: float | None = None,
    days: int = 365,
    n_ranked: int = 10,
    log_odds: float = 0.0,
    threshold: float = THRESHOLD,
    indicators: Sequence[Indicator] = (),
) -> NightPlan:
    """Nights of the coming year, ranked by what they tell between the live hypotheses.

    Parameters
    ----------
    star : Star
        With ``ra_deg`` and ``dec_deg`` the nights come from the sky, without from the seasons seen
        in the data.
    time, rv, sd : Array, shape (n_obs,)
        Days (BJD), velocities less all other orbits and zero points, total white noise.
    orbit : Orbit
        The signal in question.
    rotation_period : float, optional
        Of the star, d.
    site : str, optional
        Name or "latitude,longitude[,height]"; a large observatory of the right hemisphere if
        absent.
    start : float, optional
        JD from which nights count; the last velocity if absent, so that a rerun gives the same.
    days, n_ranked : int
        Length of the search and of the list.
    log_odds : float
        Natural log-odds of planet against star so far.
    threshold : float
        Log-odds at which the question counts as settled.
    indicators : sequence of Indicator
        Those measured with the velocities, for judging what an indicator would add.

    Raises
    ------
    InputFault
        Where the site is unknown.
    """
    order = np.argsort(time)
    everything = Velocities(time[order], rv[order], sd[order])
    begin = float(everything.time[-1]) if start is None else start
    nights, name = _usable(star, everything.time, site, begin, days)
    if nights.time.size == 0:
        return NightPlan(
            (), None, threshold, (), (), name, "No usable night: the star never stands well."
        )
    data = everything.latest(_MAX_DATA)
    hypotheses, shape = live_hypotheses(data, orbit, rotation_period)
    # what the telescope in use reaches now, not what older ones did
    new_sd = np.full(nights.time.size, float(np.median(data.sd[-_RECENT:])))
    forecasts = [forecast(h, data, nights.time, new_sd) for h in hypotheses]
    weights = np.array([h.weight for h in hypotheses])
    chosen, alone = order_nights(forecasts, weights, max(n_ranked, _MAX_SOUGHT), nights.night)
    gains = _expected_log_odds(forecasts[0], forecasts[-1], chosen, log_odds)
    needed = next((k + 1 for k, g in enumerate(gains) if g >= threshold), None)
    shown = min(n_ranked, len(chosen))
    aligned = [replace(i, value=i.value[order], error=i.error[order]) for i in indicators]
    extra = extra_measurements(
        star, everything, orbit, gains[shown - 1] / shown, aligned,
        rotation_period=rotation_period,
    )  # fmt: skip
    return NightPlan(
        nights=_rows(nights, forecasts, chosen[:shown], gains, alone),
        nights_needed=needed,
        threshold=threshold,
        hypotheses=tuple((h.name, h.weight, h.period) for h in hypotheses),
        extra=extra,
        site=name,
        sentence=_summary(nights.sentence, shown, gains, needed, extra, shape),
    )


def _usable(
    star: Star, times: Array, site: str | None, begin: float, days: int
) -> tuple[NightTimes, str | None]:
    """Usable nights and the name of the site, None where the star has no coordinates."""
    place = find_site(site) if site else site_for(star)  # a wrong name is told in any case
    if star.ra_deg is None or star.dec_deg is None:
        return nights_from_data(times, begin, days), None
    return nights_from_site(star, place, begin, days), place.name


def _rows(
    nights: NightTimes,
    forecasts: Sequence[Forecast],
    chosen: Sequence[int],
    gains: Sequence[float],
    alone: Array,
) -> tuple[Night, ...]:
    """The table: the first forecast is the planet's, the last the star's."""
    return tuple(
        Night(
            rank=k + 1,
            time=float(nights.time[i]),
            information=float(alone[i]),
            log_odds=gains[k],
            velocity_planet=float(forecasts[0].mean[i]),
            velocity_star=float(forecasts[-1].mean[i]),
            altitude=_known(nights.altitude[i]),
            moon_distance=_known(nights.moon_distance[i]),
            moon_lit=_known(nights.moon_lit[i]),
        )
        for k, i in enumerate(chosen)
    )


def _known(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _summary(
    where: str,
    n: int,
    gains: list[float],
    needed: int | None,
    extra: Sequence[ExtraMeasurement],
    shape: tuple[float, float, float, float],
) -> str:
    if needed is None:
        text = (
            f"{len(gains)} velocities of the coming year are not expected to settle it "
            f"(log-odds {gains[-1]:.1f})."
        )
    else:
        text = f"{needed} well-chosen nights are expected to settle it."
    text += (
        f" The best {n} bring log-odds of {gains[n - 1]:.1f} against a star whose pattern recurs "
        f"after {shape[1]:.3g} d and lasts {shape[2]:.0f} d."
    )
    better = [e for e in extra if e.worth > 1.2]
    if better:
        text += f" Worth more than a velocity: {better[0].name}."
    return f"{text} {where}"
