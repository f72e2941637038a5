"""What a worker does with a star: read it, screen it, hand the verdict back as bytes.

Workers write nothing: the process that holds the store writes the files as well, so that a worker
that dies leaves nothing half done, and a cluster's workers need no way to write.
"""

from __future__ import annotations

import json
import math
import warnings
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from screener.catalogue.messages import StarTask, WorkResult
from screener.core import Array, Depth, Fold, Products, Screening, SignalVerdict

__all__ = [
    "DRAW",
    "SCREEN",
    "binned_fold",
    "draw_dossier",
    "preload",
    "screen_again",
    "screen_star",
    "with_options",
]

SCREEN = "screener.catalogue.work:screen_star"
DRAW = "screener.catalogue.work:draw_dossier"

N_BINS = 30


def preload() -> None:
    """Import what screening needs, and raise here what would else be each star's fault."""
    import screener.intake
    import screener.pipeline
    import screener.report.verdict_json  # noqa: F401


def _screen(task: StarTask) -> Screening:
    from screener.intake import read_star
    from screener.pipeline import screen
    from screener.rules import load_rules

    observations = read_star(task.table, task.sidecar)
    overlay = None if task.rules_file is None else Path(task.rules_file)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what matters is in the verdict's cautions
        return screen(
            observations, depth=Depth(task.depth), seed=task.seed,
            rules=load_rules(overlay=overlay), period=task.period, site=task.site,
        )  # fmt: skip


def with_options(task: StarTask, verdict: Mapping[str, Any]) -> StarTask:
    """The task with the options that a verdict records, depth and seed included."""
    options = verdict.get("options") or {}  # early verdicts have none
    return replace(
        task,
        depth=verdict["depth"],
        seed=verdict["seed"],
        period=options.get("period_d"),
        rules_file=options.get("rules_file"),
        site=options.get("site"),
    )


def screen_star(task: StarTask) -> WorkResult:
    """Screen one star.

    Raises
    ------
    InputFault, InputFaults
        If its table, sidecar or photometry is at fault.
    """
    from screener.report.verdict_json import verdict_to_json

    screening = _screen(task)
    folds = {}
    if screening.products is not None:
        items = {item.signal.id: item for item in screening.verdict.signals}
        for fold in screening.products.folds:
            if fold.signal_id in items:
                bins = binned_fold(fold, items[fold.signal_id], screening.products)
                folds[fold.signal_id] = bins
    return WorkResult(verdict_to_json(screening.verdict).encode(), folds)


def binned_fold(
    fold: Fold, item: SignalVerdict, products: Products, n_bins: int = N_BINS
) -> list[list[float]]:
    """Phase-folded velocities, inverse-variance means in ``n_bins`` bins of phase.

    Returns
    -------
    list of [phase, m/s]
        Phase in [0, 1), zero at the orbit's ``time_peri``; empty bins are left out.
    """
    import numpy as np

    orbit = item.signal.orbit
    phase: Array = np.mod((fold.time - orbit.time_peri) / orbit.period, 1.0)
    jitter = products.jitter[fold.instrument] if products.jitter.size else 0.0
    weight = 1.0 / np.maximum(fold.rv_err**2 + jitter**2, 1e-12)
    good = np.isfinite(fold.rv) & np.isfinite(weight) & np.isfinite(phase)
    which = np.minimum((phase[good] * n_bins).astype(int), n_bins - 1)
    total = np.bincount(which, weight[good], n_bins)
    means = np.bincount(which, weight[good] * fold.rv[good], n_bins)
    phases = np.bincount(which, weight[good] * phase[good], n_bins)
    return [
        [round(float(phases[i] / total[i]), 4), float(f"{means[i] / total[i]:.4g}")]
        for i in range(n_bins)
        if total[i] > 0 and math.isfinite(means[i] / total[i])
    ]


def screen_again(task: StarTask) -> tuple[Screening, bool | None]:
    """Screen a star once more and say whether its verdict is the one in ``task.folder``.

    Whatever options that verdict was made with are used again.

    Returns
    -------
    (Screening, bool or None)
        None if there is no verdict to compare with. The recorded path of the input may differ.
    """
    from screener.report.verdict_json import verdict_to_dict

    if task.folder is None or not (task.folder / "verdict.json").is_file():
        return _screen(task), None
    then = json.loads((task.folder / "verdict.json").read_text(encoding="utf-8"))
    screening = _screen(with_options(task, then))
    now = json.loads(json.dumps(verdict_to_dict(screening.verdict)))
    for verdict in (then, now):
        for name in ("file", "sidecar", "photometry"):
            verdict.get("input", {}).pop(name, None)
    return screening, then == now


def draw_dossier(task: StarTask) -> str:
    """Draw the dossier of a star into its folder, from a second screening with the same numbers.

    Returns
    -------
    str
        Empty, or why there is none.
    """
    from screener.report import write_dossier

    screening, same = screen_again(task)
    if same is False:
        return "its input gives another verdict by now: screen the star again"
    assert task.folder is not None
    write_dossier(screening, Path(task.folder))
    return ""
