"""How to run, and what came of it."""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from screener.catalogue.messages import Limits
from screener.catalogue.work import DRAW, SCREEN

__all__ = ["Options", "Summary"]


@dataclass(frozen=True)
class Options:
    """How to run.

    Attributes
    ----------
    workers : int
        Processes on this machine.
    limits : Limits
        Per star.
    scheduler : str or None
        Address of a Dask scheduler that takes the stars instead.
    dossiers : int
        How many of the most planet-like stars get a dossier at the end.
    compare : Path or None
        Folder of an earlier run, for the page.
    retry_failed : bool
        Try stars again that an earlier session gave up.
    work, draw : str
        "module:name" of the functions that workers apply.
    """

    workers: int = field(default_factory=lambda: os.cpu_count() or 1)
    limits: Limits = field(default_factory=lambda: Limits(900.0, 2000.0))
    depth: str = "standard"
    seed: int = 1
    scheduler: str | None = None
    dossiers: int = 20
    compare: Path | None = None
    retry_failed: bool = False
    work: str = SCREEN
    draw: str = DRAW


@dataclass(frozen=True)
class Summary:
    """What came of a run: stars by grade (and "failed"), and what this session did."""

    folder: Path
    counts: dict[str, int]
    computed: int
    kept: int
    seconds: float
    peak_memory_mb: float | None
    failures: list[dict[str, Any]]
    start_seconds: float | None = None  # median time until a worker was ready
