"""A whole catalogue: plan, hand out, record, and leave a folder from which one can go on.

Order of events for each star: the worker answers, ``verdict.json`` appears by a rename, the store
commits. A kill between any two of these leaves at worst a verdict that the store does not know,
and that star is done again. At the start of a run, files and store are compared, and what does
not agree is done again as well.
"""

from __future__ import annotations

import heapq
import json
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

from screener import __version__
from screener.catalogue.folder import RunFolder, full_disk_told
from screener.catalogue.messages import ClusterLost, Done, Event, Executor, Failed, StarTask
from screener.catalogue.planning import Item, make_plan
from screener.catalogue.pool import LocalPool
from screener.catalogue.progress import LogFile, Tally, Watch, clock
from screener.catalogue.settings import Options, Summary
from screener.catalogue.sources import StarInput, find_stars
from screener.catalogue.stopping import StopFlag, Stopped
from screener.store import Store, grade_of
from screener.store.reading import counts, failures, ranked, work_summary

__all__ = ["run_catalogue"]

ATTEMPTS = 2
_PAGE_EVERY = 120.0  # s between refreshes of the page while the run goes on


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
        self.flag = StopFlag()
        self.items: dict[str, Item] = {}
        self.heap: list[tuple[int, float, str]] = []
        self.computed = 0
        self.start_seconds: list[float] = []
        self._page_time = time.monotonic()

    # -- the whole --------------------------------------------------------------------------

    def go(self) -> Summary:
        start = time.monotonic()
        plan = make_plan(
            self.source,
            self.stars,
            self.folder,
            self.store,
            self.options,
            self.log,
            self.flag.check,
        )
        run_id = plan.run_id
        for item in plan.items:
            self._queue(item)
        for name, fault in plan.faults.items():
            self._say(f"{name}: failed, {fault}")
        kept = len(self.stars) - len(self.items)
        self._say(
            f"{len(self.stars)} stars, {kept} done already, {len(self.items)} to do; "
            f"depth {self.options.depth}, seed {self.options.seed}"
        )
        try:
            if self.items:
                self._screen_all(kept)
            self._draw_dossiers()
        except (Stopped, ClusterLost):
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

    def _queue(self, item: Item) -> None:
        self.items[item.star.name] = item
        # longest first; second attempts after all first ones
        heapq.heappush(self.heap, (item.attempts, -item.estimate, item.star.name))

    # -- screening --------------------------------------------------------------------------

    def _screen_all(self, kept: int) -> None:
        workers = min(self.options.workers, len(self.items))
        estimate = sum(item.estimate for item in self.items.values())
        executor = self._executor(self.options.work, workers)
        if self.options.scheduler is not None:
            workers = max(1, executor.free() // 2)  # a cluster takes two stars per thread
        tally = Tally(len(self.stars), kept, workers, estimate)
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
            self.flag.check()
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

    def _mismatch(self, verdict: dict[str, Any], item: Item) -> str | None:
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
        self.items = {name: Item(by_name[name], 0.0, 0, None) for name in missing}
        self.heap = [(0, float(rank), name) for rank, name in enumerate(missing)]
        # drawing writes files: it stays on this machine even when a cluster did the screening
        workers = min(self.options.workers, len(missing))
        pool = LocalPool(self.options.draw, workers, self.options.limits, self.folder.workers_log)
        try:
            self._drive(pool, self._drawing_task, self._drawn, None)
        finally:
            pool.close()

    def _drawing_task(self, name: str) -> StarTask:
        return replace(self._task(name), folder=self.folder.star(name))

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


def _count_words(numbers: dict[str, int]) -> str:
    return ", ".join(f"{count} {name}" for name, count in numbers.items() if count) or "no stars"


def _median(values: list[float]) -> float | None:
    return sorted(values)[len(values) // 2] if values else None
