"""A signal among the planets of its solution: the finding "stability"."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from screener.core import Depth, Finding, Grade, Outcome, Signal, Star
from screener.system.nbody import nbody_check
from screener.system.stability import GLADMAN_LIMIT, PairStability, pair_stability

__all__ = ["stability_finding", "stability_findings"]

_UNSTABLE = 0.95  # share of draws that must fail before a solution is called unstable
_REFERENCES = ("gladman1993", "laskar2017")


def stability_findings(
    star: Star,
    signals: Sequence[Signal],
    grades: Mapping[str, Grade],
    *,
    seed: int,
    depth: Depth = Depth.STANDARD,
) -> dict[str, Finding]:
    """The finding "stability" of every signal not known already, by signal id.

    The planets of the solution are the known ones and all signals that are not graded likely
    stellar by what else was found: a spot has no orbit that could cross another. Signals graded
    likely stellar get "not applicable". At deep depth an N-body check joins in where ``rebound`` is
    installed and the pairs leave doubt.
    """
    planets = [
        s
        for s in signals
        if s.orbit.semi_amplitude > 0 and (s.known or grades.get(s.id) is not Grade.LIKELY_STELLAR)
    ]
    rng = np.random.default_rng(np.random.SeedSequence([seed, 0x57AB]))
    n_draws = 300 if depth is Depth.QUICK else 2000
    pairs = pair_stability(star, planets, rng, n_draws=n_draws)
    lasting = None
    if depth is Depth.DEEP and any(_failing(p) > 1 - _UNSTABLE for p in pairs):
        outcome = nbody_check(star, planets, rng)
        lasting = None if outcome is None else outcome.survival
    found = {}
    for signal in signals:
        if signal.known:
            continue
        others = [s for s in planets if s.id != signal.id]
        if all(s.id != signal.id for s in planets):
            found[signal.id] = _not_applicable("A signal of the star has no orbit.")
        else:
            found[signal.id] = stability_finding(
                star, signal, others, seed=seed, depth=depth, pairs=pairs, survival=lasting
            )
    return found


def stability_finding(
    star: Star,
    signal: Signal,
    others: Sequence[Signal],
    *,
    seed: int,
    depth: Depth = Depth.STANDARD,
    pairs: Sequence[PairStability] | None = None,
    survival: float | None = None,
) -> Finding:
    """Whether ``signal`` can live beside ``others``, the signals that are taken for planets.

    An unstable pair counts against the weaker of its two signals only. Unstable means: in 95 % of
    the draws the orbits cross and no first- or second-order resonance could keep the bodies
    apart, or the bodies violate Gladman's criterion while closer than 2 sqrt(3) Hill radii, or
    fewer than 5 % of the N-body draws (``survival``) last. AMD-instability alone decides nothing.
    Orbits that are stable are no evidence for a planet, hence "inconclusive".

    The statistic is the share of draws in which the pair fails; there is no null hypothesis and
    so no p-value. ``pairs`` saves computing them twice.
    """
    if not others:
        return _not_applicable("There is no second planet in this solution.")
    if star.mass is None:
        return _not_applicable("Without a stellar mass the orbits have no sizes.")
    if pairs is None:
        n_draws = 300 if depth is Depth.QUICK else 2000
        rng = np.random.default_rng(seed)
        pairs = pair_stability(star, [signal, *others], rng, n_draws=n_draws)
    by_id = {s.id: s for s in (signal, *others)}
    mine = [p for p in pairs if signal.id in (p.inner, p.outer)]
    if not mine:
        return _not_applicable("The amplitudes of this solution give no masses.")
    # where several neighbours are lost, the one that outranks this signal decides
    worst = max(mine, key=lambda p: (_failing(p), _strength(by_id[_partner(p, signal)])))
    partner = by_id[_partner(worst, signal)]
    share, near = _failing(worst), worst.commensurability
    resonant = near.near and near.p - near.q <= 2
    lost = survival is not None and survival < 1 - _UNSTABLE
    saved = survival is not None and survival >= 0.5
    geometric = share >= _UNSTABLE and not resonant and not saved
    # integrations do not say which pair broke up: only one in doubt by itself is blamed
    unstable = geometric or (lost and share > 1 - _UNSTABLE)
    weaker = _strength(signal) < _strength(partner)
    if unstable and weaker:
        outcome = Outcome.SUPPORTS_STAR
        how = (
            f"it fails in {100 * share:.0f} % of the draws"
            if geometric
            else "no integration of the system lasts"
        )
        sentence = (
            f"The orbit cannot last beside {partner.id} ({partner.orbit.period:.4g} d): {how}; "
            "the weaker of the two is not a planet on this orbit."
        )
    else:
        outcome = Outcome.INCONCLUSIVE
        sentence = _stable_sentence(partner, worst, share, unstable, resonant)
    parameters: dict[str, Any] = {
        "partner": partner.id,
        "crossing": worst.crossing,
        "hill_unstable": worst.hill_unstable,
        "amd_unstable": worst.amd_unstable,
        "hill_separation": worst.hill_separation,
        "near_resonance": f"{near.p}:{near.q}" if near.near else None,
        "survival": survival,
        "weaker": weaker,
    }
    return Finding("stability", outcome, sentence, share, None, None, parameters, _REFERENCES)


def _not_applicable(reason: str) -> Finding:
    return Finding("stability", Outcome.NOT_APPLICABLE, reason, references=_REFERENCES)


def _partner(pair: PairStability, signal: Signal) -> str:
    return pair.outer if pair.inner == signal.id else pair.inner


def _strength(signal: Signal) -> float:
    """How well a signal stands by itself; known planets stand above all."""
    if signal.known:
        return math.inf
    orbit = signal.orbit
    if orbit.semi_amplitude_err:
        return orbit.semi_amplitude / orbit.semi_amplitude_err
    return max(signal.white_gain, signal.activity_gain)


def _failing(pair: PairStability) -> float:
    """Share of draws in which a pair is lost by geometry or by Hill's criterion."""
    packed = pair.hill_unstable if pair.hill_separation < GLADMAN_LIMIT else 0.0
    return max(pair.crossing, packed)


def _stable_sentence(
    partner: Signal, pair: PairStability, share: float, unstable: bool, resonant: bool
) -> str:
    name = f"{partner.id} ({partner.orbit.period:.4g} d)"
    if unstable:
        return f"The orbit cannot last beside {name}, the weaker of the two signals."
    if share >= _UNSTABLE and resonant:
        near = pair.commensurability
        return (
            f"Crosses the orbit of {name}; only the {near.p}:{near.q} resonance could protect it."
        )
    if share > 1 - _UNSTABLE:
        return f"Beside {name} the orbit fails in {100 * share:.0f} % of the draws."
    if pair.amd_unstable > 0.5:
        return (
            f"Keeps {pair.hill_separation:.1f} Hill radii from {name}; AMD-unstable as fitted, "
            "which large fitted eccentricities bring about easily."
        )
    return f"Stable beside {name}: {pair.hill_separation:.1f} mutual Hill radii apart."
