"""Files that appear whole or not at all."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

__all__ = ["write_bytes", "write_text", "writing"]


@contextmanager
def writing(path: Path) -> Iterator[Path]:
    """Give out a temporary name beside ``path`` and move it there once the block has ended well.

    A reader never sees half a file under the final name; a killed writer leaves only a file whose
    name starts with a dot. Missing parent folders are made.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    # the ending stays, because numpy and matplotlib choose formats by it
    temporary = path.parent / f".{path.stem[:80]}.{os.getpid()}.{secrets.token_hex(4)}{path.suffix}"
    try:
        yield temporary
        with temporary.open("rb") as handle:
            os.fsync(handle.fileno())
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def write_bytes(path: Path, content: bytes) -> None:
    """Write ``content`` to ``path`` by way of a temporary file and a rename."""
    with writing(path) as temporary:
        temporary.write_bytes(content)


def write_text(path: Path, content: str) -> None:
    """Write ``content`` as UTF-8 with plain line feeds, by way of a rename."""
    write_bytes(path, content.encode("utf-8", errors="replace"))
