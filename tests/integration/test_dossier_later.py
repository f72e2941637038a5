"""A dossier that is drawn later comes from the same options as its verdict."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from screener.cli import main
from tests.tables import columns, write_csv

RULES = """[meta]
name = "house rules"
version = "1"
[thresholds]
planetary_above = 3.5
"""


def _run(*arguments: str) -> int:
    with pytest.raises(SystemExit) as stop:
        main(list(arguments))
    return int(stop.value.code or 0)


@pytest.mark.slow
def test_dossier_of_a_verdict_with_options(tmp_path: Path):
    table = write_csv(tmp_path / "star.csv", columns())
    rules = tmp_path / "rules.toml"
    rules.write_text(RULES, encoding="utf-8")
    folder = tmp_path / "out"
    command = ["candidate", str(table), "--out", str(folder), "--depth", "quick"]
    assert _run(*command, "--period", "17.3", "--rules", str(rules)) == 0
    then = json.loads((folder / "verdict.json").read_text(encoding="utf-8"))
    assert then["options"]["period_d"] == 17.3
    assert then["options"]["rules_file"] == str(rules)
    (folder / "dossier.html").unlink()
    (folder / "products.npz").unlink()
    assert _run("dossier", str(folder)) == 0
    assert "house rules" in (folder / "dossier.html").read_text(encoding="utf-8")
    # without the period it would be another verdict, and none is drawn
    then["options"]["period_d"] = None
    (folder / "verdict.json").write_text(json.dumps(then), encoding="utf-8")
    (folder / "dossier.html").unlink()
    assert _run("dossier", str(folder)) == 2
    assert not (folder / "dossier.html").exists()
