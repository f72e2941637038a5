"""Grades radial-velocity signals: planet, or the star itself?"""

from __future__ import annotations

from typing import Any

__all__ = ["__version__", "screen"]

__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    # on demand: the command line must answer before numpy and its company are loaded
    if name == "screen":
        from screener.face import screen

        return screen
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
