"""Are there enough measurements, well enough spread over the period, to judge this signal?

No null and no p-value: this line states what the data can carry. The statistic is the number of
nights per fitted parameter of the orbit. It never speaks for a planet or for the star.
"""

from __future__ import annotations

import math

import numpy as np

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "largest_phase_gap", "run"]

ID = "sampling"
QUESTION = "Do the measurements cover the period well enough to judge the signal?"
REQUIRES = ("velocities",)
REFERENCES = ("vanderplas2018",)
_N_ORBIT = 5


def largest_phase_gap(time: Array, period: float) -> float:
    """Widest stretch of phase without a measurement, between 0 and 1."""
    phase = np.sort(np.mod(time / period, 1.0))
    if phase.size == 0:
        return 1.0
    return float(np.max(np.append(np.diff(phase), phase[0] + 1.0 - phase[-1])))


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
    }
    nights = series.n_nights
    weak = []
    if nights < 40:
        weak.append(f"only {nights} nights")
    if gap > 0.3:
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
