"""One entry of the ledger: what it holds, its canonical text, and its hash.

The text of an entry is JSON in one form only: keys sorted, no white space, ASCII. A line that is
not exactly that form of itself was changed. The hash is SHA-256 over the entry without its hash,
and the hash of the entry before is part of the entry, so that no entry can be changed, taken out,
put in or moved without every later one showing it (Haber & Stornetta 1991, J. Cryptology 3, 99).
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

__all__ = ["DECISIONS", "FORMAT", "NO_ENTRY", "Entry", "canonical", "parse_line", "sealed"]

FORMAT = 1
DECISIONS = ("announce", "observe", "set-aside")
NO_ENTRY = "0" * 64  # the hash "before" the first entry


@dataclass(frozen=True)
class Entry:
    """A decision on one signal of one verdict.

    Attributes
    ----------
    seq : int
        1 for the first.
    time : str
        UTC, ISO 8601.
    star, star_name, signal : str
        The star's folder, its name in the verdict, and the signal's id there.
    decision : str
        One of ``DECISIONS``.
    by, note : str
        Who decided, and what they want to say.
    reason : str or None
        Why the decision departs from the grade; never None where it does.
    weighed_most : str or None
        The test whose finding weighed most.
    verdict : mapping
        ``file`` (relative to the ledger) and ``sha256`` of its bytes.
    inputs : mapping
        ``table``, ``sidecar``, ``photometry``: each ``file`` and ``sha256``, or None.
    snapshot : mapping
        The deciding numbers as they were.
    set_aside : tuple of str
        SHA-256 of the lines of the side file that this entry answers for (see ``journal``).
    previous, hash : str
        Hash of the entry before, and of this one.
    """

    seq: int
    time: str
    star: str
    star_name: str
    signal: str
    decision: str
    by: str
    note: str
    reason: str | None
    weighed_most: str | None
    verdict: Mapping[str, Any]
    inputs: Mapping[str, Any]
    snapshot: Mapping[str, Any]
    set_aside: tuple[str, ...] = ()
    previous: str = NO_ENTRY
    hash: str = ""

    def to_dict(self) -> dict[str, Any]:
        """As plain JSON values, the format's number included."""
        content: dict[str, Any] = {f.name: getattr(self, f.name) for f in fields(self)}
        content["set_aside"] = list(self.set_aside)
        return {"format": FORMAT, **content}

    def line(self) -> bytes:
        """The line of the ledger, with its line feed."""
        return canonical(self.to_dict()) + b"\n"


def canonical(content: Any) -> bytes:
    """The one JSON text of a value: sorted keys, no white space, ASCII, no NaN."""
    text = json.dumps(
        content, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False
    )
    return text.encode("ascii")


def _hash(content: Mapping[str, Any]) -> str:
    bare = {key: value for key, value in content.items() if key != "hash"}
    return hashlib.sha256(canonical(bare)).hexdigest()


def sealed(content: Mapping[str, Any]) -> Entry:
    """The entry of these fields, with its hash put in."""
    entry = Entry(**{**content, "hash": ""})
    return Entry(**{**content, "hash": _hash(entry.to_dict())})


_NAMES = frozenset({"format", *(f.name for f in fields(Entry))})
_TEXTS = ("time", "star", "star_name", "signal", "decision", "by", "note", "previous", "hash")
_MAPPINGS = ("verdict", "inputs", "snapshot")


def parse_line(line: bytes) -> tuple[Entry, str]:
    """An entry from its line (without line feed), and the hash that its content gives.

    The caller compares that hash with ``Entry.hash``.

    Raises
    ------
    ValueError
        If the line is not an entry in canonical form.
    """
    try:
        content = json.loads(line.decode("ascii"))
    except (ValueError, RecursionError):
        raise ValueError("is not an entry") from None
    if not isinstance(content, dict) or set(content) != _NAMES:
        raise ValueError("does not hold the fields of an entry")
    if content["format"] != FORMAT:
        raise ValueError(f"has format {content['format']!r}; this version reads {FORMAT}")
    try:
        exact = canonical(content) == line
    except ValueError:
        exact = False
    if not exact:
        raise ValueError("is not in the form in which entries are written")
    sound = (
        type(content["seq"]) is int
        and all(isinstance(content[name], str) for name in _TEXTS)
        and all(isinstance(content[name], dict) for name in _MAPPINGS)
        and isinstance(content["set_aside"], list)
        and all(isinstance(item, str) for item in content["set_aside"])
    )
    if not sound:
        raise ValueError("holds a value of the wrong kind")
    content["set_aside"] = tuple(content["set_aside"])
    del content["format"]
    entry = Entry(**content)
    return entry, _hash(entry.to_dict())
