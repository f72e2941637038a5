"""Small made-up tables for the tests of the intake."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

__all__ = ["columns", "write_csv"]


def columns(n: int = 40, seed: int = 5) -> dict[str, Any]:
    """A sound table: ``n`` nights, one instrument, velocities in m/s, one indicator."""
    rng = np.random.default_rng(seed)
    time = 2_458_000.6 + 3.0 * np.arange(n) + rng.uniform(-0.1, 0.1, n)
    return {
        "time": np.round(time, 6),
        "rv": np.round(20.0 * np.sin(2 * np.pi * time / 17.3) + rng.normal(0, 2.0, n), 3),
        "rv_err": np.round(rng.uniform(1.5, 2.5, n), 3),
        "instrument": np.array(["ECHO"] * n, dtype=object),
        "s_index": np.round(rng.normal(0.21, 0.01, n), 4),
    }


def write_csv(path: Path, table: dict[str, Any], delimiter: str = ",") -> Path:
    """Write columns as text; None and NaN become empty cells."""
    lines = [delimiter.join(table)]
    for row in zip(*table.values(), strict=True):
        lines.append(delimiter.join(_cell(value) for value in row))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def _cell(value: Any) -> str:
    if value is None or (isinstance(value, float) and np.isnan(value)):
        return ""
    return value if isinstance(value, str) else repr(float(value))
