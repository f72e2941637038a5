"""Errors that the screener raises on purpose; only the command line turns them into exit codes."""

from __future__ import annotations

from collections.abc import Iterable

__all__ = ["InputFault", "InputFaults", "NumericalError", "ScreenerError"]


class ScreenerError(Exception):
    """Root of every error the screener raises on purpose."""


class InputFault(ScreenerError):
    """One fault of an input: where it is, what is wrong, and what to do about it.

    Parameters
    ----------
    file : str
        The file as the user named it.
    problem : str
        What is wrong, with the column and the first bad row where they exist.
    cure : str
        What the user can do.
    """

    def __init__(self, file: str, problem: str, cure: str) -> None:
        self.file, self.problem, self.cure = file, problem, cure
        super().__init__(f"{file}: {problem}. {cure}")

    def __reduce__(self) -> tuple[type[InputFault], tuple[str, str, str]]:
        # exceptions cross process borders in catalogue runs
        return (InputFault, (self.file, self.problem, self.cure))


class InputFaults(ScreenerError):
    """All faults of an input in one go."""

    def __init__(self, faults: Iterable[InputFault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(str(f) for f in self.faults))

    def __reduce__(self) -> tuple[type[InputFaults], tuple[tuple[InputFault, ...]]]:
        return (InputFaults, (self.faults,))


class NumericalError(ScreenerError):
    """A factorisation or an optimisation failed; the message carries the numbers."""
