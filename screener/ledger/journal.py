"""The ledger's files: locked, appended to, brought to the disk before success is reported.

``ledger.jsonl`` holds one entry a line and only ever grows. ``ledger.head.json`` holds count and
last hash, written to a temporary file and renamed, so that whole entries missing at the end are
seen. Order of a write: lock, check the chain, append, fsync, head. A kill leaves at worst a last
line without its end, or a head that is one entry behind. The cut-off bytes of such a line never
were an entry; the next write moves them to ``ledger.torn.jsonl`` and answers for them by hash.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import stat
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from screener.core import InputFault, InputFaults
from screener.ledger.chain import HEAD, LEDGER, TORN, Reading, examine, head_bytes, torn_line
from screener.ledger.entry import Entry, sealed
from screener.report.files import write_bytes

__all__ = ["Journal"]

_PATIENCE = 60.0  # s to wait for another writer
_BLOCK = 1 << 20
_COPY = "Compare with a copy of the folder and restore what was changed"


class Journal:
    """The ledger of one folder.

    Parameters
    ----------
    folder : Path
        Where the files lie or will lie.
    patience : float
        Seconds to wait for other writers.
    """

    def __init__(self, folder: Path, patience: float = _PATIENCE) -> None:
        self.folder, self.patience = folder, patience
        self.path, self.head, self.side = (folder / name for name in (LEDGER, HEAD, TORN))

    def read(self) -> Reading:
        """What the files hold, seen at one moment between two writes.

        Raises
        ------
        InputFault
            If they cannot be read, or another process does not let go of them.
        """
        for _ in range(3):  # the first writer may be about to make the file
            try:
                with self._locked(os.O_RDONLY, fcntl.LOCK_SH) as descriptor:
                    return self._examined(_content(descriptor))
            except FileNotFoundError:
                if not self.head.exists():
                    return Reading()
        return examine(None, self._beside(self.head), self._beside(self.side))

    def append(self, draft: Mapping[str, Any]) -> tuple[Entry, tuple[str, ...]]:
        """Add an entry; when this returns, it is on the disk.

        Parameters
        ----------
        draft : mapping
            The fields of ``Entry`` but ``seq``, ``time``, ``set_aside``, ``previous``, ``hash``.

        Returns
        -------
        (Entry, tuple of str)
            The entry, and what was found and put in order of an earlier write.

        Raises
        ------
        InputFaults
            If the chain is not whole: nothing is written on a damaged ledger.
        InputFault
            If another process does not let go of the ledger, or it is no regular file.
        OSError
            If the disk is full or the folder cannot be written to; the ledger is as before.
        """
        flags = os.O_RDWR | os.O_CREAT | os.O_APPEND
        if not self.path.exists() and self.head.exists():
            raise InputFaults(
                InputFault(str(self.folder), fault, _COPY) for fault in self.read().faults
            )
        with self._locked(flags, fcntl.LOCK_EX) as descriptor:
            content = _content(descriptor)
            reading = self._examined(content)
            if reading.faults:
                raise InputFaults(
                    InputFault(str(self.folder), fault, _COPY) for fault in reading.faults
                )
            unanswered = reading.unanswered
            if reading.torn:
                unanswered = self._set_aside(descriptor, len(content), reading)
            entry = sealed(
                {
                    **draft,
                    "seq": reading.last_seq + 1,
                    "time": datetime.now(UTC).isoformat(timespec="microseconds"),
                    "set_aside": unanswered,
                    "previous": reading.last_hash,
                }
            )
            if reading.head_is_behind:  # it may be one entry behind, never two
                self._write_head(reading.entries[-1])
            self._write(descriptor, entry.line(), len(content) - len(reading.torn))
            notes = self._repaired(reading)
            try:
                self._write_head(entry)
            except OSError as error:  # the entry itself is safe, and must not be given twice
                notes += (f"{self.head}: could not be written ({error.strerror}); the decision is "
                          "recorded all the same",)  # fmt: skip
        return entry, notes

    def _write_head(self, entry: Entry) -> None:
        write_bytes(self.head, head_bytes(entry.seq, entry.hash))
        _sync_folder(self.folder)

    def _repaired(self, reading: Reading) -> tuple[str, ...]:
        if not reading.torn:
            return ()
        return (
            f"{self.path}: an earlier write had been cut off; its {len(reading.torn)} bytes, which "
            f"never were an entry, are kept in {self.side.name}",
        )

    def _set_aside(self, descriptor: int, size: int, reading: Reading) -> tuple[str, ...]:
        """Keep the cut-off bytes in the side file, then take them off the ledger's end."""
        line = torn_line(reading.last_seq, reading.torn)
        hash = hashlib.sha256(line[:-1]).hexdigest()
        unanswered = reading.unanswered
        if hash not in unanswered:  # there already if we were killed between these two steps
            write_bytes(self.side, (self._beside(self.side) or b"") + line)
            _sync_folder(self.folder)
            unanswered = (*unanswered, hash)
        os.ftruncate(descriptor, size - len(reading.torn))
        os.fsync(descriptor)
        return unanswered

    def _write(self, descriptor: int, line: bytes, size: int) -> None:
        try:
            rest = memoryview(line)
            while rest:
                rest = rest[os.write(descriptor, rest) :]
            os.fsync(descriptor)
        except OSError as error:
            with suppress(OSError):  # a torn line is recognised later, if this fails as well
                os.ftruncate(descriptor, size)
            raise OSError(error.errno, error.strerror, str(self.path)) from None

    def _examined(self, content: bytes) -> Reading:
        return examine(content, self._beside(self.head), self._beside(self.side))

    def _beside(self, path: Path) -> bytes | None:
        try:
            descriptor = os.open(path, os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC)
        except FileNotFoundError:
            return None
        except OSError as error:
            raise _unusable(path, error) from None
        try:
            _require_regular(path, descriptor)
            return _content(descriptor)
        finally:
            os.close(descriptor)

    @contextmanager
    def _locked(self, flags: int, kind: int) -> Iterator[int]:
        """The open ledger, held by an advisory lock that the system frees if we die."""
        deadline = time.monotonic() + self.patience
        while True:
            descriptor = self._open(flags)
            try:
                self._hold(descriptor, kind, deadline)
                if self._is_current(descriptor):
                    yield descriptor
                    return
            finally:
                os.close(descriptor)

    def _open(self, flags: int) -> int:
        flags |= os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC
        try:
            descriptor = os.open(self.path, flags, 0o644)
        except FileNotFoundError:
            raise
        except OSError as error:
            raise _unusable(self.path, error) from None
        try:
            _require_regular(self.path, descriptor)
        except InputFault:
            os.close(descriptor)
            raise
        return descriptor

    def _hold(self, descriptor: int, kind: int, deadline: float) -> None:
        while True:
            try:
                fcntl.flock(descriptor, kind | fcntl.LOCK_NB)
                return
            except BlockingIOError:
                if time.monotonic() > deadline:
                    raise InputFault(
                        str(self.path),
                        f"another process has held it for {self.patience:.0f} s",
                        "End that process, or try again",
                    ) from None
                time.sleep(0.005)

    def _is_current(self, descriptor: int) -> bool:
        """Whether the file that we hold is still the one under the ledger's name."""
        try:
            return os.path.samestat(os.fstat(descriptor), self.path.stat())
        except FileNotFoundError:
            return False


def _content(descriptor: int) -> bytes:
    os.lseek(descriptor, 0, os.SEEK_SET)
    blocks = []
    while block := os.read(descriptor, _BLOCK):
        blocks.append(block)
    return b"".join(blocks)


def _require_regular(path: Path, descriptor: int) -> None:
    if not stat.S_ISREG(os.fstat(descriptor).st_mode):
        raise InputFault(str(path), "is not a regular file", "Remove it; the ledger belongs there")


def _unusable(path: Path, error: OSError) -> InputFault:
    if path.is_symlink():
        problem, cure = "is a symbolic link", "Put the ledger itself there, not a link to it"
    else:
        problem, cure = f"cannot be opened ({error.strerror})", "Check permissions and the disk"
    return InputFault(str(path), problem, cure)


def _sync_folder(folder: Path) -> None:
    """Bring the folder's list of names to the disk, which renaming needs to outlast a crash."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_CLOEXEC)
    try:
        os.fsync(descriptor)
    except OSError:
        pass  # some network file systems cannot
    finally:
        os.close(descriptor)
