"""One SQLite file per run: opened, migrated, written by one process, read by anyone."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from urllib.parse import quote

from screener.core import InputFault
from screener.store.schema import migrate

__all__ = ["Planned", "RunSettings", "StarRow", "Store", "WorkRow", "grade_of", "utc_now"]


# keys of verdict.json that go to the tables as they are, in the tables' order
_SIGNAL_NUMBERS = (
    "id",
    "grade",
    "score",
    "period_d",
    "period_err_d",
    "k_m_s",
    "k_err_m_s",
    "eccentricity",
    "false_alarm_probability",
)
_FINDING_KEYS = ("test", "outcome", "statistic", "p_value", "power", "sentence")


def utc_now() -> str:
    """The time, ISO 8601 to the millisecond, UTC."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


@dataclass(frozen=True)
class RunSettings:
    """What all stars of a run have in common."""

    source: str
    version: str
    rules: str
    rules_sha256: str
    seed: int
    depth: str
    compared: str | None = None  # folder of an earlier run, for the page


@dataclass(frozen=True)
class StarRow:
    """A star as the store knows it; paths as text."""

    name: str
    folder: str
    table_file: str
    sidecar_file: str | None = None
    photometry_file: str | None = None


@dataclass(frozen=True)
class WorkRow:
    """What is to be computed for a star; hashes hexadecimal, the estimate in seconds."""

    key: str
    table_sha256: str | None
    sidecar_sha256: str | None
    photometry_sha256: str | None
    estimate: float


@dataclass(frozen=True)
class Planned:
    """How far a star's work has come."""

    state: str  # waiting, done or failed
    attempts: int
    file_sha256: str | None  # of the verdict, when done
    failure_kind: str | None  # of the last failed attempt
    failure_limit: float | None
    seconds: float | None  # time it took, when done


class Store:
    """The SQLite file of a run.

    Parameters
    ----------
    path : Path
        The file; made and brought to the present layout unless ``read_only``.
    read_only : bool
        Leave the file as it is. It must exist.

    Raises
    ------
    InputFault
        If the file is no SQLite file, or absent while ``read_only``.
    StoreError
        If a newer version wrote it.
    """

    def __init__(self, path: Path, *, read_only: bool = False) -> None:
        self.path = path
        if read_only and not path.is_file():
            raise InputFault(
                str(path), "there is no such run", "Give the folder of a catalogue run"
            )
        try:
            self.connection = self._connect(read_only)
            if not read_only:
                self.connection.execute("PRAGMA journal_mode = WAL")
                # a verdict that was announced as done must survive a power cut as well
                self.connection.execute("PRAGMA synchronous = FULL")
                migrate(self.connection)
        except sqlite3.DatabaseError as error:
            if "full" in str(error) or "disk I/O" in str(error):
                raise
            raise InputFault(
                str(path),
                f"cannot be used as a store ({error})",
                "Move it away or give another folder",
            ) from None

    def _connect(self, read_only: bool) -> sqlite3.Connection:
        name = f"file:{quote(str(self.path.absolute()))}"
        if not read_only:
            return self._opened(name + "?mode=rwc")
        log = self.path.with_name(self.path.name + "-wal")
        if not log.exists():
            # nobody writes; without this, a reader leaves the files behind that WAL needs
            return self._opened(name + "?mode=ro&immutable=1")
        return self._opened(name + "?mode=ro")

    @staticmethod
    def _opened(uri: str) -> sqlite3.Connection:
        connection = sqlite3.connect(uri, uri=True, isolation_level=None, timeout=30.0)
        connection.row_factory = sqlite3.Row
        connection.execute("PRAGMA foreign_keys = ON")
        return connection

    def close(self) -> None:
        """Fold the write-ahead log into the file, as far as readers allow, and close."""
        try:
            self.connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        except sqlite3.OperationalError:
            pass  # read only, or the disk is full: nothing is lost, the log stays
        finally:
            self.connection.close()

    def __enter__(self) -> Store:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """All or nothing."""
        self.connection.execute("BEGIN IMMEDIATE")
        try:
            yield self.connection
            self.connection.execute("COMMIT")
        except BaseException:
            if self.connection.in_transaction:
                self.connection.execute("ROLLBACK")
            raise

    # -- planning ---------------------------------------------------------------------------

    def begin_run(self, settings: RunSettings) -> int:
        """The number of the run with these settings, a new one or the one to go on with."""
        now = utc_now()
        with self.transaction() as db:
            row = db.execute(
                "INSERT INTO run (source, version, rules, rules_sha256, seed, depth, state,"
                " started_utc, changed_utc, compared)"
                " VALUES (?, ?, ?, ?, ?, ?, 'running', ?, ?, ?)"
                " ON CONFLICT (source, version, rules_sha256, seed, depth)"
                " DO UPDATE SET state = 'running', changed_utc = excluded.changed_utc,"
                " compared = excluded.compared"
                " RETURNING id",
                (
                    settings.source,
                    settings.version,
                    settings.rules,
                    settings.rules_sha256,
                    settings.seed,
                    settings.depth,
                    now,
                    now,
                    settings.compared,
                ),
            ).fetchone()
        return int(row["id"])

    def end_run(self, run_id: int, state: str) -> None:
        """Note that the run is 'done' or 'stopped'."""
        with self.transaction() as db:
            db.execute(
                "UPDATE run SET state = ?, changed_utc = ? WHERE id = ?", (state, utc_now(), run_id)
            )

    def plan(self, run_id: int, stars: Iterable[tuple[StarRow, WorkRow]]) -> dict[str, Planned]:
        """Enter the run's stars; what is known under another key is forgotten.

        Returns
        -------
        dict
            Star name to how far its work has come.
        """
        items = list(stars)
        with self.transaction() as db:
            for star, work in items:
                db.execute(
                    "DELETE FROM star WHERE folder = ? AND name <> ?", (star.folder, star.name)
                )
                db.execute(
                    "INSERT INTO star VALUES (?, ?, ?, ?, ?, ?) ON CONFLICT (name) DO UPDATE SET"
                    " run_id = excluded.run_id, folder = excluded.folder,"
                    " table_file = excluded.table_file, sidecar_file = excluded.sidecar_file,"
                    " photometry_file = excluded.photometry_file",
                    (
                        star.name,
                        run_id,
                        star.folder,
                        star.table_file,
                        star.sidecar_file,
                        star.photometry_file,
                    ),
                )
                db.execute("DELETE FROM work WHERE star = ? AND key <> ?", (star.name, work.key))
                db.execute(
                    "INSERT OR IGNORE INTO work (key, star, state, table_sha256, sidecar_sha256,"
                    " photometry_sha256, estimate_s) VALUES (?, ?, 'waiting', ?, ?, ?, ?)",
                    (
                        work.key,
                        star.name,
                        work.table_sha256,
                        work.sidecar_sha256,
                        work.photometry_sha256,
                        work.estimate,
                    ),
                )
        return self._planned(run_id)

    def _planned(self, run_id: int) -> dict[str, Planned]:
        rows = self.connection.execute(
            "SELECT w.star, w.state, w.attempts, v.file_sha256, w.seconds, f.kind, f.limit_value"
            " FROM work w JOIN star t ON t.name = w.star"
            " LEFT JOIN verdict v ON v.star = w.star"
            " LEFT JOIN failure f ON f.work_key = w.key AND f.attempt = w.attempts"
            " WHERE t.run_id = ?",
            (run_id,),
        )
        return {
            row["star"]: Planned(
                state=row["state"],
                attempts=row["attempts"],
                file_sha256=row["file_sha256"],
                failure_kind=row["kind"],
                failure_limit=row["limit_value"],
                seconds=row["seconds"],
            )
            for row in rows
        }

    def again(self, star: str) -> None:
        """Forget what was computed for a star; it waits once more."""
        with self.transaction() as db:
            db.execute("DELETE FROM verdict WHERE star = ?", (star,))
            db.execute("DELETE FROM failure WHERE star = ?", (star,))
            db.execute(
                "UPDATE work SET state = 'waiting', attempts = 0, seconds = NULL,"
                " peak_memory_mb = NULL, finished_utc = NULL WHERE star = ?",
                (star,),
            )

    # -- results ----------------------------------------------------------------------------

    def record_verdict(
        self,
        star: str,
        verdict: Mapping[str, Any],
        *,
        file_sha256: str,
        seconds: float | None,
        peak_memory_mb: float | None,
        folds: Mapping[str, list[list[float]]] | None = None,
    ) -> str:
        """Enter a verdict (as ``verdict.json`` holds it), replacing an earlier one.

        Returns
        -------
        str
            The star's grade: the most planet-like one among its signals, or "no signal".
        """
        grade = grade_of(verdict)
        entry, rotation = verdict["input"], verdict["rotation"] or {}
        with self.transaction() as db:
            db.execute("DELETE FROM verdict WHERE star = ?", (star,))
            db.execute(
                "UPDATE work SET state = 'done', attempts = attempts + 1, seconds = ?,"
                " peak_memory_mb = ?, finished_utc = ? WHERE star = ?",
                (seconds, peak_memory_mb, utc_now(), star),
            )
            db.execute(
                "INSERT INTO verdict SELECT ?, key, ?, ?, ?, ?, ?, ?, ?, ?, ?, ? FROM work"
                " WHERE star = ?",
                (
                    star,
                    verdict["star"],
                    grade,
                    len(verdict["signals"]),
                    entry.get("n_obs"),
                    entry.get("n_nights"),
                    entry.get("baseline_d"),
                    rotation.get("period_d"),
                    rotation.get("period_err_d"),
                    len(verdict.get("cautions") or ()),
                    file_sha256,
                    star,
                ),
            )
            for signal in verdict["signals"]:
                self._enter_signal(star, signal, (folds or {}).get(signal["id"]))
        return grade

    def _enter_signal(
        self, star: str, signal: Mapping[str, Any], fold: list[list[float]] | None
    ) -> None:
        values = [signal.get(name) for name in _SIGNAL_NUMBERS]
        self.connection.execute(
            "INSERT INTO signal VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            (
                star,
                *values,
                ", ".join(signal.get("deciding_rules") or ()),
                signal.get("next_step") or "",
                None if fold is None else json.dumps(fold, allow_nan=False),
            ),
        )
        self.connection.executemany(
            "INSERT INTO finding VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
            [
                (star, signal["id"], number, *(finding.get(name) for name in _FINDING_KEYS))
                for number, finding in enumerate(signal.get("findings") or ())
            ],
        )

    def record_failure(
        self,
        star: str,
        kind: str,
        reason: str,
        *,
        final: bool,
        seconds: float | None = None,
        limit: float | None = None,
    ) -> None:
        """Enter a failed attempt; ``final`` if there will be no other."""
        now = utc_now()
        with self.transaction() as db:
            db.execute("DELETE FROM verdict WHERE star = ?", (star,))
            db.execute(
                "UPDATE work SET state = ?, attempts = attempts + 1, seconds = ?,"
                " finished_utc = ? WHERE star = ?",
                ("failed" if final else "waiting", seconds, now if final else None, star),
            )
            db.execute(
                "INSERT INTO failure SELECT key, attempts, star, ?, ?, ?, ?, ? FROM work"
                " WHERE star = ?",
                (kind, reason, limit, seconds, now, star),
            )


def grade_of(verdict: Mapping[str, Any]) -> str:
    """The most planet-like grade among a verdict's signals, or "no signal"."""
    grades = {signal["grade"] for signal in verdict["signals"]}
    for grade in ("planetary", "ambiguous", "likely stellar"):
        if grade in grades:
            return grade
    return "no signal"
