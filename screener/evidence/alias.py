"""Is the period itself preferred over its daily, monthly and yearly aliases?

Null: the signal is at its stated period. Statistic: its log-likelihood gain less that of the best
alias. For the p-value each alias is added to the stated period: under the null its further gain
is that of noise, whatever the amplitude, and noise is simulated at the real times; a small
p-value says that the stated period does not explain what is there. The power is the chance of
p < 0.05 if the true period were the best alias, from simulated signals of the fitted size there
(after Dawson & Fabrycky 2010), and ``chance_rival_wins`` is how often such an alias would have won
outright. A rival at the star's rotation, or at another signal's period, is flagged.
"""

from __future__ import annotations

import numpy as np

from screener.core import Array, Finding, Outcome
from screener.evidence.case import Case
from screener.evidence.lines import n_draws
from screener.evidence.projected import each_with_its_noise, gain, project

__all__ = ["ID", "QUESTION", "REFERENCES", "REQUIRES", "family", "run"]

ID = "alias"
QUESTION = "Is the period itself preferred over its daily, monthly and yearly aliases?"
REQUIRES = ("at least 20 velocities",)
REFERENCES = ("dawson2010", "deeming1975", "phipson2010")

_YEAR, _SIDEREAL, _MONTH = 1.0 / 365.25, 1.0 / 0.99726957, 1.0 / 29.530588
_SHIFTS = (_YEAR, 2.0 * _YEAR, _MONTH, 1.0, _SIDEREAL, 2.0, 2.0 * _SIDEREAL)
_STEPS = np.array([-0.4, -0.2, 0.0, 0.2, 0.4])
_ALPHA = 0.05


def family(time: Array, frequency: float) -> Array:
    """Frequencies (1/d) that the sampling mixes with ``frequency``, itself first.

    Shifts count where the sampling's own amplitude there is above 0.2, and where the shifted
    frequency differs by more than a resolution and lies between 1/3 baselines and 2 per day.
    """
    baseline = max(float(time[-1] - time[0]), 1e-9)
    found = [frequency]
    for shift in _SHIFTS:
        if abs(np.mean(np.exp(2j * np.pi * shift * time))) < 0.2:
            continue
        for candidate in (abs(frequency - shift), frequency + shift):
            near = min(abs(candidate - f) for f in found)
            if 1.0 / (3.0 * baseline) < candidate < 2.0 and near > 1.0 / baseline:
                found.append(candidate)
    return np.array(found)


def _flags(case: Case, period: float) -> dict[str, bool | str | None]:
    """Whether a period is the star's (or half of it) or another signal's."""
    density, width = case.rotation_density, 1.0 / max(case.series.baseline, 1e-9)
    star = False
    if density is not None:
        chance = density.chance(0.9 * period, 1.1 * period)
        star = chance > 0.3 or density.chance(1.8 * period, 2.2 * period) > 0.3
    other = next(
        (s.id for s in case.others if abs(1.0 / s.orbit.period - 1.0 / period) < width), None
    )
    return {"rival_is_rotation": star, "rival_is_signal": other}


def _gains(columns: Array, values: Array, n_steps: int) -> tuple[Array, Array]:
    """Gain of each frequency, (G, S), and the largest of any alias beyond the stated period, (S,).

    ``columns`` (n_obs, G, 2) and ``values`` (n_obs, S) are whitened; the first ``n_steps``
    frequencies are the stated one within its resolution, of which the best is taken.
    """
    each = gain(columns, values)
    own = np.argmax(each[:n_steps], axis=0)
    further = np.empty(values.shape[1])
    for pair in np.unique(own):
        rows = own == pair
        basis, _ = np.linalg.qr(columns[:, pair])
        flat = columns[:, n_steps:].reshape(columns.shape[0], -1)
        beyond = flat - basis @ (basis.T @ flat)
        pairs = beyond.reshape(columns.shape[0], -1, 2)
        further[rows] = np.max(gain(pairs, values[:, rows]), axis=0)
    return each, further


def run(case: Case) -> Finding:
    """The finding for one signal; not applicable without aliases in the sampling."""
    time, period = case.series.time, case.signal.orbit.period
    members = family(time, 1.0 / period) if time.size >= 20 else np.array([1.0 / period])
    if members.size == 1:
        return Finding(
            ID,
            Outcome.NOT_APPLICABLE,
            "The sampling gives this period no alias.",
            references=REFERENCES,
        )
    projected, rng, n = project(case), case.rng(ID), n_draws(case)
    n_members, n_steps = members.size, _STEPS.size
    fine = (members[:, None] + _STEPS[None, :] / case.series.baseline).ravel()
    angle = 2.0 * np.pi * (time - time.mean())[:, None] * fine[None, :]
    raw = np.stack([np.cos(angle), np.sin(angle)], axis=2)
    flat = raw.reshape(time.size, -1)
    columns, values = projected(flat).reshape(raw.shape), projected(case.target_rv[:, None])
    gains, largest = _gains(columns, values, n_steps)
    seen, observed = gains[:, 0].reshape(n_members, n_steps), float(largest[0])
    best = seen.max(axis=1)
    rival = 1 + int(np.argmax(best[1:]))
    statistic = float(best[0] - best[rival])

    def signal(member: int) -> Array:
        """The fitted signal at a member of the family, shape (n_obs, 1)."""
        pair = member * n_steps + int(np.argmax(seen[member]))
        solution = np.linalg.lstsq(columns[:, pair], values[:, 0], rcond=None)[0]
        return np.asarray(raw[:, pair] @ solution)[:, None]

    n_true = max(60, n // 4)
    fakes = projected.fakes(rng, n + n_true)
    fakes[:, :n] += signal(0)
    fakes[:, n:] += signal(rival)
    beyond, lead = np.empty(n + n_true), np.empty(n + n_true)
    for rows, x, y in each_with_its_noise(case, projected.noise, fakes, flat):
        gains, beyond[rows] = _gains(x.reshape(raw.shape), y, n_steps)
        lead[rows] = gains[:n_steps].max(axis=0) - gains[n_steps:].max(axis=0)
    p_value = float((1 + np.count_nonzero(beyond[:n] >= observed)) / (1 + n))
    critical = float(np.quantile(beyond[:n], 1.0 - _ALPHA))
    power = float(np.mean(beyond[n:] > critical))
    rival_wins = float(np.mean(lead[n:] < 0.0))
    other = float(1.0 / members[rival])
    flags = _flags(case, other)
    parameters: dict[str, float | int | bool | str | None] = {
        "rival_period": other,
        "n_members": int(members.size),
        "own_gain": float(best[0]),
        "rival_gain": float(best[rival]),
        "further_gain": observed,
        "chance_rival_wins": rival_wins,
        **flags,
    }
    flagged = bool(flags["rival_is_rotation"]) or flags["rival_is_signal"] is not None
    name = "the star's rotation" if flags["rival_is_rotation"] else str(flags["rival_is_signal"])
    if flagged and statistic < 2.0:
        outcome = Outcome.SUPPORTS_STAR
        sentence = (
            f"The alias at {other:.4g} d explains the velocities about as well (log-likelihood "
            f"{-statistic:+.1f}) and is {name}."
        )
    elif statistic < 0.0 or p_value < _ALPHA:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The true period may be the alias at {other:.5g} d (log-likelihood {-statistic:+.1f}, "
            f"p = {p_value:.2g})."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = (
            f"The period is preferred over its best alias at {other:.5g} d by {statistic:.1f} in "
            f"log-likelihood (p = {p_value:.2g})."
        )
    return Finding(ID, outcome, sentence, statistic, p_value, power, parameters, REFERENCES)
