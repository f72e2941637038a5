"""Work is known by what goes into it: the same content is never computed twice.

The key of a star is a SHA-256 over its name, table, sidecar, photometry, the rules, the version,
the seed and the depth. Hashes are taken with suspicion: what is no regular file of a sane size is
not read, and such a star is tried afresh in each run (which costs next to nothing).
"""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from screener.catalogue.sources import StarInput

__all__ = ["MAX_BYTES", "Content", "content_of", "estimate_seconds", "work_key"]

MAX_BYTES = 200_000_000
_BLOCK = 1 << 20

# seconds for a star of 100 exposures on one core of 2024, only to order stars and to guess the
# time left until the run has timed itself
_SECONDS = {"quick": 3.0, "standard": 30.0, "deep": 120.0}


@dataclass(frozen=True)
class Content:
    """Hashes of a star's inputs; None where there is no such file or it cannot be read."""

    table: str | None
    sidecar: str | None
    photometry: str | None
    n_rows: int  # lines of a text table, or a guess
    complete: bool  # whether every file that exists could be read


def content_of(star: StarInput) -> Content:
    """Hash the inputs of a star. Never raises for what a file is or does."""
    table, rows = _hash_file(star.table) if star.rows is None else _hash_rows(star)
    sidecar = _hash_file(star.sidecar)[0] if star.sidecar is not None else None
    light = _hash_file(star.photometry)[0] if star.photometry is not None else None
    complete = (
        table is not None
        and (sidecar is not None or star.sidecar is None)
        and (light is not None or star.photometry is None)
    )
    return Content(table, sidecar, light, rows, complete)


def _hash_rows(star: StarInput) -> tuple[str | None, int]:
    raw = star.rows.source.raw  # type: ignore[union-attr]
    digest = hashlib.sha256()
    for name, unit, column in zip(raw.names, raw.units, raw.columns, strict=True):
        digest.update(f"{name}\0{unit}\0".encode("utf-8", "surrogateescape"))
        if column.dtype.kind == "f":
            digest.update(column.tobytes())
        else:
            digest.update("\0".join(map(str, column)).encode("utf-8", "surrogateescape"))
    return digest.hexdigest(), int(raw.n_rows)


def _hash_file(path: Path) -> tuple[str | None, int]:
    """(SHA-256, number of lines) of a regular file of a sane size, else (None, 0)."""
    try:
        # without O_NONBLOCK, opening a pipe that nobody writes to would wait for ever
        descriptor = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except (OSError, ValueError):
        return None, 0
    try:
        status = os.fstat(descriptor)
        if not stat.S_ISREG(status.st_mode) or status.st_size > MAX_BYTES:
            return None, 0
        digest, lines, size = hashlib.sha256(), 0, 0
        while block := os.read(descriptor, _BLOCK):
            digest.update(block)
            lines += block.count(b"\n")
            size += len(block)
            if size > MAX_BYTES:
                return None, 0
    except OSError:
        return None, 0
    finally:
        os.close(descriptor)
    # binary tables have few line feeds: about a hundred bytes a row
    return digest.hexdigest(), max(lines, 1) if lines > size / 2000 else size // 100


def work_key(star: StarInput, content: Content, settings: Mapping[str, str | int]) -> str:
    """The key of a star's work, hexadecimal.

    Parameters
    ----------
    settings : mapping
        Version, hash of the rules, seed, depth: what the stars of a run have in common.
    """
    words = [star.name, content.table, content.sidecar, content.photometry]
    words += [f"{name}={settings[name]}" for name in sorted(settings)]
    if not content.complete:
        words.append(os.fspath(star.table))
    text = "\0".join("" if word is None else str(word) for word in words)
    return hashlib.sha256(text.encode("utf-8", "surrogateescape")).hexdigest()


def estimate_seconds(content: Content, depth: str) -> float:
    """A guess at a star's time: a constant, and what grows with the matrices."""
    # exposures of a night are binned, which keeps the growth in check
    size = min(content.n_rows, 2000) / 100.0
    return _SECONDS.get(depth, 30.0) * (0.4 + 0.3 * size + 0.3 * size * size)
