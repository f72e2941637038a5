"""What the run, its workers and its watchers say to each other."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

from screener.core import ScreenerError

__all__ = ["ClusterLost", "Done", "Event", "Executor", "Failed", "Limits", "StarTask", "WorkResult"]


class ClusterLost(ScreenerError):
    """The cluster's scheduler does not answer any more; what is done is kept."""


@dataclass(frozen=True)
class Limits:
    """What one star may take: seconds of wall-clock time, MB of resident memory."""

    time: float
    memory: float


@dataclass(frozen=True, eq=False)
class StarTask:
    """One star's work, as a worker needs it; ``table`` is a path or the rows of a larger table."""

    star: str
    table: Any
    sidecar: Path | None
    depth: str
    seed: int
    folder: Path | None = None  # where to draw a dossier, when that is the work
    period: float | None = None  # d, a period to grade in any case
    rules_file: str | None = None  # laid over the default rules
    site: str | None = None  # observatory whose nights are ranked


@dataclass(frozen=True, eq=False)
class WorkResult:
    """The bytes of ``verdict.json`` and per signal id the fold, [[phase, m/s], ...]."""

    verdict: bytes
    folds: dict[str, list[list[float]]] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Done:
    """A task that ended well; seconds of wall-clock time, peak resident memory in MB."""

    task: str
    result: Any
    seconds: float
    peak_memory: float


@dataclass(frozen=True, eq=False)
class Failed:
    """A task that did not.

    ``kind`` is "input" (nothing to retry), "time", "memory", "crash" or "error"; ``reason`` is
    for a person; ``detail`` goes to the log.
    """

    task: str
    kind: str
    reason: str
    seconds: float
    limit: float | None = None
    detail: str = ""


Event = Done | Failed


class Executor(Protocol):
    """Something that runs tasks elsewhere and never lets one take the others down."""

    def free(self) -> int:
        """How many more tasks can be handed over now."""

    def submit(self, task: str, payload: Any) -> None:
        """Hand over a task."""

    def events(self, timeout: float) -> list[Event]:
        """What has ended, waiting up to ``timeout`` seconds for something."""

    def running(self) -> list[str]:
        """The tasks that were handed over and have not ended."""

    def close(self) -> None:
        """Stop at once; what runs is lost."""
