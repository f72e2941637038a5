"""The screener from Python: ``screener.screen(table)``."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from screener.core import Depth, InputFault, Observations, Screening, SignalVerdict, Star, Verdict

__all__ = ["Result", "screen"]


@dataclass(frozen=True, eq=False)
class Result:
    """What screening one star gave.

    Attributes
    ----------
    verdict : Verdict
        Grades, findings and reasons, as frozen dataclasses.
    screening : Screening
        The verdict together with the arrays behind the figures.
    """

    screening: Screening

    @property
    def verdict(self) -> Verdict:
        """The verdict."""
        return self.screening.verdict

    @property
    def signals(self) -> tuple[SignalVerdict, ...]:
        """The graded signals, strongest first."""
        return self.verdict.signals

    def to_dict(self) -> dict[str, Any]:
        """The content of ``verdict.json``."""
        from screener.report.verdict_json import verdict_to_dict

        return verdict_to_dict(self.verdict)

    def to_pandas(self, what: str = "signals") -> Any:
        """Signals or findings ("signals", "findings") as a pandas DataFrame."""
        from screener.report.tables import to_pandas

        return to_pandas(self.verdict, what)

    def to_table(self, what: str = "signals") -> Any:
        """The same as an astropy Table with units.

        Raises
        ------
        ValueError
            If ``what`` is neither "signals" nor "findings".
        """
        from screener.report.tables import findings_table, signals_table

        makers = {"signals": signals_table, "findings": findings_table}
        if what not in makers:
            raise ValueError(f"no table {what!r}; there are {', '.join(makers)}")
        return makers[what](self.verdict)

    def write(
        self,
        folder: Path | str,
        formats: tuple[str, ...] = ("html",),
        figure_formats: tuple[str, ...] | None = None,
    ) -> tuple[Path, ...]:
        """Write verdict and dossier to a folder; see ``screener.report.write_dossier``."""
        from screener.report.dossier import write_dossier
        from screener.report.verdict_json import write_verdict

        path = Path(folder) / "verdict.json"
        write_verdict(path, self.verdict)
        return (path, *write_dossier(self.screening, folder, formats, figure_formats))

    def __repr__(self) -> str:
        graded = ", ".join(
            f"{s.signal.id} {s.signal.orbit.period:.5g} d {s.grade.value}" for s in self.signals
        )
        return f"<{self.verdict.star.name}: {graded or 'no significant period'}>"

    def _repr_html_(self) -> str:
        from screener.report.dossier import result_html
        from screener.report.view import build_view

        return result_html(build_view(self.verdict))


def screen(
    table: Any,
    *,
    star: Path | str | Star | None = None,
    depth: Depth | str = Depth.STANDARD,
    seed: int = 1,
    period: float | None = None,
    rules: Path | str | None = None,
    progress: Callable[[str, float], None] | None = None,
) -> Result:
    """Screen one star: planet, or the star itself?

    Parameters
    ----------
    table : path, pandas.DataFrame or astropy.table.Table
        One row per exposure, with the columns ``time``, ``rv``, ``rv_err``, ``instrument`` and
        any indicators; units of an astropy table are honoured.
    star : path or Star, optional
        A sidecar file, or what is known of the star. By default the sidecar beside the table.
    depth : {"quick", "standard", "deep"}
    seed : int
        Seed of every random draw; the same input and seed give the same verdict.
    period : float, optional
        A period (d) to grade in any case.
    rules : path, optional
        A rule file to lay over the default rules.
    progress : callable, optional
        Called with the name of each stage and the share done.

    Raises
    ------
    InputFaults, InputFault
        If the table, the sidecar or the rules are at fault.
    ValueError
        If ``depth`` is none of the three.

    Examples
    --------
    With the scenario that comes with the source (any table and sidecar of yours will do):

    >>> import screener
    >>> result = screener.screen("fixtures/heron_survey/stars/heron-47.csv", depth="quick")
    >>> result.verdict.star.name
    'Heron 47'
    >>> for item in result.signals:
    ...     orbit = item.signal.orbit
    ...     print(item.signal.id, f"{orbit.period:.1f} d, {orbit.semi_amplitude:.0f} m/s")
    S1 9.6 d, 4 m/s

    Signals and findings come as tables, with units from astropy:

    >>> list(result.to_pandas().columns)[:4]
    ['star', 'id', 'period', 'period_err']
    >>> str(result.to_table()["period"].unit)
    'd'
    >>> {"rotation", "joint_amplitude"} <= set(result.to_pandas("findings")["test"])
    True

    Why a signal has its grade, rule by rule, the first of them the odds before any evidence:

    >>> result.signals[0].trace[0].rule
    'prior'
    """
    from screener.pipeline import screen as screen_observations
    from screener.rules import load_rules

    depth = Depth(depth)
    observations = _observations(table, None if isinstance(star, Star) else star)
    if isinstance(star, Star):
        observations = replace(observations, star=star)
    return Result(
        screen_observations(
            observations,
            depth=depth,
            seed=seed,
            rules=load_rules(overlay=None if rules is None else Path(rules)),
            period=period,
            progress=progress,
        )
    )


def _observations(table: Any, sidecar: Path | str | None) -> Observations:
    from screener.intake import read_star

    known = None if sidecar is None else Path(sidecar)
    if isinstance(table, str | Path):
        return read_star(Path(table), known)
    with tempfile.TemporaryDirectory() as folder:
        # by way of a file, so that a table in memory passes the same checks as one on disk
        path = _written(table, Path(folder))
        observations = read_star(path, known)
    name = Path(known).stem if known is not None else observations.star.name
    return replace(
        observations,
        star=replace(observations.star, name=name)
        if observations.star.name == path.stem
        else observations.star,
        record=replace(observations.record, file="a table in memory"),
    )


def _written(table: Any, folder: Path) -> Path:
    if hasattr(table, "to_csv"):
        path = folder / "star.csv"
        table.to_csv(path, index=False)
    elif hasattr(table, "colnames") and hasattr(table, "write"):
        path = folder / "star.ecsv"
        table.write(path, format="ascii.ecsv")
    else:
        raise InputFault(
            "screen()",
            f"cannot read a table out of a {type(table).__name__}",
            "Give a path, a pandas DataFrame or an astropy Table",
        )
    return path
