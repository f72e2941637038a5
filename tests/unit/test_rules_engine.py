"""Grades: adding up, limits, what decided, what would change it, what comes next."""

from __future__ import annotations

import dataclasses
import math
import pickle
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from screener.core import Finding, Grade, Orbit, Outcome, RuleEffect, Signal
from screener.rules import RuleSet, grade, load_rules
from screener.rules.explain import check_template, render
from screener.rules.grammar import ConditionError, Field
from screener.rules.scope import Scope
from screener.rules.types import Ramp

_RANK = {Grade.LIKELY_STELLAR: 0, Grade.AMBIGUOUS: 1, Grade.PLANETARY: 2}
_TOY = """
[meta]
name = "toy"
version = "1"
[prior]
log_odds = -1.0
intercept = 0.0
[thresholds]
planetary_above = 2.0
likely_stellar_below = -2.0
[terms]
loud = "b.statistic > 5"
[[rule]]
id = "up"
sentence = "It grows."
ramp = { of = "a.statistic", from = 2.0, to = 8.0 }
weight = 4.0
[[rule]]
id = "up-more"
sentence = "It grows as well."
ramp = { of = "c.gain", from = 1.0, to = 100.0, scale = "log" }
weight = 2.0
[[rule]]
id = "down"
sentence = "It shrinks."
when = "b.present"
ramp = { of = "b.p_value", from = 0.1, to = 0.001, scale = "log" }
weight = -3.0
[[rule]]
id = "stop"
sentence = "It is loud."
when = "loud"
veto = "likely stellar"
cure = "it were less loud"
[[rule]]
id = "careful"
sentence = "No b."
unless = "b.present"
cap = "ambiguous"
cure = "b were measured"
[[rule]]
id = "mild"
sentence = "Nothing speaks for the star."
unless = "b.p_value < 0.05"
floor = "ambiguous"
[[advice]]
id = "last"
sentence = "Wait."
[[advice]]
id = "with-number"
grades = ["ambiguous"]
when = "a.statistic < 8"
priority = 5
sentence = "Bring {a.statistic:.1f} to eight at {period:.3g} d, and {half_period:.1f} d."
"""


@pytest.fixture(scope="module")
def toy(tmp_path_factory: pytest.TempPathFactory) -> RuleSet:
    path = tmp_path_factory.mktemp("toy") / "toy.toml"
    path.write_text(_TOY)
    return load_rules(path)


def _finding(test: str, outcome: Outcome = Outcome.INCONCLUSIVE, **values: object) -> Finding:
    known = {k: values.pop(k, None) for k in ("statistic", "p_value", "power")}
    return Finding(test, outcome, "", **known, parameters=values)  # type: ignore[arg-type]


def _signal(period: float = 12.0, k: float = 5.0, err: float = 0.5) -> Signal:
    return Signal(
        "S1", Orbit(period, k, semi_amplitude_err=err), 1e-6, ("white noise",), 30.0, 20.0
    )


def test_weights_add_up_to_the_score(toy: RuleSet) -> None:
    findings = [
        _finding("a", statistic=5.0),
        _finding("c", gain=10.0),
        _finding("b", p_value=0.01, statistic=0.0),
    ]
    result = grade(findings, toy)
    # by hand: -1 + 4 * 3/6 + 2 * ln(10)/ln(100) - 3 * ln(0.1/0.01)/ln(0.1/0.001)
    assert result.score == pytest.approx(-1.0 + 2.0 + 1.0 - 1.5)
    weights = [e.value for e in result.trace if e.effect == "weight"]
    assert sum(float(w) for w in weights) == pytest.approx(result.score)
    assert result.grade is Grade.AMBIGUOUS
    up = next(e for e in result.trace if e.rule == "up")
    assert up.findings == ("a.statistic = 5",)


def test_absent_failed_and_inapplicable_findings_count_for_nothing(toy: RuleSet) -> None:
    silent = grade([], toy)
    for outcome in (Outcome.FAILED, Outcome.NOT_APPLICABLE):
        findings = [
            _finding("a", outcome, statistic=8.0),
            _finding("b", outcome, p_value=0.001, statistic=9.0),
            _finding("c", outcome, gain=100.0),
        ]
        assert grade(findings, toy).score == silent.score == -1.0
        assert grade(findings, toy).grade is silent.grade is Grade.AMBIGUOUS


def test_limits(toy: RuleSet) -> None:
    high = [_finding("a", statistic=9.0)]
    capped = grade(high, toy)
    assert (capped.grade, capped.deciding_rules) == (Grade.AMBIGUOUS, ("careful",))
    assert capped.would_change == "It would become planetary if b were measured."
    free = grade([*high, _finding("b", p_value=0.5, statistic=0.0)], toy)
    assert (free.grade, free.deciding_rules) == (Grade.PLANETARY, ("up",))
    vetoed = grade([*high, _finding("b", p_value=0.5, statistic=6.0)], toy)
    assert (vetoed.grade, vetoed.deciding_rules) == (Grade.LIKELY_STELLAR, ("stop",))
    assert "it were less loud" in vetoed.would_change
    low = grade([_finding("b", p_value=0.001, statistic=0.0)], toy)
    assert (low.score, low.grade) == (-4.0, Grade.LIKELY_STELLAR)


def test_a_stellar_grade_needs_positive_evidence(toy: RuleSet) -> None:
    lowered = dataclasses.replace(toy, log_odds=-9.0)
    result = grade([_finding("a", statistic=1.0)], lowered)
    assert result.grade is Grade.AMBIGUOUS
    assert result.deciding_rules == ("mild",)


def test_grade_without_each_rule_is_the_grade_without_it(toy: RuleSet) -> None:
    findings = [
        _finding("a", statistic=8.0),
        _finding("c", gain=100.0),
        _finding("b", p_value=0.04, statistic=0.0),
    ]
    result = grade(findings, toy)
    for effect in result.trace[1:]:
        rest = dataclasses.replace(toy, rules=tuple(r for r in toy.rules if r.id != effect.rule))
        assert effect.grade_without is grade(findings, rest).grade
    assert all(
        (e.grade_without is not result.grade) == (e.rule in result.deciding_rules)
        for e in result.trace[1:]
    )


def test_without_a_single_decider_the_heaviest_are_named(toy: RuleSet) -> None:
    sure = dataclasses.replace(toy, log_odds=3.0)
    findings = [
        _finding("a", statistic=8.0),
        _finding("c", gain=100.0),
        _finding("b", p_value=0.5, statistic=0.0),
    ]
    assert grade(findings, sure).deciding_rules == ("up", "up-more")


def test_the_change_that_is_named_does_change_the_grade(toy: RuleSet) -> None:
    before = grade([_finding("a", statistic=5.0), _finding("b", p_value=0.5, statistic=0.0)], toy)
    assert before.grade is Grade.AMBIGUOUS
    said = before.would_change
    assert said.startswith("It would become planetary if a.statistic rose from 5 to ")
    value = float(said.split(" to ")[1].split()[0])
    after = [_finding("a", statistic=value), _finding("b", p_value=0.5, statistic=0.0)]
    assert grade(after, toy).grade is Grade.PLANETARY
    after = [_finding("a", statistic=value - 0.05), _finding("b", p_value=0.5, statistic=0.0)]
    assert grade(after, toy).grade is Grade.AMBIGUOUS


def test_advice_fits_the_case(toy: RuleSet) -> None:
    findings = [_finding("a", statistic=5.0), _finding("b", p_value=0.5, statistic=0.0)]
    signal = _signal(period=12.0)
    assert grade(findings, toy, signal).next_step == "Bring 5.0 to eight at 12 d, and 6.0 d."
    # a placeholder without a value passes the turn to the next advice
    assert grade(findings, toy).next_step == "Wait."


def test_templates_are_checked_and_filled_without_format() -> None:
    check_template("{period:.1f} and {a.b} and {half_cycle_years:.2g}")
    for bad in ("{perod}", "{a.b!r}", "{a.b.__class__}", "{0}", "{}", "{period:>999}", "{a.b", "}"):
        with pytest.raises(ConditionError):
            check_template(bad)
    assert render("{a.word}", Scope([_finding("a", word="{period}")])) == "{period}"


@pytest.mark.parametrize("log", [False, True])
@pytest.mark.parametrize(("start", "stop"), [(1.0, 10.0), (10.0, 1.0)])
def test_ramps(start: float, stop: float, log: bool) -> None:
    ramp = Ramp(Field("a", "x"), start, stop, log)
    assert ramp.share(start) == 0.0
    assert ramp.share(stop) == 1.0
    low, high = (0.0, 1.0) if start < stop else (1.0, 0.0)
    assert ramp.share(-5.0) == low
    assert ramp.share(1e9) == high
    middle = math.sqrt(10.0) if log else 5.5
    assert ramp.share(middle) == pytest.approx(0.5)
    assert ramp.at(0.5) == pytest.approx(middle)


def test_prior_classes_move_by_their_occurrence(tmp_path: Path) -> None:
    overlay = tmp_path / "mine.toml"
    overlay.write_text(
        '[[prior.class]]\nid = "hot-jupiter"\nsentence = "Hot."\n'
        'when = "signal.period < 10 and signal.semi_amplitude > 30"\n'
        "occurrence = 0.002\ncalibrated = 0.01\n"
    )
    rules, defaults = load_rules(None, overlay), load_rules()
    hot, cool = _signal(4.0, 60.0), _signal(40.0, 60.0)
    assert grade([], rules, cool).score == grade([], defaults, cool).score
    moved = grade([], rules, hot).score - grade([], defaults, hot).score
    assert moved == pytest.approx(math.log(0.2))
    assert any(e.rule == "hot-jupiter" for e in grade([], rules, hot).trace)


def test_where_nothing_speaks_the_prior_decides(toy: RuleSet) -> None:
    low = dataclasses.replace(toy, log_odds=-9.0)
    result = grade([_finding("b", p_value=0.04, statistic=0.0)], low)
    assert result.grade is Grade.LIKELY_STELLAR
    assert result.deciding_rules == ("down",)
    bare = dataclasses.replace(low, rules=tuple(r for r in low.rules if r.effect == "cap"))
    assert grade([], bare).deciding_rules == ("prior",)


def test_rule_sets_travel_between_processes(toy: RuleSet) -> None:
    again = pickle.loads(pickle.dumps(toy))
    assert again == toy
    assert again.sha256 == toy.sha256


# properties of the default rules, on any findings at all

_DEFAULT = load_rules()
_NAMES = sorted(
    {
        (f.test, f.name)
        for r in _DEFAULT.rules
        for f in r.fields
        if f.test != "signal" and f.name not in ("outcome", "present", "failed")
    }
)
_INDICATOR_TESTS = (
    "indicator_power",
    "correlation",
    "cycle",
    "line_shape",
    "wavelength",
    "rotation",
)
_value = st.one_of(
    st.none(), st.floats(-10, 60, allow_nan=False), st.sampled_from([0.0, 1.0, 3.0, 0.001])
)


@st.composite
def _cases(draw: st.DrawFn) -> tuple[list[Finding], Signal]:
    findings = []
    good = draw(st.booleans())  # half of them lean to a planet, or few would be planetary
    for test in _DEFAULT.tests:
        if test == "signal":
            continue
        outcomes = [Outcome.SUPPORTS_PLANET, *Outcome] if good else list(Outcome)
        values = {n: draw(_value) for t, n in _NAMES if t == test}
        if good and test in ("joint_amplitude", "activity_gain", "prediction", "dominance"):
            values = {n: draw(st.floats(8.0, 60.0)) for n in values}
        if good and test == "sampling":
            values = {"n_nights": 90.0, "largest_phase_gap": 0.1, "period_over_baseline": 0.1}
        findings.append(_finding(test, draw(st.sampled_from(outcomes)), **values))
    signal = _signal(draw(st.sampled_from([1.5, 20.0, 300.0, 900.0])), draw(st.floats(1.0, 60.0)))
    return findings, signal


def _without(findings: list[Finding], tests: tuple[str, ...]) -> list[Finding]:
    gone = Outcome.NOT_APPLICABLE
    return [Finding(f.test, gone, "") if f.test in tests else f for f in findings]


@given(_cases())
@settings(max_examples=120, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_taking_the_indicators_away_makes_no_planet(case: tuple[list[Finding], Signal]) -> None:
    findings, signal = case
    before = grade(findings, _DEFAULT, signal)
    after = grade(_without(findings, _INDICATOR_TESTS), _DEFAULT, signal)
    if after.grade is Grade.PLANETARY:
        assert before.grade is Grade.PLANETARY


@given(_cases(), st.sampled_from(_DEFAULT.tests))
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_where_rules_only_speak_for_planets_less_evidence_never_helps(
    case: tuple[list[Finding], Signal], test: str
) -> None:
    # a monotone setup: weights towards planet, and caps that fall by evidence
    findings, signal = case
    rules = tuple(
        r
        for r in _DEFAULT.rules
        if (r.effect == "weight" and r.weight > 0) or (r.effect == "cap" and r.when is None)
    )
    monotone = dataclasses.replace(_DEFAULT, rules=rules)
    full = grade(findings, monotone, signal)
    less = grade(_without(findings, (test,)), monotone, signal)
    assert _RANK[less.grade] <= _RANK[full.grade]
    assert less.score <= full.score + 1e-12


@given(_cases(), st.randoms(use_true_random=False))
@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_the_order_of_findings_does_not_matter(
    case: tuple[list[Finding], Signal], random: object
) -> None:
    findings, signal = case
    shuffled = list(findings)
    random.shuffle(shuffled)  # type: ignore[attr-defined]
    assert grade(shuffled, _DEFAULT, signal) == grade(findings, _DEFAULT, signal)


@given(_cases())
@settings(max_examples=50, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_every_grade_comes_with_its_reasons(case: tuple[list[Finding], Signal]) -> None:
    findings, signal = case
    result = grade(findings, _DEFAULT, signal)
    ids = {e.rule for e in result.trace}
    assert result.deciding_rules
    assert set(result.deciding_rules) <= ids
    assert result.next_step.endswith(".")
    assert "{" not in result.next_step
    assert result.would_change.endswith(".")
    total = sum(e.value for e in result.trace if isinstance(e.value, float))
    assert total == pytest.approx(result.score)
    assert all(isinstance(e, RuleEffect) and e.grade_without is not None for e in result.trace)


def _clear_planet() -> list[Finding]:
    good = Outcome.SUPPORTS_PLANET
    return [
        _finding("joint_amplitude", good, statistic=20.0, kept_share=0.95),
        _finding("activity_gain", good, statistic=60.0, gain_joint=70.0, gain_white=90.0),
        _finding("prediction", good, statistic=25.0),
        _finding("dominance", good, statistic=20.0),
        _finding("rotation", good, statistic=-3.0, nearest_harmonic=1, closeness_relative=0.6),
        _finding("indicator_power", good, statistic=-4.0, p_value=0.6, power=0.95),
        _finding("correlation", good, statistic=0.0, drop=0.0, p_value=0.5),
        _finding("persistence", good, statistic=1.0),
        _finding("sampling", n_nights=100, largest_phase_gap=0.05, period_over_baseline=0.02),
    ]


def test_the_clear_cases_come_out_clearly() -> None:
    assert grade(_clear_planet(), _DEFAULT, _signal()).grade is Grade.PLANETARY
    star = Outcome.SUPPORTS_STAR
    spot = [
        _finding("joint_amplitude", star, statistic=1.5, kept_share=0.2),
        _finding("activity_gain", star, statistic=1.0, gain_joint=1.0, gain_white=30.0),
        _finding("prediction", star, statistic=-4.0),
        _finding("rotation", star, statistic=3.0, nearest_harmonic=1, closeness_relative=0.02),
        _finding("indicator_power", star, statistic=8.0, p_value=1e-5, power=0.9),
        _finding("sampling", n_nights=100, largest_phase_gap=0.05, period_over_baseline=0.02),
    ]
    result = grade(spot, _DEFAULT, _signal())
    assert result.grade is Grade.LIKELY_STELLAR
    assert "photometry" in result.next_step


@pytest.mark.parametrize(
    ("rule", "change"),
    [
        ("too-few-nights", {"sampling": {"n_nights": 15}}),
        ("phase-gap", {"sampling": {"largest_phase_gap": 0.5}}),
        ("longer-than-the-data", {"sampling": {"period_over_baseline": 1.2}}),
        ("below-noise-floor", {"sampling": {"noise_floor": 6.0}}),
        ("no-indicators", {"indicator_power": None}),
        ("no-activity-model", {"joint_amplitude": None}),
        ("amplitude-lost", {"joint_amplitude": {"statistic": 2.5}}),
    ],
)
def test_caution_caps_a_clear_planet_and_says_so(
    rule: str, change: dict[str, dict[str, float] | None]
) -> None:
    findings = []
    for finding in _clear_planet():
        values = change.get(finding.test, {})
        if values is None:
            continue
        known = {k: v for k, v in values.items() if k == "statistic"}
        parameters = {**finding.parameters, **values}
        findings.append(dataclasses.replace(finding, parameters=parameters, **known))
    strong = dataclasses.replace(_DEFAULT, log_odds=20.0)
    result = grade(findings, strong, _signal())
    assert result.grade is Grade.AMBIGUOUS
    assert rule in result.deciding_rules
    assert result.would_change.startswith("It would become planetary if ")


def test_unknown_rotation_and_mute_indicators_cap() -> None:
    weak = [
        dataclasses.replace(f, statistic=7.0) if f.test == "joint_amplitude" else f
        for f in _clear_planet()
    ]
    sure = dataclasses.replace(_DEFAULT, log_odds=20.0)
    unknown = grade(_without(weak, ("rotation",)), sure, _signal())
    assert unknown.grade is Grade.AMBIGUOUS
    assert unknown.deciding_rules == ("rotation-unknown",)
    mute = [
        dataclasses.replace(f, power=0.1) if f.test == "indicator_power" else f
        for f in _without(weak, ("persistence",))
    ]
    result = grade(mute, sure, _signal())
    assert result.grade is Grade.AMBIGUOUS
    assert result.deciding_rules == ("indicators-without-power",)
