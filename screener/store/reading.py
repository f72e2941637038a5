"""What a finished, or half-finished, run holds, for pages, exports and comparisons."""

from __future__ import annotations

from typing import Any

from screener.store.database import Store

__all__ = ["counts", "current_run", "failures", "folds", "ranked", "stars", "work_summary"]

_LATEST = "(SELECT id FROM run ORDER BY changed_utc DESC, id DESC LIMIT 1)"


def _rows(store: Store, query: str) -> list[dict[str, Any]]:
    return [dict(row) for row in store.connection.execute(query)]


def current_run(store: Store) -> dict[str, Any]:
    """The latest run's row; empty if there was none."""
    found = _rows(store, f"SELECT * FROM run WHERE id = {_LATEST}")
    return found[0] if found else {}


def ranked(store: Store) -> list[dict[str, Any]]:
    """The latest run's signals, most planet-like first, as the view ``ranked`` gives them."""
    return _rows(store, "SELECT * FROM ranked ORDER BY rank")


def stars(store: Store) -> list[dict[str, Any]]:
    """The latest run's stars with the state of their work and their grade, by name."""
    return _rows(
        store,
        "SELECT t.name, t.folder, t.table_file, t.sidecar_file, t.photometry_file, w.state,"
        " w.seconds, v.grade FROM star t JOIN work w ON w.star = t.name"
        f" LEFT JOIN verdict v ON v.star = t.name WHERE t.run_id = {_LATEST} ORDER BY t.name",
    )


def failures(store: Store) -> list[dict[str, Any]]:
    """The latest run's stars that were given up, with the last reason, by name."""
    return _rows(
        store,
        "SELECT w.star, t.table_file, f.kind, f.reason, w.attempts, f.seconds, f.at_utc"
        " FROM work w JOIN star t ON t.name = w.star"
        " LEFT JOIN failure f ON f.work_key = w.key AND f.attempt = w.attempts"
        f" WHERE w.state = 'failed' AND t.run_id = {_LATEST} ORDER BY w.star",
    )


def folds(store: Store) -> dict[tuple[str, str], str]:
    """(star, signal) to the phase-folded velocities as JSON, where they were kept."""
    query = "SELECT star, id, fold FROM signal WHERE fold IS NOT NULL"
    return {(row["star"], row["id"]): row["fold"] for row in store.connection.execute(query)}


def counts(store: Store) -> dict[str, int]:
    """Stars of the latest run by grade, and those waiting and failed."""
    result = dict.fromkeys(
        ("planetary", "ambiguous", "likely stellar", "no signal", "failed", "waiting"), 0
    )
    for row in stars(store):
        result[row["grade"] if row["state"] == "done" else row["state"]] += 1
    return result


def work_summary(store: Store) -> dict[str, float | None]:
    """Total time (s) and largest memory (MB) of the latest run's finished stars."""
    row = store.connection.execute(
        "SELECT sum(w.seconds) AS seconds, max(w.peak_memory_mb) AS memory FROM work w"
        f" JOIN star t ON t.name = w.star WHERE t.run_id = {_LATEST} AND w.state = 'done'"
    ).fetchone()
    return {"seconds": row["seconds"], "peak_memory_mb": row["memory"]}
