"""``decide``, ``ledger`` and ``reproduce`` as they are typed; exports; the comparison."""

from __future__ import annotations

import csv
import json
import re
import shutil
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from astropy.table import Table

from screener import __version__
from screener.cli import main
from screener.core import Grade, Screening
from screener.ledger import compare
from screener.report.verdict_json import read_verdict, verdict_to_dict, write_verdict
from screener.rules import load_rules
from tests.ledger_sample import STARS, decide, make_run
from tests.tables import columns, write_csv
from tests.unit.report_sample import sample

Run = Callable[..., tuple[int, str, str]]
EVIL = '=HYPERLINK("x")|<script>alert(1)</script>\x1b[31m{{7*7}}'


@pytest.fixture
def screener(capsys: pytest.CaptureFixture[str]) -> Run:
    def run(*arguments: object) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as stop:
            main([str(a) for a in arguments])
        out, err = capsys.readouterr()
        assert "Traceback" not in err
        return int(stop.value.code or 0), out, err

    return run


def test_decide_show_verify_from_the_command_line(tmp_path: Path, screener: Run):
    run = make_run(tmp_path)
    common = ("decide", run, "--star", STARS[0], "--by", "A. Kestrel", "--note", "seen twice")
    code, out, _ = screener(*common, "--signal", "s1", "--decision", "announce")
    assert code == 0
    assert out.startswith("entry 1: tern-14 S1 announce, ")
    hash = out.split()[-1]
    code, _, err = screener(*common, "--signal", "S1", "--decision", "set-aside")
    assert code == 2
    assert "--reason" in err
    code, _, err = screener(*common, "--signal", "S1", "--decision", "publish")
    assert code == 2
    code, out, _ = screener("ledger", "verify", run, "--holds", hash)
    assert code == 0
    assert out == f"intact: 1 entry, 1 verdict, 3 inputs; last hash {hash}\n"
    code, out, _ = screener("ledger", "show", run)
    assert code == 0
    assert "S1 announce, by A. Kestrel" in out
    assert "OUTDATED" not in out
    code, out, _ = screener("ledger", "show", run, "--star", STARS[1])
    assert out == "Nothing has been decided yet.\n"
    code, out, _ = screener("ledger", "show", run / STARS[0], "--json")
    assert json.loads(out)[0]["state"] == "current"


def test_each_fault_is_a_line_of_its_own(tmp_path: Path, screener: Run):
    run = make_run(tmp_path)
    decide(run)
    for path in (
        run / "ledger.jsonl",
        run / STARS[0] / "verdict.json",
        tmp_path / "stars/tern-14.csv",
    ):
        content = path.read_bytes()
        for old, new in ((b"1.5", b"1.6"), (b"seen", b"SEEN"), (b"7.4", b"7.5")):
            content = content.replace(old, new, 1)
        path.write_bytes(content)
    code, out, err = screener("ledger", "verify", run)
    assert code == 2
    assert out == ""
    assert [re.search(r"[\w.-]+\.\w+(?=:)", line)[0] for line in err.splitlines()] == [  # type: ignore[index]
        "ledger.jsonl", "verdict.json", "tern-14.csv",
    ]  # fmt: skip
    code, out, err = screener("ledger", "show", run)
    assert code == 2
    assert "OUTDATED" in out
    code, out, err = screener("ledger", "export", run)
    assert code == 2
    assert not list(run.glob("decisions.*"))


def test_a_terminal_is_asked_for_the_reason(
    tmp_path: Path, screener: Run, monkeypatch: pytest.MonkeyPatch
):
    run = make_run(tmp_path)
    monkeypatch.setattr(sys.stdin, "isatty", lambda: True, raising=False)
    monkeypatch.setattr("click.prompt", lambda *_, **__: "transits")
    code, _, err = screener("decide", run, "--star", STARS[0], "--signal", "S2", "--decision",
                            "announce", "--by", "B", "--note", "n")  # fmt: skip
    assert code == 0
    assert "graded likely stellar" in err
    assert json.loads((run / "ledger.jsonl").read_text())["reason"] == "transits"


def test_exports_are_harmless_whatever_people_write(tmp_path: Path, screener: Run):
    run = make_run(tmp_path)
    decide(run, note=EVIL, by=EVIL)
    decide(run, STARS[1], "S2", "announce", note="fine", reason="-1+2")
    decide(run, note="=1+1", decision="observe")
    names = [tmp_path / f"out.{end}" for end in ("csv", "ecsv", "html", "md")]
    code, out, _ = screener("ledger", "export", run, *(a for n in names for a in ("--to", n)))
    assert code == 0
    assert out.split() == [str(n) for n in names]
    with names[0].open(newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    assert [r["entry"] for r in rows] == ["1", "2", "3"]
    assert rows[0]["replaced_by"] == "3"
    assert rows[1]["reason"] == "'-1+2"
    assert not any(re.match(r"\s*[=@]|\s*[+-]\D", v) for r in rows for v in r.values())
    table = Table.read(names[1], format="ascii.ecsv")
    assert list(table["decision"]) == ["announce", "announce", "observe"]
    assert str(table["period_d"].unit) == "d"
    assert table["replaced_by"].mask.tolist() == [False, True, True]
    decide(run, note=EVIL)
    screener("ledger", "export", run, *(a for n in names[2:] for a in ("--to", n)))
    for name in names[2:]:
        text = name.read_text(encoding="utf-8")
        assert "<script" not in text
        assert "\x1b" not in text
        assert "{{7*7}}" in text.replace("\\", "")
        assert "2 earlier ones replaced" in text
    assert "http" not in names[2].read_text().replace("http-equiv", "")
    code, out, _ = screener("ledger", "show", run)
    assert "\x1b" not in out


def test_export_of_one_star_goes_beside_its_verdict(tmp_path: Path, screener: Run):
    run = make_run(tmp_path)
    decide(run)
    decide(run, STARS[1])
    screener("ledger", "export", run, "--star", STARS[1])
    page = (run / STARS[1] / "decisions.html").read_text(encoding="utf-8")
    assert "Tern-15 S1" in page
    assert "to be announced" in page
    assert "Tern-14" not in page
    assert screener("ledger", "export", run, "--to", "x.docx")[0] == 2


def test_statement_shows_outdated_decisions(tmp_path: Path, screener: Run):
    run = make_run(tmp_path)
    decide(run)
    path = run / STARS[0] / "verdict.json"
    path.write_text(path.read_text().replace('"grade": "planetary"', '"grade": "ambiguous"', 1))
    screener("ledger", "export", run, "--to", tmp_path / "s.md")
    text = (tmp_path / "s.md").read_text()
    assert "**Outdated.**" in text
    assert "- grade: planetary then, ambiguous now" in text


# -- comparison -----------------------------------------------------------------------------------


def test_comparison_number_by_number():
    before = verdict_to_dict(sample().verdict)
    match = compare(before, json.loads(json.dumps(before)))
    assert match.exact
    assert match.n_numbers > 100
    now = json.loads(json.dumps(before))
    now["input"]["file"] = "/elsewhere/x.csv"
    assert compare(before, now).exact
    now["signals"][0]["findings"][0]["statistic"] = 17.0
    now["signals"][0]["period_d"] *= 1 + 2e-7
    match = compare(before, now)
    assert [d.where.split(".")[:2] for d in match.differences] == [["signals", "S1"]] * 2
    assert match.differences[0].where == "signals.S1.period_d"
    assert match.differences[0].within_tolerance
    assert not match.same
    now["signals"][0]["findings"][0] = before["signals"][0]["findings"][0]
    assert compare(before, now).same
    assert not compare(before, now).exact


def test_comparison_of_signals_that_come_and_go():
    before = verdict_to_dict(sample().verdict)
    now = {**before, "signals": before["signals"][:1]}
    (difference,) = compare(before, now).differences
    assert str(difference) == "signals.S2: '11.19 d, likely stellar' then, not there now"
    true = {**before, "n": True}
    assert len(compare({**before, "n": 1}, true).differences) == 1
    assert compare({**before, "n": 1}, {**before, "n": 1.0}).exact


# -- reproduce ------------------------------------------------------------------------------------


@pytest.fixture
def star(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A star's folder, and a pipeline that gives a fixed verdict on whatever it reads."""
    (tmp_path / "data").mkdir()
    table = write_csv(tmp_path / "data" / "tern.csv", columns())

    def screen(observations, *, depth, seed, rules, period, **_):
        verdict = replace(
            sample().verdict, star=observations.star, record=observations.record, depth=depth,
            seed=seed, asked_period=period, rules=rules.label, rules_sha256=rules.sha256,
            rules_file=rules.overlay, version=__version__,
        )  # fmt: skip
        first = verdict.signals[0]
        score = round(float(observations.series.rv.sum()), 6)
        signals = (replace(first, score=score), *verdict.signals[1:])
        return Screening(replace(verdict, signals=signals), None)

    from screener.core import Depth
    from screener.intake import read_star

    monkeypatch.setattr("screener.pipeline.screen", screen)
    made = screen(read_star(table), depth=Depth.QUICK, seed=4, rules=load_rules(), period=37.4)
    write_verdict(tmp_path / "data" / "out" / "verdict.json", made.verdict)
    return tmp_path / "data" / "out"


def test_reproduce_the_same(star: Path, screener: Run, tmp_path: Path):
    code, out, _ = screener("reproduce", star)
    assert code == 0
    assert re.fullmatch(r"tern: the verdict is the same, \d+ numbers and \d+ words compared, "
                        r"all equal.\n", out)  # fmt: skip
    (tmp_path / "data").rename(tmp_path / "moved")  # table and verdict together
    assert screener("reproduce", tmp_path / "moved" / "out")[0] == 0
    shutil.move(tmp_path / "moved" / "tern.csv", tmp_path / "other.csv")
    code, _, err = screener("reproduce", tmp_path / "moved" / "out")
    assert code == 2
    assert "--table" in err
    code, out, _ = screener(
        "reproduce", tmp_path / "moved" / "out", "--table", tmp_path / "other.csv", "--json"
    )
    assert code == 0
    assert json.loads(out)["exact"] is True


def test_reproduce_names_the_file_with_a_changed_digit_and_what_moved(star: Path, screener: Run):
    table = star.parent / "tern.csv"
    lines = table.read_text().splitlines()
    cells = lines[7].split(",")
    cells[1] = str(round(float(cells[1]) + 1, 3))
    table.write_text("\n".join([*lines[:7], ",".join(cells), *lines[8:]]) + "\n")
    code, out, err = screener("reproduce", star)
    assert code == 2
    assert f"{table}: the table of tern was changed since" in err
    assert re.search(r"signals.S1.score: [-.\d]+ then, [-.\d]+ now \(\+1\)", out)
    table.write_text("time,rv\n1,2\n")
    code, _, err = screener("reproduce", star)
    assert code == 2
    assert "was changed since" in err


def test_reproduce_tells_new_sidecars_and_other_rules(star: Path, screener: Run, tmp_path: Path):
    sidecar = star.parent / "tern.toml"
    sidecar.write_text("[star]\nmass_msun = 0.8\n")
    code, _, err = screener("reproduce", star)
    assert code == 2
    assert f"{sidecar}: a sidecar of tern that was not there then" in err
    sidecar.unlink()
    overlay = tmp_path / "mine.toml"
    overlay.write_text("[prior]\nlog_odds = -3.0\n")
    code, _, err = screener("reproduce", star, "--rules", overlay)
    assert code == 2
    assert "not the rules of the verdict" in err


def test_reproduce_a_verdict_that_was_altered_or_made_by_another_version(star: Path, screener: Run):
    path = star / "verdict.json"
    content = read_verdict(path)
    content["signals"][0]["grade"] = Grade.AMBIGUOUS.value
    path.write_text(json.dumps(content))
    code, out, err = screener("reproduce", star)
    assert code == 1
    assert "signals.S1.grade: 'ambiguous' then, 'planetary' now" in out
    assert "defect of ours unless verdict.json was altered" in err
    content["screener"] = "0.0.1"
    path.write_text(json.dumps(content))
    code, out, _ = screener("reproduce", star)
    assert code == 2
    assert "made by version 0.0.1" in out
    assert screener("reproduce", star.parent)[0] == 2


@pytest.mark.slow
def test_reproduce_after_a_real_screening(tmp_path: Path, screener: Run):
    from screener.core import Depth
    from screener.intake import read_star
    from screener.pipeline import screen

    table = write_csv(tmp_path / "tern.csv", columns(30))
    made = screen(read_star(table), depth=Depth.QUICK, seed=5, period=4.123456789012)
    write_verdict(tmp_path / "out" / "verdict.json", made.verdict)
    assert read_verdict(tmp_path / "out")["options"]["period_d"] == 4.123456789
    assert screener("reproduce", tmp_path / "out")[0] == 0
