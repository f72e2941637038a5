"""How a run tells what it does: a live panel, one line per star, and the log file."""

from __future__ import annotations

import sys
import time
from collections import Counter
from datetime import datetime
from pathlib import Path
from types import TracebackType
from typing import IO, Any, Protocol

__all__ = ["LineWatch", "LiveWatch", "LogFile", "Tally", "Watch", "choose_watch", "clock"]

GRADES = ("planetary", "ambiguous", "likely stellar", "no signal")


def clock(seconds: float | None) -> str:
    """ "1 h 05 min", "3 min 20 s", "12 s"; "?" if unknown."""
    if seconds is None:
        return "?"
    whole = round(seconds)
    if whole >= 3600:
        return f"{whole // 3600} h {whole % 3600 // 60:02d} min"
    if whole >= 60:
        return f"{whole // 60} min {whole % 60:02d} s"
    return f"{whole} s"


class Tally:
    """How far the run is.

    Time left comes from the time that stars took per second of estimate, once a few are done.
    """

    def __init__(self, total: int, kept: int, workers: int, estimate: float) -> None:
        self.total, self.kept, self.workers = total, kept, workers
        self.grades: Counter[str] = Counter()
        self.failed = 0
        self.done = 0
        self.running: list[str] = []
        self._left = estimate  # s of one worker, by estimate
        self._spent = self._expected = 0.0
        self._start = time.monotonic()

    def finished(self, grade: str, seconds: float, estimate: float) -> None:
        self.done += 1
        self.grades[grade] += 1
        self._count(seconds, estimate)

    def gave_up(self, seconds: float, estimate: float) -> None:
        self.failed += 1
        self._count(seconds, estimate)

    def _count(self, seconds: float, estimate: float) -> None:
        self._left = max(0.0, self._left - estimate)
        self._spent += seconds
        self._expected += estimate

    def per_hour(self) -> float | None:
        """Stars an hour in this session."""
        ended = self.done + self.failed
        passed = time.monotonic() - self._start
        return 3600.0 * ended / passed if ended and passed > 0 else None

    def time_left(self) -> float | None:
        """Seconds, or None before the first star."""
        if self._expected <= 0:
            return None
        return self._left * (self._spent / self._expected) / max(1, self.workers)

    def position(self) -> int:
        return self.kept + self.done + self.failed

    def words(self) -> str:
        rate = self.per_hour()
        parts = [f"{self.position()}/{self.total}"]
        parts.append("? stars/h" if rate is None else f"{rate:.0f} stars/h")
        parts.append(f"{clock(self.time_left())} left")
        return ", ".join(parts)

    def grade_words(self) -> str:
        parts = [f"{self.grades[grade]} {grade}" for grade in GRADES]
        return ", ".join([*parts, f"{self.failed} failed"])


class Watch(Protocol):
    """Where a run's news goes."""

    def __enter__(self) -> Watch: ...

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None: ...

    def note(self, text: str) -> None:
        """A sentence about the run."""

    def star(self, text: str, tally: Tally) -> None:
        """A sentence about a star that ended."""

    def tick(self, tally: Tally) -> None:
        """Called a few times a second."""


class LineWatch:
    """One line per star, for what is no terminal."""

    def __init__(self, stream: IO[str] | None = None) -> None:
        self.stream = sys.stderr if stream is None else stream

    def __enter__(self) -> LineWatch:
        return self

    def __exit__(self, *_: object) -> None:
        return None

    def note(self, text: str) -> None:
        self._say(text)

    def star(self, text: str, tally: Tally) -> None:
        self._say(f"{text} [{tally.words()}]")

    def tick(self, tally: Tally) -> None:
        return None

    def _say(self, text: str) -> None:
        line = printable(text).encode("utf-8", "replace").decode("utf-8") + "\n"
        try:
            self.stream.write(line)
            self.stream.flush()
        except UnicodeEncodeError:
            self.stream.write(line.encode("ascii", "backslashreplace").decode("ascii"))
        except OSError:
            pass  # nobody listens any more; the run goes on, and the log file has it all


class LiveWatch:
    """A bar with rate, time left, grades so far and failures, for a terminal."""

    def __init__(self) -> None:
        from rich.console import Console
        from rich.live import Live

        self._console = Console(stderr=True)
        self._live = Live(console=self._console, auto_refresh=False, transient=False)
        self._last = 0.0

    def __enter__(self) -> LiveWatch:
        self._live.__enter__()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._live.__exit__(kind, error, trace)

    def note(self, text: str) -> None:
        from rich.text import Text

        self._console.print(Text(printable(text)))

    def star(self, text: str, tally: Tally) -> None:
        if "failed" in text or "planetary" in text:
            self.note(text)
        self.tick(tally)

    def tick(self, tally: Tally) -> None:
        now = time.monotonic()
        if now - self._last < 0.2 and tally.position() < tally.total:
            return
        self._last = now
        self._live.update(self._panel(tally), refresh=True)

    def _panel(self, tally: Tally) -> Any:
        from rich.console import Group
        from rich.progress_bar import ProgressBar
        from rich.table import Table
        from rich.text import Text

        head = Table.grid(padding=(0, 1))
        bar = ProgressBar(total=max(1, tally.total), completed=tally.position(), width=30)
        head.add_row(bar, Text(tally.words()))
        names = ", ".join(printable(name) for name in tally.running[:8])
        return Group(
            head,
            Text(tally.grade_words()),
            Text(f"at work on: {names or 'nothing yet'}", overflow="ellipsis", no_wrap=True),
        )


def choose_watch() -> Watch:
    """The live panel on a terminal, else lines."""
    return LiveWatch() if sys.stderr.isatty() else LineWatch()


def printable(text: str) -> str:
    """The text with control characters escaped: names come from files, and terminals obey."""
    return "".join(
        c if c.isprintable() or c == "\n" else c.encode("unicode_escape").decode("ascii")
        for c in text
    )


class LogFile:
    """``run.log``: a line per event, with local time. A full disk silences it and nothing else."""

    def __init__(self, path: Path) -> None:
        self._path = path

    def write(self, text: str) -> None:
        stamp = datetime.now().astimezone().isoformat(timespec="seconds")
        lines = printable(text).splitlines() or [""]
        try:
            with self._path.open("a", encoding="utf-8", errors="backslashreplace") as handle:
                handle.write("".join(f"{stamp} {line}\n" for line in lines))
        except OSError:
            pass
