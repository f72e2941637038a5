"""A worker process: takes one task at a time and answers, or dies alone.

Started as ``python -m screener.catalogue.worker`` with a socket to its supervisor. Numeric
threads are pinned by the environment that the supervisor gives it, before numpy is imported.
"""

from __future__ import annotations

import faulthandler
import importlib
import os
import resource
import signal
import sys
import threading
import time
import traceback
from collections.abc import Callable
from multiprocessing.connection import Connection
from typing import Any

from screener.core import InputFault, InputFaults

__all__ = ["find_work", "serve"]


def find_work(reference: str) -> Callable[[Any], Any]:
    """The function that "package.module:name" refers to.

    If its module has a function ``preload``, that is called first: what it imports is then part
    of the worker's start, and neither of a star's time nor of its memory.
    """
    name_of_module, _, name = reference.partition(":")
    module = importlib.import_module(name_of_module)
    preload: Callable[[], None] | None = getattr(module, "preload", None)
    if preload is not None:
        preload()
    function: Callable[[Any], Any] = getattr(module, name)
    return function


def _die_with_parent(parent: int) -> None:
    """End this process once the one that started it is gone, however it went."""

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(0.5)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def _peak_memory() -> float:
    """Largest resident memory so far, MB."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / 1e6 if sys.platform == "darwin" else peak / 1e3


def _limit_memory(limit: float) -> None:
    """Let allocations fail that would pass ``limit`` MB on top of what the imports took."""
    try:
        with open("/proc/self/statm", encoding="ascii") as handle:  # noqa: PTH123
            pages = int(handle.read().split()[0])
        size = pages * os.sysconf("SC_PAGE_SIZE") + int(limit * 1e6)
        _, hard = resource.getrlimit(resource.RLIMIT_AS)
        if hard != resource.RLIM_INFINITY:
            size = min(size, hard)
        resource.setrlimit(resource.RLIMIT_AS, (size, hard))
    except (OSError, ValueError):
        pass  # the supervisor watches the resident memory as well


def _attempt(work: Callable[[Any], Any], task: str, payload: Any) -> tuple[Any, ...]:
    start = time.monotonic()
    try:
        result = work(payload)
        return ("done", task, result, time.monotonic() - start, _peak_memory())
    except (InputFault, InputFaults) as fault:
        kind, reason, detail = "input", str(fault), ""
    except MemoryError:
        kind, reason, detail = "memory", "memory ran out", ""
    except Exception as error:
        text = " ".join(str(error).split())
        kind, reason = "error", f"{type(error).__name__}: {text}"[:2000]
        detail = traceback.format_exc()[-20000:]
    return ("failed", task, kind, reason, time.monotonic() - start, detail)


def serve(connection: Connection, reference: str, memory: float) -> None:
    """Answer tasks until the supervisor closes the connection."""
    work = find_work(reference)
    _limit_memory(memory)
    connection.send(("ready", _peak_memory()))
    while True:
        try:
            task, payload = connection.recv()
            connection.send(("started", task))
        except (EOFError, OSError):
            return
        answer = _attempt(work, task, payload)
        try:
            connection.send(answer)
        except OSError:
            return
        except Exception as error:  # an answer that cannot be sent must not cost a second attempt
            text = f"the result cannot be sent: {error}"
            connection.send(("failed", task, "error", text, 0.0, traceback.format_exc()))
        if answer[0] == "failed" and answer[2] == "memory":
            return  # what is left of the memory is in pieces; a new process starts clean


def _main() -> None:
    descriptor, parent, reference, memory = sys.argv[1:5]
    # the terminal sends Ctrl-C to every process; stopping is the supervisor's business
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    faulthandler.enable()
    _die_with_parent(int(parent))
    serve(Connection(int(descriptor)), reference, float(memory))


if __name__ == "__main__":
    _main()
