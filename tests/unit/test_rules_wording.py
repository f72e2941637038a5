"""Sentences on a grade are in a reader's words, not in those of the code."""

from __future__ import annotations

import dataclasses
import importlib
import re

from screener.core import Finding, Grade, Orbit, Outcome, Signal
from screener.core.wording import QUANTITIES, TESTS
from screener.rules import grade, load_rules

_DEFAULT = load_rules()


def _signal(period: float = 12.0) -> Signal:
    return Signal("S1", Orbit(period, 5.0, 0.0, 0.0, 2459000.0, semi_amplitude_err=0.3), 1e-9, ())


def _clear_planet() -> list[Finding]:
    def found(test: str, statistic: float, **parameters: float | str) -> Finding:
        return Finding(test, Outcome.SUPPORTS_PLANET, "", statistic, parameters=parameters)

    return [
        found("joint_amplitude", 20.0, kept_share=0.95),
        found("activity_gain", 60.0, gain_joint=70.0, gain_white=90.0),
        found("prediction", 25.0),
        found("dominance", 20.0),
        found("rotation", -3.0, nearest_harmonic=1, closeness_relative=0.6),
        found("indicator_power", -4.0),
        found("persistence", 1.0),
        found("sampling", 20.0, n_nights=100, largest_phase_gap=0.05, period_over_baseline=0.02),
    ]


def test_missing_phases_are_advised_with_their_season() -> None:
    found = [
        dataclasses.replace(
            f, parameters={**f.parameters, "largest_phase_gap": 0.5, "gap_season": "in May 2031"}
        )
        if f.test == "sampling"
        else f
        for f in _clear_planet()
    ]
    result = grade(found, _DEFAULT, _signal(period=410.0))
    assert result.grade is Grade.AMBIGUOUS
    assert result.next_step.startswith("Observe in May 2031: the missing phases of the 410 d orbit")


def test_sentences_name_no_internal_field() -> None:
    for test, words in TESTS.items():
        if test not in ("stability",):
            assert words.question == importlib.import_module(f"screener.evidence.{test}").QUESTION
    ramped = {str(r.ramp.of) for r in _DEFAULT.rules if r.ramp is not None}
    given = ("signal.", "neighbours.", "family.", "sampling.")
    assert {f for f in ramped if not f.startswith(given)} <= set(QUANTITIES)
    weak = [
        dataclasses.replace(f, statistic=6.0) if f.test == "joint_amplitude" else f
        for f in _clear_planet()
    ]
    for findings in (_clear_planet(), weak, weak[:3]):
        for odds in (-12.0, -6.0, 0.0, 6.0):
            said = grade(
                findings, dataclasses.replace(_DEFAULT, log_odds=odds), _signal()
            ).would_change
            assert not re.search(r"[a-z]_[a-z]|[a-z]\.[a-z]", said), said
