"""Two verdicts of one star, number by number."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

__all__ = ["RELATIVE", "Difference", "Match", "compare"]

RELATIVE = 1e-6  # what another processor's arithmetic may move, with ABSOLUTE near zero
ABSOLUTE = 1e-9

# Where the files lay is no part of the result.
_PLACES = frozenset({"input.file", "input.sidecar", "input.photometry", "options.rules_file"})
# How entries of a list are told apart, instead of by position.
_IDS = ("id", "test", "rule", "name", "source")
_FIRST = ("grade", "score", "period_d", "period_err_d", "k_m_s", "k_err_m_s", "eccentricity")


@dataclass(frozen=True)
class Difference:
    """A value that is not the same; ``None`` stands for "not known" or "not there"."""

    where: str  # e.g. "signals.S1.period_d"
    before: Any
    now: Any

    @property
    def relative(self) -> float:
        """|now - before| over the larger of the two; infinite where that has no meaning."""
        if not (_number(self.before) and _number(self.now)):
            return math.inf
        scale = max(abs(self.before), abs(self.now))
        return abs(self.now - self.before) / scale if scale else 0.0

    @property
    def within_tolerance(self) -> bool:
        """Whether another machine's arithmetic may explain it."""
        if not (_number(self.before) and _number(self.now)):
            return False
        return self.relative <= RELATIVE or abs(self.now - self.before) <= ABSOLUTE

    def __str__(self) -> str:
        if _number(self.before) and _number(self.now):
            step = self.now - self.before
            return f"{self.where}: {self.before!r} then, {self.now!r} now ({step:+.3g})"
        return f"{self.where}: {_short(self.before)} then, {_short(self.now)} now"


@dataclass(frozen=True)
class Match:
    """How many values were compared, and those that differ, the deciding ones first."""

    n_numbers: int
    n_words: int
    differences: tuple[Difference, ...]

    @property
    def exact(self) -> bool:
        return not self.differences

    @property
    def same(self) -> bool:
        """Exactly, or within what another machine's arithmetic may move."""
        return all(d.within_tolerance for d in self.differences)


def compare(before: Mapping[str, Any], now: Mapping[str, Any], skip: Sequence[str] = ()) -> Match:
    """Compare two verdicts as ``verdict_to_dict`` gives them.

    Parameters
    ----------
    skip : sequence of str
        Places (as in ``Difference.where``) not to look at, besides the paths of the files.
    """
    alone = _alone(before, now)
    first, second = (
        {p: v for p, v in _leaves(verdict) if not p.startswith(tuple(f"{a}." for a in alone))}
        for verdict in (before, now)
    )
    ignored = _PLACES.union(skip)
    places = [p for p in {**first, **second} if p not in ignored]
    found = [
        Difference(place, first.get(place), second.get(place))
        for place in places
        if not _equal(place, first, second)
    ]
    found += [Difference(where, *pair) for where, pair in alone.items()]
    numbers = sum(_number(first.get(place)) or _number(second.get(place)) for place in places)
    found.sort(key=_weight)
    return Match(numbers, len(places) - numbers, tuple(found))


def _alone(before: Mapping[str, Any], now: Mapping[str, Any]) -> dict[str, tuple[Any, Any]]:
    """Signals that only one of the verdicts has, each as one difference instead of a hundred."""
    first, second = (
        {f"signals.{s['id']}": f"{s['period_d']} d, {s['grade']}" for s in verdict["signals"]}
        for verdict in (before, now)
    )
    places = [p for p in {**first, **second} if p not in first or p not in second]
    return {place: (first.get(place), second.get(place)) for place in places}


def _equal(place: str, first: Mapping[str, Any], second: Mapping[str, Any]) -> bool:
    if place not in first or place not in second:
        return first.get(place) is None and second.get(place) is None
    one, other = first[place], second[place]
    return (type(one) is type(other) and bool(one == other)) or (
        _number(one) and _number(other) and one == other
    )


def _number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _leaves(value: Any, place: str = "") -> Iterator[tuple[str, Any]]:
    """Every value that is no list or object, with its place."""
    if isinstance(value, Mapping):
        for key, item in value.items():
            yield from _leaves(item, f"{place}.{key}" if place else str(key))
    elif isinstance(value, list | tuple):
        seen: dict[str, int] = {}
        for number, item in enumerate(value):
            name = _id(item) or str(number)
            seen[name] = seen.get(name, 0) + 1
            suffix = f"#{seen[name]}" if seen[name] > 1 else ""
            yield from _leaves(item, f"{place}.{name}{suffix}")
    else:
        yield place, value


def _id(item: Any) -> str | None:
    if isinstance(item, Mapping):
        for key in _IDS:
            if isinstance(item.get(key), str):
                return str(item[key])
    return None


def _weight(difference: Difference) -> tuple[int, int, float]:
    """Signals' own numbers first, in the order of importance, then by how far they moved."""
    parts = difference.where.split(".")
    if parts[0] == "signals" and len(parts) == 2:
        return (0, -1, 0.0)
    own = parts[0] == "signals" and len(parts) == 3
    rank = _FIRST.index(parts[2]) if own and parts[2] in _FIRST else len(_FIRST)
    group = 0 if own and rank < len(_FIRST) else 1
    return (group, rank, -min(difference.relative, 1e9))


def _short(value: Any) -> str:
    text = "not there" if value is None else repr(value)
    return text if len(text) <= 70 else text[:67] + "..."
