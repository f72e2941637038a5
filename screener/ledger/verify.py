"""Is everything as it was when the decisions were made: ledger, verdicts, inputs?"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import PurePosixPath
from typing import Any

from screener.core import InputFault
from screener.ledger.chain import LEDGER, Reading
from screener.ledger.changes import changes
from screener.ledger.entry import Entry
from screener.ledger.inputs import find_input
from screener.ledger.journal import Journal
from screener.ledger.place import Place

__all__ = ["Verification", "verify"]


@dataclass(frozen=True)
class Verification:
    """Faults, each naming the file that is not as it was, and harmless remarks."""

    reading: Reading
    faults: tuple[InputFault, ...]
    notes: tuple[str, ...]
    n_verdicts: int
    n_inputs: int


def verify(place: Place, anchor: str | None = None, star: str | None = None) -> Verification:
    """Check the chain, and for each star the verdict and inputs of its latest decision.

    Earlier decisions of a star may refer to verdicts that a new screening has replaced since; the
    later entry attests that. A verdict that no entry attests is a fault: whether someone altered
    it or screened the star again, the file is not the one that was decided on.

    Parameters
    ----------
    anchor : str, optional
        Hash of an entry, noted elsewhere (at least its first eight digits), that the chain must
        hold.
    star : str, optional
        Look only at the verdict and inputs of the star of this folder. The chain is checked whole.

    Raises
    ------
    InputFault
        If the ledger's files cannot be read at all.
    """
    reading = Journal(place.folder).read()
    chain = [
        InputFault(
            str(place.folder / name.split(",")[0]),
            f"{name.partition(',')[2].strip()}: {text}".removeprefix(": "),
            "Compare with a copy of the folder and restore it",
        )
        for name, _, text in (fault.partition(": ") for fault in reading.faults)
    ]
    if anchor is not None and not reading.holds(anchor):
        chain.append(
            InputFault(
                str(place.folder / LEDGER),
                f"no entry has the hash {anchor}, so the ledger was put back or written anew since "
                "that hash was noted",
                "Compare with a copy of the folder and restore it",
            )
        )
    latest: dict[str, Entry] = {}
    for entry in reading.entries:
        if star is None or entry.star == star:
            latest[entry.star] = entry
    faults, n_inputs = list(chain), 0
    for entry in latest.values():
        faults += _verdict_faults(place, entry)
        for kind, record in sorted(entry.inputs.items()):
            if record is not None:
                n_inputs += 1
                faults += _input_faults(place, entry, kind, record)
    return Verification(reading, tuple(faults), reading.notes, len(latest), n_inputs)


def _inside(file: str) -> bool:
    parts = PurePosixPath(file).parts
    return bool(parts) and not file.startswith("/") and ".." not in parts


def _verdict_faults(place: Place, entry: Entry) -> list[InputFault]:
    file = str(entry.verdict.get("file", ""))
    path = place.folder / file
    name = f"{entry.star}, decided in entry {entry.seq}"
    if not _inside(file):
        return []  # no entry of ours says so; the chain's faults name it
    try:
        sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError as error:
        cure = "Put it back, or screen the star again and decide anew"
        return [InputFault(str(path), f"verdict of {name}: {error.strerror}", cure)]
    if sha256 == entry.verdict.get("sha256"):
        return []
    try:
        moved = changes(entry, place.verdict(entry.star))
        what = "; ".join(str(change) for change in moved) or "none of the deciding numbers moved"
    except (InputFault, KeyError, TypeError, ValueError):
        what = "it cannot be read as a verdict any more"
    return [
        InputFault(
            str(path),
            f"verdict of {name}: was changed since ({what})",
            "If the star was screened again, decide anew; if not, restore the file",
        )
    ]


def _input_faults(place: Place, entry: Entry, kind: str, record: Any) -> list[InputFault]:
    try:
        file, sha256 = str(record["file"]), str(record["sha256"])
    except (KeyError, TypeError):
        return []
    folder = (place.folder / str(entry.verdict.get("file", ""))).parent
    found = find_input(kind, file, sha256, folder)
    if found.same:
        return []
    name = f"{kind} of {entry.star}, decided in entry {entry.seq}"
    if found.path is None:
        problem = f"{name}: cannot be checked, {found.problem}"
        return [InputFault(file, problem, "Put it back where it was")]
    return [
        InputFault(
            str(found.path),
            f"{name}: was changed since (SHA-256 {sha256[:12]}... then, "
            f"{str(found.sha256)[:12]}... now)",
            "Restore it, or screen the star again and decide anew",
        )
    ]
