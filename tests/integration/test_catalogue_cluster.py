"""The same run on a Dask cluster of separate worker processes, one of which is killed."""

from __future__ import annotations

import io
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest

from screener.catalogue import Limits, Options, run_catalogue
from screener.catalogue.pool import pinned_environment
from screener.catalogue.progress import LineWatch
from screener.core import InputFault
from tests.integration.catalogue_work import DRAW, WORK, write_star
from tests.integration.kill_catalogue import computed_twice, differences

pytest.importorskip("distributed", reason="needs the extra 'cluster' (Dask)")
pytestmark = pytest.mark.filterwarnings("ignore")  # what Dask warns of is not ours


class Cluster:
    """A scheduler and two workers, each a process of its own, as a batch system starts them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.environment = pinned_environment()
        file = folder / "scheduler.json"
        self.scheduler = self._start("scheduler", "--host", "127.0.0.1", "--port", "0",
                                     "--scheduler-file", str(file))  # fmt: skip
        deadline = time.monotonic() + 60
        while not file.exists() and time.monotonic() < deadline:
            time.sleep(0.1)
        import json

        time.sleep(0.2)
        self.address: str = json.loads(file.read_text())["address"]
        self.workers = [self.add_worker(), self.add_worker()]

    def _start(self, what: str, *words: str) -> subprocess.Popen[bytes]:
        command = [sys.executable, "-m", "distributed.cli.dask_" + what, *words, "--no-dashboard"]
        log = (self.folder / f"{what}-{time.monotonic_ns()}.log").open("wb")
        with log:
            return subprocess.Popen(
                command, stdout=log, stderr=log, env=self.environment, start_new_session=True
            )

    def add_worker(self) -> subprocess.Popen[bytes]:
        words = ("--nthreads", "1", "--host", "127.0.0.1", "--local-directory", str(self.folder))
        return self._start("worker", self.address, *words, "--no-nanny")

    def close(self) -> None:
        for process in [*self.workers, self.scheduler]:
            process.kill()
            process.wait()


@pytest.fixture
def cluster(tmp_path: Path) -> Iterator[Cluster]:
    place = tmp_path / "cluster"
    place.mkdir()
    made = Cluster(place)
    yield made
    made.close()


def _options(address: str | None) -> Options:
    limits = Limits(5.0, 400.0)
    return Options(workers=2, limits=limits, scheduler=address, work=WORK, draw=DRAW, dossiers=0)


@pytest.mark.slow
def test_a_killed_worker_costs_nothing_and_the_verdicts_are_the_same(
    cluster: Cluster, tmp_path: Path
) -> None:
    folder = tmp_path / "stars"
    folder.mkdir()
    for number in range(24):
        write_star(folder / f"s{number:02d}.csv", "slow")
    write_star(folder / "die.csv", "die")
    write_star(folder / "raise.csv", "raise")
    run = tmp_path / "run"

    def kill_one() -> None:
        deadline = time.monotonic() + 90
        while len(list(run.glob("*/verdict.json"))) < 4 and time.monotonic() < deadline:
            time.sleep(0.02)
        os.kill(cluster.workers[0].pid, signal.SIGKILL)

    killer = threading.Thread(target=kill_one)
    killer.start()
    stream = io.StringIO()
    summary = run_catalogue(folder, run, _options(cluster.address), LineWatch(stream))
    killer.join()
    assert cluster.workers[0].poll() == -signal.SIGKILL
    assert {row["star"]: row["kind"] for row in summary.failures} == {
        "die": "crash",
        "raise": "error",
    }
    assert summary.computed == 24
    assert computed_twice(run) == []
    run_catalogue(folder, tmp_path / "local", _options(None), LineWatch(stream))
    assert differences(run, tmp_path / "local") == []
    # the processes of the killed worker went with it
    left = [p for p in psutil.process_iter(["cmdline"]) if _serves(p, cluster.workers[0].pid)]
    assert left == []


def _serves(process: psutil.Process, parent: int) -> bool:
    words = process.info["cmdline"] or []
    return "screener.catalogue.worker" in words and str(parent) in words


@pytest.mark.slow
def test_a_star_that_hangs_on_the_cluster_is_ended_there(cluster: Cluster, tmp_path: Path) -> None:
    folder = tmp_path / "stars"
    folder.mkdir()
    write_star(folder / "hang.csv", "hang")
    write_star(folder / "memory.csv", "memory")
    write_star(folder / "ok.csv")
    options = Options(
        limits=Limits(1.0, 300.0), scheduler=cluster.address, work=WORK, draw=DRAW, dossiers=0
    )
    summary = run_catalogue(folder, tmp_path / "run", options, LineWatch(io.StringIO()))
    assert {row["star"]: row["kind"] for row in summary.failures} == {
        "hang": "time",
        "memory": "memory",
    }
    assert summary.computed == 1


def test_no_scheduler_at_the_address_is_said(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("screener.catalogue.cluster._CONNECT", 1.0)
    folder = tmp_path / "stars"
    folder.mkdir()
    write_star(folder / "a.csv")
    with pytest.raises(InputFault, match="no scheduler answers"):
        run_catalogue(
            folder, tmp_path / "run", _options("tcp://127.0.0.1:9"), LineWatch(io.StringIO())
        )
