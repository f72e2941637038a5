"""Is the period a harmonic of another signal, or does eccentricity do another signal's work?

Null: the signal's period has nothing to do with those of the others: its frequency lies anywhere
between a quarter and four times theirs. Statistic: distance to the nearest small-integer ratio
p:q (p, q up to 3, not 1:1) with a stronger signal, in frequency resolutions 1/baseline. The
p-value is the share of that range at least as near to such a ratio. The power is the chance that
a true harmonic lies within half a resolution of it, given the error of the period.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import special, stats

from screener.core import Array, Finding, Outcome, Signal
from screener.evidence.case import Case
from screener.evidence.lines import fit_columns, velocity_channel

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "run"]

ID = "harmonics"
QUESTION = "Is the period a harmonic of another signal, or the eccentricity a signal in disguise?"
REQUIRES = ("velocities",)
REFERENCES = ("angladaescude2010", "kurster2015")

_RATIOS = ((2, 1), (3, 1), (3, 2), (1, 2), (1, 3), (2, 3))
_DOUBTFUL_ECCENTRICITY = 0.3


def _distance(frequency: Array, other: Signal, baseline: float) -> tuple[Array, Array]:
    """Distance to the nearest ratio in resolutions, and the index of that ratio."""
    own = 1.0 / other.orbit.period
    offsets = np.stack([np.abs(frequency - p / q * own) for p, q in _RATIOS]) * baseline
    return np.min(offsets, axis=0), np.argmin(offsets, axis=0)


def _share_of_harmonic(case: Case) -> tuple[float, float]:
    """Amplitude at half the period over that at the period, and the p-value of the former."""
    period = case.signal.orbit.period
    angle = 2.0 * np.pi / period * case.series.time
    columns = np.column_stack([np.cos(2 * angle), np.sin(2 * angle), np.cos(angle), np.sin(angle)])
    channel = velocity_channel(case, case.target_rv)
    found = fit_columns(channel, columns)
    value, covariance = found.value[0], found.covariance[0]
    chi2 = float(value[:2] @ np.linalg.solve(covariance[:2, :2], value[:2]))
    p_value = float(stats.f.sf(chi2 / 2.0, 2, max(channel.noise.dof[0] - 4.0, 1.0)))
    return float(np.hypot(*value[:2]) / max(np.hypot(*value[2:]), 1e-12)), p_value


def run(case: Case) -> Finding:
    """The finding for one signal; the part about other signals needs one that is stronger."""
    orbit, baseline = case.signal.orbit, case.series.baseline
    parameters: dict[str, float | int | str | bool | None] = {
        "eccentricity": orbit.eccentricity,
        "eccentricity_err": orbit.eccentricity_err,
    }
    share, harmonic_p = _share_of_harmonic(case) if case.series.n_obs >= 12 else (0.0, 1.0)
    parameters |= {"half_period_share": share, "half_period_p": harmonic_p}
    stronger = [s for s in case.others if s.orbit.semi_amplitude >= 0.8 * orbit.semi_amplitude]
    statistic = p_value = power = None
    related = ""
    if stronger and baseline > 0.0:
        own = 1.0 / orbit.period
        theirs = [1.0 / s.orbit.period for s in stronger]
        trial = np.linspace(0.25 * min(theirs), 4.0 * max(theirs), 4001)
        measured = [_distance(np.append(trial, own), s, baseline) for s in stronger]
        nearest = np.min([d for d, _ in measured], axis=0)
        statistic = float(nearest[-1])
        p_value = float((1 + np.count_nonzero(nearest[:-1] <= statistic)) / (2 + trial.size))
        # a true harmonic falls within half a resolution of the ratio unless its period is badly
        # known
        blur = (orbit.period_err or 0.0) / orbit.period**2 * baseline
        power = float(special.erf(0.5 / (math.sqrt(2.0) * max(blur, 0.05))))
        which = int(np.argmin([d[-1] for d, _ in measured]))
        p, q = _RATIOS[int(measured[which][1][-1])]
        parameters |= {
            "ratio": f"{p}:{q}",
            "of_signal": stronger[which].id,
            "of_period": stronger[which].orbit.period,
            "of_eccentricity": stronger[which].orbit.eccentricity,
        }
        if statistic < 0.5 and p_value < 0.05:
            related = (
                f"The frequency is {p}:{q} of that of {stronger[which].id} "
                f"({stronger[which].orbit.period:.4g} d) within the resolution: it may be a "
                "harmonic of that signal."
            )
    err = orbit.eccentricity_err or 0.1
    eccentric = orbit.eccentricity > _DOUBTFUL_ECCENTRICITY and orbit.eccentricity > 2.0 * err
    doubled = harmonic_p < 0.01 and share > 0.5
    parameters |= {"is_harmonic": bool(related), "large_eccentricity": bool(eccentric)}
    parameters["strong_half_period"] = bool(doubled)
    if related:
        # twice and three times the frequency is what an ill-fitted eccentric orbit leaves behind;
        # other ratios are those of resonant planets as well
        left_over = parameters["ratio"] in ("2:1", "3:1")
        outcome = Outcome.SUPPORTS_STAR if left_over else Outcome.INCONCLUSIVE
        sentence = related
    elif eccentric:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The eccentricity of {orbit.eccentricity:.2f} may do the work of a second signal at "
            f"{0.5 * orbit.period:.4g} d (an orbit at half the period looks the same at first "
            "order), or of activity."
        )
    elif doubled:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"Half the period ({0.5 * orbit.period:.4g} d) carries {share:.0%} of the amplitude at "
            "the period itself: eccentricity, a second signal, or spots on two sides of the star."
        )
    elif statistic is None:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            "No other signal of that strength to be a harmonic of, and no large eccentricity."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"No small-integer ratio with a stronger signal (nearest at {statistic:.2g} frequency "
            "resolutions), and no large eccentricity."
        )
    if statistic is not None and not math.isfinite(statistic):
        statistic = None
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
