"""Rule files: what they may say, faults with line, key and suggestion, overlays, hashes."""

from __future__ import annotations

import importlib
import inspect
import pkgutil
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner

import screener.evidence
from screener.cli.rules import command, known_tests
from screener.core import InputFaults
from screener.rules import DEFAULT_FILE, RULE_KEYS, grade, load_rules
from screener.rules.toml_lines import Source

# made by the pipeline from several signals, not by a module of its own
_FROM_ELSEWHERE = {"signal", "stability", "own_null"}


def _faults(tmp_path: Path, text: str, **options: object) -> list[str]:
    path = tmp_path / "mine.toml"
    path.write_text(text)
    with pytest.raises(InputFaults) as caught:
        load_rules(None, path, **options)  # type: ignore[arg-type]
    assert all(f.file == str(path) for f in caught.value.faults)
    return [str(f) for f in caught.value.faults]


def _rule(body: str, id: str = "mine") -> str:
    return f'[[rule]]\nid = "{id}"\nsentence = "It is so."\n{body}\n'


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[meat]\nname = 'x'", ["line 1", "key 'meat'", "Did you mean 'meta'?"]),
        ("[prior]\nlog_odd = 2", ["line 2", "key 'log_odd'", "Did you mean 'log_odds'?"]),
        ("[prior]\nlog_odds = '2'", ["line 2", "log_odds", "number"]),
        ("[thresholds]\n\nplanetary_above = nan", ["line 3", "planetary_above", "number"]),
        ("disable = ['too-few-night']", ["line 1", "Did you mean 'too-few-nights'?"]),
        (_rule("wieght = 2\nwhen = 'a.present'"), ["line 4", "weight", "exactly one"]),
        (_rule("weight = 1\ncap = 'ambiguous'"), ["2 effects"]),
        (_rule("when = 'a.present'"), ["no effect"]),
        (_rule("weight = 1\nwhen = 'a.present'\nwhenn = 'b'"), ["line 6", "Did you mean 'when'?"]),
        (_rule("weight = 1\nwhen = 'a.presnt <'"), ["line 5", "'when'", "column 11"]),
        (_rule("weight = 99\nwhen = 'a.present'"), ["line 4", "'weight'", "-50 to 50"]),
        (_rule("weight = true\nwhen = 'a.present'"), ["line 4", "'weight'"]),
        (_rule("weight = 1"), ["always counts"]),
        (_rule("weight = 1\nramp = 3"), ["line 5", "'ramp'", "must be a table"]),
        (
            _rule("weight = 1\nramp = { of = 'a.statistic', from = 1, too = 2 }"),
            ["Did you mean 'to'"],
        ),
        (_rule("weight = 1\nramp = { of = 'a', from = 1, to = 2 }"), ["line 5", "no quantity"]),
        (_rule("weight = 1\nramp = { of = 'a.b', from = 1, to = 1 }"), ["must differ"]),
        (
            _rule("weight = 1\nramp = { of = 'a.b', from = 0, to = 1, scale = 'log' }"),
            ["positive ends"],
        ),
        (
            _rule("weight = 1\nramp = { of = 'a.b', from = 1, to = 2, scale = 'lin' }"),
            ["Did you mean 'linear'?"],
        ),
        (
            _rule("veto = 'likely stelar'\nwhen = 'a.present'"),
            ["line 4", 'veto = "likely stellar"'],
        ),
        (_rule("veto = 'likely stellar'\nwhen = 'not a.present'"), ["positive evidence"]),
        (_rule("veto = 'likely stellar'\nunless = 'a.present'"), ["positive evidence"]),
        (_rule("cap = 'planetary'\nwhen = 'a.present'"), ["what a cap can say"]),
        (_rule("cap = 'ambiguous'\nwhen = 'a.present'\nfitted = true"), ["Only weights"]),
        (_rule("weight = 1\nwhen = 'a.present'\nfitted = true"), ["needs a direction"]),
        (
            _rule("weight = 1\nwhen = 'a.present'\ndirection = 'star'"),
            ["other sign than its direction"],
        ),
        (
            _rule("weight = 1\nwhen = 'a.present'\ndirection = 'plant'"),
            ["Did you mean 'planet'?"],
        ),
        (_rule("weight = 1\nwhen = 'signal.perod < 3'"), ["Did you mean 'period'?"]),
        (_rule("weight = 1\nwhen = 'a.present'", id="Bad Id"), ["line 2", "cannot be an id"]),
        ("[[rule]]\nsentence = 'x'\nweight = 1", ["line 1", "'id'", "missing"]),
        (2 * _rule("weight = 1\nwhen = 'a.present'"), ["line 7", "stands twice", "line 1"]),
        ("[[rule]]\nid = 'x'\nweight = 1\nwhen = 'a.present'", ["'sentence'", "missing"]),
        ("rule = 3", ["line 1", "array of tables"]),
        ("[terms]\nmine = 'stron'", ["line 2", "term 'mine'", "Did you mean 'strong'?"]),
        (
            "[[advice]]\nid = 'x'\nsentence = 'At {perio} d.'",
            ["line 3", "'sentence'", "Did you mean 'period'?"],
        ),
        (
            "[[advice]]\nid = 'x'\nsentence = 'Go.'\ngrades = ['planetry']",
            ["line 4", "Did you mean 'planetary'?"],
        ),
        ("disable = ['set-aside']", ["no advice fits"]),
        (
            "[[prior.class]]\nid = 'x'\nsentence = 'y'\nwhen = 'a.present'\noccurrence = 0\n"
            "calibrated = 0.1",
            ["line 5", "'occurrence'"],
        ),
        ("[thresholds]\nplanetary_above = -5", ["Part the two"]),
        ("[meta\n", ["not valid TOML", "line 1"]),
        ("x = 1\nx = 2\n\n", ["not valid TOML"]),
    ],
)
def test_faults_name_line_key_and_cure(tmp_path: Path, text: str, words: list[str]) -> None:
    said = "\n".join(_faults(tmp_path, text))
    for word in words:
        assert word in said


def test_all_faults_come_in_one_go(tmp_path: Path) -> None:
    text = (
        "[prior]\nlog_odds = 'x'\n"
        + _rule("weight = 1\nwhen = 'a.present and'")
        + _rule("cap = 'no'", "other")
    )
    assert len(_faults(tmp_path, text)) == 3


def test_unknown_tests_are_found_where_the_tests_are_known(tmp_path: Path) -> None:
    text = _rule("weight = 1\nwhen = 'rotatio.present'\n")
    assert load_rules(None, _write(tmp_path, text)).rule("mine").tests == ("rotatio",)
    (fault,) = _faults(tmp_path, text, known_tests=known_tests())
    assert "line 5" in fault
    assert "Did you mean 'rotation'?" in fault


def _write(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "mine.toml"
    path.write_text(text)
    return path


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda p: None, "no such file"),
        (lambda p: p.mkdir(), "not a regular file"),
        (lambda p: p.write_bytes(b"\xff\xfe"), "not UTF-8"),
        (lambda p: p.write_text("x = " + "[" * 3000), "mine.toml"),
    ],
)
def test_files_that_cannot_be_read(tmp_path: Path, make: object, words: str) -> None:
    path = tmp_path / "mine.toml"
    make(path)  # type: ignore[operator]
    with pytest.raises(InputFaults, match=words):
        load_rules(None, path)


def test_overlay_replaces_adds_and_takes_away(tmp_path: Path) -> None:
    before = load_rules()
    text = (
        "disable = ['phase-gap', 'transit-search']\n"
        "[meta]\nname = 'mine'\nversion = '7'\n"
        "[prior]\nlog_odds = -2.5\n"
        "[thresholds]\nplanetary_above = 4.5\n"
        "[terms]\nstrong = 'joint_amplitude.statistic >= 99'\n"
        + _rule("weight = 0.5\nwhen = 'strong'", "mine")
        + _rule("cap = 'ambiguous'\nwhen = 'sampling.n_nights < 40'", "too-few-nights")
    )
    after = load_rules(None, _write(tmp_path, text))
    ids = {r.id for r in after.rules}
    assert ids == {r.id for r in before.rules} - {"phase-gap"} | {"mine"}
    assert after.rule("too-few-nights").sentence == "It is so."
    assert "transit-search" not in {a.id for a in after.advice}
    assert after.log_odds == -2.5
    assert after.intercept == before.intercept
    assert after.thresholds.planetary_above == 4.5
    assert after.thresholds.likely_stellar_below == before.thresholds.likely_stellar_below
    # a term that is replaced is replaced in the default rules as well
    assert "99" in repr(after.rule("indicators-without-power").unless)
    assert after.label == f"{before.label} with mine 7"
    assert after.sha256 != before.sha256


def test_the_hash_covers_what_counts_and_nothing_else(tmp_path: Path) -> None:
    text = DEFAULT_FILE.read_text()
    weights = DEFAULT_FILE.with_name("weights.toml").read_text()
    (tmp_path / "weights.toml").write_text(weights)
    reference = load_rules().sha256

    def changed(old: str, new: str) -> str:
        path = tmp_path / "rules.toml"
        assert old in text
        path.write_text(text.replace(old, new, 1))
        return load_rules(path).sha256

    assert changed("[meta]", "# a remark\n[meta]") == reference
    assert changed("[terms]", "\n\n[terms]") == reference
    assert changed("sampling.n_nights < 20", "sampling.n_nights < 21") != reference
    assert changed("joint_amplitude.statistic >= 8", "joint_amplitude.statistic >= 9") != reference
    assert changed("There are too few", "There are far too few") != reference
    assert changed("occurrence = 0.01", "occurrence = 0.02") != reference


def test_fitted_weights_come_from_their_file(tmp_path: Path) -> None:
    base = tmp_path / "rules.toml"
    base.write_text(DEFAULT_FILE.read_text())
    file = tmp_path / "weights.toml"
    file.write_text(
        '[fit]\nlabel = "fit-1"\n[prior]\nintercept = -3.5\n'
        "[thresholds]\nplanetary_above = 2.5\n[weights]\npredicts = 0.25\n"
    )
    rules = load_rules(base)
    assert rules.rule("predicts").weight == 0.25
    assert rules.intercept == -3.5
    assert rules.thresholds.planetary_above == 2.5
    assert rules.version.endswith("+fit-1")
    assert load_rules(base, use_weights=False).rule("predicts").weight != 0.25
    mine = _write(tmp_path, _rule("weight = 0.75\nwhen = 'prediction.present'", "predicts"))
    assert load_rules(base, mine).rule("predicts").weight == 0.75
    file.write_text("[weights]\npredict = 1\n")
    with pytest.raises(InputFaults, match="Did you mean 'predicts'"):
        load_rules(base)
    file.write_text("[weights]\npredicts = -1.0\n")
    with pytest.raises(InputFaults, match="other sign"):
        load_rules(base)


def test_the_committed_weights_belong_to_the_committed_rules() -> None:
    content = tomllib.loads(DEFAULT_FILE.with_name("weights.toml").read_text())
    design = content.get("fit", {}).get("design_sha256")
    if design is not None:
        assert design == load_rules().design_sha256, "run the calibration again"


def test_every_test_of_the_default_rules_exists() -> None:
    found = set()
    for module in pkgutil.iter_modules(screener.evidence.__path__):
        name = getattr(importlib.import_module(f"screener.evidence.{module.name}"), "ID", None)
        if name is not None:
            found.add(name)
    unknown = set(load_rules().tests) - found - _FROM_ELSEWHERE
    assert not unknown


def test_every_quantity_of_the_default_rules_is_reported_by_its_test() -> None:
    """A rule on a parameter that no finding has would never count, and nobody would notice."""
    sources = {}
    for module in pkgutil.iter_modules(screener.evidence.__path__):
        loaded = importlib.import_module(f"screener.evidence.{module.name}")
        if hasattr(loaded, "ID"):
            sources[loaded.ID] = inspect.getsource(loaded)
    of_any_finding = {"statistic", "p_value", "power", "outcome", "present", "failed"}
    missing = [
        f"{rule.id}: {field}"
        for rule in load_rules().rules
        for field in rule.fields
        if field.test in sources
        and field.name not in of_any_finding
        and f'"{field.name}"' not in sources[field.test]
    ]
    assert not missing


def test_every_key_is_documented_and_used_by_the_defaults() -> None:
    content = tomllib.loads(DEFAULT_FILE.read_text())
    assert set(content) <= {"meta", "prior", "thresholds", "terms", "rule", "advice"}
    used = {
        "meta": set(content["meta"]),
        "prior": set(content["prior"]),
        "thresholds": set(content["thresholds"]),
        "rule": {k for r in content["rule"] for k in r},
        "ramp": {k for r in content["rule"] for k in r.get("ramp", {})},
        "advice": {k for a in content["advice"] for k in a},
        "prior.class": {k for c in content["prior"]["class"] for k in c},
    }
    for section, keys in used.items():
        assert keys <= set(RULE_KEYS[section])
    assert all(text for keys in RULE_KEYS.values() for text in keys.values())


def test_lines_of_keys() -> None:
    source = Source(
        "x",
        'a = 1\n[t]\nb = """\nc = 2\n[no]\n"""\nlist = [\n  1,\n  "[x]",\n]\nd = 2 # [z]\n'
        "[[r]]\nk = 1\n\n[[r]]\n# k = 2\nk = 3\nin = { deep = 1 }\n[[r.s]]\nq = 1\n",
    )
    places = {
        ("a",): 1, ("t",): 2, ("t", "b"): 3, ("t", "list"): 7, ("t", "d"): 11, ("r", 0): 12,
        ("r", 0, "k"): 13, ("r", 1): 15, ("r", 1, "k"): 17, ("r", 1, "in", "deep"): 18,
        ("r", 1, "s", 0, "q"): 20, ("r", 1, "nothing"): 15, ("nowhere",): 1,
    }  # fmt: skip
    for path, line in places.items():
        assert source.line(path) == line


def test_command_lists_explains_and_checks(tmp_path: Path) -> None:
    run = CliRunner().invoke
    listed = run(command, ["list"])
    assert listed.exit_code == 0
    rules = load_rules()
    for rule in rules.rules:
        assert rule.id in listed.output
        shown = run(command, ["explain", rule.id])
        assert rule.sentence in shown.output
    keys = run(command, ["explain", "keys"]).output
    assert all(key in keys for section in RULE_KEYS.values() for key in section)
    assert "recursive" not in run(command, ["explain", "grammar"]).output
    assert "conjunction" in run(command, ["explain", "grammar"]).output
    good = _write(tmp_path, "disable = ['phase-gap']")
    checked = run(command, ["check", str(good)])
    assert checked.exit_code == 0
    assert "takes away phase-gap" in checked.output
    assert run(command, ["check", str(DEFAULT_FILE), "--whole"]).exit_code == 0
    for arguments in (["explain", "phase-gpa"], ["check", str(tmp_path / "none.toml")]):
        assert isinstance(run(command, arguments).exception, Exception)
    assert '"sha256"' in run(command, ["list", "--json"]).output


def test_default_rules_grade_today() -> None:
    assert grade([], load_rules()).next_step
