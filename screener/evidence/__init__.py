"""Lines of evidence: one module per test, found by looking, so that a new test is a new file.

A test module has ``ID``, ``QUESTION``, ``REQUIRES``, ``REFERENCES`` and ``run(case) -> Finding``.
"""

from __future__ import annotations

import importlib
import pkgutil
from functools import cache
from types import ModuleType

import numpy as np

from screener.core import Finding, Outcome
from screener.core.errors import ScreenerError
from screener.evidence.case import Case

__all__ = ["Case", "run_all", "run_test", "tests"]


@cache
def _found() -> tuple[tuple[str, ModuleType], ...]:
    modules = []
    for info in pkgutil.iter_modules(__path__):
        module = importlib.import_module(f"{__name__}.{info.name}")
        if hasattr(module, "ID") and hasattr(module, "run"):
            modules.append((str(module.ID), module))
    return tuple(sorted(modules))


def tests() -> dict[str, ModuleType]:
    """All test modules by their ID, in alphabetical order."""
    return dict(_found())


def run_test(module: ModuleType, case: Case) -> Finding:
    """The finding of one test; a numerical breakdown makes it "failed", which counts for nothing.

    Only our own errors and failed factorisations are caught: any other exception is a defect.
    """
    try:
        finding: Finding = module.run(case)
    except (ScreenerError, np.linalg.LinAlgError) as error:
        return Finding(
            module.ID,
            Outcome.FAILED,
            f"This test broke down and counts for nothing: {error}.",
            references=tuple(module.REFERENCES),
        )
    return finding


def run_all(case: Case) -> tuple[Finding, ...]:
    """The findings of all tests about one signal, in the order of their IDs."""
    return tuple(run_test(module, case) for module in tests().values())
