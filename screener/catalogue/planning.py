"""What is left to do: the stars of the source against what store and folder hold already."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from screener import __version__
from screener.catalogue.folder import RunFolder
from screener.catalogue.keys import content_of, estimate_seconds, work_key
from screener.catalogue.progress import LogFile
from screener.catalogue.settings import Options
from screener.catalogue.sources import StarInput
from screener.core import InputFault
from screener.rules import load_rules
from screener.store import RunSettings, StarRow, Store, WorkRow
from screener.store.database import Planned

__all__ = ["Item", "Plan", "make_plan"]


@dataclass(eq=False)
class Item:
    """A star that is to be screened: expected time in s, attempts so far."""

    star: StarInput
    estimate: float
    attempts: int
    table_sha256: str | None


@dataclass(frozen=True)
class Plan:
    """The number of the run in the store, what is to do, and stars that cannot be done at all."""

    run_id: int
    items: list[Item]
    faults: dict[str, str]


def make_plan(
    source: Path,
    stars: list[StarInput],
    folder: RunFolder,
    store: Store,
    options: Options,
    log: LogFile,
    check: Callable[[], None],
) -> Plan:
    """Enter the run and its stars in the store; files and store are made to agree.

    ``check`` is called between stars and may raise to stop.
    """
    rules = load_rules()
    settings = RunSettings(
        source=_text(source.absolute()),
        version=__version__,
        rules=rules.label,
        rules_sha256=rules.sha256,
        seed=options.seed,
        depth=options.depth,
        compared=None if options.compare is None else _text(options.compare.absolute()),
    )
    common: dict[str, str | int] = {
        "version": __version__,
        "rules": rules.sha256,
        "seed": options.seed,
        "depth": options.depth,
    }
    rows: list[tuple[StarRow, WorkRow]] = []
    unread: set[str] = set()
    faults: dict[str, str] = {}
    for star in stars:
        check()
        content = content_of(star)
        fault = _folder_fault(folder, star)
        if fault is not None:
            faults[star.name] = fault
        if fault is not None or not content.complete:
            unread.add(star.name)
        key = work_key(star, content, common)
        estimate = estimate_seconds(content, options.depth)
        work = WorkRow(key, content.table, content.sidecar, content.photometry, estimate)
        rows.append((_star_row(star), work))
    run_id = store.begin_run(settings)
    planned = store.plan(run_id, rows)
    items: list[Item] = []
    for star, (_, work) in zip(stars, rows, strict=True):
        state = planned[star.name]
        if state.state == "done" and folder.verdict_sha256(star.name) != state.file_sha256:
            log.write(f"{star.name}: verdict.json is not what was recorded; done again")
        elif _is_settled(state, star.name in unread, options):
            continue
        if state.state != "waiting":
            store.again(star.name)
        if star.name in faults:
            store.record_failure(star.name, "input", faults[star.name], final=True)
            continue
        attempts = state.attempts if state.state == "waiting" else 0
        items.append(Item(star, work.estimate, attempts, work.table_sha256))
    return Plan(run_id, items, faults)


def _is_settled(state: Planned, unread: bool, options: Options) -> bool:
    """Whether nothing is left to do for a star whose files are as recorded."""
    if state.state != "failed":
        return state.state == "done"
    if unread or options.retry_failed:
        return False
    limits = {"time": options.limits.time, "memory": options.limits.memory}
    raised = limits.get(state.failure_kind or "", 0.0) > (state.failure_limit or 0.0)
    return not raised  # more time or memory than last time is a reason to try again


def _folder_fault(folder: RunFolder, star: StarInput) -> str | None:
    """What keeps the star from having a folder, or None."""
    try:
        folder.star(star.name)
    except InputFault as fault:
        return str(fault)
    return None


def _text(path: Path) -> str:
    """A path as text that SQLite and JSON can bear."""
    return os.fsencode(path).decode("utf-8", "backslashreplace")


def _star_row(star: StarInput) -> StarRow:
    return StarRow(
        name=star.name,
        folder=star.name,
        table_file=_text(star.table),
        sidecar_file=None if star.sidecar is None else _text(star.sidecar),
        photometry_file=None if star.photometry is None else _text(star.photometry),
    )
