"""Signals, kills and full disks: a run stops in good order or in none, and goes on the same."""

from __future__ import annotations

import contextlib
import os
import random
import shutil
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from screener.catalogue import DiskFull
from screener.store import Store
from tests.integration.catalogue_tools import MODULE, cli, run_stars, wait_for
from tests.integration.catalogue_work import write_star
from tests.integration.kill_catalogue import (
    check_state,
    computed_twice,
    differences,
    kill_and_resume,
    write_stars,
)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "stars"
    made.mkdir()
    return made


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_stopping_is_clean_and_says_how_to_go_on(
    folder: Path, tmp_path: Path, number: signal.Signals
) -> None:
    write_star(folder / "hang.csv", "hang")
    for k in range(3):
        write_star(folder / f"s{k}.csv")
    run = tmp_path / "run"
    words = [sys.executable, "-m", MODULE, "catalogue", str(folder), "--out", str(run)]
    words += ["--workers", "2"]
    process = subprocess.Popen(words, stderr=subprocess.PIPE, text=True)
    wait_for(lambda: len(list(run.glob("*/verdict.json"))) == 3, 60.0)
    process.send_signal(number)
    _, text = process.communicate(timeout=30)
    assert process.returncode == 130
    assert "Traceback" not in text
    assert f"screener catalogue {folder} --out {run}" in text
    assert check_state(run) == []
    with Store(run / "catalogue.sqlite", read_only=True) as store:
        assert store.connection.execute("SELECT state FROM run").fetchone()[0] == "stopped"
    assert "not finished" in (run / "index.html").read_text("utf-8")
    write_star(folder / "hang.csv")
    assert run_stars(folder, run)[0].computed == 1


def test_on_a_terminal_the_panel_shows_grades_and_failures(folder: Path, tmp_path: Path) -> None:
    import pty

    for k in range(4):
        write_star(folder / f"s{k}.csv", "slow")
    write_star(folder / "b\x1b[2Jd.csv", "raise")  # a name that would clear the screen
    ours, theirs = pty.openpty()
    words = [sys.executable, "-m", MODULE, "catalogue", str(folder), "--out", str(tmp_path / "r")]
    process = subprocess.Popen(words, stderr=theirs, stdout=subprocess.DEVNULL)
    os.close(theirs)
    seen = b""
    with contextlib.suppress(OSError):  # the terminal is gone when the program is
        while block := os.read(ours, 65536):
            seen += block
    os.close(ours)
    assert process.wait() == 3
    text = seen.decode("utf-8", "replace")
    assert "stars/h" in text
    assert "5/5" in text
    assert "1 failed" in text
    assert "\x1b[2Jd" not in text
    assert "Traceback" not in text


@pytest.mark.parametrize("moment", ["before rename", "before commit", "after commit"])
def test_a_kill_at_the_worst_moment_leaves_nothing_half_done(
    folder: Path, tmp_path: Path, moment: str
) -> None:
    for k in range(5):
        write_star(folder / f"s{k}.csv")
    run = tmp_path / "run"
    words = [sys.executable, "-m", "tests.integration.catalogue_kill_at", moment]
    words += ["catalogue", str(folder), "--out", str(run), "--workers", "1"]
    done = subprocess.run(words, capture_output=True, timeout=60)
    assert done.returncode == -signal.SIGKILL
    assert check_state(run) == []
    done_before = 3 if moment == "after commit" else 2
    summary, _ = run_stars(folder, run)
    assert (summary.kept, summary.computed) == (done_before, 5 - done_before)
    run_stars(folder, tmp_path / "calm")
    found = differences(run, tmp_path / "calm")
    assert found == []


def test_killed_at_random_and_resumed_is_the_same_as_undisturbed(tmp_path: Path) -> None:
    write_stars(tmp_path / "stars", 40, stand_in=True)
    run_stars(tmp_path / "stars", tmp_path / "calm", depth="quick", dossiers=0)
    seen = kill_and_resume(tmp_path / "stars", tmp_path / "run", 6, True, random.Random(3))
    assert seen.get("killed", 0) >= 3
    assert differences(tmp_path / "run", tmp_path / "calm") == []
    assert computed_twice(tmp_path / "run") == []


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    place = tmp_path / "small"
    place.mkdir()
    mount = shutil.which("mount")
    if mount is None or os.geteuid() != 0:
        pytest.skip("needs the right to mount a small disk")
    done = subprocess.run([mount, "-t", "tmpfs", "-o", "size=400k", "tmpfs", place], check=False)
    if done.returncode != 0:
        pytest.skip("cannot mount a small disk here")
    yield place
    subprocess.run(["umount", place], check=True)


def test_a_full_disk_stops_with_a_word_and_goes_on_after(
    folder: Path, tmp_path: Path, small_disk: Path
) -> None:
    for k in range(12):
        write_star(folder / f"s{k:02d}.csv")
    run = small_disk / "run"
    (small_disk / "ballast").write_bytes(b"x" * 230_000)
    with pytest.raises(DiskFull, match="make space"):
        run_stars(folder, run, dossiers=0)
    assert check_state(run) == []
    (small_disk / "ballast").unlink()
    subprocess.run(["mount", "-o", "remount,size=20m", small_disk], check=True)
    summary, _ = run_stars(folder, run, dossiers=0)
    assert sum(summary.counts.values()) == 12
    assert summary.counts["failed"] == summary.counts["waiting"] == 0
    run_stars(folder, tmp_path / "calm", dossiers=0)
    assert differences(run, tmp_path / "calm") == []


def test_the_command_says_that_the_disk_is_full(folder: Path, small_disk: Path) -> None:
    write_star(folder / "a.csv")
    (small_disk / "ballast").write_bytes(b"x" * 380_000)
    done = cli(folder, "--out", small_disk / "run")
    assert done.returncode == 2
    assert "disk is full" in done.stderr
    assert "Traceback" not in done.stderr
