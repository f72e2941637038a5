"""The screener from Python."""

from __future__ import annotations

import doctest
import re
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import astropy.units as u
import numpy as np
import pandas as pd
import pytest
from astropy.table import Table

import screener
from screener.core import Depth, InputFault, InputFaults, Screening, Star
from screener.face import Result, _observations, screen
from tests.unit.report_sample import sample

ROOT = Path(__file__).resolve().parents[2]


def _frame(n_obs: int = 30) -> pd.DataFrame:
    rng = np.random.default_rng(4)
    time = 2458000.7 + np.arange(n_obs) * 3.1 + rng.uniform(-0.1, 0.1, n_obs)
    return pd.DataFrame(
        {
            "time": time,
            "rv": 20 * np.sin(2 * np.pi * time / 9.3) + rng.normal(0, 1, n_obs),
            "rv_err": 1.0,
            "instrument": "NORTH",
        }
    )


def test_the_package_answers_without_loading_numpy():
    code = "import screener, sys; assert 'numpy' not in sys.modules and 'screen' in dir(screener)"
    subprocess.run([sys.executable, "-c", code], check=True)
    assert screener.screen is screen
    with pytest.raises(AttributeError, match="no_such_thing"):
        _ = screener.no_such_thing


def test_tables_in_memory_are_read_like_files(tmp_path: Path):
    frame = _frame()
    frame.to_csv(tmp_path / "tern.csv", index=False)
    from_file = _observations(tmp_path / "tern.csv", None)
    from_frame = _observations(frame, None)
    np.testing.assert_array_equal(from_file.series.rv, from_frame.series.rv)
    assert from_frame.record.file == "a table in memory"
    assert from_frame.record.sha256 == from_file.record.sha256
    table = Table.from_pandas(frame)
    table["rv"] = (table["rv"].value / 1000) * u.km / u.s
    table["rv_err"] = (table["rv_err"].value / 1000) * u.km / u.s
    table["time"].unit = u.day
    from_table = _observations(table, None)
    np.testing.assert_allclose(from_table.series.rv, from_file.series.rv)


def test_faults_of_a_table_in_memory():
    with pytest.raises(InputFaults, match="rv"):
        _observations(_frame().drop(columns="rv"), None)
    with pytest.raises(InputFault, match="out of a dict"):
        screen({"time": [1.0]})
    with pytest.raises(ValueError, match="bottomless"):
        screen(_frame(), depth="bottomless")


@pytest.fixture
def result() -> Result:
    return Result(sample())


def test_result_as_tables(result: Result):
    assert result.verdict is sample().verdict
    assert [s.signal.id for s in result.signals] == ["S1", "S2"]
    assert list(result.to_pandas()["grade"]) == ["planetary", "likely stellar", "known"]
    assert len(result.to_pandas("findings")) == 12
    assert result.to_table()["period"].unit == u.day
    assert result.to_dict()["star"] == "Tern 14"
    with pytest.raises(ValueError, match="'nights'"):
        result.to_table("nights")


def test_result_in_a_notebook_and_at_a_prompt(result: Result):
    assert repr(result) == "<Tern 14: S1 37.42 d planetary, S2 11.19 d likely stellar>"
    text = result._repr_html_()
    assert "Amplitude and phase are the same in all four seasons." in text
    evil = replace(sample().verdict, star=Star("<script>x</script>"), signals=())
    bare = Result(Screening(evil, None))
    assert "<script" not in bare._repr_html_()
    assert repr(bare).endswith("no significant period>")


def test_result_written(result: Result, tmp_path: Path):
    files = result.write(tmp_path, formats=("md",), figure_formats=())
    assert [f.name for f in files] == ["verdict.json", "dossier.md"]
    assert all(f.is_file() for f in files)


@pytest.mark.slow
def test_screening_a_table_from_start_to_end():
    star = Star("Tern 3", mass=0.9)
    result = screen(_frame(60), star=star, depth=Depth.QUICK, seed=3)
    assert result.verdict.star == star
    assert result.signals[0].signal.orbit.period == pytest.approx(9.3, abs=0.05)
    assert result.verdict.seed == 3
    again = screen(_frame(60), star=star, depth="quick", seed=3)
    assert again.to_dict() == result.to_dict()


@pytest.mark.slow
def test_the_examples_of_the_docstring_run(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(ROOT)
    tests = doctest.DocTestFinder().find(screen, "screen", globs={})
    outcome = [doctest.DocTestRunner().run(test) for test in tests]
    assert sum(o.attempted for o in outcome) >= 7
    assert sum(o.failed for o in outcome) == 0


@pytest.mark.slow
def test_the_example_of_the_readme_runs(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    (code,) = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text("utf-8"), re.DOTALL)
    demo = ROOT / "fixtures" / "heron_survey" / "stars"
    for kind in (".csv", ".toml"):
        shutil.copy(demo / f"heron-47{kind}", tmp_path / f"STAR{kind}")
    monkeypatch.chdir(tmp_path)
    names: dict[str, object] = {}
    exec(compile(code, "README.md", "exec"), names)
    result = names["result"]
    assert isinstance(result, Result)
    assert len(result.signals) == 1
    assert (tmp_path / "reports" / "STAR" / "dossier.html").is_file()
