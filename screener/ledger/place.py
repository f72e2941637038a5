"""From what a person names to a ledger and the verdicts it is about."""

from __future__ import annotations

import difflib
import hashlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from screener.core import InputFault
from screener.ledger.chain import HEAD, LEDGER
from screener.report.verdict_json import read_verdict

__all__ = ["Place", "ReadVerdict", "open_place"]

_MANY = 500  # stars; more verdicts than this are not opened only to learn their names


@dataclass(frozen=True)
class ReadVerdict:
    """A verdict with the hash of the very bytes it was read from."""

    star: str  # the folder's name
    file: str  # relative to the ledger
    content: dict[str, Any]
    sha256: str


@dataclass(frozen=True)
class Place:
    """A folder with a ledger, of one star (``single``) or of a run."""

    folder: Path
    single: bool
    named: str | None = None  # the star, if its folder was named and its run holds the ledger

    def stars(self) -> list[str]:
        """Folder names of the stars that have a verdict."""
        if self.single:
            return [self.folder.absolute().name]
        return sorted(p.parent.name for p in self.folder.glob("*/verdict.json"))

    def file(self, star: str) -> str:
        """The verdict's path relative to the ledger."""
        return "verdict.json" if self.single else f"{star}/verdict.json"

    def verdict(self, star: str) -> ReadVerdict:
        """Read a star's verdict; ``star`` is one of ``stars()``.

        Raises
        ------
        InputFault
            If it cannot be read.
        """
        file = self.file(star)
        path = self.folder / file
        while True:
            content = read_verdict(path)
            sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
            if read_verdict(path) == content:  # else it was replaced between the two looks
                return ReadVerdict(star, file, content, sha256)

    def find(self, name: str | None) -> str:
        """The star's folder name from what a person typed: that, or the name in the verdict.

        Raises
        ------
        InputFault
            If there is no such star, or the name could be several.
        """
        name = self.named if name is None else name
        known = self.stars()
        if name is None:
            if len(known) == 1:
                return known[0]
            raise InputFault(str(self.folder), f"holds {len(known)} stars", "Name one with --star")
        if name in known:
            return name
        plain = _plain(name)
        matches = [star for star in known if _plain(star) == plain]
        if not matches and len(known) <= _MANY:
            matches = [star for star in known if _plain(self._star_name(star)) == plain]
        if len(matches) == 1:
            return matches[0]
        if matches:
            raise InputFault(
                str(self.folder), f"the name {name!r} fits {', '.join(matches)}", "Name one folder"
            )
        close = difflib.get_close_matches(name, known, n=1)
        cure = f"Did you mean {close[0]!r}?" if close else f"There is {', '.join(known[:8])}"
        raise InputFault(str(self.folder), f"holds no verdict of a star {name!r}", cure)

    def _star_name(self, star: str) -> str:
        try:
            return str(read_verdict(self.folder / self.file(star))["star"])
        except InputFault:
            return ""


def _plain(name: str) -> str:
    return "".join(c for c in name.casefold() if c.isalnum())


def open_place(path: Path) -> Place:
    """The ledger that belongs to a run's folder, or to a star's.

    A star's folder inside a run shares the run's ledger, so that there is one record.

    Raises
    ------
    InputFault
        If the path is neither.
    """
    if path.name in ("verdict.json", LEDGER) and path.is_file():
        path = path.parent
    if not path.is_dir():
        problem = "is not a folder" if path.exists() else "there is no such folder"
        raise InputFault(str(path), problem, "Give a run's folder, or the folder of one star")
    above = path.absolute().parent
    if (path / "verdict.json").is_file():
        own = (path / LEDGER).exists() or (path / HEAD).exists()
        if not own and ((above / "catalogue.sqlite").is_file() or (above / LEDGER).is_file()):
            return Place(above, False, path.absolute().name)
        return Place(path, True)
    has_ledger = (path / LEDGER).exists() or (path / HEAD).exists()
    has_verdicts = next(path.glob("*/verdict.json"), None) is not None
    if has_ledger or has_verdicts or (path / "catalogue.sqlite").is_file():
        return Place(path, False)
    raise InputFault(
        str(path),
        "holds neither a verdict nor stars with one",
        "Give the folder that 'screener catalogue' or 'screener candidate' wrote",
    )
