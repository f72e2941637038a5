"""What is said about the system, as tables and sentences.

The part of a verdict about the system is an open mapping; whatever a line of it holds, numbers,
sentences, lists or further mappings, is shown, with units taken from the names.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from screener.report.words import MISSING, number, title_of, uncertain

__all__ = ["Block", "label_of", "system_blocks"]

_UNITS = (
    ("_m_s", "m/s"),
    ("_m_s_yr", "m/s per year"),
    ("_mjup", "Jupiter masses"),
    ("_mearth", "Earth masses"),
    ("_msun", "solar masses"),
    ("_rsun", "solar radii"),
    ("_au", "au"),
    ("_deg", "degrees"),
    ("_rad", "radians"),
    ("_yr", "years"),
    ("_pc", "pc"),
    ("_ppm", "ppm"),
    ("_ppt", "ppt"),
    ("_k", "K"),
    ("_d", "d"),
    ("_h", "hours"),
)
_MAX_ROWS, _MAX_DEPTH = 60, 5


@dataclass(frozen=True)
class Block:
    """A heading with sentences, pairs of name and value, and at most one table."""

    title: str
    level: int
    sentences: tuple[str, ...] = ()
    pairs: tuple[tuple[str, str], ...] = ()
    head: tuple[str, ...] = ()
    rows: tuple[tuple[str, ...], ...] = ()
    left_out: int = 0


def label_of(key: str) -> str:
    """ "m_sin_i_mearth" -> "m sin i (Earth masses)"."""
    for suffix, unit in sorted(_UNITS, key=lambda pair: -len(pair[0])):
        if key.endswith(suffix) and len(key) > len(suffix):
            return f"{key[: -len(suffix)].replace('_', ' ')} ({unit})"
    return key.replace("_", " ")


def system_blocks(system: Mapping[str, Any]) -> tuple[Block, ...]:
    """The mapping as blocks to show one after the other; empty when there is nothing."""
    return tuple(_blocks(system, "", 0)) if system else ()


def _blocks(content: Mapping[str, Any], title: str, level: int) -> list[Block]:
    sentences, deeper = [], []
    plain: dict[str, Any] = {}
    for key, value in content.items():
        if isinstance(value, Mapping):
            if value and level < _MAX_DEPTH:
                deeper += _blocks(value, title_of(str(key)), level + 1)
        elif isinstance(value, np.ndarray):
            deeper += _listed(str(key), value.tolist(), level)
        elif isinstance(value, Sequence) and not isinstance(value, str):
            deeper += _listed(str(key), value, level)
        elif isinstance(value, str) and " " in value and len(value) > 30:
            sentences.append(value)
        else:
            plain[str(key)] = value
    own = Block(title, level, tuple(sentences), _pairs(plain))
    return ([own] if own.sentences or own.pairs or (title and not deeper) else []) + deeper


def _listed(key: str, values: Sequence[Any], level: int) -> list[Block]:
    if not values:
        return []
    title = label_of(key)[:1].upper() + label_of(key)[1:]
    if all(isinstance(v, Mapping) for v in values):
        return [_table(title, values, level + 1)]
    if all(isinstance(v, str) and " " in v for v in values):
        return [Block(title, level + 1, tuple(values[:_MAX_ROWS]))]
    text = ", ".join(_text(v) for v in values[:_MAX_ROWS])
    left_out = max(0, len(values) - _MAX_ROWS)
    return [Block(title, level + 1, (text,), left_out=left_out)]


def _table(title: str, values: Sequence[Mapping[str, Any]], level: int) -> Block:
    keys = list(dict.fromkeys(str(k) for v in values for k in v))
    shown = [k for k in keys if _partner(k) not in keys]
    rows = tuple(tuple(_cell(k, v, keys) for k in shown) for v in values[:_MAX_ROWS])
    head = tuple(label_of(k) for k in shown)
    return Block(title, level, head=head, rows=rows, left_out=max(0, len(values) - _MAX_ROWS))


def _pairs(plain: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    keys = list(plain)
    return tuple((label_of(k), _cell(k, plain, keys)) for k in keys if _partner(k) not in keys)


def _partner(key: str) -> str | None:
    """ "period_err_d" -> "period_d": the value that an error belongs to."""
    return key.replace("_err", "", 1) if "_err" in key else None


def _cell(key: str, content: Mapping[str, Any], keys: list[str]) -> str:
    value = content.get(key)
    error = next((content.get(k) for k in keys if _partner(k) == key), None)
    if isinstance(value, int | float) and not isinstance(value, bool) and _is_number(error):
        return uncertain(float(value), float(error), 4)  # type: ignore[arg-type]
    return _text(value)


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.number) and not isinstance(value, bool)


def _text(value: Any) -> str:
    if value is None:
        return MISSING
    if isinstance(value, bool | np.bool_):
        return "yes" if value else "no"
    if isinstance(value, int | np.integer):
        return str(value)
    if isinstance(value, float | np.floating):
        # times (BJD) keep their decimals
        real = float(value)
        return f"{real:.4f}" if abs(real) > 1e6 else number(real, 4)
    if isinstance(value, Mapping):
        return "; ".join(f"{label_of(str(k))}: {_text(v)}" for k, v in value.items())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(_text(v) for v in value)
    return str(value)
