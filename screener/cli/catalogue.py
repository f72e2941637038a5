"""``screener catalogue``: a whole catalogue, unattended."""

from __future__ import annotations

import json
import os
import shlex
import sys
from pathlib import Path
from typing import Any

import click

__all__ = ["command"]

EXIT_DONE, EXIT_INPUT, EXIT_SOME_FAILED, EXIT_STOPPED = 0, 2, 3, 130


@click.command("catalogue")
@click.argument("source", metavar="FOLDER|LIST", type=click.Path(path_type=Path))
@click.option(
    "--out",
    "out",
    metavar="RUN",
    required=True,
    type=click.Path(path_type=Path),
    help="Folder of the run; the same command again goes on where it stopped.",
)
@click.option(
    "--workers",
    type=click.IntRange(1, 4096),
    default=None,
    help="Processes on this machine.  [default: one per core]",
)
@click.option(
    "--scheduler",
    metavar="ADDRESS",
    default=None,
    help="Send the stars to the Dask scheduler at this address instead.",
)
@click.option(
    "--time-limit",
    type=click.FloatRange(min=0, min_open=True),
    default=900.0,
    show_default=True,
    metavar="SECONDS",
    help="Per star.",
)
@click.option(
    "--memory-limit",
    type=click.FloatRange(min=50),
    default=2000.0,
    show_default=True,
    metavar="MB",
    help="Per star.",
)
@click.option(
    "--depth",
    type=click.Choice(["quick", "standard", "deep"]),
    default="standard",
    show_default=True,
    help="How much work is spent on a star.",
)
@click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=1,
    show_default=True,
    help="Seed of every star's random numbers.",
)
@click.option(
    "--dossiers",
    type=click.IntRange(min=0),
    default=20,
    show_default=True,
    metavar="N",
    help="Draw the dossiers of the N most planet-like stars at the end.",
)
@click.option(
    "--compare",
    metavar="RUN",
    default=None,
    type=click.Path(path_type=Path),
    help="Folder of an earlier run: the page says what changed since.",
)
@click.option(
    "--export",
    "exports",
    metavar="FILE",
    multiple=True,
    type=click.Path(path_type=Path),
    help="Write the ranked table; .ecsv, .csv, .fits or .vot. May be repeated.",
)
@click.option("--retry-failed", is_flag=True, help="Try stars again that failed before.")
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def command(
    source: Path,
    out: Path,
    workers: int | None,
    scheduler: str | None,
    time_limit: float,
    memory_limit: float,
    depth: str,
    seed: int,
    dossiers: int,
    compare: Path | None,
    exports: tuple[Path, ...],
    retry_failed: bool,
    as_json: bool,
) -> None:
    """Screen every star of a FOLDER of tables, of a LIST with the path of a table per line, or of
    one table with a column for the star. RUN gets a folder per star, index.html to read in the
    morning, and catalogue.sqlite. Ends with 3 if some stars failed."""
    from screener.catalogue import ClusterLost, DiskFull, Limits, Options, Stopped, run_catalogue
    from screener.catalogue.progress import choose_watch

    _check(exports, compare)
    options = Options(
        workers=workers or _cores(),
        limits=Limits(time_limit, memory_limit),
        depth=depth,
        seed=seed,
        scheduler=scheduler,
        dossiers=dossiers,
        compare=compare,
        retry_failed=retry_failed,
    )
    try:
        summary = run_catalogue(source, out, options, choose_watch())
        _export(out, exports)
    except Stopped:
        again = shlex.join(["screener", *sys.argv[1:]])
        click.echo(f"Stopped; what is done is kept. To go on:\n  {again}", err=True)
        raise click.exceptions.Exit(EXIT_STOPPED) from None
    except (ClusterLost, DiskFull) as cause:
        click.echo(f"screener: {cause}", err=True)
        raise click.exceptions.Exit(EXIT_INPUT) from None
    if as_json:
        click.echo(json.dumps(_as_dict(summary, out), indent=1, allow_nan=False))
    else:
        _print(summary, out)
    failed = summary.counts["failed"]
    raise click.exceptions.Exit(EXIT_SOME_FAILED if failed else EXIT_DONE)


def _cores() -> int:
    try:
        return len(os.sched_getaffinity(0))  # what a batch system has given us
    except AttributeError:
        return os.cpu_count() or 1


def _check(exports: tuple[Path, ...], compare: Path | None) -> None:
    """Say at the start, not after the night, what cannot work."""
    from screener.core import InputFault, InputFaults
    from screener.store.export import FORMATS

    faults = [
        InputFault(str(path), "the ending is unknown", f"Use one of {', '.join(FORMATS)}")
        for path in exports
        if path.suffix.lower() not in FORMATS
    ]
    if compare is not None and not (compare / "catalogue.sqlite").is_file():
        cure = "Give the folder that an earlier run had as --out"
        faults.append(InputFault(str(compare), "holds no catalogue.sqlite", cure))
    if faults:
        raise InputFaults(faults)


def _export(out: Path, exports: tuple[Path, ...]) -> None:
    from screener.store import Store
    from screener.store.export import export_ranked

    if not exports:
        return
    with Store(out / "catalogue.sqlite", read_only=True) as store:
        for path in exports:
            export_ranked(store, path)


def _leading(out: Path, count: int) -> list[dict[str, Any]]:
    from screener.store import Store
    from screener.store.reading import ranked

    with Store(out / "catalogue.sqlite", read_only=True) as store:
        return [row for row in ranked(store) if row["signal"] is not None][:count]


def _as_dict(summary: Any, out: Path) -> dict[str, Any]:
    return {
        "run": str(summary.folder),
        "index": str(summary.folder / "index.html"),
        "counts": summary.counts,
        "computed": summary.computed,
        "kept": summary.kept,
        "seconds": round(summary.seconds, 3),
        "peak_memory_mb": summary.peak_memory_mb,
        "start_seconds": summary.start_seconds,
        "failures": summary.failures,
        "signals": _leading(out, 1_000_000),
    }


def _print(summary: Any, out: Path) -> None:
    from screener.catalogue.progress import printable

    for row in _leading(out, 10):
        period, amplitude = row["period_d"] or float("nan"), row["k_m_s"] or float("nan")
        click.echo(
            printable(f"{row['rank']:>4}  {row['star']:<24} {row['grade']:<15}")
            + f"{period:>10.4g} d {amplitude:>8.3g} m/s  score {row['score'] or 0:+.1f}"
        )
    for failure in summary.failures[:20]:
        click.echo(printable(f"failed: {failure['star']}: {failure['reason']}"), err=True)
    more = len(summary.failures) - 20
    if more > 0:
        click.echo(f"... and {more} more, see {summary.folder / 'index.html'}", err=True)
    click.echo(str(summary.folder / "index.html"))
