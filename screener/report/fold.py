"""One signal folded at its period, and whether it keeps amplitude and phase."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.figure import FigureBase

from screener.core import Array, Fold, IntArray, Orbit, Products, Screening, Signal
from screener.report.axes import add_axes, instrument_points, size
from screener.report.style import GRADE_COLOUR, LIGHT

__all__ = ["Block", "block_amplitudes", "draw_fold", "folded", "orbit_at", "phase_bins"]

_N_CURVE = 4096


def _curve(orbit: Orbit) -> tuple[Array, Array]:
    """Mean anomaly from 0 to 2 pi and the velocity there, m/s.

    Drawn along the eccentric anomaly, where Kepler's equation needs no solving.
    """
    ecc = min(max(orbit.eccentricity, 0.0), 0.99)
    e_anomaly = np.linspace(0.0, 2 * np.pi, _N_CURVE)
    mean = e_anomaly - ecc * np.sin(e_anomaly)
    shrink = 1 - ecc * np.cos(e_anomaly)
    cos_nu = (np.cos(e_anomaly) - ecc) / shrink
    sin_nu = math.sqrt(1 - ecc**2) * np.sin(e_anomaly) / shrink
    cos_w, sin_w = math.cos(orbit.omega_peri), math.sin(orbit.omega_peri)
    return mean, orbit.semi_amplitude * (cos_w * (cos_nu + ecc) - sin_w * sin_nu)


def _conjunction(orbit: Orbit) -> float:
    """Mean anomaly of inferior conjunction, nu + omega = pi / 2."""
    ecc = min(max(orbit.eccentricity, 0.0), 0.99)
    half = (math.pi / 2 - orbit.omega_peri) / 2
    e_anomaly = 2 * math.atan2(
        math.sqrt(1 - ecc) * math.sin(half), math.sqrt(1 + ecc) * math.cos(half)
    )
    return e_anomaly - ecc * math.sin(e_anomaly)


def orbit_at(orbit: Orbit, time: Array) -> Array:
    """Velocity of the orbit at ``time``, m/s, good to 1e-4 of the semi-amplitude up to e = 0.9."""
    mean, velocity = _curve(orbit)
    anomaly = np.mod(2 * np.pi * (time - orbit.time_peri) / orbit.period, 2 * np.pi)
    return np.asarray(np.interp(anomaly, mean, velocity))


def folded(orbit: Orbit, time: Array) -> Array:
    """Phase of ``time`` in [-0.5, 0.5), zero at inferior conjunction (where a transit would be)."""
    turn = (time - orbit.time_peri) / orbit.period - _conjunction(orbit) / (2 * np.pi)
    return np.asarray(np.mod(turn + 0.5, 1.0) - 0.5)


def total_error(products: Products, fold: Fold) -> Array:
    """Errors of the folded velocities with the fitted jitter of each instrument in quadrature."""
    jitter = products.jitter[fold.instrument] if products.jitter.size else 0.0
    return np.asarray(np.hypot(fold.rv_err, jitter))


def phase_bins(phase: Array, rv: Array, error: Array) -> tuple[Array, Array, Array]:
    """Weighted means in equal bins of phase: centre, mean, error, each shape (n_bins,).

    The error is the larger of the propagated one and the scatter within the bin.
    """
    n_bins = int(np.clip(phase.size // 6, 4, 14))
    index = np.minimum(((phase + 0.5) * n_bins).astype(int), n_bins - 1)
    rows = []
    for k in range(n_bins):
        inside = index == k
        count = np.count_nonzero(inside)
        if count < 2:
            continue
        weight = 1 / error[inside] ** 2
        mean = np.average(rv[inside], weights=weight)
        spread = np.sqrt(np.average((rv[inside] - mean) ** 2, weights=weight) / (count - 1))
        centre = np.average(phase[inside], weights=weight)
        rows.append((centre, mean, max(1 / math.sqrt(weight.sum()), spread)))
    return tuple(np.array(rows).reshape(-1, 3).T)  # type: ignore[return-value]


@dataclass(frozen=True)
class Block:
    """Amplitude (m/s) and phase (turns) of one stretch of the observations."""

    time: float
    start: float
    stop: float
    amplitude: float
    amplitude_err: float
    phase: float
    phase_err: float


def block_amplitudes(orbit: Orbit, fold: Fold, error: Array) -> tuple[Block, list[Block]]:
    """Sine of the orbit's period fitted to all data and to each block of them.

    Blocks are observing seasons (a break of 60 d ends one), joined until each covers seven tenths
    of a period and holds eight points; a single season is cut into three.
    """
    everything = _sine_fit(orbit, fold, error, np.arange(fold.time.size))
    blocks = [_sine_fit(orbit, fold, error, rows) for rows in _blocks(orbit, fold.time)]
    return everything, blocks


def _blocks(orbit: Orbit, time: Array) -> list[IntArray]:
    order = np.argsort(time)
    cuts = np.flatnonzero(np.diff(time[order]) > 60.0) + 1
    parts = np.split(order, cuts)
    if len(parts) == 1 and time.size >= 24:
        parts = np.array_split(order, 3)
    joined: list[IntArray] = []
    pending: list[IntArray] = []
    for part in parts:
        pending.append(part)
        rows = np.concatenate(pending)
        if rows.size >= 8 and np.ptp(time[rows]) >= 0.7 * orbit.period:
            joined.append(rows)
            pending = []
    if pending and joined:
        joined[-1] = np.concatenate([joined[-1], *pending])
    return joined


def _sine_fit(orbit: Orbit, fold: Fold, error: Array, rows: IntArray) -> Block:
    time, rv, err = fold.time[rows], fold.rv[rows], error[rows]
    angle = 2 * np.pi * folded(orbit, time)
    design = np.stack([np.sin(angle), np.cos(angle), np.ones_like(angle)], axis=1) / err[:, None]
    # a ridge far below the information of any datum keeps gaps in phase from dividing by zero
    normal = design.T @ design + 1e-9 * np.eye(3)
    covariance = np.linalg.inv(normal)
    a, b, _ = covariance @ design.T @ (rv / err)
    size_ = max(math.hypot(a, b), 1e-12)
    along = np.array([a, b]) / size_
    across = np.array([-b, a]) / size_
    part = covariance[:2, :2]
    return Block(
        float(time.mean()),
        float(time.min()),
        float(time.max()),
        size_,
        math.sqrt(along @ part @ along),
        math.atan2(b, a) / (2 * np.pi),
        min(math.sqrt(across @ part @ across) / size_ / (2 * np.pi), 0.5),
    )


def draw_fold(fig: FigureBase, screening: Screening, signal: Signal, fold: Fold) -> None:
    """Draw the fold, its residuals, and amplitude and phase by block on ``fig``."""
    products = screening.products
    assert products is not None
    width, height = size(fig)
    orbit = signal.orbit
    error = total_error(products, fold)
    everything, blocks = block_amplitudes(orbit, fold, error)
    wide = len(blocks) >= 2
    main_width = 0.6 * width if wide else width - 0.75
    main = add_axes(fig, 0.6, 1.2, main_width, height - 1.5)
    rest = add_axes(fig, 0.6, 0.42, main_width, 0.66, sharex=main)
    _draw_phase(main, rest, screening, signal, fold, error)
    if wide:
        left = 0.6 + main_width + 0.68
        room = (width - left - 0.12, (height - 1.0) / 2)
        top = add_axes(fig, left, 0.42 + room[1] + 0.28, *room)
        bottom = add_axes(fig, left, 0.42, *room, sharex=top)
        _draw_blocks(top, bottom, everything, blocks)


def _colour_of(screening: Screening, signal: Signal) -> str:
    for item in screening.verdict.signals:
        if item.signal.id == signal.id:
            return LIGHT[GRADE_COLOUR[item.grade]]
    return LIGHT["planet"]


def _draw_phase(main, rest, screening, signal, fold, error) -> None:  # type: ignore[no-untyped-def]
    orbit = signal.orbit
    series = screening.products.series
    colour = _colour_of(screening, signal)
    phase = folded(orbit, fold.time)
    left = fold.rv - orbit_at(orbit, fold.time)
    crowd = fold.time.size > 150
    args: dict[str, Any] = {"alpha": 0.45 if crowd else 0.75, "size": 3.0 if crowd else 3.6}
    instrument_points(
        main, phase, fold.rv, fold.rv_err, fold.instrument, series.instruments, **args
    )
    instrument_points(rest, phase, left, fold.rv_err, fold.instrument, series.instruments, **args)
    grid = np.linspace(-0.5, 0.5, 500)
    moment = orbit.time_peri + (grid + _conjunction(orbit) / (2 * np.pi)) * orbit.period
    main.plot(grid, orbit_at(orbit, moment), color=colour, lw=1.8, zorder=5, label="orbit")
    for axes, values in ((main, fold.rv), (rest, left)):
        x, y, e = phase_bins(phase, values, error)
        axes.errorbar(
            x, y, e, fmt="o", ms=5.5, mfc=LIGHT["paper"], mec=LIGHT["ink"], ecolor=LIGHT["ink"],
            mew=1.1, elinewidth=1.1, zorder=6, label="binned" if axes is main else None,
        )  # fmt: skip
    rest.axhline(0, color=LIGHT["muted"], lw=0.8, ls="--")
    for axes, values in ((main, fold.rv), (rest, left)):
        axes.set_ylim(*_limits(values))
    main.tick_params(labelbottom=False)
    main.set_xlim(-0.5, 0.5)
    main.set_ylabel("velocity (m/s)")
    rest.set_ylabel("O − C (m/s)")
    rest.set_xlabel(f"phase at {orbit.period:.6g} d (0: conjunction)")
    main.legend(
        loc="lower left", bbox_to_anchor=(0, 1.01), ncols=6, handletextpad=0.3, columnspacing=1.0
    )


def _limits(values: Array) -> tuple[float, float]:
    low, high = np.percentile(values, [0.5, 99.5])
    low, high = min(low, values.min() / 1.6), max(high, values.max() / 1.6)
    room = max(0.12 * (high - low), 1e-6)
    return low - room, high + room


def _draw_blocks(top, bottom, everything: Block, blocks: list[Block]) -> None:  # type: ignore[no-untyped-def]
    zero = 2450000.0 if blocks[0].time > 2450000 else 0.0
    x = np.array([b.time for b in blocks]) - zero
    half = np.array([(b.stop - b.start) / 2 for b in blocks])
    style = {
        "fmt": "D", "ms": 4.5, "mfc": LIGHT["ink"], "mec": LIGHT["ink"],
        "ecolor": LIGHT["ink"], "elinewidth": 1.0,
    }  # fmt: skip
    amplitude = np.array([b.amplitude for b in blocks])
    top.errorbar(x, amplitude, [b.amplitude_err for b in blocks], half, **style)
    # phases differ from the common one by less than half a turn
    turns = [np.mod(b.phase - everything.phase + 0.5, 1.0) - 0.5 for b in blocks]
    errors = [b.phase_err for b in blocks]
    bottom.errorbar(x, turns, errors, half, **style)
    top.axhline(everything.amplitude, color=LIGHT["ink"], lw=0.9, ls="--")
    bottom.axhline(0.0, color=LIGHT["ink"], lw=0.9, ls="--")
    top.set_ylim(0, 1.35 * max(amplitude.max(), everything.amplitude))
    reach = min(max(1.3 * np.max(np.abs(turns) + np.array(errors)), 0.15), 0.55)
    bottom.set_ylim(-reach, reach)
    top.tick_params(labelbottom=False)
    top.set_title("block by block", loc="left")
    top.set_ylabel("amplitude (m/s)")
    bottom.set_ylabel("phase shift")
    bottom.set_xlabel(f"BJD − {zero:.0f}" if zero else "time (d)")
    bottom.locator_params(axis="x", nbins=3)
