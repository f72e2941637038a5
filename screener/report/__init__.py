"""A verdict for people and programs: JSON, a page with figures, tables, a terminal summary.

Everything is imported on demand, because matplotlib takes a while to load.
"""

from __future__ import annotations

import importlib
from typing import Any

_WHERE = {
    "build_view": "view",
    "figure_specs": "figures",
    "load_products": "products",
    "load_verdict": "restore",
    "print_summary": "terminal",
    "read_verdict": "verdict_json",
    "save_products": "products",
    "to_pandas": "tables",
    "verdict_from_dict": "restore",
    "verdict_to_dict": "verdict_json",
    "verdict_to_json": "verdict_json",
    "write_dossier": "dossier",
    "write_figures": "figures",
    "write_tables": "tables",
    "write_verdict": "verdict_json",
}

__all__ = list(_WHERE)


def __getattr__(name: str) -> Any:
    if name not in _WHERE:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_WHERE[name]}"), name)
