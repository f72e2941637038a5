"""Small things that all figures share: axes placed in inches, points by instrument, time axes."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.figure import FigureBase
from matplotlib.ticker import FuncFormatter, NullFormatter

from screener.core import Array, IntArray
from screener.report.style import INSTRUMENTS, LIGHT, MARKERS

__all__ = [
    "broken",
    "add_axes",
    "instrument_points",
    "instrument_style",
    "period_axis",
    "size",
    "year_axis",
]

# Points beyond this number are drawn as a picture within a vector figure, to keep pages light.
_MANY = 700


def size(fig: FigureBase) -> tuple[float, float]:
    """Width and height of a figure, or of its part, in inches."""
    part: Any = fig  # the common base of figures and their parts does not declare its box
    dpi = part.get_figure(root=True).dpi
    return float(part.bbox.width / dpi), float(part.bbox.height / dpi)


def add_axes(
    fig: FigureBase, left: float, bottom: float, width: float, height: float, **options: Any
) -> Any:
    """Axes at a place given in inches from the lower left corner."""
    full_width, full_height = size(fig)
    box = (left / full_width, bottom / full_height, width / full_width, height / full_height)
    return fig.add_axes(box, **options)


def instrument_style(index: int) -> tuple[str, str, bool]:
    """Colour, marker and whether the marker is filled; no two of the first 24 are alike."""
    colour = LIGHT[INSTRUMENTS[index % len(INSTRUMENTS)]]
    return colour, MARKERS[index % len(MARKERS)], (index // len(MARKERS)) % 2 == 0


def instrument_points(
    axes: Any,
    x: Array,
    y: Array,
    error: Array | None,
    instrument: IntArray,
    names: tuple[str, ...],
    *,
    size: float = 3.6,
    alpha: float = 0.85,
    x_error: Array | None = None,
) -> None:
    """Points with error bars, each instrument with a colour and marker of its own."""
    rasterised = x.size > _MANY
    for index, name in enumerate(names):
        rows = (instrument == index) & np.isfinite(x) & np.isfinite(y)
        if not rows.any():
            continue
        colour, marker, filled = instrument_style(index)
        axes.errorbar(
            x[rows], y[rows],
            None if error is None else error[rows],
            None if x_error is None else x_error[rows],
            fmt=marker, ms=size, color=colour, mec=colour, mfc=colour if filled else "none",
            mew=0.7, elinewidth=0.6, alpha=alpha, ls="none", rasterized=rasterised,
            label=name if len(name) <= 24 else name[:23] + "…", zorder=3,
        )  # fmt: skip


def year_axis(axes: Any, zero: float) -> None:
    """Calendar years along the top of an axis in days since ``zero`` (a BJD)."""
    low, high = axes.get_xlim()
    first, last = (2000.0 + (zero + edge - 2451544.5) / 365.25 for edge in (low, high))
    span = last - first
    if span < 1.2 or not 1900 < first < last < 2200:
        return
    step = next((s for s in (1, 2, 5, 10, 20) if span / s <= 9), 50)
    years = np.arange(np.ceil(first / step) * step, last, step)
    top = axes.secondary_xaxis("top")
    top.set_xticks((years - 2000.0) * 365.25 + 2451544.5 - zero, [f"{y:.0f}" for y in years])
    top.tick_params(length=2.5, pad=1.5, colors=LIGHT["muted"])
    top.spines["top"].set_visible(False)


def period_axis(axes: Any, low: float, high: float) -> None:
    """A logarithmic axis of periods in days with plain numbers."""
    axes.set_xscale("log")
    axes.set_xlim(low, high)
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.xaxis.set_minor_formatter(NullFormatter())


def broken(grid: Array, *curves: Array) -> tuple[Array, ...]:
    """Grid and curves with a NaN in each gap of the grid, so that no line is drawn across it.

    Nothing was observed there, and a straight line would look like a model.
    """
    step = np.diff(grid)
    if step.size == 0:
        return (grid, *curves)
    cuts = np.flatnonzero(step > 4 * np.median(step)) + 1
    return tuple(np.insert(values, cuts, np.nan) for values in (grid, *curves))
