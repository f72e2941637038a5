"""A whole catalogue overnight: many stars, on many processes or machines, resumable.

Everything is imported on demand, so that worker processes start without what only their
supervisor needs.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from screener.catalogue.folder import DiskFull
    from screener.catalogue.messages import ClusterLost, Limits
    from screener.catalogue.run import run_catalogue
    from screener.catalogue.settings import Options, Summary
    from screener.catalogue.stopping import Stopped

__all__ = [
    "ClusterLost",
    "DiskFull",
    "Limits",
    "Options",
    "Stopped",
    "Summary",
    "run_catalogue",
]

_WHERE = {
    "ClusterLost": "messages",
    "DiskFull": "folder",
    "Limits": "messages",
    "Options": "settings",
    "Stopped": "stopping",
    "Summary": "settings",
    "run_catalogue": "run",
}


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_WHERE[name]}"), name)
