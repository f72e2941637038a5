"""The run's folder: held by one process, with a folder per star below it."""

from __future__ import annotations

import errno
import fcntl
import hashlib
import os
import shutil
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from screener.core import InputFault, ScreenerError
from screener.report.files import write_bytes

__all__ = ["DiskFull", "RunFolder", "full_disk_told"]


class DiskFull(ScreenerError):
    """The disk of the run's folder is full; what is done is kept."""


_FULL = (errno.ENOSPC, errno.EDQUOT)


@contextmanager
def full_disk_told(folder: Path) -> Iterator[None]:
    """Turn the many ways in which a disk is full into :class:`DiskFull`."""
    message = (
        f"{folder}: the disk is full. What is done so far is kept; make space and give the same "
        "command again to go on"
    )
    try:
        yield
    except OSError as error:
        if error.errno in _FULL:
            raise DiskFull(message) from error
        raise
    except sqlite3.OperationalError as error:
        if "full" in str(error) or "disk I/O" in str(error):
            raise DiskFull(message) from error
        raise


class RunFolder:
    """Everything a run writes goes through here, and so stays inside.

    Parameters
    ----------
    path : Path
        Made if absent.

    Raises
    ------
    InputFault
        If it is no folder, cannot be written to, or another process is at work in it.
    """

    def __init__(self, path: Path) -> None:
        self.path = path.absolute()
        try:
            self.path.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise InputFault(
                str(path), f"cannot be made ({error.strerror})", "Give another folder as --out"
            ) from None
        self._lock = self._hold()

    def _hold(self) -> int:
        try:
            lock = os.open(self.path / ".lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        except OSError as error:
            if error.errno in _FULL:
                raise
            raise InputFault(
                str(self.path), f"cannot be written to ({error.strerror})", "Check its permissions"
            ) from None
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            os.close(lock)
            raise InputFault(
                str(self.path),
                "another catalogue run is at work in this folder",
                "Wait for it, stop it, or give another folder as --out",
            ) from None
        return lock

    def release(self) -> None:
        """Let others work in the folder. The system does so, too, when this process ends."""
        os.close(self._lock)

    @property
    def store(self) -> Path:
        return self.path / "catalogue.sqlite"

    @property
    def page(self) -> Path:
        return self.path / "index.html"

    @property
    def log(self) -> Path:
        return self.path / "run.log"

    @property
    def workers_log(self) -> Path:
        return self.path / "workers.log"

    def star(self, name: str) -> Path:
        """The folder of a star.

        Raises
        ------
        InputFault
            If the name would lead out of the run's folder, or a link or a file stands in its
            place.
        """
        folder = self.path / name
        inside = folder.parent == self.path and name not in ("", ".", "..")
        if not inside or folder.is_symlink() or (folder.exists() and not folder.is_dir()):
            raise InputFault(
                str(folder), "a file or a link stands where the star's folder belongs", "Remove it"
            )
        return folder

    def verdict_sha256(self, name: str) -> str | None:
        """SHA-256 of a star's ``verdict.json``, None if there is none."""
        try:
            return hashlib.sha256((self.star(name) / "verdict.json").read_bytes()).hexdigest()
        except (OSError, InputFault):
            return None

    def write_verdict(self, name: str, content: bytes) -> str:
        """Write ``verdict.json`` and drop what belonged to an earlier one; gives its SHA-256."""
        folder = self.star(name)
        self.drop_drawings(name)
        write_bytes(folder / "verdict.json", content)
        return hashlib.sha256(content).hexdigest()

    def drop_drawings(self, name: str) -> None:
        """Remove a star's dossier and what a killed process may have left half-written."""
        folder = self.star(name)
        for drawing in folder.glob("dossier.*"):
            drawing.unlink(missing_ok=True)
        if (folder / "figures").is_dir() and not (folder / "figures").is_symlink():
            shutil.rmtree(folder / "figures", ignore_errors=True)
        for leftover in folder.glob(".*.*"):
            leftover.unlink(missing_ok=True)

    def drop_verdict(self, name: str) -> None:
        """Remove a star's verdict and drawings: they say what is no longer so."""
        self.drop_drawings(name)
        (self.star(name) / "verdict.json").unlink(missing_ok=True)

    def has_dossier(self, name: str) -> bool:
        return (self.path / name / "dossier.html").is_file()
