"""A whole catalogue overnight: many stars, on many processes or machines, resumable.

Everything is imported on demand, so that worker processes start without what only their
supervisor needs.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from screener.catalogue.folder import DiskFull
    from screener.catalogue.messages import Limits
    from screener.catalogue.run import Options, Stopped, Summary, run_catalogue

__all__ = ["DiskFull", "Limits", "Options", "Stopped", "Summary", "run_catalogue"]

_WHERE = {"DiskFull": "folder", "Limits": "messages"}


def __getattr__(name: str) -> Any:
    if name not in __all__:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_WHERE.get(name, 'run')}"), name)
