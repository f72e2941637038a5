"""Types and errors shared by every room; depends on numpy only."""

from screener.core.errors import InputFault, InputFaults, NumericalError, ScreenerError
from screener.core.types import *  # noqa: F403
from screener.core.types import __all__ as _types

__all__ = [*_types, "InputFault", "InputFaults", "NumericalError", "ScreenerError"]
