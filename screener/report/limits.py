"""What these data could have shown: detection limits over period."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.figure import FigureBase
from matplotlib.ticker import LogLocator

from screener.core import Array, Screening
from screener.report.axes import add_axes, period_axis, size
from screener.report.style import GRADE_COLOUR, LIGHT
from screener.report.system_view import nested

__all__ = ["draw_limits", "limit_curve"]

_CURVES = (
    ("k99_m_s", "99 % found", ":"),
    ("k90_m_s", "90 % found", "-"),
    ("k50_m_s", "50 % found", "--"),
)


def limit_curve(system: Mapping[str, Any]) -> dict[str, Array] | None:
    """Periods and semi-amplitudes of the detection limits, each shape (n,); None without them.

    Points that were not determined are NaN.
    """
    points = nested(system, "sensitivity", "curve")
    if not isinstance(points, list) or len(points) < 2:
        return None
    names = ("period_d", *(name for name, _, _ in _CURVES))
    columns = {
        name: np.array([_number(nested(point, name)) for point in points], dtype=float)
        for name in names
    }
    if not np.all(columns["period_d"] > 0) or not np.isfinite(columns["k90_m_s"]).any():
        return None
    return columns


def _number(value: Any) -> float:
    return float(value) if isinstance(value, int | float) else float("nan")


def draw_limits(fig: FigureBase, screening: Screening) -> None:
    """Semi-amplitude that would have been found, against period, with the signals as points."""
    curve = limit_curve(screening.verdict.system)
    assert curve is not None
    width, height = size(fig)
    axes = add_axes(fig, 0.6, 0.42, width - 0.75, height - 0.72)
    period = curve["period_d"]
    period_axis(axes, period.min(), period.max())
    axes.set_yscale("log")
    for name, label, style in _CURVES:
        axes.plot(period, curve[name], color=LIGHT["ink"], ls=style, lw=1.2, label=label)
    axes.fill_between(period, curve["k90_m_s"], 1e-3, color=LIGHT["line"], alpha=0.5, lw=0)
    heights = [curve["k50_m_s"], curve["k99_m_s"]]
    for item in screening.verdict.signals:
        orbit = item.signal.orbit
        _point(
            axes, item.signal.id, orbit.period, orbit.semi_amplitude, GRADE_COLOUR[item.grade], "o"
        )
        heights.append(np.array([orbit.semi_amplitude]))
    for known in screening.verdict.known_planets:
        if known.orbit.semi_amplitude > 0:
            _point(axes, known.id, known.orbit.period, known.orbit.semi_amplitude, "muted", "s")
            heights.append(np.array([known.orbit.semi_amplitude]))
    everything = np.concatenate(heights)
    good = everything[np.isfinite(everything) & (everything > 0)]
    axes.set_ylim(good.min() / 1.8, good.max() * 1.8)
    axes.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}")
    axes.yaxis.set_minor_formatter(lambda value, _: "")
    axes.set_xlabel("period (d)")
    axes.set_ylabel("semi-amplitude (m/s)")
    axes.legend(loc="lower left", bbox_to_anchor=(0, 1.01), ncols=3, handletextpad=0.4)


def _point(axes: Any, name: str, period: float, amplitude: float, colour: str, marker: str) -> None:
    low, high = axes.get_xlim()
    if not low <= period <= high:
        return
    axes.plot([period], [amplitude], marker, color=LIGHT[colour], ms=6, zorder=5)
    axes.annotate(
        name, (period, amplitude), (5, 4), textcoords="offset points", color=LIGHT[colour],
        weight="bold",
    )  # fmt: skip
