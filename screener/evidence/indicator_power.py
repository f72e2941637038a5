"""Does any indicator vary at the signal's own period, and would it have if the star made it?

Null: the indicators are correlated noise (red plus white) without a line at this period. The
amplitude of a sinusoid in each is tested with an F statistic under the fitted noise, and the
indicators' p-values are joined with their correlation taken into account (Brown 1975).

Statistic: natural log of the Bayes factor of "the star made this signal" over "the indicators
are silent". Under the first each indicator has the amplitude that its scatter, in proportion to
that of the velocities, gives a signal of this size, up to a factor of two; some indicators do
not respond at all. So silence counts only where the indicator would have spoken, and the power
is the chance of p < 0.01 under the same assumption.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import special, stats

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.lines import (
    Amplitudes,
    Channels,
    amplitudes,
    channels_of,
    combined_p,
    residual_correlation,
)

__all__ = [
    "ALPHA",
    "ID",
    "MUTE",
    "NODES",
    "QUESTION",
    "REFERENCES",
    "REQUIRES",
    "SPREAD",
    "WEIGHTS",
    "expected",
    "run",
]

ID = "indicator_power"
QUESTION = "Do the indicators vary at this period, and would they if the star made the signal?"
REQUIRES = ("at least one indicator",)
REFERENCES = ("queloz2001", "boisse2011", "brown1975")

ALPHA = 0.01
#: Scatter of ln(amplitude) about the expected one, and the chance that an indicator stays silent
#: about a signal of the star's (line-shape indicators of slow rotators do). Common practice.
SPREAD = 0.7
MUTE = 0.15
#: Quadrature over that scatter: places in units of it, and weights.
NODES = np.linspace(-2.2, 2.2, 9)
WEIGHTS = np.exp(-0.5 * NODES**2) / np.sum(np.exp(-0.5 * NODES**2))


def expected(case: Case, channels: Channels) -> Array:
    """Amplitude of each indicator, shape (K,), if the star's activity made the velocity signal.

    The semi-amplitude times the ratio of scatters beyond the errors, indicator over velocity. The
    velocities' scatter is taken with the signal in, as activity is supposed to have made it.
    """
    known = channels.noise.measured
    result = np.zeros(len(channels.names))
    nuisance = channels.noise.nuisance
    for k in range(result.size):
        rows = known[:, k]
        basis = nuisance[rows]

        def excess(values: Array, errors: Array, basis: Array = basis) -> float:
            rest = values - basis @ np.linalg.lstsq(basis, values, rcond=None)[0]
            total = float(np.sum(rest**2)) / max(values.size - basis.shape[1], 1)
            # not below a tenth of the scatter: errors are seldom known better than that
            return math.sqrt(max(total - float(np.median(errors**2)), 0.01 * total))

        item = case.series.indicator(channels.names[k])
        own = excess(channels.values[rows, k], item.error[rows])
        velocity = excess(case.target_rv[rows], case.series.rv_err[rows])
        # the signal is part of the velocities' scatter
        amplitude = case.signal.orbit.semi_amplitude
        result[k] = amplitude * own / max(velocity, amplitude / math.sqrt(2.0), 1e-12)
    return result


def _log_bayes(found: Amplitudes, size: Array) -> Array:
    """Log Bayes factor per series of an amplitude near ``size`` in any phase over none."""
    trial = size[:, None] * np.exp(SPREAD * NODES)[None, :]
    # isotropic error of the amplitude: the geometric mean of the two
    variance = np.sqrt(np.linalg.det(found.covariance))
    seen = np.hypot(found.value[:, 0], found.value[:, 1])
    argument = seen[:, None] * trial / variance[:, None]
    log_like = -0.5 * trial**2 / variance[:, None] + np.log(special.i0e(argument)) + argument
    average = special.logsumexp(log_like, axis=1, b=WEIGHTS)
    return np.asarray(np.logaddexp(math.log(1.0 - MUTE) + average, math.log(MUTE)))


def _power(found: Amplitudes, size: Array, factor: float, dof: float) -> float:
    """Chance of a joint p below ``ALPHA`` if the star made the signal."""
    variance = np.sqrt(np.linalg.det(found.covariance))
    lam = (size**2 / variance)[:, None] * np.exp(2.0 * SPREAD * NODES)[None, :]
    critical = factor * float(stats.chi2.isf(ALPHA, dof))
    # the same factor for all indicators in a trial (they see the same spots), silence apart
    silent_all = MUTE ** len(size)
    total = np.sum(lam, axis=0) * (1.0 - MUTE) / max(1.0 - silent_all, 1e-9)
    chance = stats.ncx2.sf(critical / factor, dof, total / factor)
    return float(WEIGHTS @ chance * (1.0 - silent_all) + ALPHA * silent_all)


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable without a usable indicator."""
    channels = channels_of(case)
    if channels is None:
        return Finding(
            ID, Outcome.NOT_APPLICABLE, "No indicator was measured.", references=REFERENCES
        )
    found = amplitudes(case, channels)
    size = expected(case, channels)
    p_value, factor, dof = combined_p(found, 2)
    power = _power(found, size, factor, dof)
    each = _log_bayes(found, size)
    # correlated indicators do not speak independently
    r = residual_correlation(found)
    independent = len(size) / float(np.sum(r**2))
    statistic = float(np.sum(each)) * max(independent, 1.0 / len(size))
    seen = np.hypot(found.value[:, 0], found.value[:, 1])
    error = np.sqrt(0.5 * np.einsum("kii->k", found.covariance))
    strongest = int(np.argmin(found.p_value))
    parameters: dict[str, float | int | str] = {
        "n_indicators": len(size),
        "strongest": channels.names[strongest],
        "smallest_p": float(found.p_value[strongest]),
        "log10_p": math.log10(max(p_value, 1e-300)),
        "loudness": float(np.max(seen / np.maximum(size, 1e-300))),
    }
    for k, name in enumerate(channels.names):
        parameters[f"{name}_amplitude"] = float(seen[k])
        parameters[f"{name}_amplitude_err"] = float(error[k])
        parameters[f"{name}_expected"] = float(size[k])
        parameters[f"{name}_p"] = float(found.p_value[k])
    names = ", ".join(channels.names)
    period = case.signal.orbit.period
    if p_value < ALPHA and statistic > 0.0:
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The indicators vary at {period:.4g} d (joint p = {p_value:.2g}), most of all "
            f"{channels.names[strongest]}."
        )
    elif p_value > 0.05 and power > 0.8 and statistic < -1.0:
        outcome = Outcome.SUPPORTS_PLANET
        sentence = (
            f"The indicators ({names}) are silent at {period:.4g} d (p = {p_value:.2g}), and "
            f"would have spoken in {power:.0%} of the cases if the star made the signal."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The indicators ({names}) show nothing clear at {period:.4g} d (p = {p_value:.2g}); "
            f"they would have spoken in {power:.0%} of the cases if the star made the signal."
        )
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
