"""The store: layout, migrations, results, and the ranked table in four formats."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from astropy.io import fits
from astropy.table import Table

from screener.core import InputFault
from screener.store import RunSettings, StarRow, Store, StoreError, WorkRow, schema
from screener.store.export import COLUMNS, export_ranked
from screener.store.reading import counts, failures, ranked

SETTINGS = RunSettings("/data", "0.1.0", "default 1", "r" * 64, 1, "quick")


def _signal(number: int, grade: str, score: float | None, **more: object) -> dict[str, object]:
    finding = {"test": "t", "outcome": "inconclusive", "statistic": 1.0, "p_value": None}
    return {
        "id": f"S{number}",
        "grade": grade,
        "score": score,
        "period_d": 10.0 + number,
        "k_m_s": 3.0,
        "findings": [{**finding, "power": 0.5, "sentence": "Nothing."}] * 2,
        "deciding_rules": ["a", "b"],
        "next_step": "Wait.",
        **more,
    }


def _verdict(name: str, *signals: dict[str, object], rotation: float | None = None) -> dict:
    return {
        "star": name,
        "input": {"n_obs": 20, "n_nights": 18, "baseline_d": 100.5},
        "rotation": {"period_d": rotation, "period_err_d": None, "sources": []},
        "signals": list(signals),
        "cautions": ["c"],
    }


def _plan(store: Store, *names: str, key: str = "k") -> int:
    run = store.begin_run(SETTINGS)
    rows = [
        (StarRow(n, n, f"/data/{n}.csv"), WorkRow(f"{key}{n}", "t", None, None, 2.0)) for n in names
    ]
    store.plan(run, rows)
    return run


def _record(store: Store, name: str, *signals: dict[str, object], rotation: float | None = None):
    verdict = _verdict(name, *signals, rotation=rotation)
    return store.record_verdict(
        name, verdict, file_sha256="f", seconds=1.5, peak_memory_mb=100.0, folds={"S1": [[0.1, 2]]}
    )


@pytest.fixture
def store(tmp_path: Path):
    with Store(tmp_path / "catalogue.sqlite") as opened:
        yield opened


def test_a_new_store_has_the_layout_and_the_pragmas(store: Store) -> None:
    db = store.connection
    assert db.execute("PRAGMA user_version").fetchone()[0] == schema.VERSION
    assert db.execute("PRAGMA journal_mode").fetchone()[0] == "wal"
    assert db.execute("PRAGMA foreign_keys").fetchone()[0] == 1


def test_every_table_and_column_is_described_and_nothing_else(store: Store) -> None:
    db = store.connection
    tables = [row[0] for row in db.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    real = {(t, row[1]) for t in tables for row in db.execute(f"PRAGMA table_info({t})")}
    described = {(row[0], row[1]) for row in db.execute("SELECT * FROM about")}
    assert {t for t, _ in real} <= {t for t, c in described if c == ""}
    of_columns = {(t, c) for t, c in described if c and t != "ranked"}
    assert of_columns - real == set()
    assert real - of_columns == set()


def test_an_old_file_is_migrated_step_by_step_and_a_bad_step_leaves_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "x.sqlite"
    with Store(path) as store:
        _plan(store, "a")
    bad = "CREATE TABLE later (x INTEGER); CREATE TABLE run (y INTEGER);"  # run exists already
    monkeypatch.setattr(schema, "MIGRATIONS", (*schema.MIGRATIONS, bad))
    monkeypatch.setattr(schema, "VERSION", schema.VERSION + 1)
    with pytest.raises(InputFault, match="already exists"):
        Store(path)
    with sqlite3.connect(path) as db:
        assert db.execute("PRAGMA user_version").fetchone()[0] == schema.VERSION - 1
        names = [row[0] for row in db.execute("SELECT name FROM sqlite_master")]
    assert "later" not in names
    good = "CREATE TABLE later (x INTEGER);"
    monkeypatch.setattr(schema, "MIGRATIONS", (*schema.MIGRATIONS[:-1], good))
    with Store(path) as store:
        assert store.connection.execute("SELECT count(*) FROM later").fetchone()[0] == 0
        assert store.connection.execute("SELECT name FROM star").fetchone()[0] == "a"


def test_a_file_of_a_newer_version_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "x.sqlite"
    Store(path).close()
    with sqlite3.connect(path) as db:
        db.execute(f"PRAGMA user_version = {schema.VERSION + 1}")
    with pytest.raises(StoreError, match="update the screener"):
        Store(path)


def test_what_is_no_store_is_refused_with_a_cure(tmp_path: Path) -> None:
    path = tmp_path / "x.sqlite"
    path.write_text("not a database, but long enough to be looked at " * 30)
    with pytest.raises(InputFault, match="cannot be used as a store"):
        Store(path)
    with pytest.raises(InputFault, match="there is no such run"):
        Store(tmp_path / "absent", read_only=True)


def test_same_settings_are_the_same_run(store: Store) -> None:
    first = store.begin_run(SETTINGS)
    assert store.begin_run(SETTINGS) == first
    other = RunSettings("/data", "0.1.0", "default 1", "r" * 64, 2, "quick")
    assert store.begin_run(other) != first


def test_foreign_keys_hold(store: Store) -> None:
    _plan(store, "a")
    with pytest.raises(sqlite3.IntegrityError), store.transaction() as db:
        db.execute("INSERT INTO signal (star, id, grade, deciding_rules, next_step)"
                   " VALUES ('nobody', 'S1', 'ambiguous', '', '')")  # fmt: skip


def test_another_key_forgets_the_verdict_and_the_same_keeps_it(store: Store) -> None:
    run = _plan(store, "a", "b")
    assert _record(store, "a", _signal(1, "planetary", 3.0)) == "planetary"
    _plan(store, "a", "b")
    assert [row["star"] for row in ranked(store)] == ["a"]
    work = [(StarRow("a", "a", "/data/a.csv"), WorkRow("new", "t2", None, None, 2.0))]
    planned = store.plan(run, work)
    assert planned["a"].state == "waiting"
    assert ranked(store) == []
    assert store.connection.execute("SELECT count(*) FROM finding").fetchone()[0] == 0


def test_a_second_verdict_replaces_the_first(store: Store) -> None:
    _plan(store, "a")
    _record(store, "a", _signal(1, "planetary", 3.0), _signal(2, "ambiguous", 0.0))
    assert _record(store, "a") == "no signal"
    assert [(row["signal"], row["grade"]) for row in ranked(store)] == [(None, "no signal")]


def test_ranking_goes_by_grade_then_score_with_unknown_last(store: Store) -> None:
    _plan(store, "a", "b", "c", "d")
    _record(store, "a", _signal(1, "likely stellar", 9.0), _signal(2, "planetary", 1.0))
    _record(store, "b", _signal(1, "planetary", 2.0), _signal(2, "planetary", None))
    _record(store, "c", _signal(1, "ambiguous", -5.0))
    _record(store, "d")
    order = [(row["star"], row["signal"]) for row in ranked(store)]
    assert order == [
        ("b", "S1"), ("a", "S2"), ("b", "S2"), ("c", "S1"), ("a", "S1"), ("d", None),
    ]  # fmt: skip
    assert [row["rank"] for row in ranked(store)] == [1, 2, 3, 4, 5, 6]


def test_failures_count_attempts_and_the_last_reason_stands(store: Store) -> None:
    _plan(store, "a", "b")
    store.record_failure("a", "time", "took longer than 3 s", final=False, limit=3.0)
    assert counts(store)["waiting"] == 2
    assert failures(store) == []
    store.record_failure("a", "crash", "killed", final=True)
    (row,) = failures(store)
    assert (row["star"], row["kind"], row["reason"], row["attempts"]) == ("a", "crash", "killed", 2)
    assert store.connection.execute("SELECT count(*) FROM failure").fetchone()[0] == 2
    store.again("a")
    assert counts(store)["waiting"] == 2


def test_pandas_reads_it(store: Store) -> None:
    _plan(store, "a")
    _record(store, "a", _signal(1, "planetary", 3.25), rotation=21.0)
    frame = pd.read_sql("SELECT * FROM ranked", store.connection)
    assert frame.loc[0, "score"] == 3.25
    assert frame.loc[0, "rotation_period_d"] == 21.0


@pytest.mark.parametrize("ending", [".ecsv", ".csv", ".fits", ".vot"])
def test_the_ranked_table_survives_the_way_through_a_file(
    store: Store, tmp_path: Path, ending: str
) -> None:
    _plan(store, "a", "=1+1", "ü")
    _record(store, "a", _signal(1, "planetary", 3.25), rotation=21.0)
    _record(store, "=1+1", _signal(1, "ambiguous", -1.5, next_step="@x"))
    _record(store, "ü")
    path = tmp_path / f"ranked{ending}"
    export_ranked(store, path)
    # astropy and pandas are the outside: they read what we wrote
    table = Table.from_pandas(pd.read_csv(path)) if ending == ".csv" else Table.read(path)
    assert table.colnames == list(COLUMNS)
    assert len(table) == 3
    assert table["score"][0] == 3.25
    assert list(table["n_obs"]) == [20, 20, 20]
    period = table["period_d"]
    missing = np.ma.getmaskarray(np.ma.masked_invalid(np.ma.asarray(period)))
    assert list(missing) == [False, False, True]
    if ending in (".ecsv", ".vot", ".fits"):
        assert str(table["k_m_s"].unit) == "m / s"
    stars = [str(name) for name in table["star"]]
    expected = {".csv": ["a", "'=1+1", "ü"], ".fits": ["a", "=1+1", "\\xfc"]}
    assert stars == expected.get(ending, ["a", "=1+1", "ü"])
    if ending == ".csv":
        assert str(table["next_step"][1]) == "'@x"
    if ending == ".fits":
        with fits.open(path) as file:
            file.verify("exception")
    assert [p.name for p in tmp_path.iterdir() if p.name.startswith(".")] == []


def test_an_unknown_ending_is_refused(store: Store, tmp_path: Path) -> None:
    with pytest.raises(InputFault, match="unknown"):
        export_ranked(store, tmp_path / "x.doc")


@pytest.mark.parametrize("ending", [".ecsv", ".csv", ".fits", ".vot"])
def test_an_empty_run_exports_an_empty_table(store: Store, tmp_path: Path, ending: str) -> None:
    store.begin_run(SETTINGS)
    export_ranked(store, tmp_path / f"x{ending}")
    assert (tmp_path / f"x{ending}").stat().st_size > 0


def test_a_reader_sees_a_run_at_work_and_leaves_no_files(tmp_path: Path) -> None:
    path = tmp_path / "catalogue.sqlite"
    with Store(path) as store:
        _plan(store, "a")
        _record(store, "a", _signal(1, "planetary", 3.0))
        with Store(path, read_only=True) as reader:
            assert len(ranked(reader)) == 1
            with pytest.raises(sqlite3.OperationalError, match="readonly"):
                reader.connection.execute("DELETE FROM star")
    with Store(path, read_only=True) as reader:
        assert len(ranked(reader)) == 1
    assert [p.name for p in tmp_path.iterdir()] == ["catalogue.sqlite"]
