"""A whole catalogue: plan, hand out, record, and leave a folder from which one can go on.

Order of events for each star: the worker answers, ``verdict.json`` appears by a rename, the store
commits. A kill between any two of these leaves at worst a verdict that the store does not know,
and that star is done again. At the start of a run, files and store are compared, and what does
not agree is done again as well.
"""

from __future__ import annotations

import heapq
import json
import os
import signal
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from types import FrameType
from typing import Any

from screener import __version__
from screener.catalogue.folder import RunFolder, full_disk_told
from screener.catalogue.keys import content_of, estimate_seconds, work_key
from screener.catalogue.messages import Done, Event, Executor, Failed, Limits, StarTask
from screener.catalogue.pool import LocalPool
from screener.catalogue.progress import LogFile, Tally, Watch, clock
from screener.catalogue.sources import StarInput, find_stars
from screener.catalogue.work import DRAW, SCREEN
from screener.core import InputFault, ScreenerError
from screener.rules import load_rules
from screener.store import RunSettings, StarRow, Store, WorkRow, grade_of
from screener.store.database import Planned
from screener.store.reading import counts, failures, ranked, work_summary

__all__ = ["Options", "Stopped", "Summary", "run_catalogue"]

ATTEMPTS = 2
_PAGE_EVERY = 120.0  # s between refreshes of the page while the run goes on


class Stopped(ScreenerError):
    """The run was asked to stop; what is done is kept."""


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


@dataclass(eq=False)
class _Item:
    star: StarInput
    estimate: float
    attempts: int
    table_sha256: str | None


class _StopFlag:
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


def run_catalogue(source: Path, out: Path, options: Options, watch: Watch) -> Summary:
    """Screen all stars of a source into a folder, or go on with it.

    Parameters
    ----------
    source : Path
        Folder of tables, list of tables, or one table with a column for the star.
    out : Path
        The run's folder.

    Raises
    ------
    InputFault
        If source or folder cannot be used.
    DiskFull, Stopped
        What is done so far is kept; the same call goes on.
    WorkersDoNotStart
        If the worker processes die before they are ready.
    """
    with full_disk_told(out):
        stars = find_stars(source)
        folder = RunFolder(out)
        try:
            with Store(folder.store) as store:
                run = _Run(source, stars, folder, store, options, watch)
                with run.flag.listening(), watch:
                    return run.go()
        finally:
            folder.release()


class _Run:
    def __init__(
        self,
        source: Path,
        stars: list[StarInput],
        folder: RunFolder,
        store: Store,
        options: Options,
        watch: Watch,
    ) -> None:
        self.source, self.stars, self.folder, self.store = source, stars, folder, store
        self.options, self.watch = options, watch
        self.log = LogFile(folder.log)
        self.flag = _StopFlag()
        self.items: dict[str, _Item] = {}
        self.heap: list[tuple[int, float, str]] = []
        self.computed = 0
        self.start_seconds: list[float] = []
        self._page_time = time.monotonic()

    # -- the whole --------------------------------------------------------------------------

    def go(self) -> Summary:
        start = time.monotonic()
        run_id = self._plan()
        kept = len(self.stars) - len(self.items)
        self._say(
            f"{len(self.stars)} stars, {kept} done already, {len(self.items)} to do; "
            f"depth {self.options.depth}, seed {self.options.seed}"
        )
        try:
            if self.items:
                self._screen_all(kept)
            self._draw_dossiers()
        except Stopped:
            self.store.end_run(run_id, "stopped")
            self._write_page()
            self._say("stopped; the same command goes on")
            raise
        self.store.end_run(run_id, "done")
        self._write_page()
        summary = Summary(
            folder=self.folder.path,
            counts=counts(self.store),
            computed=self.computed,
            kept=kept,
            seconds=time.monotonic() - start,
            peak_memory_mb=work_summary(self.store)["peak_memory_mb"],
            failures=failures(self.store),
            start_seconds=_median(self.start_seconds),
        )
        self._say(f"done in {clock(summary.seconds)}: {_count_words(summary.counts)}")
        return summary

    def _say(self, text: str) -> None:
        self.log.write(text)
        self.watch.note(text)

    # -- planning ---------------------------------------------------------------------------

    def _plan(self) -> int:
        options = self.options
        rules = load_rules()
        settings = RunSettings(
            source=_text(self.source.absolute()),
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
        for star in self.stars:
            self._check_stop()
            content = content_of(star)
            if not content.complete or self._folder_fault(star) is not None:
                unread.add(star.name)
            key = work_key(star, content, common)
            estimate = estimate_seconds(content, options.depth)
            rows.append(
                (
                    _star_row(star),
                    WorkRow(key, content.table, content.sidecar, content.photometry, estimate),
                )
            )
        run_id = self.store.begin_run(settings)
        planned = self.store.plan(run_id, rows)
        for star, (_, work) in zip(self.stars, rows, strict=True):
            state = planned[star.name]
            if self._is_settled(star, state, star.name in unread):
                continue
            if state.state != "waiting":
                self.store.again(star.name)
            fault = self._folder_fault(star)
            if fault is not None:
                self.store.record_failure(star.name, "input", fault, final=True)
                self._say(f"{star.name}: failed, {fault}")
                continue
            attempts = state.attempts if state.state == "waiting" else 0
            self._queue(_Item(star, work.estimate, attempts, work.table_sha256))
        return run_id

    def _folder_fault(self, star: StarInput) -> str | None:
        """What keeps the star from having a folder, or None."""
        try:
            self.folder.star(star.name)
        except InputFault as fault:
            return str(fault)
        return None

    def _is_settled(self, star: StarInput, state: Planned, unread: bool) -> bool:
        """Whether nothing is left to do for a star."""
        if state.state == "done":
            if self.folder.verdict_sha256(star.name) == state.file_sha256:
                return True
            self.log.write(f"{star.name}: verdict.json is not what was recorded; done again")
            return False
        if state.state == "failed":
            if unread or self.options.retry_failed:
                return False
            limits = {"time": self.options.limits.time, "memory": self.options.limits.memory}
            raised = limits.get(state.failure_kind or "", 0.0) > (state.failure_limit or 0.0)
            return not raised  # more time or memory than last time is a reason to try again
        return False

    def _queue(self, item: _Item) -> None:
        self.items[item.star.name] = item
        # longest first; second attempts after all first ones
        heapq.heappush(self.heap, (item.attempts, -item.estimate, item.star.name))

    def _check_stop(self) -> None:
        if self.flag.signal is not None:
            raise Stopped(signal.Signals(self.flag.signal).name)

    # -- screening --------------------------------------------------------------------------

    def _screen_all(self, kept: int) -> None:
        workers = min(self.options.workers, len(self.items))
        estimate = sum(item.estimate for item in self.items.values())
        executor = self._executor(self.options.work, workers)
        tally = Tally(len(self.stars), kept, max(1, executor.free()), estimate)
        try:
            self._drive(executor, self._task, lambda event: self._ended(event, tally), tally)
        finally:
            executor.close()
            self.start_seconds = getattr(executor, "start_seconds", [])

    def _executor(self, work: str, workers: int) -> Executor:
        options = self.options
        if options.scheduler is not None:
            from screener.catalogue.cluster import ClusterPool

            return ClusterPool(options.scheduler, work, options.limits)
        return LocalPool(work, workers, options.limits, self.folder.workers_log)

    def _drive(
        self,
        executor: Executor,
        payload: Callable[[str], StarTask],
        ended: Callable[[Event], None],
        tally: Tally | None,
    ) -> None:
        """Keep the executor busy until the heap is empty and all tasks have ended."""
        while self.heap or executor.running():
            self._check_stop()
            while self.heap and executor.free() > 0:
                name = heapq.heappop(self.heap)[2]
                executor.submit(name, payload(name))
            for event in executor.events(0.25):
                ended(event)
            if tally is not None:
                tally.running = executor.running()
                self.watch.tick(tally)
                self._refresh_page()

    def _task(self, name: str) -> StarTask:
        star, options = self.items[name].star, self.options
        return StarTask(
            star=name,
            table=star.table if star.rows is None else star.rows,
            sidecar=star.sidecar if star.rows is None else None,
            depth=options.depth,
            seed=options.seed,
        )

    def _ended(self, event: Event, tally: Tally) -> None:
        if isinstance(event, Done):
            fault = self._accept(event, tally)
            if fault is None:
                return
            event = fault
        self._failed(event, tally)

    def _accept(self, event: Done, tally: Tally) -> Failed | None:
        """Write and record a verdict; or say why it is none."""
        item = self.items[event.task]
        try:
            verdict = json.loads(event.result.verdict)
            fault = self._mismatch(verdict, item)
            if fault is None:
                grade = grade_of(verdict)
        except (ValueError, KeyError, TypeError, AttributeError) as error:
            fault = f"the answer is no verdict ({error})"
        if fault is not None:
            return Failed(event.task, "error", fault, event.seconds)
        digest = self.folder.write_verdict(event.task, event.result.verdict)
        self.store.record_verdict(
            event.task,
            verdict,
            file_sha256=digest,
            seconds=round(event.seconds, 3),
            peak_memory_mb=round(event.peak_memory, 1),
            folds=event.result.folds,
        )
        self.computed += 1
        tally.finished(grade, event.seconds, item.estimate)
        text = f"{event.task}: {grade}, {event.seconds:.1f} s"
        self.log.write(text)
        self.watch.star(text, tally)
        return None

    def _mismatch(self, verdict: dict[str, Any], item: _Item) -> str | None:
        """Why a verdict is not the answer to what was asked, or None."""
        asked = {"screener": __version__, "seed": self.options.seed, "depth": self.options.depth}
        for name, value in asked.items():
            if verdict[name] != value:
                return f"the worker answered with {name} {verdict[name]!r} instead of {value!r}"
        if item.star.rows is None and verdict["input"]["sha256"] != item.table_sha256:
            return "the table changed while it was at work"
        return None

    def _failed(self, event: Failed, tally: Tally) -> None:
        item = self.items[event.task]
        item.attempts += 1
        final = event.kind == "input" or item.attempts >= ATTEMPTS
        self.folder.drop_verdict(event.task)
        self.store.record_failure(
            event.task,
            event.kind,
            event.reason,
            final=final,
            seconds=round(event.seconds, 3),
            limit=event.limit,
        )
        if event.detail:
            self.log.write(f"{event.task}: details of the failure\n{event.detail}")
        if final:
            tally.gave_up(event.seconds, item.estimate)
            text = f"{event.task}: failed, {event.reason}"
        else:
            self._queue(item)
            text = f"{event.task}: attempt {item.attempts} failed, {event.reason}; to be retried"
        self.log.write(text)
        self.watch.star(text, tally)

    # -- afterwards -------------------------------------------------------------------------

    def _draw_dossiers(self) -> None:
        """Dossiers of the stars that lead the ranking, where they are not there yet."""
        by_name = {star.name: star for star in self.stars}
        leading: list[str] = []
        for row in ranked(self.store):
            if row["grade"] in ("planetary", "ambiguous") and row["star"] not in leading:
                leading.append(row["star"])
        missing = [
            name
            for name in leading[: self.options.dossiers]
            if name in by_name and not self.folder.has_dossier(name)
        ]
        if not missing:
            return
        self._say(f"drawing {len(missing)} dossiers")
        self.items = {name: _Item(by_name[name], 0.0, 0, None) for name in missing}
        self.heap = [(0, float(rank), name) for rank, name in enumerate(missing)]
        # drawing writes files: it stays on this machine even when a cluster did the screening
        workers = min(self.options.workers, len(missing))
        pool = LocalPool(self.options.draw, workers, self.options.limits, self.folder.workers_log)
        try:
            self._drive(pool, self._drawing_task, self._drawn, None)
        finally:
            pool.close()

    def _drawing_task(self, name: str) -> StarTask:
        task = self._task(name)
        return StarTask(
            star=name,
            table=task.table,
            sidecar=task.sidecar,
            depth=task.depth,
            seed=task.seed,
            folder=self.folder.star(name),
        )

    def _drawn(self, event: Event) -> None:
        reason = event.reason if isinstance(event, Failed) else str(event.result or "")
        if reason:
            self._say(f"{event.task}: no dossier, {reason}")
        if isinstance(event, Failed) and event.detail:
            self.log.write(event.detail)

    def _refresh_page(self) -> None:
        if time.monotonic() - self._page_time > _PAGE_EVERY:
            self._write_page()

    def _write_page(self) -> None:
        from screener.catalogue.page import write_page

        write_page(self.store, self.folder)
        self._page_time = time.monotonic()


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


def _count_words(numbers: dict[str, int]) -> str:
    return ", ".join(f"{count} {name}" for name, count in numbers.items() if count) or "no stars"


def _median(values: list[float]) -> float | None:
    return sorted(values)[len(values) // 2] if values else None
