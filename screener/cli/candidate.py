"""``screener candidate``: one star from table to dossier."""

from __future__ import annotations

import json
import os
from pathlib import Path

import click

from screener.cli.progress import stage_progress

__all__ = ["command"]


@click.command("candidate")
@click.argument("table", type=click.Path(path_type=Path))
@click.option(
    "--star", "sidecar", type=click.Path(path_type=Path), help="Sidecar; default: next to TABLE."
)
@click.option("--period", type=click.FloatRange(min=0.1), help="A period (d) to grade in any case.")
@click.option(
    "--out", type=click.Path(path_type=Path), help="Folder to write; default: reports/<star>."
)
@click.option(
    "--depth",
    type=click.Choice(["quick", "standard", "deep"]),
    default="standard",
    show_default=True,
    help="How much work to spend.",
)
@click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=1,
    show_default=True,
    help="Seed of every random draw.",
)
@click.option(
    "--site", help="Observatory for which nights are ranked: a name, or LAT,LON[,HEIGHT]."
)
@click.option(
    "--rules", "rule_file", type=click.Path(path_type=Path), help="Rules to lay over the defaults."
)
@click.option(
    "--format",
    "formats",
    type=click.Choice(["md", "pdf"]),
    multiple=True,
    help="Further formats of the dossier.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the verdict as JSON on stdout.")
def command(
    table: Path,
    sidecar: Path | None,
    period: float | None,
    out: Path | None,
    depth: str,
    seed: int,
    site: str | None,
    rule_file: Path | None,
    formats: tuple[str, ...],
    as_json: bool,
) -> None:
    """Screen the star in TABLE: verdict, dossier and figures."""
    from screener.core import Depth
    from screener.intake import read_star

    observations = read_star(table, sidecar)  # a bad table is refused before the heavy imports
    from screener.pipeline import screen
    from screener.report import (
        print_summary,
        save_products,
        verdict_to_dict,
        write_dossier,
        write_tables,
        write_verdict,
    )
    from screener.rules import load_rules

    rules = load_rules(overlay=rule_file)
    folder = out or Path("reports") / table.name.removesuffix(table.suffix)
    folder.mkdir(parents=True, exist_ok=True)
    with stage_progress(observations.star.name) as progress:
        screening = screen(
            observations, depth=Depth(depth), seed=seed, rules=rules, period=period,
            progress=progress, workers=os.cpu_count() or 1, site=site,
        )  # fmt: skip
        progress("dossier and figures", 0.98)
        write_verdict(folder / "verdict.json", screening.verdict)
        if screening.products is not None:
            save_products(folder / "products.npz", screening.products)
        write_tables(screening.verdict, folder)
        write_dossier(screening, folder, formats=("html", *formats))
        progress("done", 1.0)
    if as_json:
        click.echo(json.dumps(verdict_to_dict(screening.verdict), indent=1, allow_nan=False))
    else:
        print_summary(screening.verdict, folder)
