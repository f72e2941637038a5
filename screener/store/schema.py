"""The tables of a run's SQLite file, what each column means, and how old files are brought up.

The layout's number stands in SQLite's ``user_version``. A migration is SQL text that takes a file
from one number to the next; further tables are added by appending a migration, never by changing
one that has been released. Every column is described in the file itself, in the table ``about``.
"""

from __future__ import annotations

import sqlite3

from screener.core import ScreenerError

__all__ = ["ABOUT", "MIGRATIONS", "VERSION", "StoreError", "migrate"]


class StoreError(ScreenerError):
    """The store cannot be used: written by a newer version, or damaged."""


_FIRST = """
CREATE TABLE about (
  table_name TEXT NOT NULL,
  column_name TEXT NOT NULL,
  meaning TEXT NOT NULL,
  PRIMARY KEY (table_name, column_name)
) WITHOUT ROWID;

CREATE TABLE run (
  id INTEGER PRIMARY KEY,
  source TEXT NOT NULL,
  version TEXT NOT NULL,
  rules TEXT NOT NULL,
  rules_sha256 TEXT NOT NULL,
  seed INTEGER NOT NULL,
  depth TEXT NOT NULL,
  state TEXT NOT NULL CHECK (state IN ('running', 'stopped', 'done')),
  started_utc TEXT NOT NULL,
  changed_utc TEXT NOT NULL,
  compared TEXT,
  UNIQUE (source, version, rules_sha256, seed, depth)
);

CREATE TABLE star (
  name TEXT PRIMARY KEY,
  run_id INTEGER NOT NULL REFERENCES run (id),
  folder TEXT NOT NULL UNIQUE,
  table_file TEXT NOT NULL,
  sidecar_file TEXT,
  photometry_file TEXT
) WITHOUT ROWID;

CREATE TABLE work (
  key TEXT PRIMARY KEY,
  star TEXT NOT NULL UNIQUE REFERENCES star (name) ON DELETE CASCADE,
  state TEXT NOT NULL CHECK (state IN ('waiting', 'done', 'failed')),
  attempts INTEGER NOT NULL DEFAULT 0,
  table_sha256 TEXT,
  sidecar_sha256 TEXT,
  photometry_sha256 TEXT,
  estimate_s REAL,
  seconds REAL,
  peak_memory_mb REAL,
  finished_utc TEXT
) WITHOUT ROWID;
CREATE INDEX work_state ON work (state);

CREATE TABLE verdict (
  star TEXT PRIMARY KEY REFERENCES star (name) ON DELETE CASCADE,
  work_key TEXT NOT NULL REFERENCES work (key) ON DELETE CASCADE,
  star_name TEXT NOT NULL,
  grade TEXT NOT NULL CHECK (grade IN ('planetary', 'ambiguous', 'likely stellar', 'no signal')),
  n_signals INTEGER NOT NULL,
  n_obs INTEGER,
  n_nights INTEGER,
  baseline_d REAL,
  rotation_period_d REAL,
  rotation_period_err_d REAL,
  cautions INTEGER NOT NULL,
  file_sha256 TEXT NOT NULL
) WITHOUT ROWID;
CREATE INDEX verdict_work ON verdict (work_key);

CREATE TABLE signal (
  star TEXT NOT NULL REFERENCES verdict (star) ON DELETE CASCADE,
  id TEXT NOT NULL,
  grade TEXT NOT NULL CHECK (grade IN ('planetary', 'ambiguous', 'likely stellar')),
  score REAL,
  period_d REAL,
  period_err_d REAL,
  k_m_s REAL,
  k_err_m_s REAL,
  eccentricity REAL,
  false_alarm_probability REAL,
  deciding_rules TEXT NOT NULL,
  next_step TEXT NOT NULL,
  fold TEXT,
  PRIMARY KEY (star, id)
) WITHOUT ROWID;
CREATE INDEX signal_grade ON signal (grade, score);

CREATE TABLE finding (
  star TEXT NOT NULL,
  signal TEXT NOT NULL,
  number INTEGER NOT NULL,
  test TEXT NOT NULL,
  outcome TEXT NOT NULL,
  statistic REAL,
  p_value REAL,
  power REAL,
  sentence TEXT NOT NULL,
  PRIMARY KEY (star, signal, number),
  FOREIGN KEY (star, signal) REFERENCES signal (star, id) ON DELETE CASCADE
) WITHOUT ROWID;
CREATE INDEX finding_test ON finding (test, outcome);

CREATE TABLE failure (
  work_key TEXT NOT NULL REFERENCES work (key) ON DELETE CASCADE,
  attempt INTEGER NOT NULL,
  star TEXT NOT NULL REFERENCES star (name) ON DELETE CASCADE,
  kind TEXT NOT NULL,
  reason TEXT NOT NULL,
  limit_value REAL,
  seconds REAL,
  at_utc TEXT NOT NULL,
  PRIMARY KEY (work_key, attempt)
) WITHOUT ROWID;
CREATE INDEX failure_star ON failure (star);

CREATE VIEW ranked AS
SELECT
  row_number() OVER (ORDER BY
    CASE coalesce(s.grade, 'no signal') WHEN 'planetary' THEN 0 WHEN 'ambiguous' THEN 1
      WHEN 'likely stellar' THEN 2 ELSE 3 END,
    s.score DESC, v.star, s.id) AS rank,
  v.star AS star, v.star_name AS star_name, s.id AS signal,
  coalesce(s.grade, 'no signal') AS grade,
  s.score AS score, s.period_d AS period_d, s.period_err_d AS period_err_d,
  s.k_m_s AS k_m_s, s.k_err_m_s AS k_err_m_s, s.eccentricity AS eccentricity,
  s.false_alarm_probability AS false_alarm_probability,
  v.rotation_period_d AS rotation_period_d, v.rotation_period_err_d AS rotation_period_err_d,
  s.deciding_rules AS deciding_rules, s.next_step AS next_step,
  v.n_obs AS n_obs, v.n_nights AS n_nights, v.baseline_d AS baseline_d,
  w.seconds AS seconds, t.folder AS folder
FROM verdict v
JOIN star t ON t.name = v.star
JOIN work w ON w.key = v.work_key
LEFT JOIN signal s ON s.star = v.star
WHERE t.run_id = (SELECT id FROM run ORDER BY changed_utc DESC, id DESC LIMIT 1);
"""

# Migration n takes a file from layout n to n + 1.
MIGRATIONS: tuple[str, ...] = (_FIRST,)
VERSION = len(MIGRATIONS)

ABOUT: dict[str, dict[str, str]] = {
    "about": {
        "": "What every table and column of this file means.",
        "table_name": "The table.",
        "column_name": "The column; empty for the table as a whole.",
        "meaning": "What it holds, with its unit.",
    },
    "run": {
        "": "One row per set of settings under which stars were screened into this folder.",
        "id": "Number of the run.",
        "source": "Folder, list or catalogue table that names the stars, as an absolute path.",
        "version": "Version of the screener.",
        "rules": "Name and version of the grading rules.",
        "rules_sha256": "SHA-256 of the rule file.",
        "seed": "Seed of every star's random numbers.",
        "depth": "quick, standard or deep.",
        "state": "running, stopped (resumes with the same command) or done.",
        "started_utc": "First start, ISO 8601, UTC.",
        "changed_utc": "Last start or end, ISO 8601, UTC.",
        "compared": "Folder of the earlier run that the page compares with, or null.",
    },
    "star": {
        "": "One row per star, that is per input table.",
        "name": "Name of the star within the run: the table's file name without its ending.",
        "run_id": "The last run that the star was part of.",
        "folder": "Folder of the star's files, below the run's folder.",
        "table_file": "The input table, as an absolute path.",
        "sidecar_file": "The sidecar read with it, or null.",
        "photometry_file": "The photometry read with it, or null.",
    },
    "work": {
        "": "What has to be computed for each star, by content: another content, another key.",
        "key": "SHA-256 over name, table, sidecar, photometry, rules, version, seed and depth.",
        "star": "The star.",
        "state": "waiting, done or failed.",
        "attempts": "Attempts that ended, well or not.",
        "table_sha256": "SHA-256 of the table (of the star's rows in a catalogue table).",
        "sidecar_sha256": "SHA-256 of the sidecar, or null.",
        "photometry_sha256": "SHA-256 of the photometry, or null.",
        "estimate_s": "Time expected beforehand, s.",
        "seconds": "Time taken, s.",
        "peak_memory_mb": "Largest resident memory of the process up to the end of this star, MB.",
        "finished_utc": "When the star was done or given up, ISO 8601, UTC.",
    },
    "verdict": {
        "": "One row per star that was screened; the whole verdict is in <folder>/verdict.json.",
        "star": "The star.",
        "work_key": "The work that gave this verdict.",
        "star_name": "Name of the star as its sidecar or table gives it.",
        "grade": "The most planet-like grade among the signals, or 'no signal'.",
        "n_signals": "Number of graded signals.",
        "n_obs": "Velocities used.",
        "n_nights": "Nights with a velocity.",
        "baseline_d": "First to last velocity, d.",
        "rotation_period_d": "Rotation period of the star, d; null if not known.",
        "rotation_period_err_d": "Its 1-sigma error, d.",
        "cautions": "Number of cautions in the verdict.",
        "file_sha256": "SHA-256 of verdict.json.",
    },
    "signal": {
        "": "One row per graded signal.",
        "star": "The star.",
        "id": "S1, S2, ... within the star, strongest first.",
        "grade": "planetary, ambiguous or likely stellar.",
        "score": "Natural log-odds of planet against star.",
        "period_d": "Period, d.",
        "period_err_d": "Its 1-sigma error, d.",
        "k_m_s": "Semi-amplitude, m/s.",
        "k_err_m_s": "Its 1-sigma error, m/s.",
        "eccentricity": "Eccentricity.",
        "false_alarm_probability": "Chance of such a period in noise.",
        "deciding_rules": "Rules that decided the grade, separated by ', '.",
        "next_step": "What to do next.",
        "fold": "JSON: phase-folded velocities in bins, [[phase, m/s], ...]; null if not kept.",
    },
    "finding": {
        "": "One row per line of evidence about a signal.",
        "star": "The star.",
        "signal": "The signal's id.",
        "number": "Order within the signal, from 0.",
        "test": "ID of the test.",
        "outcome": "supports planet, supports star, inconclusive, not applicable or failed.",
        "statistic": "The test's number.",
        "p_value": "Chance of such a number under the test's null.",
        "power": "Chance that the test would have spoken, had the signal been the star's.",
        "sentence": "The same for a person.",
    },
    "failure": {
        "": "One row per attempt that failed.",
        "work_key": "The work.",
        "attempt": "1 for the first attempt.",
        "star": "The star.",
        "kind": "input, time, memory, crash or error.",
        "reason": "What happened.",
        "limit_value": "The limit that was hit (s or MB), or null.",
        "seconds": "Time until then, s.",
        "at_utc": "When, ISO 8601, UTC.",
    },
    "ranked": {
        "": "View: the latest run's signals, most planet-like first; stars without one come last.",
        "rank": "1 for the most planet-like.",
    },
}


def migrate(connection: sqlite3.Connection) -> int:
    """Bring a file up to the present layout, each step in a transaction of its own.

    Returns
    -------
    int
        The number of the layout.

    Raises
    ------
    StoreError
        If the file was written by a newer version.
    """
    version = int(connection.execute("PRAGMA user_version").fetchone()[0])
    if version > VERSION:
        raise StoreError(
            f"the store has layout {version} and this version of the screener knows {VERSION}; "
            "update the screener"
        )
    for number in range(version, VERSION):
        statements = _statements(MIGRATIONS[number])
        connection.execute("BEGIN IMMEDIATE")
        try:
            for statement in statements:
                connection.execute(statement)
            _describe(connection)
            connection.execute(f"PRAGMA user_version = {number + 1}")
            connection.execute("COMMIT")
        except BaseException:
            if connection.in_transaction:
                connection.execute("ROLLBACK")
            raise
    return VERSION


def _statements(script: str) -> list[str]:
    # executescript() commits first, and a migration must be whole or absent
    result, current = [], ""
    for piece in script.split(";"):
        current += piece + ";"
        if sqlite3.complete_statement(current):
            result.append(current.strip())
            current = ""
    if current.strip(" \n;"):
        raise StoreError(f"a migration ends in the middle of a statement: {current.strip()[:60]}")
    return [s for s in result if s]


def _describe(connection: sqlite3.Connection) -> None:
    rows = [(t, c, text) for t, columns in ABOUT.items() for c, text in columns.items()]
    connection.execute("DELETE FROM about")
    connection.executemany("INSERT INTO about VALUES (?, ?, ?)", rows)
