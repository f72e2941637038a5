"""Catalogue runs with stars that misbehave, inputs that poison, and interruptions."""

from __future__ import annotations

import io
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from screener.catalogue import DiskFull, Limits, Options, run_catalogue
from screener.catalogue.folder import RunFolder
from screener.catalogue.pool import LocalPool, WorkersDoNotStart
from screener.catalogue.progress import LineWatch
from screener.catalogue.run import Summary
from screener.catalogue.sources import find_stars, safe_name
from screener.core import InputFault
from screener.store import Store
from screener.store.reading import failures, stars
from tests.integration.catalogue_work import DRAW, WORK, write_star
from tests.integration.kill_catalogue import (
    check_state,
    computed_twice,
    differences,
    kill_and_resume,
    write_stars,
)

MODULE = "tests.integration.catalogue_work"


def _options(**changes: object) -> Options:
    given = {"workers": 2, "limits": Limits(20.0, 400.0), "work": WORK, "draw": DRAW}
    given |= {"dossiers": 0, **changes}
    return Options(**given)  # type: ignore[arg-type]


def _run(source: Path, out: Path, **changes: object) -> tuple[Summary, str]:
    stream = io.StringIO()
    summary = run_catalogue(source, out, _options(**changes), LineWatch(stream))
    return summary, stream.getvalue()


def _cli(*arguments: object, module: str = MODULE) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", module, "catalogue", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, timeout=120)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "stars"
    made.mkdir()
    return made


def _outside(tmp_path: Path, run: Path) -> set[str]:
    return {str(p.relative_to(tmp_path)) for p in tmp_path.rglob("*") if run not in (p, *p.parents)}


# -- stars that misbehave --------------------------------------------------------------------


def test_each_bad_star_costs_only_itself_and_says_why(folder: Path, tmp_path: Path) -> None:
    for what in ("hang", "die", "signal", "memory", "raise", "garbage", "once"):
        write_star(folder / f"{what}.csv", what)
    for number in range(6):
        write_star(folder / f"good{number}.csv")
    summary, _ = _run(folder, tmp_path / "run", limits=Limits(1.5, 300.0))
    reasons = {row["star"]: (row["kind"], row["reason"]) for row in summary.failures}
    assert set(reasons) == {"hang", "die", "signal", "memory", "raise", "garbage"}
    assert reasons["hang"] == ("time", "took longer than 1.5 s")
    assert reasons["die"] == ("crash", "the worker process ended with exit code 7")
    assert "SIGSEGV" in reasons["signal"][1]
    assert reasons["memory"] == ("memory", "needed more than 300 MB of memory")
    assert reasons["raise"] == ("error", "RuntimeError: the star <b>raised</b> this")
    assert reasons["garbage"][0] == "error"
    assert all(row["attempts"] == 2 for row in summary.failures)
    assert summary.counts["failed"] == 6
    assert summary.computed == 7  # the good ones, and the one that died once only
    assert not (tmp_path / "run" / "die").exists() or not list((tmp_path / "run/die").iterdir())
    with Store(tmp_path / "run/catalogue.sqlite", read_only=True) as store:
        first = store.connection.execute("SELECT kind FROM failure WHERE star = 'once'").fetchall()
    assert [row[0] for row in first] == ["crash"]


def test_nothing_is_computed_twice_and_what_changed_is(folder: Path, tmp_path: Path) -> None:
    for number in range(4):
        write_star(folder / f"s{number}.csv")
    write_star(folder / "bad.csv", "raise")
    run = tmp_path / "run"
    assert _run(folder, run)[0].computed == 4
    again, _ = _run(folder, run)
    assert (again.computed, again.kept) == (0, 5)  # the failed star is not tried again, either
    write_star(folder / "s0.csv", rows=9)
    (folder / "s1.toml").write_text("[star]\n")
    (folder / "s2.phot.csv").write_text("time,flux,flux_err\n")
    changed, _ = _run(folder, run)
    assert (changed.computed, changed.kept) == (3, 2)
    (run / "s3/verdict.json").write_text("{}")  # tampered with
    (run / "s2/verdict.json").unlink()
    assert _run(folder, run)[0].computed == 2
    assert _run(folder, run, seed=2)[0].computed == 4
    assert _run(folder, run, seed=2, depth="quick")[0].computed == 4
    write_star(folder / "bad.csv", "ok")
    assert _run(folder, run, seed=2, depth="quick")[0].counts["failed"] == 0


def test_failed_stars_are_tried_again_when_asked_or_given_more_time(
    folder: Path, tmp_path: Path
) -> None:
    write_star(folder / "slow.csv", "slow")
    write_star(folder / "bad.csv", "raise")
    run = tmp_path / "run"
    assert _run(folder, run, limits=Limits(0.15, 400.0))[0].counts["failed"] == 2
    assert _run(folder, run, limits=Limits(0.15, 400.0))[0].kept == 2
    more, _ = _run(folder, run, limits=Limits(20.0, 400.0))
    assert (more.computed, more.kept, more.counts["failed"]) == (1, 1, 1)
    write_star(folder / "bad.csv", "raise")
    assert "bad: attempt 1 failed" in _run(folder, run, retry_failed=True)[1]


def test_a_star_that_fails_later_loses_its_old_verdict(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "s.csv")
    run = tmp_path / "run"
    _run(folder, run)
    assert (run / "s/verdict.json").is_file()
    write_star(folder / "s.csv", "raise")
    assert _run(folder, run)[0].counts["failed"] == 1
    assert not (run / "s/verdict.json").exists()


def test_removed_stars_leave_the_page_but_not_the_folder(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "gone.csv")
    run = tmp_path / "run"
    _run(folder, run)
    write_star(folder / "kept.csv")
    (folder / "gone.csv").unlink()
    summary, _ = _run(folder, run, seed=5)
    assert sum(summary.counts.values()) == 1
    assert "gone" not in (run / "index.html").read_text("utf-8")
    assert (run / "gone/verdict.json").exists()


def test_longest_stars_go_first(folder: Path, tmp_path: Path) -> None:
    for number, rows in enumerate((5, 500, 50)):
        write_star(folder / f"s{number}.csv", rows=rows)
    _, text = _run(folder, tmp_path / "run", workers=1)
    order = [line.split(":")[0] for line in text.splitlines() if line.startswith("s")]
    assert order == ["s1", "s2", "s0"]


def test_the_same_verdicts_whatever_the_number_of_workers(folder: Path, tmp_path: Path) -> None:
    for number in range(7):
        write_star(folder / f"s{number}.csv")
    _run(folder, tmp_path / "one", workers=1)
    _run(folder, tmp_path / "three", workers=3)
    assert differences(tmp_path / "one", tmp_path / "three") == []


def test_workers_have_one_numeric_thread(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OMP_NUM_THREADS", "8")
    pool = LocalPool("tests.integration.test_catalogue:threads_here", 1, Limits(60.0, 2000.0))
    try:
        pool.submit("t", None)
        (event,) = pool.events(60.0)
        assert set(event.result) <= {1}  # type: ignore[union-attr]
        assert event.result  # type: ignore[union-attr]
    finally:
        pool.close()


def threads_here(_: object) -> list[int]:
    """Number of threads of each numeric library in this process."""
    import numpy as np
    from scipy import linalg
    from threadpoolctl import threadpool_info

    linalg.cholesky(np.eye(3))
    return [int(entry["num_threads"]) for entry in threadpool_info()]


def test_workers_that_cannot_start_end_the_run_with_a_word(tmp_path: Path) -> None:
    pool = LocalPool("no.such.module:work", 2, Limits(5.0, 400.0), tmp_path / "workers.log")
    try:
        pool.submit("t", None)
        with pytest.raises(WorkersDoNotStart, match="do not start"):
            for _ in range(100):
                pool.events(1.0)
        assert "No module named" in (tmp_path / "workers.log").read_text()
    finally:
        pool.close()


def test_workers_die_with_their_supervisor(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "hang.csv", "hang")
    command = [sys.executable, "-m", MODULE, "catalogue", folder, "--out", tmp_path / "run"]
    process = subprocess.Popen(list(map(str, command)), stderr=subprocess.DEVNULL)
    try:
        child = _wait_for(lambda: _children(process.pid), 30.0)[0]
    finally:
        process.kill()
        process.wait()
    _wait_for(lambda: not _alive(child), 10.0)


def _children(pid: int) -> list[int]:
    import psutil

    return [child.pid for child in psutil.Process(pid).children()]


def _alive(pid: int) -> bool:
    import psutil

    try:
        return bool(psutil.Process(pid).status() != psutil.STATUS_ZOMBIE)
    except psutil.NoSuchProcess:
        return False


def _wait_for(condition, seconds: float):  # type: ignore[no-untyped-def]
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        value = condition()
        if value:
            return value
        time.sleep(0.05)
    raise AssertionError("waited in vain")


# -- inputs ----------------------------------------------------------------------------------


def test_names_stay_inside_the_run(folder: Path, tmp_path: Path) -> None:
    names = [
        "...csv", "..csv", "index.html.csv", "catalogue.sqlite.csv", "=cmd|' calc'!A0.csv",
        "<script>alert(1)<⁄script>.csv", "a'b\"c;d.csv", "ünïcödé 星.csv", "new\nline.csv",
        "x" * 240 + ".csv", "-rf.csv", "@sum.csv", "&amp;.csv",
    ]  # fmt: skip
    listing = tmp_path / "list.txt"
    for name in names:
        write_star(folder / name)
    write_star(folder / "raw.csv").rename(folder / os.fsdecode(b"raw\xff.csv"))
    inside = [name for name in names if not name.startswith(".")]
    run = tmp_path / "run"
    before = _outside(tmp_path, run)
    summary, _ = _run(folder, run)
    assert summary.computed == len(inside) + 1
    # hidden files are reached through a list only
    listing.write_text("\n".join(f"stars/{name}" for name in names if "\n" not in name))
    summary, _ = _run(listing, tmp_path / "run2")
    assert summary.counts["failed"] == 0
    after = {name for name in _outside(tmp_path, run) if not name.startswith("run2")}
    assert after == before | {"list.txt"}
    for folder_of_run in (run, tmp_path / "run2"):
        places = {p.parent.parent for p in folder_of_run.rglob("verdict.json")}
        assert places == {folder_of_run}
    page = (run / "index.html").read_text("utf-8")
    assert "<script>alert(1)" not in page
    assert "&lt;script&gt;alert(1)" in page
    assert page.count("<script>") == 1  # ours


@pytest.mark.parametrize(
    "name", ["..", ".", "", "a/b", "../up", "\0", "index.html", "RUN.LOG", ".hidden", "x" * 300]
)
def test_what_cannot_name_a_folder_is_changed_and_stays_unique(name: str, tmp_path: Path) -> None:
    safe = safe_name(name)
    assert safe != name
    assert "/" not in safe
    assert not safe.startswith(".")
    assert len(safe.encode()) < 250
    (tmp_path / safe).mkdir()
    assert safe_name(name) == safe
    assert safe_name(name + "?") != safe


@pytest.mark.parametrize("name", ["A1-003", "=1+1", "<b>", "a'\"b", "ü 星", "HD 1.2", "-x"])
def test_what_can_name_a_folder_is_kept(name: str) -> None:
    assert safe_name(name) == name


def test_photometry_sidecars_and_papers_are_no_stars(folder: Path) -> None:
    for name in ("a.csv", "a.phot.csv", "b.fits", "b.toml", "README.txt", ".c.csv", "truth.json"):
        write_star(folder / name)
    (folder / "d.csv").mkdir()
    (folder / "sub").mkdir()
    found = {star.name: star for star in find_stars(folder)}
    assert set(found) == {"a", "b"}
    assert found["a"].photometry == folder / "a.phot.csv"
    assert found["b"].sidecar == folder / "b.toml"


def test_two_tables_of_one_name_are_two_stars(folder: Path, tmp_path: Path) -> None:
    (folder / "other").mkdir()
    for path in ("a.csv", "a.ecsv", "other/a.csv"):
        write_star(folder / path)
    listing = tmp_path / "list.txt"
    listing.write_text("# a comment\nstars/a.csv\nstars/a.ecsv\n\nstars/other/a.csv\nstars/a.csv\n")
    names = [star.name for star in find_stars(listing)]
    assert names[:2] == ["a", "a.ecsv"]
    assert len(set(names)) == 3


@pytest.mark.parametrize("content", ["", "time,rv\n1,2\n", "# nothing\n", "absent.csv\n"])
def test_a_file_that_is_no_list_is_refused(tmp_path: Path, content: str) -> None:
    path = tmp_path / "list.txt"
    path.write_text(content)
    done = _cli(path, "--out", tmp_path / "run", module="screener")
    assert done.returncode == 2, done.stderr
    assert "Traceback" not in done.stderr
    assert str(path) in done.stderr


@pytest.mark.slow
def test_poisoned_tables_fail_alone(folder: Path, tmp_path: Path) -> None:
    """With the real reader: nothing of this may hang, fill the memory or stop the others."""
    os.mkfifo(folder / "fifo.csv")
    with (folder / "zeros.csv").open("wb") as handle:
        handle.truncate(2_000_000_000)
    row = "2459000.5,1.0,1.0\n"
    (folder / "million.csv").write_text("time,rv,rv_err\n" + row * 1_000_000)
    (folder / "loop.csv").symlink_to("loop.csv")
    (folder / "dangling.csv").symlink_to("nowhere.csv")
    (folder / "socket.csv").symlink_to("/dev/zero")
    secret = write_star(folder / "secret.csv")
    secret.chmod(0)
    (folder / "binary.csv").write_bytes(bytes(range(256)) * 100)
    (folder / "bomb.toml").write_text("[star\n" * 1000)
    write_star(folder / "bomb.csv")
    nights = "".join(f"{2459000.5 + 3.1 * k:.2f},{(k * 7) % 5},1.0\n" for k in range(24))
    (folder / "good.csv").write_text("time,rv,rv_err\n" + nights)
    run = tmp_path / "run"
    start = time.monotonic()
    done = _cli(folder, "--out", run, "--depth", "quick", "--dossiers", 0, "--json",
                module="screener")  # fmt: skip
    assert done.returncode == 3, done.stderr
    assert time.monotonic() - start < 100
    result = json.loads(done.stdout)
    failed = {row["star"]: row for row in result["failures"]}
    bad = {"fifo", "zeros", "million", "loop", "dangling", "socket", "secret", "binary", "bomb"}
    assert set(failed) == bad
    assert all(row["kind"] == "input" and row["attempts"] == 1 for row in failed.values())
    assert result["computed"] == 1
    assert (run / "good/verdict.json").is_file()
    assert "regular file" in failed["fifo"]["reason"]
    assert result["peak_memory_mb"] < 600


@pytest.mark.slow
def test_a_table_of_many_stars_is_taken_apart(tmp_path: Path) -> None:
    lines = ["star,time,rv,rv_err"]
    for star in ("alpha", "../up", "gamma"):
        lines += [f"{star},{2459000.5 + 3.1 * k:.2f},{(k * 7) % 5},1.0" for k in range(24)]
    table = tmp_path / "big.csv"
    table.write_text("\n".join(lines) + "\n")
    run = tmp_path / "run"
    command = (table, "--out", run, "--depth", "quick", "--dossiers", 0)
    done = _cli(*command, module="screener")
    assert done.returncode == 0, done.stderr
    assert {p.parent.parent for p in tmp_path.rglob("verdict.json")} == {run}
    assert (run / "alpha/verdict.json").is_file()
    # another row for one star: only that star is done again
    table.write_text(table.read_text() + "gamma,2459100.5,1.0,1.0\n")
    done = _cli(*command, "--json", module="screener")
    result = json.loads(done.stdout)
    assert (result["computed"], result["kept"]) == (1, 2)


# -- the command -----------------------------------------------------------------------------


def test_exit_codes_json_and_exports(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    write_star(folder / "=b.csv")
    run = tmp_path / "run"
    exports = [tmp_path / f"ranked{ending}" for ending in (".csv", ".ecsv", ".fits", ".vot")]
    options = [word for path in exports for word in ("--export", path)]
    done = _cli(folder, "--out", run, "--json", *options)
    assert done.returncode == 0, done.stderr
    result = json.loads(done.stdout)
    assert result["computed"] == 2
    assert all(path.stat().st_size for path in exports)
    assert "'=b" in exports[0].read_text()
    write_star(folder / "c.csv", "raise")
    assert _cli(folder, "--out", run).returncode == 3
    bad = _cli(folder, "--out", run, "--export", tmp_path / "x.doc", "--compare", tmp_path)
    assert bad.returncode == 2
    assert len(bad.stderr.splitlines()) == 2  # one message per fault
    assert _cli(tmp_path / "absent", "--out", run).returncode == 2
    assert _cli(folder, "--out", write_star(tmp_path / "file")).returncode == 2


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
    _wait_for(lambda: len(list(run.glob("*/verdict.json"))) == 3, 60.0)
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
    assert _run(folder, run)[0].computed == 1


def test_two_runs_do_not_share_a_folder(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    held = RunFolder(tmp_path / "run")
    with pytest.raises(InputFault, match="another catalogue run"):
        _run(folder, tmp_path / "run")
    held.release()
    assert _run(folder, tmp_path / "run")[0].computed == 1


def test_a_link_in_place_of_a_star_is_not_followed(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    run, elsewhere = tmp_path / "run", tmp_path / "elsewhere"
    run.mkdir()
    elsewhere.mkdir()
    (run / "a").symlink_to(elsewhere)
    summary, _ = _run(folder, run)
    assert summary.counts["failed"] == 1
    assert list(elsewhere.iterdir()) == []


# -- kills and full disks --------------------------------------------------------------------


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
    summary, _ = _run(folder, run)
    assert (summary.kept, summary.computed) == (done_before, 5 - done_before)
    _run(folder, tmp_path / "calm")
    found = differences(run, tmp_path / "calm")
    assert found == []


def test_killed_at_random_and_resumed_is_the_same_as_undisturbed(tmp_path: Path) -> None:
    import random

    write_stars(tmp_path / "stars", 40, stand_in=True)
    _run(tmp_path / "stars", tmp_path / "calm", depth="quick", dossiers=0)
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
        _run(folder, run, dossiers=0)
    assert check_state(run) == []
    (small_disk / "ballast").unlink()
    subprocess.run(["mount", "-o", "remount,size=20m", small_disk], check=True)
    summary, _ = _run(folder, run, dossiers=0)
    assert sum(summary.counts.values()) == 12
    assert summary.counts["failed"] == summary.counts["waiting"] == 0
    _run(folder, tmp_path / "calm", dossiers=0)
    assert differences(run, tmp_path / "calm") == []


def test_the_command_says_that_the_disk_is_full(folder: Path, small_disk: Path) -> None:
    write_star(folder / "a.csv")
    (small_disk / "ballast").write_bytes(b"x" * 380_000)
    done = _cli(folder, "--out", small_disk / "run")
    assert done.returncode == 2
    assert "disk is full" in done.stderr
    assert "Traceback" not in done.stderr


# -- the store of a run ----------------------------------------------------------------------


def test_the_store_says_what_the_files_say(folder: Path, tmp_path: Path) -> None:
    for number in range(6):
        write_star(folder / f"s{number}.csv")
    write_star(folder / "x.csv", "raise")
    run = tmp_path / "run"
    _run(folder, run)
    with Store(run / "catalogue.sqlite", read_only=True) as store:
        rows = stars(store)
        assert [row["star"] for row in failures(store)] == ["x"]
        for row in rows:
            path = run / row["folder"] / "verdict.json"
            assert path.exists() == (row["state"] == "done")
            if row["state"] != "done":
                continue
            content = json.loads(path.read_text("utf-8"))
            query = "SELECT id, grade, period_d, score FROM signal WHERE star = ? ORDER BY id"
            found = [tuple(r) for r in store.connection.execute(query, (row["name"],))]
            assert found == [
                (s["id"], s["grade"], s["period_d"], s["score"]) for s in content["signals"]
            ]
