"""The ledger: chain, files, decisions and what becomes of them."""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import shutil
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from screener.core import Grade, InputFault, InputFaults
from screener.ledger import Journal, examine, open_place, standings, verify
from screener.ledger.chain import HEAD, LEDGER, TORN
from screener.ledger.entry import NO_ENTRY, canonical, parse_line
from screener.report.files import write_bytes
from screener.report.verdict_json import write_verdict
from tests.ledger_sample import STARS, decide, make_run, verdict_for, write_inputs


@pytest.fixture
def run(tmp_path: Path) -> Path:
    return make_run(tmp_path)


def _screened_again(run: Path, **changes: Any) -> None:
    """Another verdict of the first star: changes of S1, or of the verdict itself."""
    verdict = verdict_for(STARS[0], write_inputs(run.parent / "stars", STARS[0]))
    of_verdict = {k: changes.pop(k) for k in ("version", "rules_sha256") if k in changes}
    first = verdict.signals[0]
    orbit = replace(first.signal.orbit, **changes.pop("orbit", {}))
    first = replace(first, signal=replace(first.signal, orbit=orbit), **changes)
    verdict = replace(verdict, signals=(first, *verdict.signals[1:]), **of_verdict)
    write_verdict(run / STARS[0] / "verdict.json", verdict)


def test_canonical_json_is_what_jq_and_python_agree_on():
    # keys sorted, no white space, ASCII: the form `python -m json.tool --sort-keys --compact` gives
    assert canonical({"b": [1, 2.5, None], "a": "é"}) == b'{"a":"\\u00e9","b":[1,2.5,null]}'
    with pytest.raises(ValueError, match="JSON"):
        canonical({"a": float("nan")})


def test_entries_carry_the_hashes_of_what_they_are_about(run: Path):
    first, warnings = decide(run, note="  seen twice\n")
    second, _ = decide(run, STARS[1], "S2", "set-aside")
    assert warnings == ()
    assert (first.seq, second.seq) == (1, 2)
    assert (first.previous, second.previous) == (NO_ENTRY, first.hash)
    # the hash by hand: SHA-256 over the line without its hash
    content = json.loads((run / LEDGER).read_text().splitlines()[0])
    assert content.pop("hash") == first.hash
    text = json.dumps(content, sort_keys=True, separators=(",", ":"))
    assert hashlib.sha256(text.encode()).hexdigest() == first.hash
    verdict = (run / STARS[0] / "verdict.json").read_bytes()
    assert first.verdict["sha256"] == hashlib.sha256(verdict).hexdigest()
    for record in first.inputs.values():
        there = hashlib.sha256(Path(record["file"]).read_bytes()).hexdigest()
        assert record["sha256"] == there
    assert first.note == "seen twice"
    assert first.snapshot["grade"] == "planetary"
    assert first.snapshot["period_d"] == pytest.approx(37.42)
    assert parse_line(first.line()[:-1]) == (first, first.hash)


def test_a_decision_against_the_grade_needs_a_reason(run: Path):
    for signal, decision in (("S1", "set-aside"), ("S2", "announce")):
        with pytest.raises(InputFaults, match="departs from the grade"):
            decide(run, signal=signal, decision=decision)
        with pytest.raises(InputFaults, match="--reason: is empty"):
            decide(run, signal=signal, decision=decision, reason=" ")
        entry, _ = decide(run, signal=signal, decision=decision, reason="known from transits")
        assert entry.reason == "known from transits"
    for signal, decision in (("S1", "announce"), ("S1", "observe"), ("S2", "observe")):
        assert decide(run, signal=signal, decision=decision)[0].reason is None


def test_what_does_not_exist_cannot_be_decided_on(run: Path):
    with pytest.raises(InputFault, match=r"S1 \(37.42 d, planetary\)"):
        decide(run, signal="S7")
    with pytest.raises(InputFault, match="Did you mean 'tern-14'"):
        decide(run, star="tern-4")
    with pytest.raises(InputFault, match="holds no verdict"):
        decide(run, star="../stars")
    with pytest.raises(InputFaults, match="There is"):
        decide(run, weighed_most="tea leaves")
    with pytest.raises(InputFaults, match="--by: is empty") as caught:
        decide(run, by=" ", note="")
    assert len(caught.value.faults) == 2
    with pytest.raises(InputFault, match="holds neither"):
        decide(run.parent / "stars")
    assert not (run / LEDGER).exists()


def test_stars_by_the_name_in_the_verdict_and_tests_by_name(run: Path):
    test = json.loads((run / STARS[0] / "verdict.json").read_text())["signals"][0]["findings"][0]
    entry, _ = decide(run, star="Tern 14", weighed_most=test["test"])
    assert (entry.star, entry.weighed_most) == ("tern-14", test["test"])


def test_a_stars_folder_inside_a_run_shares_the_runs_ledger(run: Path):
    decide(run)
    entry, _ = decide(run / STARS[1], None)
    assert entry.seq == 2
    assert not (run / STARS[1] / LEDGER).exists()
    alone = run.parent / "alone"
    shutil.copytree(run / STARS[0], alone)
    entry, _ = decide(alone, None)
    assert (entry.seq, entry.star, entry.verdict["file"]) == (1, "alone", "verdict.json")
    assert verify(open_place(alone)).faults == ()


def test_changed_inputs_stop_a_decision_and_missing_ones_warn(run: Path):
    table = run.parent / "stars" / "tern-14.csv"
    content = table.read_bytes()
    table.write_bytes(content.replace(b"1.5", b"1.6", 1))
    with pytest.raises(InputFaults, match="Screen the star again"):
        decide(run)
    table.unlink()
    _, warnings = decide(run)
    assert len(warnings) == 1
    assert "table cannot be checked" in warnings[0]
    assert [f.file for f in verify(open_place(run)).faults] == [str(table)]


def test_inputs_that_moved_with_the_run_are_found_by_hash(run: Path, tmp_path: Path):
    decide(run)
    (tmp_path / "elsewhere").mkdir()
    for part in ("run", "stars"):
        (tmp_path / part).rename(tmp_path / "elsewhere" / part)
    moved = tmp_path / "elsewhere" / "run"
    assert verify(open_place(moved)).faults == ()
    table = tmp_path / "elsewhere" / "stars" / "tern-14.csv"
    table.write_bytes(table.read_bytes() + b"\n")
    assert len(verify(open_place(moved)).faults) == 1


def test_verify_says_what_moved_in_a_verdict(run: Path):
    decide(run)
    path = run / STARS[0] / "verdict.json"
    path.write_text(path.read_text().replace('"score": ', '"score": 1', 1))
    (fault,) = verify(open_place(run)).faults
    assert fault.file == str(path)
    assert "score: " in fault.problem
    path.unlink()
    (fault,) = verify(open_place(run)).faults
    assert "No such file" in fault.problem


def test_an_outdated_decision_says_what_changed(run: Path):
    decide(run)
    (now,) = standings(open_place(run), Journal(run).read().entries)
    assert (now.state, now.changes) == ("current", ())
    _screened_again(run, grade=Grade.AMBIGUOUS, orbit={"semi_amplitude": 5.5, "period": 37.5},
                    rules_sha256="d" * 64, version="0.2.0")  # fmt: skip
    (now,) = standings(open_place(run), Journal(run).read().entries)
    changed = {c.what: (c.before, c.now) for c in now.changes}
    assert now.state == "outdated"
    assert changed["grade"] == ("planetary", "ambiguous")
    assert changed["K"][1] == "5.5 m/s"
    assert changed["period"] == ("37.42 d", "37.5 d")
    assert changed["screener version"] == ("0.1.0", "0.2.0")
    assert "content of the rules" in changed
    assert "content of the table" not in changed
    # a new decision attests the new verdict; the old one stays outdated and is replaced
    assert len(verify(open_place(run)).faults) == 1
    decide(run, decision="observe")
    assert verify(open_place(run)).faults == ()
    old, new = standings(open_place(run), Journal(run).read().entries)
    assert (old.state, old.replaced_by, new.state) == ("outdated", 2, "current")


def test_signals_are_followed_by_period_not_by_id(run: Path):
    decide(run)
    verdict = verdict_for(STARS[0], write_inputs(run.parent / "stars", STARS[0]))
    one, two = verdict.signals
    exchanged = (
        replace(two, signal=replace(two.signal, id="S1")),
        replace(one, signal=replace(one.signal, id="S2")),
    )
    path = run / STARS[0] / "verdict.json"
    write_verdict(path, replace(verdict, signals=exchanged))
    (now,) = standings(open_place(run), Journal(run).read().entries)
    assert [str(c) for c in now.changes] == ["the signal's id: S1 then, S2 now"]
    write_verdict(path, replace(verdict, signals=(two,)))
    (now,) = standings(open_place(run), Journal(run).read().entries)
    assert now.changes[0].now == "none there, but 11.19 d"
    path.unlink()
    (now,) = standings(open_place(run), Journal(run).read().entries)
    assert now.state == "verdict gone"


def test_rolled_back_files_are_seen_with_a_hash_kept_elsewhere(run: Path):
    decide(run)
    kept = {name: (run / name).read_bytes() for name in (LEDGER, HEAD)}
    entry, _ = decide(run, decision="observe")
    for name, content in kept.items():
        (run / name).write_bytes(content)
    assert verify(open_place(run)).faults == ()  # as documented: the files alone do not show it
    assert len(verify(open_place(run), entry.hash[:16]).faults) == 1
    assert len(verify(open_place(run), "").faults) == 1  # no prefix of nothing


def test_nothing_is_written_on_a_damaged_ledger(run: Path):
    decide(run)
    decide(run, decision="observe")
    path = run / LEDGER
    content = path.read_bytes().replace(b"Kestrel", b"Falcon!", 1)
    path.write_bytes(content)
    with pytest.raises(InputFaults, match=r"entry 1 on tern-14 S1: its content was changed"):
        decide(run)
    assert path.read_bytes() == content
    path.unlink()
    with pytest.raises(InputFaults, match="is gone"):
        decide(run)
    assert not path.exists()


def test_torn_line_is_set_aside_and_answered_for(run: Path):
    decide(run)
    with (run / LEDGER).open("ab") as stream:
        stream.write(b'{"by":"half an en')
    reading = Journal(run).read()
    assert reading.faults == ()
    assert len(reading.notes) == 1
    entry, notes = decide(run, decision="observe")
    assert "17 bytes" in notes[0]
    line = (run / TORN).read_bytes().rstrip(b"\n")
    assert entry.set_aside == (hashlib.sha256(line).hexdigest(),)
    assert verify(open_place(run)).notes == ()
    assert decide(run)[0].set_aside == ()


def test_a_head_one_behind_is_brought_up_to_date_first(run: Path, monkeypatch: pytest.MonkeyPatch):
    decide(run)
    old = (run / HEAD).read_bytes()
    decide(run)
    (run / HEAD).write_bytes(old)
    assert Journal(run).read().head_is_behind
    # the entry is safe even if the head cannot be written after it
    calls = []

    def full(path: Path, content: bytes) -> None:
        calls.append(path.name)
        if len(calls) > 1:
            raise OSError(28, "No space left on device", str(path))
        write_bytes(path, content)

    monkeypatch.setattr("screener.ledger.journal.write_bytes", full)
    entry, notes = decide(run)
    assert calls == [HEAD, HEAD]
    assert "recorded all the same" in notes[0]
    assert Journal(run).read().entries[-1] == entry
    assert Journal(run).read().faults == ()


def test_a_full_disk_leaves_the_ledger_as_it_was(run: Path, monkeypatch: pytest.MonkeyPatch):
    decide(run)
    before, real = (run / LEDGER).read_bytes(), os.write

    def full(descriptor: int, content: Any) -> int:
        raise OSError(28, "No space left on device")

    def nearly(descriptor: int, content: Any) -> int:
        monkeypatch.setattr("screener.ledger.journal.os.write", full)
        return real(descriptor, bytes(content[:200]))

    monkeypatch.setattr("screener.ledger.journal.os.write", nearly)
    with pytest.raises(OSError, match="No space") as caught:
        decide(run)
    assert caught.value.filename == str(run / LEDGER)
    assert (run / LEDGER).read_bytes() == before


def test_links_and_folders_in_place_of_the_ledger(run: Path):
    (run / LEDGER).symlink_to(run / "other")
    with pytest.raises(InputFault, match="symbolic link"):
        decide(run)
    (run / LEDGER).unlink()
    os.mkfifo(run / LEDGER)
    with pytest.raises(InputFault, match="regular file"):
        decide(run)


def test_a_ledger_held_by_another_is_not_waited_for_for_ever(run: Path):
    decide(run)
    with (run / LEDGER).open("rb") as stream:
        fcntl.flock(stream, fcntl.LOCK_EX)
        with pytest.raises(InputFault, match="another process"):
            Journal(run, patience=0.05).read()
    assert len(Journal(run).read().entries) == 1


def test_empty_and_garbled_files():
    assert examine(None, None, None).faults == ()
    assert examine(b"", None, None).faults == ()
    for garbage in (b"\n", b"[]\n", b"\xff\n", b"[" * 100_000 + b"\n", b'{"format":1}\n'):
        assert len(examine(garbage, None, None).faults) == 1
    assert examine(b"", None, b"junk\n").faults
