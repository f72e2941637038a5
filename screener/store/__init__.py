"""The store of a run: one SQLite file, readable with plain SQL and ``pandas.read_sql``."""

from screener.store.database import (
    Planned,
    RunSettings,
    StarRow,
    Store,
    WorkRow,
    grade_of,
    utc_now,
)
from screener.store.schema import StoreError

__all__ = [
    "Planned",
    "RunSettings",
    "StarRow",
    "Store",
    "StoreError",
    "WorkRow",
    "grade_of",
    "utc_now",
]
