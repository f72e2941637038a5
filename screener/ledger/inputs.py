"""Finding a verdict's inputs again, by path and by hash.

Verdicts record absolute paths. Where a file is not there any more, it may have moved together with
the verdict's folder: the end of its path is then tried below each folder above the verdict. A file
found that way counts only if its hash is the recorded one.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from screener.core import InputFault
from screener.intake.catalogue import SEPARATOR
from screener.intake.files import digest, read_bytes

__all__ = ["KINDS", "Found", "find_input", "input_hash", "recorded_inputs"]

KINDS = ("table", "sidecar", "photometry")
_KEYS = {
    "table": ("file", "sha256"),
    "sidecar": ("sidecar", "sidecar_sha256"),
    "photometry": ("photometry", "photometry_sha256"),
}


@dataclass(frozen=True)
class Found:
    """Where an input is, and what it holds now.

    ``path`` is what ``screener.intake.read_star`` takes ("TABLE::STAR" for one star of many);
    None with a ``problem`` if there is no such file. ``same`` says whether the hash is as recorded.
    """

    kind: str
    recorded: str
    path: Path | None
    sha256: str | None
    same: bool
    problem: str = ""


def recorded_inputs(verdict: Mapping[str, Any]) -> dict[str, dict[str, str] | None]:
    """Per kind the recorded ``file`` and ``sha256``; None for what the verdict did not use."""
    record = verdict["input"]
    found: dict[str, dict[str, str] | None] = {}
    for kind, (file, sha256) in _KEYS.items():
        used = record.get(file) and record.get(sha256)
        found[kind] = {"file": str(record[file]), "sha256": str(record[sha256])} if used else None
    return found


def input_hash(path: Path) -> str:
    """SHA-256 of the file that an input's path means.

    Raises
    ------
    InputFault
        If it is absent or cannot be read.
    """
    return digest(read_bytes(_file(path)))


def _file(path: Path) -> Path:
    """The file of "TABLE::STAR", or the path itself."""
    if SEPARATOR in path.name and not path.exists():
        return path.with_name(path.name.split(SEPARATOR, 1)[0])
    return path


def find_input(kind: str, recorded: str, sha256: str, folder: Path) -> Found:
    """Look for an input at its recorded place, then where it would lie had all moved together.

    Parameters
    ----------
    kind : str
        One of ``KINDS``.
    recorded, sha256 : str
        As in the verdict.
    folder : Path
        The verdict's folder.
    """
    problem, changed = "", None
    for number, path in enumerate(_places(recorded, folder)):
        try:
            hash = input_hash(path)
        except (InputFault, OSError, ValueError) as fault:
            if number == 0:
                problem = fault.problem if isinstance(fault, InputFault) else str(fault)
            continue
        if hash == sha256:
            return Found(kind, recorded, path, hash, True)
        if number == 0:
            changed = Found(kind, recorded, path, hash, False)
    return changed or Found(kind, recorded, None, None, False, problem or "there is no such file")


def _places(recorded: str, folder: Path) -> Iterator[Path]:
    first = Path(recorded)
    yield first
    parts = [part for part in first.parts if part not in ("/", "..", ".")]
    for above in (folder.absolute(), *folder.absolute().parents):
        for start in range(len(parts)):
            yield above.joinpath(*parts[start:])
