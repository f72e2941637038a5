"""Stopping in good order when someone asks for it."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

from screener.core import ScreenerError

__all__ = ["StopFlag", "Stopped"]


class Stopped(ScreenerError):
    """The run was asked to stop; what is done is kept."""


class StopFlag:
    """Set by the signals with which people, terminals and batch systems end a program."""

    def __init__(self) -> None:
        self.signal: int | None = None

    @contextmanager
    def listening(self) -> Iterator[None]:
        def note(number: int, frame: FrameType | None) -> None:
            self.signal = number

        signals = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
        try:
            earlier = {number: signal.signal(number, note) for number in signals}
        except ValueError:  # not the main thread
            yield
            return
        try:
            yield
        finally:
            for number, handler in earlier.items():
                signal.signal(number, handler)

    def check(self) -> None:
        """Raise :class:`Stopped` if a signal came."""
        if self.signal is not None:
            raise Stopped(signal.Signals(self.signal).name)
