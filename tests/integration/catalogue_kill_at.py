"""The command line with stand-in stars, killed at a chosen moment of the third star."""

from __future__ import annotations

import os
import signal
import sys
from pathlib import Path
from typing import Any

from screener.catalogue.folder import RunFolder
from screener.report import files
from screener.store import Store
from tests.integration.catalogue_work import main

__all__: list[str] = []


def _die() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def _arm(moment: str) -> None:
    third = 3
    count = {"verdicts": 0}
    record, write, replace = Store.record_verdict, RunFolder.write_verdict, Path.replace

    def writing(self: RunFolder, name: str, content: bytes) -> str:
        count["verdicts"] += 1
        return write(self, name, content)

    def replacing(self: Path, target: Any) -> Path:
        if count["verdicts"] == third and Path(target).name == "verdict.json":
            _die()
        return replace(self, target)

    def recording(self: Store, *arguments: Any, **options: Any) -> str:
        if count["verdicts"] == third and moment == "before commit":
            _die()
        grade = record(self, *arguments, **options)
        if count["verdicts"] == third and moment == "after commit":
            _die()
        return grade

    RunFolder.write_verdict = writing  # type: ignore[method-assign]
    Store.record_verdict = recording  # type: ignore[method-assign]
    if moment == "before rename":
        Path.replace = replacing  # type: ignore[method-assign,assignment]
    assert files.writing  # it renames by Path.replace


if __name__ == "__main__":
    _arm(sys.argv.pop(1))
    main()
