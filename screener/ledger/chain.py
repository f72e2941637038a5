"""Is the chain whole? From the bytes of the ledger's files alone, without touching the disk.

What is found, given an untouched head file: any changed, missing, added or moved byte or entry,
also whole entries missing at the end. What cannot be found from the files themselves: a ledger
and a head file that were both put back to an earlier state, deleted together, or written anew
from the first entry on by someone who follows the format; there is no secret key. A hash kept
elsewhere (a paper, a message to a colleague) finds these too: see ``Reading.holds``.
"""

from __future__ import annotations

import base64
import hashlib
import json
from dataclasses import dataclass
from typing import Any

from screener.ledger.entry import NO_ENTRY, Entry, canonical, parse_line

__all__ = ["HEAD", "LEDGER", "TORN", "Reading", "examine", "head_bytes", "torn_line"]

LEDGER, HEAD, TORN = "ledger.jsonl", "ledger.head.json", "ledger.torn.jsonl"


@dataclass(frozen=True)
class Reading:
    """What the ledger's files hold.

    Attributes
    ----------
    entries : tuple of Entry
        Every line that can be read, faulty ones too if they are entries at all.
    faults : tuple of str
        What is wrong, each naming its file and entry.
    notes : tuple of str
        Traces of a write that was killed: nothing is wrong, and the next write clears them.
    torn : bytes
        What follows the last line feed.
    unanswered : tuple of str
        SHA-256 of lines of the side file that no entry answers for yet.
    head_is_behind : bool
        Whether the head file does not know the last entry yet.
    """

    entries: tuple[Entry, ...] = ()
    faults: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    torn: bytes = b""
    unanswered: tuple[str, ...] = ()
    head_is_behind: bool = False

    @property
    def last_hash(self) -> str:
        return self.entries[-1].hash if self.entries else NO_ENTRY

    @property
    def last_seq(self) -> int:
        return self.entries[-1].seq if self.entries else 0

    def holds(self, hash: str) -> bool:
        """Whether an entry of that hash, or of a hash that starts so, is in the chain."""
        return len(hash) >= 8 and any(e.hash.startswith(hash.lower()) for e in self.entries)


def head_bytes(count: int, hash: str) -> bytes:
    """The head file: how many entries there are, and the hash of the last."""
    return canonical({"count": count, "format": 1, "hash": hash}) + b"\n"


def torn_line(after: int, torn: bytes) -> bytes:
    """A line of the side file: the bytes of a write that was cut off, after so many entries."""
    text = base64.b64encode(torn).decode("ascii")
    return canonical({"after": after, "base64": text}) + b"\n"


def examine(ledger: bytes | None, head: bytes | None, side: bytes | None) -> Reading:
    """Check the chain.

    Parameters
    ----------
    ledger, head, side : bytes or None
        Content of the three files; None where there is none.
    """
    *lines, torn = (ledger or b"").split(b"\n")
    chain = _Chain()
    for number, line in enumerate(lines, start=1):
        chain.add(number, line)
    chain.close(_parsed_head(head))
    entries = tuple(chain.entries)
    faults, notes = list(chain.faults), []
    fault: str | None = f"{LEDGER}: is gone, while {HEAD} is still there"
    note = None
    if ledger is not None or head is None:
        fault, note = _check_head(head, entries, len(lines), chain.last_is_sound)
    faults += [fault] if fault else []
    notes += [note] if note else []
    if torn and not fault:
        notes.append(
            f"{LEDGER}: ends in {len(torn)} bytes of a write that was cut off; no entry is lost, "
            f"and the next decision moves them to {TORN}"
        )
    side_faults, unanswered = _check_side(side, entries)
    return Reading(
        entries, (*faults, *side_faults), tuple(notes), torn, unanswered, note is not None
    )


class _Chain:
    def __init__(self) -> None:
        self.entries: list[Entry] = []
        self.faults: list[str] = []
        self.last_is_sound = True
        self._sure = True  # whether the line before could be read
        self._pending: tuple[Entry, str] | None = None  # its hash does not fit: which half is off?

    def add(self, number: int, line: bytes) -> None:
        try:
            entry, actual = parse_line(line)
        except ValueError as error:
            self._settle(None)
            self.faults.append(f"{LEDGER}, line {number}: {error}; it was changed")
            self.last_is_sound = self._sure = False
            return
        before = self.entries[-1] if self.entries else None
        doubtful = self._pending is not None
        self._settle(entry.previous)
        if self._sure and not doubtful:
            self._link(entry, before)
        self.entries.append(entry)
        self._sure = True
        self.last_is_sound = entry.hash == actual
        if not self.last_is_sound:
            self._pending = (entry, actual)

    def _link(self, entry: Entry, before: Entry | None) -> None:
        seq, hash = (before.seq, before.hash) if before else (0, NO_ENTRY)
        if entry.seq > seq + 1:
            lost = entry.seq - seq - 1
            words = "1 entry is" if lost == 1 else f"{lost} entries are"
            where = f"between entry {seq} and" if seq else "before"
            self.faults.append(f"{LEDGER}: {words} missing {where} entry {entry.seq}")
        elif entry.seq <= seq:
            self.faults.append(f"{LEDGER}: entry {entry.seq} stands after entry {seq}")
        elif entry.previous != hash:
            self.faults.append(
                f"{LEDGER}: entry {entry.seq} does not follow from the entry before it; "
                "one of the two was exchanged"
            )

    def _settle(self, confirmed: str | None) -> None:
        """Name what is wrong with an entry whose hash does not fit, now that more is known."""
        if self._pending is None:
            return
        entry, actual = self._pending
        self._pending = None
        what = "the hash it carries" if confirmed == actual else "its content"
        self.faults.append(f"{LEDGER}, entry {entry.seq} on {entry.star} {entry.signal}: "
                           f"{what} was changed after it was written")  # fmt: skip

    def close(self, head: dict[str, Any] | None) -> None:
        self._settle(head["hash"] if head else None)


def _parsed_head(head: bytes | None) -> dict[str, Any] | None:
    """The head file's content, None unless it is exactly as we write it."""
    try:
        content = json.loads((head or b"").decode("ascii"))
        count, hash = content["count"], content["hash"]
        if type(count) is int and head_bytes(count, str(hash)) == head:
            return {"count": count, "hash": str(hash)}
    except (ValueError, KeyError, TypeError, RecursionError):
        pass
    return None


def _check_head(
    head: bytes | None, entries: tuple[Entry, ...], n_lines: int, last_is_sound: bool
) -> tuple[str | None, str | None]:
    """(fault, note) of the head file."""
    last = entries[-1] if entries else None
    behind = (
        f"{HEAD}: does not know the last entry yet; its write was cut off after the entry itself "
        "was safe, and the next decision brings it up to date"
    )
    if head is None:
        if n_lines > 1:
            return f"{HEAD}: is gone, so entries missing at the end would not be seen", None
        return None, behind if n_lines else None
    content = _parsed_head(head)
    if content is None:
        return f"{HEAD}: was changed; it is not as it was written", None
    count, hash = content["count"], content["hash"]
    seq = max(last.seq if last else 0, n_lines)
    if count > seq:
        return (
            f"{LEDGER}: {count - seq} of {count} entries are missing or changed at the end "
            f"({HEAD} counts {count})"
        ), None
    if not last_is_sound or last is None:
        return None, None  # said already
    if (count, hash) == (last.seq, last.hash):
        return None, None
    if (count, hash) == (last.seq - 1, last.previous):
        return None, behind
    if count < last.seq - 1:
        return f"{HEAD}: counts {count} entries, but {LEDGER} holds {last.seq}", None
    return f"{HEAD}: names another last entry than {LEDGER} holds; one of them was changed", None


def _check_side(
    side: bytes | None, entries: tuple[Entry, ...]
) -> tuple[list[str], tuple[str, ...]]:
    """Faults of the side file, and its lines that no entry answers for."""
    faults, there = [], []
    *lines, rest = (side or b"").split(b"\n")
    if rest:
        faults.append(f"{TORN}: the end of its last line is missing; it was changed")
    for number, line in enumerate(lines, start=1):
        try:
            content = json.loads(line.decode("ascii"))
            torn = base64.b64decode(content["base64"], validate=True)
            sound = torn_line(content["after"], torn) == line + b"\n"
        except (ValueError, KeyError, TypeError, RecursionError):
            sound = False
        if not sound:
            faults.append(f"{TORN}, line {number}: was changed; it is not as it was written")
        there.append(hashlib.sha256(line).hexdigest())
    answered = {hash for entry in entries for hash in entry.set_aside}
    for entry in entries:
        for hash in entry.set_aside:
            if hash not in there and not faults:
                faults.append(
                    f"{TORN}: what entry {entry.seq} set aside there is gone or was changed"
                )
    return faults, tuple(hash for hash in there if hash not in answered)
