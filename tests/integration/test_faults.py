"""A collection of bad tables and sidecars: each is refused with a message that names the cure."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from screener.cli import main
from screener.core import InputFaults
from screener.intake import read_star
from tests.integration.bad_inputs import company, files, values
from tests.integration.bad_inputs.register import CASES, edited, with_cell
from tests.tables import columns

# importing a collection registers its cases
COLLECTIONS = (company, files, values)


@pytest.mark.parametrize("name", sorted(CASES))
def test_is_refused_with_place_and_cure(name: str, tmp_path: Path) -> None:
    maker, pattern = CASES[name]
    table = maker(tmp_path)
    with pytest.raises(InputFaults) as caught:
        read_star(table)
    text = str(caught.value)
    assert re.search(pattern, text, re.DOTALL), text
    assert all(f.file and f.problem and f.cure for f in caught.value.faults)
    assert "Traceback" not in text


@pytest.mark.parametrize("name", sorted(CASES))
def test_command_exits_2(name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    table = CASES[name][0](tmp_path)
    with pytest.raises(SystemExit) as stop:
        main(["candidate", str(table), "--out", str(tmp_path / "out")])
    err = capsys.readouterr().err
    assert stop.value.code == 2, err
    assert "Traceback" not in err and err.strip()
    assert not (tmp_path / "out" / "verdict.json").exists()


@pytest.mark.parametrize("name", ["pipe", "modified_julian", "misspelt_key", "latin1", "link_loop"])
def test_command_in_its_own_process(name: str, tmp_path: Path) -> None:
    maker, pattern = CASES[name]
    table = maker(tmp_path)
    done = subprocess.run(
        [sys.executable, "-m", "screener", "candidate", str(table), "--out", str(tmp_path / "o")],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 2, done.stderr
    assert re.search(pattern, done.stderr, re.DOTALL), done.stderr
    assert "Traceback" not in done.stderr


@pytest.mark.skipif(os.geteuid() == 0, reason="root reads everything")
def test_unreadable(tmp_path: Path) -> None:
    path = edited(tmp_path)
    path.chmod(0)
    with pytest.raises(InputFaults, match=r"cannot be read.*permissions"):
        read_star(path)


def test_all_faults_come_in_one_go(tmp_path: Path) -> None:
    (tmp_path / "star.toml").write_text('[star]\nteff = 1\n[units]\ns_index = "parrots"\n')
    path = edited(
        tmp_path,
        time=columns()["time"] - 2_400_000.5,
        rv_err=with_cell("rv_err", 3, -2.0),
        rv=with_cell("rv", 5, -9_999_999.0),
    )
    with pytest.raises(InputFaults) as caught:
        read_star(path)
    text = str(caught.value)
    for part in ("teff_k", "parrots", "Julian", "rv_err', data row 4", "rv', data row 6"):
        assert part in text


def test_the_sound_table_is_not_refused(tmp_path: Path) -> None:
    # the control: without it, a reader that refuses everything would pass all of the above
    assert read_star(edited(tmp_path)).series.n_obs == 40
