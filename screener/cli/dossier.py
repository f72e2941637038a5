"""``screener dossier``: the page and figures of a star that was screened already."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

__all__ = ["command"]


@click.command("dossier")
@click.argument("folders", metavar="RUN/STAR...", nargs=-1, required=True,
                type=click.Path(path_type=Path))  # fmt: skip
def command(folders: tuple[Path, ...]) -> None:
    """Draw dossier.html and figures/ into the folder of a screened star.

    Where the curves were kept (by ``candidate``) they are drawn as they are. Otherwise the star is
    screened once more from its recorded input with its recorded options, depth and seed; if that
    does not give the recorded verdict, nothing is drawn.
    """
    from screener.catalogue.folder import full_disk_told

    for folder in folders:
        with full_disk_told(folder):
            _draw(folder)
        click.echo(str(folder / "dossier.html"))
    for run in {folder.absolute().parent for folder in folders}:
        _refresh(run)


def _draw(folder: Path) -> None:
    from screener.catalogue.messages import StarTask
    from screener.catalogue.work import draw_dossier
    from screener.core import InputFault
    from screener.report.verdict_json import read_verdict

    if (folder / "products.npz").is_file():
        from screener.core import Screening
        from screener.report import load_products, load_verdict, write_dossier

        kept = load_products(folder / "products.npz")
        write_dossier(Screening(load_verdict(folder / "verdict.json"), kept), folder)
        return
    verdict = read_verdict(folder)
    entry: dict[str, Any] = verdict["input"]
    if not entry.get("file"):
        raise InputFault(str(folder), "its verdict names no input", "Screen the star again")
    click.echo(f"screening {verdict['star']} once more for its figures", err=True)
    task = StarTask(
        star=folder.name,
        table=Path(entry["file"]),
        sidecar=Path(entry["sidecar"]) if entry.get("sidecar") else None,
        depth=verdict["depth"],
        seed=verdict["seed"],
        folder=folder,
    )
    fault = draw_dossier(task)
    if fault:
        raise InputFault(str(folder), fault, "Nothing was drawn")


def _refresh(run: Path) -> None:
    """Let the run's page link to the new dossier, unless the run is at work and will do so."""
    from screener.catalogue.folder import RunFolder
    from screener.catalogue.page import write_page
    from screener.core import InputFault
    from screener.store import Store

    if not (run / "catalogue.sqlite").is_file():
        return
    try:
        held = RunFolder(run)
    except InputFault:
        return
    try:
        with Store(held.store) as store:
            write_page(store, held)
    finally:
        held.release()
