"""Opening a file with suspicion: what it is and how large is asked before a byte is read."""

from __future__ import annotations

import difflib
import hashlib
import stat
from collections.abc import Callable
from pathlib import Path

from screener.core import InputFault, InputFaults

__all__ = ["MAX_BYTES", "FaultList", "decode", "digest", "guarded", "read_bytes", "suggest"]

MAX_BYTES = 200_000_000


class FaultList:
    """Collects the faults of a file so that they come out in one go."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.faults: list[InputFault] = []

    def __bool__(self) -> bool:
        return bool(self.faults)

    def add(self, problem: str, cure: str, file: str | None = None) -> None:
        self.faults.append(InputFault(file or self.file, problem, cure))

    def extend(self, other: InputFaults | FaultList) -> None:
        self.faults.extend(other.faults)

    def check(self) -> None:
        """Raise :class:`InputFaults` if there is any."""
        if self.faults:
            raise InputFaults(self.faults)


def guarded(faults: FaultList, work: Callable[[], None]) -> None:
    """Run ``work``; its :class:`InputFault` joins the list instead of ending the reading."""
    try:
        work()
    except InputFault as fault:
        faults.faults.append(fault)
    except InputFaults as several:
        faults.extend(several)


def suggest(word: str, known: list[str]) -> str:
    """``" Did you mean 'x'?"`` or nothing."""
    close = difflib.get_close_matches(word.lower(), [k.lower() for k in known], n=1, cutoff=0.6)
    if not close:
        return ""
    match = next(k for k in known if k.lower() == close[0])
    return f" Did you mean '{match}'?"


def read_bytes(path: Path, max_bytes: int = MAX_BYTES) -> bytes:
    """The content of a regular, readable, non-empty file of a sane size.

    Raises
    ------
    InputFault
        The file is absent, a folder, a pipe or device, a symbolic link that leads nowhere, empty,
        unreadable, or larger than ``max_bytes``. Nothing is read before the size is known.
    """
    name = str(path)
    try:
        status = path.stat()
    except FileNotFoundError:
        raise _absent(path) from None
    except (OSError, ValueError) as error:
        raise InputFault(
            name,
            f"the path cannot be followed ({getattr(error, 'strerror', None) or error})",
            "Check the path and the symbolic links in it.",
        ) from None
    if stat.S_ISDIR(status.st_mode):
        raise InputFault(
            name,
            "this is a folder, not a table",
            "Name one table in it; a folder of tables goes to 'screener catalogue'.",
        )
    if not stat.S_ISREG(status.st_mode):
        raise InputFault(
            name,
            "this is not a regular file (a pipe, a socket or a device)",
            "Save its content to a file first and name that file.",
        )
    if status.st_size == 0:
        raise InputFault(name, "the file is empty", "Download or export the table again.")
    if status.st_size > max_bytes:
        raise InputFault(
            name,
            f"the file has {status.st_size / 1e6:,.0f} MB, more than the limit of "
            f"{max_bytes / 1e6:,.0f} MB",
            "Keep only the columns and rows of the stars in question.",
        )
    try:
        with path.open("rb") as stream:
            content = stream.read(max_bytes + 1)
    except OSError as error:
        raise InputFault(
            name,
            f"the file cannot be read ({error.strerror or error})",
            "Check its permissions and the disk.",
        ) from None
    return content


def _absent(path: Path) -> InputFault:
    if path.is_symlink():
        return InputFault(
            str(path), "this symbolic link points to nothing", "Repair the link or name the file."
        )
    try:
        siblings = [p.name for p in path.parent.iterdir()]
    except OSError:
        siblings = []
    return InputFault(
        str(path), "there is no such file", "Check the path." + suggest(path.name, siblings)
    )


def decode(path: Path, content: bytes) -> str:
    """The text of a file, which must be UTF-8.

    Raises
    ------
    InputFault
        Compressed or other binary content, UTF-16, or bytes that are not UTF-8; the message names
        the line.
    """
    name = str(path)
    if content.startswith((b"\x1f\x8b", b"BZh", b"PK\x03\x04", b"\xfd7zXZ", b"\x28\xb5\x2f\xfd")):
        raise InputFault(name, "the file is compressed", "Unpack it first and name the table.")
    if content.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InputFault(name, "the text is encoded as UTF-16", "Save it as UTF-8.")
    if b"\0" in content:
        raise InputFault(
            name,
            "the file holds binary data that is no table (zero bytes)",
            "Give a CSV, ECSV, FITS, VOTable, IPAC, RDB, MRT or plain text table.",
        )
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise InputFault(
            name,
            f"line {line}: byte 0x{content[error.start]:02x} is not UTF-8 text",
            "Save the table as UTF-8 (iconv -f latin1 -t utf-8), or download it again if it is "
            "damaged.",
        ) from None
    if not text.strip():
        raise InputFault(name, "the file holds only white space", "Download the table again.")
    return text


def digest(content: bytes) -> str:
    """SHA-256, hexadecimal."""
    return hashlib.sha256(content).hexdigest()
