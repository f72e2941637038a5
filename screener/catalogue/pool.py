"""A pool of worker processes that outlives whatever its workers do.

Each worker is a process of its own with a socket to this one. A worker that takes too long, too
much memory, or dies is ended and replaced; the others never notice.
"""

from __future__ import annotations

import contextlib
import os
import signal
import socket
import subprocess
import sys
import time
from dataclasses import dataclass, field
from multiprocessing.connection import Connection, wait
from pathlib import Path
from typing import Any

import psutil

from screener.catalogue.messages import Done, Event, Failed, Limits
from screener.core import ScreenerError

__all__ = ["LocalPool", "WorkersDoNotStart", "pinned_environment"]

_THREAD_VARIABLES = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMEXPR_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
    "BLIS_NUM_THREADS",
    "NUMBA_NUM_THREADS",
)
_START_LIMIT = 180.0  # s; imports from a slow network disk take their time
_START_ATTEMPTS = 3
_TICK = 0.1  # s between looks at clocks and memory


class WorkersDoNotStart(ScreenerError):
    """Worker processes end before they are ready."""


def pinned_environment() -> dict[str, str]:
    """This process's environment with one numeric thread per process, and its import path."""
    environment = dict(os.environ)
    environment.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    paths = [path or str(Path.cwd()) for path in sys.path]
    environment["PYTHONPATH"] = os.pathsep.join(paths)
    return environment


@dataclass(eq=False)
class _Worker:
    process: subprocess.Popen[bytes]
    connection: Connection
    born: float = field(default_factory=time.monotonic)
    ready: bool = False
    task: str | None = None
    payload: Any = None
    begun: bool = False  # whether the worker said that it has the task in hand
    start: float = 0.0
    peak: float = 0.0  # MB

    def memory(self) -> float:
        """Resident memory now, MB."""
        try:
            resident = psutil.Process(self.process.pid).memory_info().rss / 1e6
        except psutil.Error:
            return 0.0
        self.peak = max(self.peak, resident)
        return float(resident)

    def end(self) -> None:
        with contextlib.suppress(OSError):
            self.connection.close()
        with contextlib.suppress(OSError):
            self.process.kill()
        self.process.wait()


class LocalPool:
    """Worker processes on this machine, an :class:`~screener.catalogue.messages.Executor`.

    Parameters
    ----------
    work : str
        "package.module:name" of the function that workers apply to a payload.
    workers : int
        Number of processes; they start when they are first needed.
    limits : Limits
        Per task.
    log : Path or None
        Where the workers' standard error goes; None: nowhere.
    """

    def __init__(self, work: str, workers: int, limits: Limits, log: Path | None = None) -> None:
        self.work, self.size, self.limits, self.log = work, max(1, workers), limits, log
        self._workers: list[_Worker] = []
        self._waiting: list[tuple[str, Any]] = []
        self._failed_starts = 0
        self.start_seconds: list[float] = []
        self._environment = pinned_environment()

    # -- the executor's face ----------------------------------------------------------------

    def free(self) -> int:
        busy = sum(worker.task is not None for worker in self._workers)
        return self.size - busy - len(self._waiting)

    def submit(self, task: str, payload: Any) -> None:
        self._waiting.append((task, payload))
        self._hand_out()

    def running(self) -> list[str]:
        active = [w.task for w in self._workers if w.task is not None]
        return active + [task for task, _ in self._waiting]

    def events(self, timeout: float) -> list[Event]:
        deadline = time.monotonic() + timeout
        while True:
            self._hand_out()
            found = self._listen(min(_TICK, max(0.0, deadline - time.monotonic())))
            found += self._police()
            if found or time.monotonic() >= deadline:
                return found

    def close(self) -> None:
        for worker in self._workers:
            worker.end()
        self._workers.clear()
        self._waiting.clear()

    # -- inside -----------------------------------------------------------------------------

    def _hand_out(self) -> None:
        for worker in self._workers:
            if self._waiting and worker.ready and worker.task is None:
                task, payload = self._waiting.pop(0)
                worker.task, worker.payload, worker.begun = task, payload, False
                worker.start = time.monotonic()
                # a worker that died in this moment is noticed at the next look
                with contextlib.suppress(OSError):
                    worker.connection.send((task, payload))
        starting = sum(not worker.ready for worker in self._workers)
        while len(self._waiting) > starting and len(self._workers) < self.size:
            self._workers.append(self._start())
            starting += 1

    def _start(self) -> _Worker:
        ours, theirs = socket.socketpair()
        errors: Any = subprocess.DEVNULL
        if self.log is not None:
            with contextlib.suppress(OSError):  # a full disk must not end the run here
                errors = self.log.open("ab")
        arguments = [str(theirs.fileno()), str(os.getpid()), self.work, str(self.limits.memory)]
        try:
            process = subprocess.Popen(
                [sys.executable, "-m", "screener.catalogue.worker", *arguments],
                stdin=subprocess.DEVNULL,
                stdout=errors,
                stderr=errors,
                pass_fds=(theirs.fileno(),),
                env=self._environment,
                start_new_session=True,
            )
        finally:
            theirs.close()
            if errors is not subprocess.DEVNULL:
                errors.close()
        return _Worker(process, Connection(ours.detach()))

    def _listen(self, timeout: float) -> list[Event]:
        if not self._workers:
            time.sleep(timeout)
            return []
        found: list[Event] = []
        by_connection = {worker.connection: worker for worker in self._workers}
        for connection in wait(list(by_connection), timeout):
            worker = by_connection[connection]  # type: ignore[index]
            try:
                message = worker.connection.recv()
            except Exception:  # the end of the stream, or something that was never an answer
                found += self._gone(worker)
                continue
            found += self._heard(worker, message)
        return found

    def _heard(self, worker: _Worker, message: tuple[Any, ...]) -> list[Event]:
        if message[0] == "ready":
            worker.ready, worker.peak = True, message[1]
            self._failed_starts = 0
            self.start_seconds.append(time.monotonic() - worker.born)
            return []
        if message[0] == "started":
            worker.begun = True
            return []
        worker.task = worker.payload = None
        if message[0] == "done":
            _, task, result, seconds, peak = message
            worker.peak = max(worker.peak, peak)
            return [Done(task, result, seconds, worker.peak)]
        _, task, kind, reason, seconds, detail = message
        if kind == "memory":
            self._drop(worker)  # it ends by itself, and must not take another star along
            return [self._memory_failure(task, seconds)]
        return [Failed(task, kind, reason, seconds, detail=detail)]

    def _memory_failure(self, task: str, seconds: float) -> Failed:
        limit = self.limits.memory
        return Failed(task, "memory", f"needed more than {limit:.0f} MB of memory", seconds, limit)

    def _drop(self, worker: _Worker) -> None:
        worker.end()
        self._workers.remove(worker)

    def _gone(self, worker: _Worker) -> list[Event]:
        """A worker closed its end: it is dead or dying."""
        with contextlib.suppress(subprocess.TimeoutExpired):
            worker.process.wait(timeout=2.0)
        code = worker.process.poll()
        self._drop(worker)
        if worker.task is not None and not worker.begun:
            self._waiting.insert(0, (worker.task, worker.payload))  # not this star's fault
            self._failed_start(_cause_of_death(code))
        elif worker.task is not None:
            seconds = time.monotonic() - worker.start
            return [Failed(worker.task, "crash", _cause_of_death(code), seconds)]
        elif not worker.ready:
            self._failed_start(_cause_of_death(code))
        return []

    def _failed_start(self, why: str) -> None:
        self._failed_starts += 1
        if self._failed_starts >= _START_ATTEMPTS:
            where = f"; see {self.log}" if self.log is not None else ""
            raise WorkersDoNotStart(f"the worker processes do not start: {why}{where}")

    def _police(self) -> list[Event]:
        """End workers that are over a limit."""
        now = time.monotonic()
        found: list[Event] = []
        for worker in list(self._workers):
            if not worker.ready:
                if now - worker.born > _START_LIMIT:
                    self._drop(worker)
                    self._failed_start(f"not ready after {_START_LIMIT:.0f} s")
                continue
            memory = worker.memory()
            if worker.task is None:
                if memory > 0.8 * self.limits.memory:  # would fail the next star for this one's
                    self._drop(worker)
                continue
            seconds = now - worker.start
            late, large = seconds > self.limits.time, memory > self.limits.memory
            if not (late or large) or worker.connection.poll():
                continue  # an answer that is there already counts
            if large:
                found.append(self._memory_failure(worker.task, seconds))
            else:
                reason = f"took longer than {self.limits.time:g} s"
                found.append(Failed(worker.task, "time", reason, seconds, self.limits.time))
            self._drop(worker)
        return found


def _cause_of_death(code: int | None) -> str:
    if code is None:
        return "the worker process stopped answering"
    if code >= 0:
        return f"the worker process ended with exit code {code}"
    try:
        name = signal.Signals(-code).name
    except ValueError:
        name = "unknown"
    text = f"the worker process was killed by signal {-code} ({name})"
    if -code == signal.SIGKILL:
        text += ", as the system does when memory runs out"
    return text
