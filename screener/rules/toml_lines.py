"""TOML with the line of every key, so that a fault can say where it stands."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from screener.core import InputFault

__all__ = ["Path_", "Source", "read_source"]

Path_ = tuple[str | int, ...]
MAX_BYTES = 2_000_000

_HEADER = re.compile(r"\s*(\[\[?)\s*([^\[\]]+?)\s*(\]\]?)\s*(?:#.*)?$")
_KEY = re.compile(r"""\s*((?:[A-Za-z0-9_-]+|"[^"\n]*"|'[^'\n]*')(?:\s*\.\s*[\w"'-]+)*)\s*=(.*)$""")


class Source:
    """One TOML file: its content, and where each key stands.

    Attributes
    ----------
    name : str
        The file as the user named it.
    data : dict
    """

    def __init__(self, name: str, text: str) -> None:
        self.name = name
        try:
            self.data: dict[str, Any] = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            cure = 'Keys look like name = "text" or name = 1.5 under a [section]'
            raise InputFault(name, f"this is not valid TOML: {error}", cure) from None
        except RecursionError:
            raise InputFault(name, "nested without end", "Rule files are flat") from None
        self._lines = _locate(text)

    def line(self, path: Path_) -> int:
        """The line of a key; where it is not known, that of what surrounds it."""
        while path and path not in self._lines:
            path = path[:-1]
        return self._lines.get(path, 1)

    def fault(self, path: Path_, problem: str, cure: str, what: str = "") -> InputFault:
        """A fault at a key."""
        key = path[-1] if path and isinstance(path[-1], str) else None
        words = [f"line {self.line(path)}"]
        if what:
            words.append(what)
        if key is not None:
            words.append(f"key '{key}'")
        return InputFault(self.name, f"{', '.join(words)}: {problem}", cure.rstrip("."))


def _locate(text: str) -> dict[Path_, int]:
    """Line of every header and key; keys inside inline tables count for the table's key."""
    lines: dict[Path_, int] = {(): 1}
    counts: dict[Path_, int] = {}
    table: Path_ = ()
    fence: str | None = None  # the quotes of a multi-line text that is open
    depth = 0  # brackets of an array that is open
    for number, line in enumerate(text.splitlines(), 1):
        if fence is not None:
            if fence in line:
                fence = None
            continue
        if depth > 0:
            depth += _brackets(line)
            continue
        header, key = _HEADER.match(line), _KEY.match(line)
        if header and header.group(1) == "[" * len(header.group(3)):
            table = _absolute(_parts(header.group(2)), counts, len(header.group(1)) == 2)
            lines.setdefault(table, number)
        elif key:
            path = (*table, *_parts(key.group(1)))
            for end in range(len(table) + 1, len(path) + 1):
                lines.setdefault(path[:end], number)
            value = key.group(2)
            fence = next((q for q in ('"""', "'''") if value.count(q) == 1), None)
            depth = 0 if fence else max(_brackets(value), 0)
    return lines


def _parts(name: str) -> Path_:
    return tuple(p.strip().strip("\"'") for p in name.split("."))


def _absolute(parts: Path_, counts: dict[Path_, int], is_array: bool) -> Path_:
    """The path of a header, with the number of each array element put in."""
    path: Path_ = ()
    for place, part in enumerate(parts):
        path = (*path, part)
        if is_array and place == len(parts) - 1:
            counts[path] = counts.get(path, -1) + 1
        if path in counts:
            path = (*path, counts[path])
    return path


def _brackets(text: str) -> int:
    bare = re.sub(r""""(?:[^"\\]|\\.)*"|'[^']*'|#.*$""", "", text)
    return bare.count("[") - bare.count("]")


def read_source(path: Path) -> Source:
    """Read a rule file.

    Raises
    ------
    InputFault
        The file is absent, not a regular file, too large, not UTF-8 or not TOML.
    """
    name = str(path)
    try:
        if path.exists() and not path.is_file():
            raise InputFault(name, "this is not a regular file", "Give the path of a TOML file")
        if path.stat().st_size > MAX_BYTES:
            problem = f"larger than {MAX_BYTES} bytes"
            raise InputFault(name, problem, "Give the path of a rule file")
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise InputFault(name, "there is no such file", "Check the path") from None
    except UnicodeDecodeError as error:
        problem = f"byte {error.start} is not UTF-8"
        raise InputFault(name, problem, "Save the file as UTF-8") from None
    except (OSError, ValueError) as error:
        problem = f"cannot be read ({getattr(error, 'strerror', None) or error})"
        raise InputFault(name, problem, "Check the path and its permissions") from None
    return Source(name, text)
