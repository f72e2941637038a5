"""Conditions: reading, writing, three-valued truth, and that nothing in them is ever run."""

from __future__ import annotations

import math
import string

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from screener.core import Finding, Orbit, Outcome, Signal
from screener.rules.grammar import (
    And,
    Compare,
    Condition,
    ConditionError,
    Field,
    Is,
    Not,
    Number,
    Or,
    Term,
    Truth,
    fields_of,
    parse,
    write,
)
from screener.rules.scope import Scope, holds

_ORDERS = ("<", "<=", ">", ">=", "==", "!=")
_tests = st.sampled_from(["rotation", "cycle", "indicator_power", "_x9", "android", "nothing"])
_numbers = st.floats(allow_nan=False, allow_infinity=False).map(Number)
_number_fields = st.builds(Field, _tests, st.sampled_from(["statistic", "p_value", "power", "k1"]))
_compare = st.one_of(
    st.builds(
        lambda a, o, b: Compare((a, b), (o,)), _number_fields, st.sampled_from(_ORDERS), _numbers
    ),
    st.builds(
        lambda a, o, b, p, c: Compare((a, b, c), (o, p)),
        _numbers, st.sampled_from(_ORDERS), _number_fields, st.sampled_from(_ORDERS), _numbers,
    ),
)  # fmt: skip
_is = st.builds(
    Is,
    st.builds(Field, _tests, st.just("outcome")),
    st.sampled_from(["supports planet", "supports star", "inconclusive"]),
    st.booleans(),
)
_truth = st.builds(Truth, st.builds(Field, _tests, st.sampled_from(["present", "failed", "flag"])))
_TERM = Term("known", Truth(Field("cycle", "present")))


_conditions = st.recursive(
    st.one_of(_compare, _is, _truth, st.just(_TERM)),
    lambda inner: st.one_of(
        st.builds(Not, inner),
        st.lists(inner, min_size=2, max_size=3).map(lambda i: And(tuple(i))),
        st.lists(inner, min_size=2, max_size=3).map(lambda i: Or(tuple(i))),
    ),
    max_leaves=12,
)


@given(_conditions)
def test_what_is_written_is_read_back(tree: Condition) -> None:
    again = parse(write(tree), {"known": _TERM.meaning})
    assert again == tree


@given(_conditions)
def test_fields_are_those_that_stand_in_the_text(tree: Condition) -> None:
    text = write(tree)
    for field in fields_of(tree):
        assert str(field) in text or field == Field("cycle", "present")


def _scope(**values: object) -> Scope:
    return Scope(
        [
            Finding("a", Outcome.SUPPORTS_PLANET, "", 2.0, 0.03, None, dict(values)),
            Finding("f", Outcome.FAILED, "", 2.0, 0.03, 1.0, {"x": 1.0}),
            Finding("n", Outcome.NOT_APPLICABLE, "", 2.0, 0.03, 1.0, {"x": 1.0}),
        ]
    )


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a.statistic < 3", True),
        ("1 < a.statistic <= 2", True),
        ("1 < a.statistic < 2", False),
        ("a.p_value < 0.01", False),
        ("a.power < 0.5", None),
        ("not (a.power < 0.5)", None),
        ("not not a.power < 0.5", None),
        ("a.power < 0.5 or a.statistic == 2", True),
        ("a.power < 0.5 or a.statistic != 2", None),
        ("a.power < 0.5 and a.statistic != 2", False),
        ("a.power < 0.5 and a.statistic == 2", None),
        ('a.outcome is "supports planet"', True),
        ('a.outcome is not "supports planet"', False),
        ("a.outcome is 'supports star'", False),
        ('f.outcome is "supports planet"', None),
        ('not n.outcome is "supports star"', None),
        ("f.statistic < 3", None),
        ("f.x < 3", None),
        ("n.x < 3", None),
        ("missing.x < 3", None),
        ("a.present and not f.present and not n.present and not missing.present", True),
        ("f.failed and not n.failed and not a.failed and not missing.failed", True),
        ("a.flag", True),
        ("a.flag < 2", None),
        ("a.word < 2", None),
        ('a.word is "grey"', True),
        ('a.statistic < a.limit and not a.word is "x"', True),
        ("a.nan < 1 or a.nan >= 1", None),
        ("a.inf > 1", None),
        ("a.count == 3", True),
        ("a.statistic < 3 and a.p_value < 0.01 or a.flag", True),
        ("a.statistic < 3 and (a.p_value < 0.01 or not a.flag)", False),
    ],
)
def test_truth_has_three_values(text: str, expected: bool | None) -> None:
    scope = _scope(
        flag=np.bool_(True), word="grey", limit=3, nan=math.nan, inf=math.inf, count=np.int64(3)
    )
    assert holds(parse(text), scope) is expected


@pytest.mark.parametrize(
    ("text", "column", "words"),
    [
        ("", 1, "the end"),
        ("a.statistic <", 14, "the end"),
        ("a.statistic < 1 and", 20, "the end"),
        ("a.statistic = 1", 13, "Write '=='"),
        ("a.statistic < 1 && b.present", 17, "Write 'and'"),
        ("a.outcome", 1, "by itself"),
        ("a.statistic", 1, "by itself"),
        ('a.outcome is "supports planets"', 14, "Did you mean 'supports planet'"),
        ('a.outcome is "failed"', 14, "a.failed"),
        ('a.outcome is "not applicable"', 14, "not a.present"),
        ('a.statistic is "x"', 1, "holds no text"),
        ('a.outcome == "supports star"', 1, 'asked with "is"'),
        ('a.word == "grey"', 11, 'Write: is "grey"'),
        ("a.outcome < 3", 1, "not a number"),
        ("(a.present", 11, "expected ')'"),
        ("a.present)", 10, "unexpected ')'"),
        ("a.present b.present", 11, "after a whole condition"),
        ("1 < 2", 1, "numbers only"),
        ("knwon", 1, "Did you mean 'known'"),
        ("known < 3", 1, "not a number"),
        ("a.b.c < 3", 1, "no meaning"),
        ('a.word is "open', 11, "no end"),
        ("1 < a.x < 2 < 3", 13, "too long"),
        ("not", 4, "the end"),
        ("3abc < a.x", 1, "no meaning"),
    ],
)
def test_faults_say_where_and_how(text: str, column: int, words: str) -> None:
    with pytest.raises(ConditionError) as caught:
        parse(text, {"known": _TERM.meaning})
    assert words in str(caught.value)
    assert caught.value.column == column


@pytest.mark.parametrize(
    "text",
    [
        "__import__('os').system('touch /tmp/x')",
        "a.__class__.__mro__",
        "exec('1')",
        "lambda: 1",
        "[x for x in a.y]",
        "a.x < 1; import os",
        "f'{a}'",
        "a.x < 1 if True else 2",
        "{{7*7}}",
        "${HOME}",
        "a['x'] < 1",
        "a.x < 10 ** 9",
        "a.x\x00< 1",
        "ａ.x < 1",
    ],
)
def test_code_is_refused(text: str) -> None:
    with pytest.raises(ConditionError):
        parse(text)


def test_dunder_names_reach_no_attribute() -> None:
    # a field is looked up among findings and parameters by name, never by getattr
    for name in ("__class__", "__dict__", "test", "sentence", "references", "parameters"):
        assert _scope().value(Field("a", name)) is None


def test_size_and_depth_are_limited() -> None:
    with pytest.raises(ConditionError, match="nested deeper"):
        parse("(" * 500 + "a.present" + ")" * 500)
    with pytest.raises(ConditionError, match="nested deeper"):
        parse("not " * 500 + "a.present")
    with pytest.raises(ConditionError, match="characters"):
        parse("a.present or " * 1000 + "a.present")


@given(st.text(alphabet=string.printable, max_size=60))
@settings(max_examples=300)
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        tree = parse(text)
    except ConditionError as error:
        assert 1 <= error.column <= len(text) + 1
    else:
        assert parse(write(tree)) == tree


def test_signal_is_seen_under_its_name() -> None:
    orbit = Orbit(10.0, 5.0, 0.1, semi_amplitude_err=0.5)
    signal = Signal("S1", orbit, 0.0, ("white noise",), 20.0, 9.0)
    scope = Scope([], signal)
    assert holds(parse("signal.amplitude_ratio == 10 and signal.found_by_white"), scope)
    assert holds(parse("signal.log_fap < -600 and not signal.found_by_activity"), scope)
    assert holds(parse("signal.period < 20"), Scope([])) is None
    assert holds(parse("signal.present"), Scope([])) is False


def test_two_findings_of_one_test_are_a_defect() -> None:
    finding = Finding("a", Outcome.INCONCLUSIVE, "")
    with pytest.raises(ValueError, match="more than one"):
        Scope([finding, finding])
    with pytest.raises(ValueError, match="signal"):
        Scope([Finding("signal", Outcome.INCONCLUSIVE, "")])
