"""The same work on a Dask cluster (extra ``cluster``).

Each Dask worker runs stars in a process of its own, below it, with the same limits on time and
memory as on one machine: a thread cannot be stopped, a process can. Results come back to this
process, which alone writes files and the store; inputs are read where the worker runs, so tables
lie on a disk that all machines see.
"""

from __future__ import annotations

import atexit
import contextlib
import queue
import threading
import time
import uuid
from typing import Any

from screener.catalogue.messages import ClusterLost, Event, Failed, Limits
from screener.catalogue.pool import LocalPool
from screener.core import InputFault

__all__ = ["ClusterPool", "run_in_process"]

_CONNECT = 30.0  # s
_local = threading.local()
_pools: list[LocalPool] = []


def run_in_process(work: str, task: str, payload: Any, limits: Limits) -> Event:
    """Run one task in a process below this one; called on the cluster's workers."""
    key = (work, limits)
    pool: LocalPool | None = getattr(_local, "pool", None)
    if pool is None or getattr(_local, "key", None) != key:
        if pool is not None:
            pool.close()
        pool = LocalPool(work, 1, limits)
        _local.pool, _local.key = pool, key
        _pools.append(pool)
    pool.submit(task, payload)
    while True:
        for event in pool.events(1.0):
            return event


@atexit.register
def _close_pools() -> None:
    for pool in _pools:
        with contextlib.suppress(Exception):
            pool.close()


class ClusterPool:
    """A Dask cluster as an :class:`~screener.catalogue.messages.Executor`.

    Parameters
    ----------
    address : str
        The scheduler's, "tcp://host:8786" or the like.
    work : str
        "package.module:name" of the function to apply; importable on the cluster's workers.

    Raises
    ------
    InputFault
        If Dask is not installed, or nothing answers at the address.
    """

    def __init__(self, address: str, work: str, limits: Limits) -> None:
        self.work, self.limits = work, limits
        try:
            from distributed import Client
        except ImportError:
            raise InputFault(
                "--scheduler", "Dask is not installed", 'pip install "activity-screener[cluster]"'
            ) from None
        try:
            self._client = Client(address, timeout=_CONNECT, set_as_default=False)
        except (OSError, ValueError, TimeoutError) as error:
            raise InputFault(
                f"--scheduler {address}",
                f"no scheduler answers there ({type(error).__name__})",
                "Check the address, and that the scheduler runs the same version of Dask",
            ) from None
        self._queue: queue.Queue[Any] = queue.Queue()
        self._futures: dict[str, tuple[Any, float]] = {}  # task -> future, time of submission
        self._lost_since: float | None = None

    def free(self) -> int:
        # one in the hands of each thread and one waiting beside it
        return max(1, 2 * self._threads()) - len(self._futures)

    def _threads(self) -> int:
        return sum(self._client.nthreads().values()) if self._connected() else 0

    def _connected(self) -> bool:
        return bool(self._client.status == "running")

    def submit(self, task: str, payload: Any) -> None:
        key = f"star-{uuid.uuid4().hex}"
        future = self._client.submit(
            run_in_process, self.work, task, payload, self.limits, key=key, pure=False
        )
        self._futures[task] = (future, time.monotonic())
        future.add_done_callback(lambda done, task=task: self._queue.put((task, done)))

    def running(self) -> list[str]:
        return list(self._futures)

    def events(self, timeout: float) -> list[Event]:
        self._watch_connection()
        found = []
        with contextlib.suppress(queue.Empty):
            item = self._queue.get(timeout=timeout)
            while True:
                found.append(self._event(*item))
                item = self._queue.get_nowait()
        return [event for event in found if event is not None]

    def _event(self, task: str, future: Any) -> Event | None:
        entry = self._futures.get(task)
        if entry is None or entry[0].key != future.key:
            return None
        _, start = self._futures.pop(task)
        if future.status == "finished":
            event: Event = future.result()
            return event
        seconds = time.monotonic() - start
        if future.status == "error":
            error = future.exception()
            kind = "crash" if type(error).__name__ == "KilledWorker" else "error"
            text = " ".join(str(error).split())
            return Failed(task, kind, f"{type(error).__name__}: {text}"[:2000], seconds)
        return Failed(task, "crash", f"the cluster gave the task up ({future.status})", seconds)

    def _watch_connection(self) -> None:
        now = time.monotonic()
        if self._connected():
            self._lost_since = None
            return
        self._lost_since = self._lost_since or now
        if now - self._lost_since > _CONNECT or self._client.status == "closed":
            raise ClusterLost(
                "the scheduler does not answer any more. What is done is kept; start the cluster "
                "and give the same command again to go on"
            )

    def close(self) -> None:
        with contextlib.suppress(Exception):
            self._client.cancel([future for future, _ in self._futures.values()])
        self._futures.clear()
        with contextlib.suppress(Exception):
            self._client.close(timeout=5)
