"""Probability densities of a period on a logarithmic grid."""

from __future__ import annotations

from dataclasses import dataclass

from screener.core import Array

__all__ = ["PeriodDensity"]


@dataclass(frozen=True, eq=False)
class PeriodDensity:
    """A density in ln(period): ``density`` integrates to one over ``log_period``."""

    log_period: Array
    density: Array
