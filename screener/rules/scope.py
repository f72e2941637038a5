"""What a condition sees of one signal: its findings, by test and name."""

from __future__ import annotations

import math
import operator
from collections.abc import Callable, Mapping, Sequence

import numpy as np

from screener.core import Finding, Outcome, Signal
from screener.rules.grammar import (
    And,
    Compare,
    Condition,
    Field,
    Is,
    Not,
    Number,
    Or,
    Term,
    Truth,
)

__all__ = ["SIGNAL", "SIGNAL_FIELDS", "Scope", "Value", "holds"]

Value = float | str | bool | None

SIGNAL = "signal"  # the test name under which the signal itself is seen
SIGNAL_FIELDS: Mapping[str, str] = {
    "period": "period of the signal, d",
    "semi_amplitude": "velocity semi-amplitude, m/s",
    "amplitude_ratio": "semi-amplitude over its error",
    "eccentricity": "eccentricity of the fitted orbit",
    "log_fap": "natural logarithm of the false-alarm probability",
    "white_gain": "log-likelihood gain over white noise",
    "activity_gain": "log-likelihood gain over the activity model",
    "found_by_white": "true if the search in white noise found it",
    "found_by_activity": "true if the search on top of the activity model found it",
}

_SILENT = (Outcome.NOT_APPLICABLE, Outcome.FAILED)
_ORDERS: Mapping[str, Callable[[float, float], bool]] = {
    "<": operator.lt,
    "<=": operator.le,
    ">": operator.gt,
    ">=": operator.ge,
    "==": operator.eq,
    "!=": operator.ne,
}


class Scope:
    """The findings about one signal, and the signal itself.

    Parameters
    ----------
    findings : sequence of Finding
        At most one for each test.
    signal : Signal, optional
        Seen under the test name ``signal``; see ``SIGNAL_FIELDS``.

    Raises
    ------
    ValueError
        If a test has two findings, or is called ``signal``.
    """

    def __init__(self, findings: Sequence[Finding], signal: Signal | None = None) -> None:
        self._findings = {f.test: f for f in findings}
        if len(self._findings) != len(findings):
            raise ValueError("a test has more than one finding on this signal")
        if SIGNAL in self._findings:
            raise ValueError(f"no test may be called {SIGNAL!r}")
        self._signal = {} if signal is None else _signal_values(signal)

    def value(self, field: Field) -> Value:
        """What stands in a field; None if absent. Numbers are finite floats."""
        if field.test == SIGNAL:
            return bool(self._signal) if field.name == "present" else self._signal.get(field.name)
        finding = self._findings.get(field.test)
        if field.name == "failed":
            return finding is not None and finding.outcome is Outcome.FAILED
        spoken = finding is not None and finding.outcome not in _SILENT
        if field.name == "present":
            return spoken
        if finding is None or not spoken:
            return None
        if field.name == "outcome":
            return str(finding.outcome.value)
        if field.name in ("statistic", "p_value", "power"):
            return _clean(getattr(finding, field.name))
        return _clean(finding.parameters.get(field.name))

    def number(self, item: Number | Field) -> float | None:
        """A quantity as a number; None if absent or not a number."""
        if isinstance(item, Number):
            return item.value
        value = self.value(item)
        return value if isinstance(value, float) else None


def _clean(value: object) -> Value:
    """Numbers as finite floats, truth values and texts as they are, anything else as absent."""
    if value is None or isinstance(value, str | bool):
        return value
    if isinstance(value, np.bool_):
        return bool(value)
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError, OverflowError):
        return None
    return number if math.isfinite(number) else None


def _signal_values(signal: Signal) -> dict[str, Value]:
    orbit, error = signal.orbit, signal.orbit.semi_amplitude_err
    ratio = orbit.semi_amplitude / error if error else None
    # below the smallest double the probability reads 0; its logarithm stays finite
    fap = max(signal.false_alarm_probability, 1e-300)
    raw: dict[str, object] = {
        "period": orbit.period,
        "semi_amplitude": orbit.semi_amplitude,
        "amplitude_ratio": ratio,
        "eccentricity": orbit.eccentricity,
        "log_fap": math.log(fap) if math.isfinite(fap) else None,
        "white_gain": signal.white_gain,
        "activity_gain": signal.activity_gain,
        "found_by_white": any("white" in word for word in signal.found_by),
        "found_by_activity": any("activity" in word for word in signal.found_by),
    }
    return {name: _clean(value) for name, value in raw.items()}


def holds(node: Condition, scope: Scope) -> bool | None:
    """Whether a condition holds: True, False, or None where that is not known."""
    match node:
        case Compare(quantities, orders):
            return _compare(quantities, orders, scope)
        case Is(field, text, negated):
            value = scope.value(field)
            return (value == text) != negated if isinstance(value, str) else None
        case Truth(field):
            value = scope.value(field)
            return value if isinstance(value, bool) else None
        case Term(_, meaning):
            return holds(meaning, scope)
        case Not(item):
            inner = holds(item, scope)
            return None if inner is None else not inner
        case And(items):
            return _all([holds(i, scope) for i in items])
        case Or(items):
            answer = _all([None if (h := holds(i, scope)) is None else not h for i in items])
            return None if answer is None else not answer


def _all(answers: list[bool | None]) -> bool | None:
    if any(a is False for a in answers):
        return False
    return None if any(a is None for a in answers) else True


def _compare(
    quantities: tuple[Number | Field, ...], orders: tuple[str, ...], scope: Scope
) -> bool | None:
    numbers = [scope.number(q) for q in quantities]
    answers: list[bool | None] = []
    for order, left, right in zip(orders, numbers, numbers[1:], strict=False):
        known = left is not None and right is not None
        answers.append(_ORDERS[order](left, right) if known else None)  # type: ignore[arg-type]
    return _all(answers)
