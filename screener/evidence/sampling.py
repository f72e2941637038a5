"""Are there enough measurements, well enough spread over the period, to judge this signal?

No null and no p-value: this line states what the data can carry. The statistic is the number of
nights per fitted parameter of the orbit. It never speaks for a planet or for the star.
"""

from __future__ import annotations

import calendar
import math

import numpy as np

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case

__all__ = [
    "ID",
    "QUESTION",
    "REFERENCES",
    "REQUIRES",
    "gap_season",
    "largest_phase_gap",
    "run",
]

ID = "sampling"
QUESTION = "Do the measurements cover the period well enough to judge the signal?"
REQUIRES = ("velocities",)
REFERENCES = ("vanderplas2018",)
_N_ORBIT = 5
_WIDE = 0.3  # a gap in phase wider than this keeps an orbit from being judged
_YEAR = 365.25
_EPOCH = 2440587.5  # Julian date of 1 January 1970
_LEAST_GAP = 20.0  # d; a shorter one comes round in any season
_LEAST_STAY = 30.0  # d; less than this, and than half the gap, is not worth a season
_YEARS_AHEAD = 5


def largest_phase_gap(time: Array, period: float) -> float:
    """Widest stretch of phase without a measurement, between 0 and 1."""
    return _gap(time, period)[1]


def _gap(time: Array, period: float) -> tuple[float, float]:
    """Phase where the widest gap starts, and its width."""
    phase = np.sort(np.mod(time / period, 1.0))
    if phase.size == 0:
        return 0.0, 1.0
    widths = np.append(np.diff(phase), phase[0] + 1.0 - phase[-1])
    widest = int(np.argmax(widths))
    return float(phase[widest]), float(widths[widest])


def gap_season(time: Array, period: float) -> str | None:
    """When the phases that were never observed come up next while the star is in the night sky.

    The star is taken to be observable on a day of the year within two weeks of one on which it was
    observed before, and the first stay in the gap after the last observation is named.

    Parameters
    ----------
    time : array, shape (n_obs,)
        BJD, d, in order.
    period : float
        d

    Returns
    -------
    str or None
        "from March to May 2021"; None where the gap is so short that any season will do, where it
        never meets the star's season within five years, or where the times are not Julian dates.
    """
    if time.size < 2 or time[0] < _EPOCH:
        return None
    start, width = _gap(time, period)
    if width * period < _LEAST_GAP:
        return None
    days = np.arange(math.ceil(time[-1]) + 1.0, time[-1] + _YEARS_AHEAD * _YEAR)
    inside = np.mod(days / period - start, 1.0) < width
    of_year = np.mod(days, _YEAR)
    apart = np.abs(of_year[:, None] - np.unique(np.mod(np.floor(time), _YEAR))[None, :])
    up = np.minimum(apart, _YEAR - apart).min(axis=1) <= 14.0
    stay = np.flatnonzero(inside & up)
    for run in np.split(stay, np.flatnonzero(np.diff(stay) > 1) + 1):
        if run.size >= min(_LEAST_STAY, width * period / 2):
            return _months(days[run[0]], days[run[-1]])
    return None


def _months(first: float, last: float) -> str:
    """Two Julian dates as a stretch of months."""
    ends = []
    for date in (first, last):
        # floored to the day: 1 January is 0 of the days since 1970
        month = np.datetime64(math.floor(date - _EPOCH), "D").astype("datetime64[M]")
        year, number = divmod(int(month.astype(int)), 12)
        ends.append((calendar.month_name[number + 1], 1970 + year))
    (one, year), (other, end) = ends
    if ends[0] == ends[1]:
        return f"in {one} {year}"
    return f"from {one} {'' if year == end else f'{year} '}to {other} {end}"


def noise_floor(rv_sd: Array) -> float:
    """Smallest amplitude that these velocities can carry, m/s.

    Three times the error of an amplitude in white noise of ``rv_sd``, shape (n_obs,), but never
    below 0.2 m/s: no spectrograph has shown a better stability over years (common practice, no
    source).
    """
    if rv_sd.size == 0:
        return math.inf
    return max(3 * math.sqrt(2 / float(np.sum(1 / rv_sd**2))), 0.2)


def run(case: Case) -> Finding:
    """The finding for one signal; always inconclusive, the numbers are for the rules."""
    series, period = case.series, case.signal.orbit.period
    cycles = np.floor((series.time - series.time[0]) / period)
    counts = np.bincount(series.instrument, minlength=len(series.instruments))
    used = counts[counts > 0]
    seasons = int(1 + np.count_nonzero(np.diff(series.time) > 60.0))
    gap = largest_phase_gap(series.time, period)
    covered = series.baseline / period
    parameters = {
        "n_obs": series.n_obs,
        "n_nights": series.n_nights,
        "n_seasons": seasons,
        "n_instruments": int(used.size),
        "fewest_per_instrument": int(used.min()),
        "largest_phase_gap": gap,
        "period_over_baseline": period / series.baseline if series.baseline > 0.0 else None,
        "cycles_in_baseline": covered,
        "cycles_observed": int(np.unique(cycles).size),
        "noise_floor": noise_floor(case.rv_sd),
        "gap_season": gap_season(series.time, period) if gap > _WIDE else None,
    }
    nights = series.n_nights
    weak = []
    if nights < 40:
        weak.append(f"only {nights} nights")
    if gap > _WIDE:
        weak.append(f"{gap:.0%} of the phases never seen")
    if covered < 1.5:
        weak.append(f"only {covered:.2g} cycles in the baseline")
    sentence = (
        "Thin data: " + ", ".join(weak) + "."
        if weak
        else f"{nights} nights cover {covered:.3g} cycles without a phase gap above {gap:.0%}."
    )
    return Finding(
        ID,
        Outcome.INCONCLUSIVE,
        sentence,
        statistic=nights / _N_ORBIT,
        parameters=parameters,
        references=REFERENCES,
    )
