"""The star's rotation period as a probability density."""

from screener.models.rotation.density import PeriodDensity

__all__ = ["PeriodDensity"]
