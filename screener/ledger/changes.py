"""What became of a decision's verdict: the deciding numbers then and now."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from screener.core import InputFault
from screener.ledger.decisions import snapshot
from screener.ledger.entry import Entry
from screener.ledger.inputs import KINDS, recorded_inputs
from screener.ledger.place import Place, ReadVerdict

__all__ = ["Change", "Standing", "changes", "same_period", "standings"]

# Periods closer than this many joint errors, or this share, are the same signal.
_SIGMAS, _SHARE, _MOST = 5.0, 0.005, 0.1

_WORDS = {
    "grade": ("grade", ""),
    "score": ("score", ""),
    "period_d": ("period", " d"),
    "period_err_d": ("period error", " d"),
    "k_m_s": ("K", " m/s"),
    "k_err_m_s": ("K error", " m/s"),
    "eccentricity": ("eccentricity", ""),
    "false_alarm_probability": ("false-alarm probability", ""),
    "rules": ("rules", ""),
    "rules_sha256": ("content of the rules", ""),
    "screener": ("screener version", ""),
    "seed": ("seed", ""),
    "depth": ("depth", ""),
}


@dataclass(frozen=True)
class Change:
    """One thing that is not as it was when the decision was made."""

    what: str
    before: str
    now: str

    def __str__(self) -> str:
        return f"{self.what}: {self.before} then, {self.now} now"


@dataclass(frozen=True)
class Standing:
    """A decision and what became of it.

    Attributes
    ----------
    state : str
        "current" (its verdict is the present one), "outdated", "verdict gone" or
        "verdict unreadable".
    changes : tuple of Change
        What is different, where it is outdated.
    replaced_by : int or None
        The later decision on the same signal.
    """

    entry: Entry
    state: str
    changes: tuple[Change, ...] = ()
    replaced_by: int | None = None


def same_period(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Whether two signals are the same one, by period and its error."""
    first, second = one.get("period_d"), other.get("period_d")
    if not first or not second:
        return False
    joint = math.hypot(one.get("period_err_d") or 0.0, other.get("period_err_d") or 0.0)
    # a wide error must not make neighbours of everything
    allowed = min(max(_SIGMAS * joint, _SHARE * first), _MOST * first)
    return bool(abs(first - second) <= allowed)


def changes(entry: Entry, verdict: ReadVerdict) -> tuple[Change, ...]:
    """What differs between an entry and a verdict, the deciding numbers first.

    The signal is looked up by its period, because ids follow the strength of the signals and may
    be exchanged by new data.
    """
    then = entry.snapshot
    near = [s for s in verdict.content["signals"] if same_period(then, s)]
    found: list[Change] = []
    if near:
        match = min(near, key=lambda s: abs(s["period_d"] - then["period_d"]))
        now = snapshot(verdict, str(match["id"]))
        if match["id"] != entry.signal:
            found.append(Change("the signal's id", entry.signal, str(match["id"])))
    else:
        now = {key: verdict.content.get(key) for key in _WORDS}
        there = ", ".join(f"{_shown(s['period_d'])} d" for s in verdict.content["signals"])
        found.append(
            Change("signal", f"{_shown(then.get('period_d'))} d", f"none there, but {there}")
            if there
            else Change("signal", f"{_shown(then.get('period_d'))} d", "no signal at all")
        )
    for key, (word, unit) in _WORDS.items():
        if not near and key not in ("rules", "rules_sha256", "screener", "seed", "depth"):
            continue
        before, after = then.get(key), now.get(key)
        if before != after and not (key == "rules_sha256" and then.get("rules") != now["rules"]):
            found.append(Change(word, *_pair(before, after, unit)))
    return (*found, *_input_changes(entry, verdict))


def _input_changes(entry: Entry, verdict: ReadVerdict) -> list[Change]:
    found = []
    inputs = recorded_inputs(verdict.content)
    for kind in KINDS:
        before, now = entry.inputs.get(kind) or {}, inputs[kind] or {}
        if before.get("sha256") != now.get("sha256"):
            found.append(Change(f"content of the {kind}", _brief(before), _brief(now)))
    return found


def _brief(record: Mapping[str, Any]) -> str:
    return f"{str(record['sha256'])[:12]}..." if record.get("sha256") else "none"


def _pair(before: Any, now: Any, unit: str) -> tuple[str, str]:
    """Both values with as many digits as it takes to tell them apart."""
    for digits in (4, 6, 10, 17):
        pair = _shown(before, digits), _shown(now, digits)
        if pair[0] != pair[1]:
            break
    return tuple(f"{text}{unit}" if text != "not known" else text for text in pair)  # type: ignore[return-value]


def _shown(value: Any, digits: int = 5) -> str:
    if value is None:
        return "not known"
    if isinstance(value, float):
        return f"{value:.{digits}g}"
    text = str(value)
    return f"{text[:12]}..." if len(text) == 64 else text


def standings(
    place: Place, entries: tuple[Entry, ...], star: str | None = None
) -> tuple[Standing, ...]:
    """Each decision, oldest first, against the verdicts as they are now.

    Parameters
    ----------
    star : str, optional
        Only decisions on the star of this folder.
    """
    verdicts: dict[str, ReadVerdict | InputFault | None] = {}
    last: dict[tuple[str, str], int] = {}
    for entry in entries:
        last[entry.star, entry.signal] = entry.seq
    result = []
    for entry in entries:
        if star is not None and entry.star != star:
            continue
        if entry.star not in verdicts:
            verdicts[entry.star] = _verdict(place, entry)
        later = last[entry.star, entry.signal]
        replaced = later if later != entry.seq else None
        result.append(_standing(entry, verdicts[entry.star], replaced))
    return tuple(result)


def _verdict(place: Place, entry: Entry) -> ReadVerdict | InputFault | None:
    if not (place.folder / place.file(entry.star)).is_file():
        return None
    try:
        return place.verdict(entry.star)
    except InputFault as fault:
        return fault


def _standing(
    entry: Entry, verdict: ReadVerdict | InputFault | None, replaced: int | None
) -> Standing:
    if verdict is None:
        return Standing(entry, "verdict gone", (), replaced)
    if isinstance(verdict, InputFault):
        return Standing(
            entry, "verdict unreadable", (Change("verdict.json", "sound", verdict.problem),),
            replaced,
        )  # fmt: skip
    if verdict.sha256 == entry.verdict["sha256"]:
        return Standing(entry, "current", (), replaced)
    found = changes(entry, verdict) or (
        Change("verdict.json", "other bytes", "the same deciding numbers, something else changed"),
    )
    return Standing(entry, "outdated", found, replaced)
