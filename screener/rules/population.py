"""Screened stars whose truth is known, as arrays: what each rule saw, and what each signal is."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from screener.core import Array, Finding, InputFault, Orbit, Outcome, Signal
from screener.rules.scope import Scope, holds
from screener.rules.types import RuleSet

__all__ = ["LABELS", "Population", "classify", "read_population"]

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

LABELS = ("not", "planet", "extra", "alias")
_DAY, _SIDEREAL, _YEAR = 1.0, 1.0 / 0.99727, 1.0 / 365.25


@dataclass(frozen=True, eq=False)
class Population:
    """Signals of many stars.

    Attributes
    ----------
    stars : tuple of str
        Names, those without a readable verdict included.
    star : array of int, shape (n_signals,)
        Index into ``stars``.
    label : array of int, shape (n_signals,)
        Index into ``LABELS``.
    snr : array, shape (n_signals,)
        Of the planet that the signal claims; NaN where it claims none.
    near : array of bool, shape (n_signals,)
        Whether that planet is near rotation.
    share : array, shape (n_signals, n_rules)
        How much of each rule counts, in the order of the rule set; 0 or 1 for limits.
    shift : array, shape (n_signals,)
        Log-odds from the prior classes.
    raw : mapping of str to array, shape (n_signals,)
        The quantities that the ramps look at; NaN where absent.
    planets : array, shape (n_planets, 3)
        Every true planet: index of its star, snr, near rotation.
    failed : tuple of str
        Stars without a readable verdict.
    """

    stars: tuple[str, ...]
    star: IntArray
    label: IntArray
    snr: Array
    near: BoolArray
    share: Array
    shift: Array
    raw: Mapping[str, Array]
    planets: Array
    failed: tuple[str, ...]

    def of_stars(self, chosen: BoolArray) -> Population:
        """The part that belongs to some of the stars; ``chosen`` has shape (n_stars,)."""
        keep = chosen[self.star]
        number = np.cumsum(chosen) - 1
        names = tuple(n for n, c in zip(self.stars, chosen, strict=True) if c)
        planets = self.planets[chosen[self.planets[:, 0].astype(int)]].copy()
        planets[:, 0] = number[planets[:, 0].astype(int)]
        return Population(
            stars=names,
            star=number[self.star[keep]],
            label=self.label[keep],
            snr=self.snr[keep],
            near=self.near[keep],
            share=self.share[keep],
            shift=self.shift[keep],
            raw={k: v[keep] for k, v in self.raw.items()},
            planets=planets,
            failed=tuple(n for n in self.failed if n in set(names)),
        )


def _close(f: float, f_true: float, baseline: float) -> bool:
    return abs(f - f_true) < 1.5 / baseline or (f > 0.0 and abs(f_true / f - 1.0) < 0.01)


def classify(
    periods: Sequence[float], planets: Sequence[float], baseline: float
) -> tuple[list[str], dict[int, int]]:
    """What each signal is, by its period alone.

    Parameters
    ----------
    periods, planets : sequences of float
        Periods of the signals and of the true planets, d.
    baseline : float
        d

    Returns
    -------
    labels : list of str
        "planet" (the nearest in frequency first, one signal for one planet), "extra" (matches a
        planet that another signal claims), "alias" (daily or yearly alias of a planet), "not".
    claims : dict
        Index of the signal for each planet that is claimed.
    """
    pairs = sorted(
        (abs(1.0 / p - 1.0 / q), i, j)
        for i, p in enumerate(periods)
        for j, q in enumerate(planets)
        if _close(1.0 / p, 1.0 / q, baseline)
    )
    labels = [""] * len(periods)
    claims: dict[int, int] = {}
    for _, i, j in pairs:
        if not labels[i] and j not in claims:
            labels[i], claims[j] = "planet", i
    for i, p in enumerate(periods):
        if labels[i]:
            continue
        aliases = [
            abs(1.0 / q + s * a) for q in planets for a in (_DAY, _SIDEREAL, _YEAR) for s in (1, -1)
        ]
        if any(_close(1.0 / p, 1.0 / q, baseline) for q in planets):
            labels[i] = "extra"
        elif any(_close(1.0 / p, f, baseline) for f in aliases):
            labels[i] = "alias"
        else:
            labels[i] = "not"
    return labels, claims


def _number(value: Any, default: float = math.nan) -> float:
    ok = isinstance(value, int | float) and not isinstance(value, bool)
    return float(value) if ok else default


def _signal(entry: Mapping[str, Any]) -> tuple[Signal, list[Finding]]:
    err = entry.get("k_err_m_s")
    orbit = Orbit(
        period=float(entry["period_d"]),
        semi_amplitude=_number(entry.get("k_m_s")),
        eccentricity=_number(entry.get("eccentricity"), 0.0),
        semi_amplitude_err=None if err is None else float(err),
    )
    if not (orbit.period > 0.0 and math.isfinite(orbit.period)):
        raise ValueError("a period that is none")
    signal = Signal(
        id=str(entry.get("id", "")),
        orbit=orbit,
        false_alarm_probability=_number(entry.get("false_alarm_probability")),
        found_by=tuple(entry.get("found_by") or ()),
        white_gain=_number(entry.get("white_gain")),
        activity_gain=_number(entry.get("activity_gain")),
    )
    findings = [
        Finding(
            test=str(f["test"]),
            outcome=Outcome(f["outcome"]),
            sentence="",
            statistic=f.get("statistic"),
            p_value=f.get("p_value"),
            power=f.get("power"),
            parameters=f.get("parameters") or {},
        )
        for f in entry["findings"]
    ]
    return signal, findings


def _read_star(path: Path) -> list[tuple[Signal, list[Finding]]] | None:
    """Signals and findings of one star; None if there is no verdict that can be read."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        return [_signal(entry) for entry in content["signals"]]
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None


def read_population(run: Path, truth: Path, rules: RuleSet) -> Population:
    """Read ``RUN/STAR/verdict.json`` of every star of a truth file.

    Parameters
    ----------
    run : Path
        Folder of a screened catalogue.
    truth : Path
        JSON with ``stars``: name, ``baseline_d``, ``planets`` (``period_d``, ``snr``,
        ``near_rotation``).
    rules : RuleSet
        Whose rules are to be evaluated.

    Raises
    ------
    InputFault
        If the truth cannot be read, or no star has a verdict.
    """
    stars = _read_truth(truth)
    rows = _Rows(rules)
    failed = []
    for number, star in enumerate(stars):
        signals = _read_star(run / star["name"] / "verdict.json")
        if signals is None:
            failed.append(star["name"])
            signals = []
        rows.add(number, star, signals)
    if len(failed) == len(stars):
        cure = "Give the folder that a catalogue run of these stars wrote"
        raise InputFault(str(run), "no star of the truth has a verdict here", cure)
    return rows.population(tuple(s["name"] for s in stars), tuple(failed))


def _read_truth(path: Path) -> list[dict[str, Any]]:
    cure = "It must be JSON with stars: name, baseline_d and planets"
    try:
        stars = json.loads(path.read_text(encoding="utf-8"))["stars"]
        return [
            {
                "name": str(s["name"]),
                "baseline": float(s["baseline_d"]),
                "planets": [
                    (float(p["period_d"]), float(p["snr"]), bool(p["near_rotation"]))
                    for p in s["planets"]
                ],
            }
            for s in stars
        ]
    except OSError as error:
        raise InputFault(
            str(path), f"cannot be read ({error.strerror})", "Check the path"
        ) from None
    except (ValueError, KeyError, TypeError) as error:
        raise InputFault(str(path), f"is no truth file ({error!r})", cure) from None


class _Rows:
    """Collects one row for each signal."""

    def __init__(self, rules: RuleSet) -> None:
        self.rules = rules
        ramps = [r.ramp.of for r in rules.rules if r.ramp is not None]
        self.fields = list(dict.fromkeys(ramps))
        self.rows: list[tuple[int, int, float, bool, float]] = []
        self.shares: list[list[float]] = []
        self.raw: list[list[float]] = []
        self.planets: list[tuple[float, float, float]] = []

    def add(
        self, number: int, star: Mapping[str, Any], signals: list[tuple[Signal, list[Finding]]]
    ) -> None:
        planets = star["planets"]
        periods = [s.orbit.period for s, _ in signals]
        labels, claims = classify(periods, [p[0] for p in planets], star["baseline"])
        claimed = {i: planets[j] for j, i in claims.items()}
        self.planets += [(number, snr, near) for _, snr, near in planets]
        for i, (signal, findings) in enumerate(signals):
            scope = Scope(findings, signal)
            _, snr, near = claimed.get(i, (math.nan, math.nan, False))
            shift = sum(c.shift for c in self.rules.classes if holds(c.when, scope) is True)
            self.rows.append((number, LABELS.index(labels[i]), snr, near, shift))
            self.shares.append([r.share(scope) for r in self.rules.rules])
            values = [scope.number(f) for f in self.fields]
            self.raw.append([math.nan if v is None else v for v in values])

    def population(self, stars: tuple[str, ...], failed: tuple[str, ...]) -> Population:
        table = np.array(self.rows, dtype=float).reshape(-1, 5)
        raw = np.array(self.raw, dtype=float).reshape(-1, len(self.fields))
        return Population(
            stars=stars,
            star=table[:, 0].astype(np.int64),
            label=table[:, 1].astype(np.int64),
            snr=table[:, 2],
            near=table[:, 3] > 0.5,
            share=np.array(self.shares, dtype=float).reshape(-1, len(self.rules.rules)),
            shift=table[:, 4],
            raw={str(f): raw[:, k] for k, f in enumerate(self.fields)},
            planets=np.array(self.planets, dtype=float).reshape(-1, 3),
            failed=failed,
        )
