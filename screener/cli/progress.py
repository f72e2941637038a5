"""Progress of one star on stderr, shown once it takes longer than two seconds."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

__all__ = ["stage_progress"]

_QUIET = 2.0  # s


@contextmanager
def stage_progress(title: str) -> Iterator[Callable[[str, float], None]]:
    """A callable (stage, share done) that draws a bar on a terminal and lines elsewhere."""
    started = time.monotonic()
    if not sys.stderr.isatty():
        last = ""

        def line(stage: str, share: float) -> None:
            nonlocal last
            spent = time.monotonic() - started
            if stage != last and spent > _QUIET:
                print(f"{title}: {share:4.0%}  {stage} ({spent:.0f} s)", file=sys.stderr)
                last = stage

        yield line
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.fields[star]}"), BarColumn(), TextColumn("{task.description}"))
    bar = Progress(*columns, TimeElapsedColumn(), console=Console(stderr=True), transient=True)
    task = bar.add_task("", total=1.0, star=title)

    def draw(stage: str, share: float) -> None:
        bar.update(task, description=stage, completed=share)
        if time.monotonic() - started > _QUIET:
            bar.start()

    try:
        yield draw
    finally:
        bar.stop()
