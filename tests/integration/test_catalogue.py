"""Catalogue runs: stars that misbehave, what is kept and what is done again, the command."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import psutil
import pytest

from screener.catalogue import Limits
from screener.catalogue.folder import RunFolder
from screener.catalogue.pool import LocalPool, WorkersDoNotStart
from screener.core import InputFault
from screener.store import Store
from screener.store.reading import failures, stars
from tests.integration.catalogue_tools import MODULE, cli, run_stars, wait_for
from tests.integration.catalogue_work import write_star
from tests.integration.kill_catalogue import differences


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "stars"
    made.mkdir()
    return made


# -- stars that misbehave --------------------------------------------------------------------


def test_each_bad_star_costs_only_itself_and_says_why(folder: Path, tmp_path: Path) -> None:
    for what in ("hang", "die", "signal", "memory", "raise", "garbage", "once"):
        write_star(folder / f"{what}.csv", what)
    for number in range(6):
        write_star(folder / f"good{number}.csv")
    summary, _ = run_stars(folder, tmp_path / "run", limits=Limits(6.0, 300.0))
    reasons = {row["star"]: (row["kind"], row["reason"]) for row in summary.failures}
    assert set(reasons) == {"hang", "die", "signal", "memory", "raise", "garbage"}
    assert reasons["hang"] == ("time", "took longer than 6 s")
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
    assert run_stars(folder, run)[0].computed == 4
    again, _ = run_stars(folder, run)
    assert (again.computed, again.kept) == (0, 5)  # the failed star is not tried again, either
    write_star(folder / "s0.csv", rows=9)
    (folder / "s1.toml").write_text("[star]\n")
    (folder / "s2.phot.csv").write_text("time,flux,flux_err\n")
    changed, _ = run_stars(folder, run)
    assert (changed.computed, changed.kept) == (3, 2)
    (run / "s3/verdict.json").write_text("{}")  # tampered with
    (run / "s2/verdict.json").unlink()
    assert run_stars(folder, run)[0].computed == 2
    assert run_stars(folder, run, seed=2)[0].computed == 4
    assert run_stars(folder, run, seed=2, depth="quick")[0].computed == 4
    write_star(folder / "bad.csv", "ok")
    assert run_stars(folder, run, seed=2, depth="quick")[0].counts["failed"] == 0


def test_failed_stars_are_tried_again_when_asked_or_given_more_time(
    folder: Path, tmp_path: Path
) -> None:
    write_star(folder / "slow.csv", "slow")
    write_star(folder / "bad.csv", "raise")
    run = tmp_path / "run"
    assert run_stars(folder, run, limits=Limits(0.15, 400.0))[0].counts["failed"] == 2
    assert run_stars(folder, run, limits=Limits(0.15, 400.0))[0].kept == 2
    more, _ = run_stars(folder, run, limits=Limits(20.0, 400.0))
    assert (more.computed, more.kept, more.counts["failed"]) == (1, 1, 1)
    write_star(folder / "bad.csv", "raise")
    assert "bad: attempt 1 failed" in run_stars(folder, run, retry_failed=True)[1]


def test_a_star_that_fails_later_loses_its_old_verdict(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "s.csv")
    run = tmp_path / "run"
    run_stars(folder, run)
    assert (run / "s/verdict.json").is_file()
    write_star(folder / "s.csv", "raise")
    assert run_stars(folder, run)[0].counts["failed"] == 1
    assert not (run / "s/verdict.json").exists()


def test_removed_stars_leave_the_page_but_not_the_folder(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "gone.csv")
    run = tmp_path / "run"
    run_stars(folder, run)
    write_star(folder / "kept.csv")
    (folder / "gone.csv").unlink()
    summary, _ = run_stars(folder, run, seed=5)
    assert sum(summary.counts.values()) == 1
    assert "gone" not in (run / "index.html").read_text("utf-8")
    assert (run / "gone/verdict.json").exists()


def test_longest_stars_go_first(folder: Path, tmp_path: Path) -> None:
    for number, rows in enumerate((5, 500, 50)):
        write_star(folder / f"s{number}.csv", rows=rows)
    _, text = run_stars(folder, tmp_path / "run", workers=1)
    order = [line.split(":")[0] for line in text.splitlines() if line.startswith("s")]
    assert order == ["s1", "s2", "s0"]


def test_the_same_verdicts_whatever_the_number_of_workers(folder: Path, tmp_path: Path) -> None:
    for number in range(7):
        write_star(folder / f"s{number}.csv")
    run_stars(folder, tmp_path / "one", workers=1)
    run_stars(folder, tmp_path / "three", workers=3)
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
        child = wait_for(lambda: _children(process.pid), 30.0)[0]
    finally:
        process.kill()
        process.wait()
    wait_for(lambda: not _alive(child), 10.0)


def _children(pid: int) -> list[int]:
    return [child.pid for child in psutil.Process(pid).children()]


def _alive(pid: int) -> bool:
    try:
        return bool(psutil.Process(pid).status() != psutil.STATUS_ZOMBIE)
    except psutil.NoSuchProcess:
        return False


# -- the command -----------------------------------------------------------------------------


def test_exit_codes_json_and_exports(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    write_star(folder / "=b.csv")
    run = tmp_path / "run"
    exports = [tmp_path / f"ranked{ending}" for ending in (".csv", ".ecsv", ".fits", ".vot")]
    options = [word for path in exports for word in ("--export", path)]
    done = cli(folder, "--out", run, "--json", *options)
    assert done.returncode == 0, done.stderr
    result = json.loads(done.stdout)
    assert result["computed"] == 2
    assert all(path.stat().st_size for path in exports)
    assert "'=b" in exports[0].read_text()
    write_star(folder / "c.csv", "raise")
    assert cli(folder, "--out", run).returncode == 3
    bad = cli(folder, "--out", run, "--export", tmp_path / "x.doc", "--compare", tmp_path)
    assert bad.returncode == 2
    assert len(bad.stderr.splitlines()) == 2  # one message per fault
    assert cli(tmp_path / "absent", "--out", run).returncode == 2
    assert cli(folder, "--out", write_star(tmp_path / "file")).returncode == 2


def test_two_runs_do_not_share_a_folder(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    held = RunFolder(tmp_path / "run")
    with pytest.raises(InputFault, match="another catalogue run"):
        run_stars(folder, tmp_path / "run")
    held.release()
    assert run_stars(folder, tmp_path / "run")[0].computed == 1


def test_a_link_in_place_of_a_star_is_not_followed(folder: Path, tmp_path: Path) -> None:
    write_star(folder / "a.csv")
    run, elsewhere = tmp_path / "run", tmp_path / "elsewhere"
    run.mkdir()
    elsewhere.mkdir()
    (run / "a").symlink_to(elsewhere)
    summary, _ = run_stars(folder, run)
    assert summary.counts["failed"] == 1
    assert list(elsewhere.iterdir()) == []


# -- the store of a run ----------------------------------------------------------------------


def test_the_store_says_what_the_files_say(folder: Path, tmp_path: Path) -> None:
    for number in range(6):
        write_star(folder / f"s{number}.csv")
    write_star(folder / "x.csv", "raise")
    run = tmp_path / "run"
    run_stars(folder, run)
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
