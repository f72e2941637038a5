"""The star's rotation period as a probability density."""

from screener.models.rotation.density import PERIOD_GRID, PeriodDensity
from screener.models.rotation.estimate import ExtraSource, estimate_rotation

__all__ = ["PERIOD_GRID", "ExtraSource", "PeriodDensity", "estimate_rotation"]
