"""Where the shared test material lies, and skipping where it does not."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

__all__ = ["needs_shared", "shared"]

_ROOT = Path(
    os.environ.get("SCREENER_SHARED", Path(__file__).resolve().parents[1].parent / "shared")
)


def shared(*parts: str) -> Path:
    """A path below the shared folder."""
    return _ROOT.joinpath(*parts)


def needs_shared(*parts: str) -> pytest.MarkDecorator:
    """Skip a test where that part of the shared material is absent."""
    path = shared(*parts)
    return pytest.mark.skipif(not path.exists(), reason=f"needs {path}")
