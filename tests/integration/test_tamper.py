"""A part of ``python -m tests.integration.tamper``, and that it can fail."""

from __future__ import annotations

from pathlib import Path

import pytest

from screener.ledger import chain
from tests.integration import tamper


def test_flipped_bytes_of_the_chain_are_seen(tmp_path: Path):
    tried, missed = tamper.flips_of_chain(tamper.small_run(tmp_path), (0x01, 0x20), step=5)
    assert tried > 2000
    assert missed == []


def test_flipped_bytes_on_disk_are_seen_and_the_file_named(tmp_path: Path):
    tried, missed = tamper.flips_on_disk(tamper.small_run(tmp_path), 8)
    assert tried > 60
    assert missed == []


def test_moved_cut_and_forged_entries_are_seen(tmp_path: Path):
    tried, missed = tamper.lines(tamper.small_run(tmp_path))
    assert tried > 30
    assert missed == []


def test_the_checks_can_fail(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    run = tamper.small_run(tmp_path)
    monkeypatch.setattr(chain, "_check_head", lambda *_: (None, None))
    _, missed = tamper.lines(run)
    assert "cut after 3 entries: not seen" in missed
    monkeypatch.setattr(chain._Chain, "_link", lambda *_: None)
    _, missed = tamper.lines(run)
    assert "entry 2 taken out: not seen" in missed
    monkeypatch.setattr(chain._Chain, "_settle", lambda *_: None)
    _, missed = tamper.flips_of_chain(run, (0x01,), step=20)
    assert missed


def test_decisions_from_many_processes_are_all_there(tmp_path: Path):
    count, wrong = tamper.concurrent(tmp_path, n_processes=4, n_each=10)
    assert (count, wrong) == (40, [])


@pytest.mark.slow
def test_a_kill_within_a_write_leaves_the_chain_whole(tmp_path: Path):
    count, wrong = tamper.killed(tmp_path)
    assert (count, wrong) == (9, [])


@pytest.mark.slow
def test_what_was_told_survives_kills_at_random(tmp_path: Path):
    count, wrong = tamper.killed_at_random(tmp_path, 2, seed=3)
    assert count >= 4
    assert wrong == []
