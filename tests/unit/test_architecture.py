"""Imports run one way along the data."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2] / "screener"

BASE = {"core", "version"}
MAY_IMPORT = {
    "core": set(),
    "intake": {"core"},
    "search": {"core"},
    "models": {"core", "search"},
    "evidence": {"core", "search", "models"},
    "rules": {"core"},
    "system": {"core", "models", "search"},
    "curves": {"core", "search", "models"},
    "judging": {"core", "models", "evidence", "rules", "system"},
    "pipeline": {"core", "judging", "models", "rules", "system", "curves"},
    "synthetic": {"core", "models"},
    "report": {"core", "models"},
    "store": {"core", "report"},
    "ledger": {"core", "report", "intake"},
    "face": {"core", "intake", "pipeline", "report", "rules"},
    "catalogue": {"core", "intake", "pipeline", "report", "rules", "store"},
}


def _imported_rooms(path: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(path.read_text())):
        names = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            names = [node.module]
        for name in names:
            parts = name.split(".")
            if parts[0] == "screener" and len(parts) > 1:
                yield parts[1]


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_imports_run_one_way(room: str) -> None:
    place = ROOT / room
    files = sorted(place.rglob("*.py")) if place.is_dir() else [ROOT / f"{room}.py"]
    assert files and all(f.exists() for f in files)
    for path in files:
        strange = set(_imported_rooms(path)) - MAY_IMPORT[room] - {room}
        assert not strange, f"{path.relative_to(ROOT)} imports {sorted(strange)}"


def test_every_room_has_a_rule() -> None:
    rooms = {p.name for p in ROOT.iterdir() if p.is_dir() and not p.name.startswith("__")}
    assert rooms <= set(MAY_IMPORT) | {"cli"}


def test_no_global_random_generator() -> None:
    for path in ROOT.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if not (isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute)):
                continue
            owner = node.func.value
            if isinstance(owner, ast.Attribute) and owner.attr == "random":
                assert node.func.attr in {
                    "default_rng",
                    "SeedSequence",
                    "Generator",
                    "MT19937",
                }, path
