"""``python -m screener.synthetic``: make populations and the demo scenario."""

from __future__ import annotations

from pathlib import Path

import click

from screener.synthetic.demo import write_demo
from screener.synthetic.population import MIXES, write_population

__all__ = ["main"]


@click.group()
def main() -> None:
    """Simulated stars: populations for calibration and the demo scenario."""


@main.command()
@click.argument("out", type=click.Path(path_type=Path, file_okay=False))
@click.option("--stars", type=click.IntRange(1), default=100, show_default=True)
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True)
@click.option("--first", type=click.IntRange(0), default=0, show_default=True, help="First star.")
@click.option("--mix", type=click.Choice(sorted(MIXES)), default="survey", show_default=True)
def population(out: Path, stars: int, seed: int, first: int, mix: str) -> None:
    """Write STARS simulated stars below OUT, and their truth."""
    truth = write_population(out, stars, seed, first, mix)
    planets = sum(len(star["planets"]) for star in truth)
    click.echo(f"{len(truth)} stars with {planets} planets in {out}")


@main.command()
@click.argument("out", type=click.Path(path_type=Path, file_okay=False))
def demo(out: Path) -> None:
    """Write the demo scenario, an invented survey of four stars, to OUT."""
    for star in write_demo(out):
        click.echo(f"{star.name}: {star.rv.size} exposures, {star.truth['tale']}")


if __name__ == "__main__":
    main()
