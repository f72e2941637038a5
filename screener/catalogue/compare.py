"""What changed between two runs: stars, signals and grades."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from screener.store import Store
from screener.store.reading import ranked, stars

__all__ = ["Change", "changes"]

# Periods closer than this many joint errors, or this share, are taken for the same signal.
_SIGMAS, _SHARE = 5.0, 0.005


@dataclass(frozen=True)
class Change:
    """One difference: ``kind`` for filtering, ``before`` and ``now`` for a person."""

    star: str
    kind: str  # "grade", "new signal", "lost signal", "new star", "lost star", "failed", "mended"
    before: str
    now: str
    weight: int  # the smaller, the more it matters


def changes(now: Store, before: Store) -> list[Change]:
    """All differences from ``before`` to ``now``, the weightiest first."""
    found: list[Change] = []
    state_now = {row["name"]: row for row in stars(now)}
    state_before = {row["name"]: row for row in stars(before)}
    signals_now, signals_before = _signals(now), _signals(before)
    for name in sorted(state_now.keys() | state_before.keys()):
        here, there = state_now.get(name), state_before.get(name)
        if here is None or there is None:
            found.append(_presence(name, here, there))
        elif here["state"] == "done" and there["state"] == "done":
            found += _compare(name, signals_now.get(name, []), signals_before.get(name, []))
        elif here["state"] != there["state"]:
            kind = "mended" if here["state"] == "done" else "failed"
            found.append(Change(name, kind, _state_words(there), _state_words(here), 3))
    return sorted(found, key=lambda change: (change.weight, change.star))


def _signals(store: Store) -> dict[str, list[dict[str, Any]]]:
    result: dict[str, list[dict[str, Any]]] = {}
    for row in ranked(store):
        if row["signal"] is not None:
            result.setdefault(row["star"], []).append(row)
    return result


def _presence(name: str, here: dict[str, Any] | None, there: dict[str, Any] | None) -> Change:
    if here is not None:
        return Change(name, "new star", "not in that run", _state_words(here), 4)
    assert there is not None
    return Change(name, "lost star", _state_words(there), "not in this run", 4)


def _state_words(row: dict[str, Any]) -> str:
    return str(row["grade"]) if row["state"] == "done" else str(row["state"])


def _compare(name: str, here: list[dict[str, Any]], there: list[dict[str, Any]]) -> list[Change]:
    found = []
    rest = list(there)
    for signal in here:
        match = min(
            (other for other in rest if _same(signal, other)),
            key=lambda other: abs(signal["period_d"] - other["period_d"]),
            default=None,
        )
        if match is None:
            weight = 0 if signal["grade"] == "planetary" else 2
            found.append(Change(name, "new signal", "none", _signal_words(signal), weight))
            continue
        rest.remove(match)
        if match["grade"] != signal["grade"]:
            weight = 0 if "planetary" in (match["grade"], signal["grade"]) else 1
            words = _signal_words(match), _signal_words(signal)
            found.append(Change(name, "grade", *words, weight))
    for signal in rest:
        weight = 0 if signal["grade"] == "planetary" else 2
        found.append(Change(name, "lost signal", _signal_words(signal), "none", weight))
    return found


def _same(one: dict[str, Any], other: dict[str, Any]) -> bool:
    if one["period_d"] is None or other["period_d"] is None:
        return False
    joint = math.hypot(one["period_err_d"] or 0.0, other["period_err_d"] or 0.0)
    allowed = max(_SIGMAS * joint, _SHARE * other["period_d"])
    # a wide error must not make neighbours of everything
    allowed = min(allowed, 0.1 * other["period_d"])
    return bool(abs(one["period_d"] - other["period_d"]) <= allowed)


def _signal_words(signal: dict[str, Any]) -> str:
    period = signal["period_d"]
    where = "?" if period is None else f"{period:.4g}"
    return f"{signal['grade']} at {where} d"
