"""Names, lists, poisoned tables, and tables of many stars."""

from __future__ import annotations

import json
import os
import time
from pathlib import Path

import pytest

from screener.catalogue.sources import find_stars, safe_name
from tests.integration.catalogue_tools import cli, run_stars
from tests.integration.catalogue_work import write_star


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "stars"
    made.mkdir()
    return made


def _outside(tmp_path: Path, run: Path) -> set[str]:
    return {str(p.relative_to(tmp_path)) for p in tmp_path.rglob("*") if run not in (p, *p.parents)}


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
    summary, _ = run_stars(folder, run)
    assert summary.computed == len(inside) + 1
    # hidden files are reached through a list only
    listing.write_text("\n".join(f"stars/{name}" for name in names if "\n" not in name))
    summary, _ = run_stars(listing, tmp_path / "run2")
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
    done = cli(path, "--out", tmp_path / "run", module="screener")
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
    done = cli(folder, "--out", run, "--depth", "quick", "--dossiers", 0, "--json",
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
    done = cli(*command, module="screener")
    assert done.returncode == 0, done.stderr
    assert {p.parent.parent for p in tmp_path.rglob("verdict.json")} == {run}
    assert (run / "alpha/verdict.json").is_file()
    # another row for one star: only that star is done again
    table.write_text(table.read_text() + "gamma,2459100.5,1.0,1.0\n")
    done = cli(*command, "--json", module="screener")
    result = json.loads(done.stdout)
    assert (result["computed"], result["kept"]) == (1, 2)
