"""What is said about the system, as tables and sentences.

The part of a verdict about the system is an open mapping. The parts we know are put first and in a
readable order; whatever else it holds, numbers, sentences, lists or further mappings, is shown
after them, with units taken from the names.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from screener.report.words import MISSING, number, title_of, uncertain

__all__ = ["Block", "label_of", "nested", "system_blocks"]

_UNITS = (
    ("_m_s", "m/s"),
    ("_m_s_yr", "m/s per year"),
    ("_mjup", "M Jup"),
    ("_mearth", "M Earth"),
    ("_msun", "M☉"),
    ("_rsun", "R☉"),
    ("_au", "au"),
    ("_deg", "°"),
    ("_rad", "rad"),
    ("_yr", "yr"),
    ("_ppm", "ppm"),
    ("_nat", "nat"),
    ("_k", "K"),
    ("_d", "d"),
)
_MAX_ROWS, _MAX_DEPTH = 40, 5
_KNOWN_PARTS = ("sentences", "planets", "stability", "alternatives", "nights", "sensitivity")


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
    """A key as words with its unit: "m_sin_i_mjup" gives "m sin i (M Jup)"."""
    for suffix, unit in sorted(_UNITS, key=lambda pair: -len(pair[0])):
        if key.endswith(suffix) and len(key) > len(suffix):
            return f"{key[: -len(suffix)].replace('_', ' ')} ({unit})"
    return key.replace("_", " ")


def nested(content: Any, *keys: str) -> Any:
    """What lies below ``keys`` in nested mappings; None where one is missing."""
    for key in keys:
        content = content.get(key) if isinstance(content, Mapping) else None
    return content


def system_blocks(system: Mapping[str, Any]) -> tuple[Block, ...]:
    """The mapping as blocks to show one after the other; empty when there is nothing."""
    if not system:
        return ()
    blocks = []
    sentences = system.get("sentences")
    if _is_list(sentences) and sentences:
        blocks.append(Block("", 0, tuple(str(s) for s in sentences[:_MAX_ROWS])))
    blocks += _planets(system.get("planets"))
    blocks += _stability(system.get("stability"))
    blocks += _nights(system.get("nights"))
    outer = system.get("outer_companion")
    mass, error = nested(outer, "mass_min_mjup"), nested(outer, "mass_min_err_mjup")
    if _is_number(mass) and _is_number(error) and mass < 3 * error:
        system = {k: v for k, v in system.items() if k != "outer_companion"}  # no slope to read
    known = {k for k in _KNOWN_PARTS if k in system and (k == "sentences" or _by_name(system[k]))}
    blocks += _blocks({k: v for k, v in system.items() if k not in known}, "", 0)
    return tuple(blocks)


def _by_name(value: Any) -> bool:
    """Whether a part has the form that is shown by hand; anything else is shown as it comes."""
    return value is None or isinstance(value, Mapping)


def _is_list(value: Any) -> bool:
    return isinstance(value, Sequence) and not isinstance(value, str)


_PLANET_COLUMNS = (
    ("m sin i (M Jup)", ("m_sin_i_mjup",)),
    ("a (au)", ("semi_major_axis_au",)),
    ("true mass (M Jup), random orientation: median", ("true_mass", "isotropic", "median_mjup")),
    ("5th percentile", ("true_mass", "isotropic", "q05_mjup")),
    ("95th percentile", ("true_mass", "isotropic", "q95_mjup")),
    ("chance to be above 13 M Jup", ("true_mass", "isotropic", "chance_above_13_mjup")),
    ("transit probability", ("transit", "probability")),
    ("next transit (BJD)", ("transit", "next_bjd_d")),
    ("± (d)", ("transit", "next_err_d")),
    ("depth (ppm)", ("transit", "depth_ppm")),
    ("T eq (K), albedo 0.3", ("equilibrium_temperature_albedo_0_3_k",)),
)


def _planets(planets: Any) -> list[Block]:
    if not isinstance(planets, Mapping):
        return []
    shown = {name: p for name, p in planets.items() if isinstance(p, Mapping) and p}
    columns = [
        (label, path)
        for label, path in _PLANET_COLUMNS
        if any(nested(p, *path) is not None for p in shown.values())
    ]
    if not columns:
        return []
    # one quantity a line: a system has few planets and many numbers
    rows = tuple(
        (label, *(_companion_cell(label, nested(p, *path)) for p in shown.values()))
        for label, path in columns
    )
    return [Block("Companions", 1, head=("if planetary", *map(str, shown)), rows=rows)]


def _companion_cell(label: str, value: Any) -> str:
    if not label.startswith("chance") or not _is_number(value):
        return _text(value)
    return "less than 0.1 %" if value < 0.001 else f"{100 * float(value):.2g} %"


def _stability(stability: Any) -> list[Block]:
    pairs = nested(stability, "pairs")
    if not _is_list(pairs) or not pairs:
        return []
    head = ("pair", "mutual Hill radii", "orbits cross", "AMD-unstable", "period ratio")
    rows = []
    for pair in pairs:
        near = nested(pair, "commensurability")
        ratio = f"near {near.get('p')}:{near.get('q')}" if nested(near, "near") else "not near one"
        rows.append(
            (
                f"{nested(pair, 'inner')}, {nested(pair, 'outer')}",
                _text(nested(pair, "hill_separation")),
                _percent(nested(pair, "crossing")),
                _percent(nested(pair, "amd_unstable")),
                ratio,
            )
        )
    body = nested(stability, "n_body")
    told = []
    if isinstance(body, Mapping):
        told.append(
            f"{_text(body.get('n_survived'))} of {_text(body.get('n_draws'))} draws survived an "
            f"integration over {_text(body.get('span_d'))} d."
        )
    elif isinstance(nested(stability, "n_body_missing"), str):
        told.append(f"No integration was run: {stability['n_body_missing']}.")
    return [Block("Do they live together?", 1, tuple(told), head=head, rows=tuple(rows))]


_NIGHT_COLUMNS = ("rank", "date", "information_nat", "log_odds_so_far", "velocity_planet_m_s",
                  "velocity_star_m_s", "altitude_deg", "moon_distance_deg")  # fmt: skip

_NIGHT_HEADS = {
    "log_odds_so_far": "expected log-odds after it",
    "velocity_planet_m_s": "velocity if planet (m/s)",
    "velocity_star_m_s": "velocity if star (m/s)",
}
_NIGHTS_EXPLAINED = (
    "Ranked by the information on which hypothesis is true that a velocity of that night is "
    "expected to add, given those ranked above it."
)


def _nights(nights: Any) -> list[Block]:
    blocks = []
    for name, plan in nights.items() if isinstance(nights, Mapping) else ():
        listed = nested(plan, "nights")
        if not _is_list(listed) or not listed:
            continue
        keys = [k for k in _NIGHT_COLUMNS if any(nested(n, k) is not None for n in listed)]
        rows = tuple(tuple(_text(nested(n, k)) for k in keys) for n in listed[:10])
        extra = nested(plan, "extra_measurements")
        told = [str(nested(e, "sentence")) for e in extra or () if nested(e, "sentence")]
        site = nested(plan, "site")
        where = f" from {site}" if isinstance(site, str) else ""
        title = f"Nights that would settle {name}{where}"
        told.append(_NIGHTS_EXPLAINED)
        head = tuple(_NIGHT_HEADS.get(k) or label_of(k) for k in keys)
        left = max(0, len(listed) - 10)
        blocks.append(Block(title, 1, tuple(told), head=head, rows=rows, left_out=left))
    return blocks


def _percent(value: Any) -> str:
    return f"{100 * float(value):.0f} %" if _is_number(value) else MISSING


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
        elif value is not None and not (isinstance(value, float) and not math.isfinite(value)):
            plain[str(key)] = value
    own = Block(title, level, tuple(sentences), _pairs(plain))
    return ([own] if own.sentences or own.pairs or (title and deeper) else []) + deeper


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
    """The value that an error belongs to: "period_err_d" gives "period_d"."""
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
        return f"{real:.4f}" if abs(real) > 1e6 else number(real, 3)
    if isinstance(value, Mapping):
        return "; ".join(f"{label_of(str(k))}: {_text(v)}" for k, v in value.items())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(_text(v) for v in value)
    return str(value)
