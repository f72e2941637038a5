"""The figures of the star as a whole."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from matplotlib.figure import FigureBase

from screener.core import Array, PeriodogramTrace, Products, Screening
from screener.report.axes import (
    add_axes,
    broken,
    instrument_points,
    period_axis,
    size,
    year_axis,
)
from screener.report.fold import orbit_at
from screener.report.style import GRADE_COLOUR, LIGHT
from screener.report.words import number

__all__ = [
    "activity_height",
    "draw_activity",
    "draw_indicators",
    "draw_periodograms",
    "draw_series",
    "indicator_rows",
    "rank_correlation",
    "remainder",
    "shown_periodograms",
    "thinned",
]

_MAX_PANELS = 12
_LINE_STYLES = ("-", "-.", (0, (5, 1.5)), (0, (3, 1, 1, 1, 1, 1)), (0, (7, 2)), (0, (1, 1)))


def _products(screening: Screening) -> Products:
    assert screening.products is not None
    return screening.products


def remainder(screening: Screening) -> Array:
    """Velocities less zero points, orbits and activity: what no model explains, m/s, (n_obs,)."""
    products = _products(screening)
    signals = [s.signal for s in screening.verdict.signals] + [*screening.verdict.known_planets]
    orbits = {s.id: s.orbit for s in signals}
    for fold in products.folds:
        if fold.signal_id in orbits and fold.time.size == products.series.n_obs:
            return np.asarray(fold.rv - orbit_at(orbits[fold.signal_id], fold.time))
    centred = products.series.rv - products.offsets[products.series.instrument]
    return np.asarray(centred - products.activity_at_data)


def _zero(time: Array) -> float:
    return 2450000.0 if time.size and time[0] > 2450000 else 0.0


def _time_label(zero: float) -> str:
    return f"BJD − {zero:.0f} (d)" if zero else "time (d)"


def draw_series(fig: FigureBase, screening: Screening) -> None:
    """Velocities per instrument over time, and the residuals of all models beneath."""
    products = _products(screening)
    series = products.series
    width, height = size(fig)
    zero = _zero(series.time)
    time = series.time - zero
    top = add_axes(fig, 0.6, 1.32, width - 0.75, height - 1.85)
    low = add_axes(fig, 0.6, 0.42, width - 0.75, 0.75, sharex=top)
    rv = series.rv - products.offsets[series.instrument]
    instrument_points(top, time, rv, series.rv_err, series.instrument, series.instruments)
    left = remainder(screening)
    instrument_points(low, time, left, series.rv_err, series.instrument, series.instruments)
    _outliers(top, screening, zero)
    low.axhline(0, color=LIGHT["muted"], lw=0.8, ls="--", zorder=1)
    span = max(float(np.ptp(time)), 1.0)
    top.set_xlim(time.min() - 0.02 * span, time.max() + 0.02 * span)
    _total_curve(top, screening, zero, span)
    top.tick_params(labelbottom=False)
    top.set_ylabel("velocity (m/s)")
    low.set_ylabel("O − C (m/s)")
    low.set_xlabel(_time_label(zero))
    year_axis(top, zero)
    top.legend(loc="lower left", bbox_to_anchor=(0, 1.11), ncols=5, handletextpad=0.2)
    rms = float(np.sqrt(np.mean(left**2)))
    low.text(
        0.995, 1.0, f"rms {number(rms, 3)} m/s", ha="right", va="bottom", transform=low.transAxes
    )


def _outliers(axes: Any, screening: Screening, zero: float) -> None:
    products = _products(screening)
    names = list(products.series.instruments)
    marks = [
        (o.time - zero, o.value - products.offsets[names.index(o.instrument)])
        for o in screening.verdict.notes.outliers
        if o.column == "rv" and o.instrument in names
    ]
    if not marks:
        return
    low, high = axes.get_ylim()
    x, y = np.array(marks).T
    # far ones sit on the edge, so that they do not squeeze everything else
    y = np.clip(y, low + 0.03 * (high - low), high - 0.03 * (high - low))
    axes.plot(x, y, "x", color=LIGHT["ink"], ms=6, mew=1.4, label="outlier", zorder=6)
    axes.set_ylim(low, high)


def _total_curve(axes: Any, screening: Screening, zero: float, span: float) -> None:
    """The model curve, where it would not be a solid block of ink."""
    products = _products(screening)
    signals = [s.signal for s in screening.verdict.signals] + [*screening.verdict.known_planets]
    periods = [s.orbit.period for s in signals]
    if products.activity_mean.any() and screening.verdict.rotation.period is not None:
        periods.append(screening.verdict.rotation.period)
    if not periods or span / min(periods) > 40 or products.model_time.size < 2:
        return
    total = products.orbits_mean + products.activity_mean
    grid, total = broken(products.model_time - zero, total)
    axes.plot(grid, total, color=LIGHT["muted"], lw=1.0, zorder=2, label="model")


def shown_periodograms(screening: Screening) -> tuple[PeriodogramTrace, ...]:
    """The panels of the stack; the window always, and as many others as a page holds."""
    traces = [t for t in _products(screening).periodograms if t.frequency.size > 1]
    window = [t for t in traces if t.name == "window"][:1]
    others = [t for t in traces if t.name != "window"][: _MAX_PANELS - len(window)]
    return (*others, *window)


def thinned(trace: PeriodogramTrace, columns: int = 900) -> tuple[Array, Array]:
    """Period and the largest power in each of ``columns`` equal steps of log period.

    Every peak keeps its height; only what a printed line cannot show is left out.
    """
    good = (trace.frequency > 0) & np.isfinite(trace.power)
    period, power = 1 / trace.frequency[good], trace.power[good]
    if period.size <= 2 * columns:
        order = np.argsort(period)
        return period[order], power[order]
    place = np.log(period)
    low, high = place.min(), place.max()
    column = np.minimum(((place - low) / (high - low) * columns).astype(int), columns - 1)
    order = np.lexsort((power, column))
    last = np.flatnonzero(np.diff(column[order], append=columns))
    best = order[last]
    return period[best], power[best]


def draw_periodograms(fig: FigureBase, screening: Screening) -> None:
    """The stack of periodograms with signals, rotation and aliases marked."""
    traces = shown_periodograms(screening)
    width, height = size(fig)
    low = min(1 / t.frequency.max() for t in traces)
    high = max(1 / t.frequency[t.frequency > 0].min() for t in traces)
    room = (height - 0.75) / max(len(traces), 1)
    first: Any = None
    for row, trace in enumerate(traces):
        bottom = 0.42 + (len(traces) - 1 - row) * room
        axes = add_axes(fig, 0.6, bottom, width - 0.75, room - 0.13, sharex=first)
        first = first or axes
        period_axis(axes, low, high)
        _draw_trace(axes, trace)
        _mark(axes, screening, aliases=trace.name in ("velocities", "residuals", "activity model"))
        axes.tick_params(labelbottom=row == len(traces) - 1)
    if first is None:
        return
    _label_marks(first, screening)
    axes.set_xlabel("period (d)")
    fig.text(0.012, 0.5, "gain in log-likelihood", rotation=90, va="center", ha="left")


def _draw_trace(axes: Any, trace: PeriodogramTrace) -> None:
    period, power = thinned(trace)
    axes.plot(period, power, color=LIGHT["ink"], lw=0.75, zorder=3)
    top = float(power.max()) if power.size else 1.0
    if trace.level is not None and math.isfinite(trace.level):
        axes.axhline(trace.level, color=LIGHT["muted"], lw=0.9, ls=(0, (4, 2)), zorder=2)
        top = max(top, trace.level)
    axes.set_ylim(0, 1.18 * top if top > 0 else 1.0)
    axes.locator_params(axis="y", nbins=3)
    name = trace.name if len(trace.name) <= 40 else trace.name[:39] + "…"
    name = "window (amplitude)" if trace.name == "window" else name
    box = {"facecolor": LIGHT["paper"], "edgecolor": "none", "alpha": 0.8, "pad": 1.0}
    axes.text(
        0.008, 0.93, name, transform=axes.transAxes, va="top", weight="bold", bbox=box, zorder=7
    )


def _mark(axes: Any, screening: Screening, *, aliases: bool) -> None:
    verdict = screening.verdict
    rotation = verdict.rotation
    if rotation.period is not None:
        err = rotation.period_err or 0.0
        for part in (1, 2, 3):
            centre, half = rotation.period / part, err / part
            axes.axvspan(
                centre - half, centre + half, color=LIGHT["star"], alpha=0.15, lw=0, zorder=0
            )
            axes.axvline(centre, color=LIGHT["star"], lw=0.9, ls="--", zorder=1)
    for row, item in enumerate(verdict.signals):
        colour, style = LIGHT[GRADE_COLOUR[item.grade]], _LINE_STYLES[row % len(_LINE_STYLES)]
        axes.axvline(item.signal.orbit.period, color=colour, lw=1.3, ls=style, alpha=0.8, zorder=1)
        if not aliases:
            continue
        for alias in _aliases(item.signal.orbit.period):
            axes.axvline(alias, 0, 0.22, color=colour, lw=1.0, ls=":", zorder=1)
    for known in verdict.known_planets:
        axes.axvline(known.orbit.period, color=LIGHT["muted"], lw=1.1, ls=":", zorder=1)


def _aliases(period: float) -> list[float]:
    """Periods that daily (sidereal) and yearly sampling confuse with ``period``."""
    result = []
    for beat in (1.00273791, 1 / 365.25):
        for sign in (-1, 1):
            frequency = abs(1 / period + sign * beat)
            if frequency > 0:
                result.append(1 / frequency)
    return result


def _label_marks(axes: Any, screening: Screening) -> None:
    """Names of the vertical lines above the first panel, moved apart where they would touch."""
    verdict = screening.verdict
    labels = [(s.signal.orbit.period, s.signal.id, GRADE_COLOUR[s.grade]) for s in verdict.signals]
    labels += [(s.orbit.period, s.id, "muted") for s in verdict.known_planets]
    if verdict.rotation.period is not None:
        names = ("rotation", "½", "⅓")
        labels += [(verdict.rotation.period / (k + 1), n, "star") for k, n in enumerate(names)]
    low, high = (math.log(edge) for edge in axes.get_xlim())
    inside = [x for x in labels if low <= math.log(x[0]) <= high]
    taken: list[tuple[float, float, int]] = []
    for value, name, colour in sorted(inside, key=lambda x: (x[2] == "star", x[0])):
        place = (math.log(value) - low) / (high - low)
        half = 0.009 + 0.0065 * len(name)
        level = 0
        while any(level == k and abs(place - p) < half + h for p, h, k in taken):
            level += 1
        taken.append((place, half, level))
        axes.text(
            place, 1.03 + 0.17 * level, name, color=LIGHT[colour], weight="bold", ha="center",
            va="bottom", transform=axes.transAxes,
        )  # fmt: skip


def _dense_stretch(screening: Screening) -> tuple[float, float] | None:
    """Start and stop of the stretch with most observations; None when all of it is one."""
    time = _products(screening).series.time
    rotation = screening.verdict.rotation.period
    length = min(max(6 * rotation if rotation else 120.0, 40.0), 250.0)
    if np.ptp(time) < 1.6 * length:
        return None
    counts = np.searchsorted(time, time + length) - np.arange(time.size)
    start = float(time[int(np.argmax(counts))])
    return start - 0.03 * length, start + length


def _shown_rows(grid: Array, stretch: tuple[float, float] | None) -> slice:
    """The part of the model's grid inside a stretch, thinned to what a figure can show."""
    first, last = (0, grid.size)
    if stretch is not None:
        first, last = (int(i) for i in np.searchsorted(grid, stretch))
        first, last = max(first - 1, 0), min(last + 1, grid.size)
    return slice(first, last, max(1, (last - first) // 1800))


def activity_height(screening: Screening) -> float:
    """Height in inches: two panels where the series is too long for one."""
    return 2.6 if _dense_stretch(screening) is None else 4.3


def draw_activity(fig: FigureBase, screening: Screening) -> None:
    """The activity model with its band over the velocities less the orbits."""
    products = _products(screening)
    width, height = size(fig)
    zero = _zero(products.series.time)
    stretch = _dense_stretch(screening)
    n_panels = 1 if stretch is None else 2
    room = (height - 0.3) / n_panels
    panels = [
        add_axes(fig, 0.6, 0.42 + k * room, width - 0.75, room - 0.5) for k in range(n_panels)
    ][::-1]
    rv = remainder(screening) + products.activity_at_data
    series = products.series
    for row, axes in enumerate(panels):
        rows = _shown_rows(products.model_time, stretch if row else None)
        grid = products.model_time[rows] - zero
        grid, mean, sd = broken(grid, products.activity_mean[rows], products.activity_sd[rows])
        axes.fill_between(
            grid, mean - sd, mean + sd, color=LIGHT["star"], alpha=0.22, lw=0, label="±1σ"
        )
        axes.plot(
            grid,
            mean,
            color=LIGHT["star"],
            lw=0.6 if row == 0 and n_panels > 1 else 1.3,
            label="activity",
        )
        instrument_points(
            axes, series.time - zero, rv, series.rv_err, series.instrument, series.instruments
        )
        axes.axhline(0, color=LIGHT["muted"], lw=0.7, ls="--", zorder=1)
        axes.set_ylabel("velocity (m/s)")
        reach = 1.1 * max(float(np.max(np.abs(rv))), 1e-6)
        axes.set_ylim(-reach, reach)
    panels[-1].set_xlabel(_time_label(zero))
    span = max(float(np.ptp(series.time)), 1.0)
    panels[0].set_xlim(series.time[0] - zero - 0.02 * span, series.time[-1] - zero + 0.02 * span)
    if stretch is not None:
        panels[1].set_xlim(stretch[0] - zero, stretch[1] - zero)
        panels[0].axvspan(
            stretch[0] - zero, stretch[1] - zero, color=LIGHT["line"], alpha=0.45, lw=0, zorder=0
        )
        panels[1].set_title("the shaded stretch", loc="left", fontsize=8)
    panels[0].legend(loc="lower left", bbox_to_anchor=(0, 1.01), ncols=6, handletextpad=0.3)


def indicator_rows(screening: Screening) -> int:
    """Rows of the grid of scatter plots, three a row, twelve at most."""
    return math.ceil(min(len(_products(screening).series.indicators), 12) / 3)


def rank_correlation(x: Array, y: Array) -> float | None:
    """Spearman's rank correlation of the rows where both are finite; None for fewer than four."""
    good = np.isfinite(x) & np.isfinite(y)
    if np.count_nonzero(good) < 4:
        return None
    ranks = [_ranks(v[good]) for v in (x, y)]
    if any(np.ptp(r) == 0 for r in ranks):
        return None
    return float(np.corrcoef(ranks[0], ranks[1])[0, 1])


def _ranks(values: Array) -> Array:
    _, inverse, counts = np.unique(values, return_inverse=True, return_counts=True)
    last = np.cumsum(counts)
    return np.asarray((last - (counts - 1) / 2)[inverse])


def draw_indicators(fig: FigureBase, screening: Screening) -> None:
    """Velocity against each indicator, medians of each instrument taken out."""
    products = _products(screening)
    series = products.series
    width, height = size(fig)
    rv = series.rv - products.offsets[series.instrument]
    n_rows = indicator_rows(screening)
    row_height = (height - 0.3) / n_rows
    column = (width - 0.5) / 3
    for index, indicator in enumerate(series.indicators[:12]):
        row, place = divmod(index, 3)
        bottom = height - 0.3 - (row + 1) * row_height + 0.42
        axes = add_axes(fig, 0.55 + place * column, bottom, column - 0.25, row_height - 0.68)
        value = indicator.value.copy()
        for k in range(len(series.instruments)):
            rows = (series.instrument == k) & np.isfinite(value)
            if rows.any():
                value[rows] -= np.median(value[rows])
        instrument_points(
            axes, value, rv, None, series.instrument, series.instruments, size=3.0, alpha=0.7
        )
        rho = rank_correlation(value, rv)
        axes.set_title(
            f"ρ = {rho:+.2f}".replace("-", "−") if rho is not None else "ρ unknown", loc="right"
        )
        axes.set_xlabel(f"{indicator.name[:30]}, less median")
        axes.locator_params(axis="both", nbins=4)
        if place == 0:
            axes.set_ylabel("velocity (m/s)")
        else:
            axes.tick_params(labelleft=False)
        if index == 0:
            axes.legend(
                loc="lower left",
                bbox_to_anchor=(0, 1.16),
                ncols=6,
                handletextpad=0.2,
                columnspacing=1.0,
            )
