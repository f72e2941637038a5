"""``screener decide``: who decided what on which signal, and why."""

from __future__ import annotations

import sys
from pathlib import Path

import click

__all__ = ["command"]


@click.command("decide")
@click.argument("place", metavar="RUN_OR_DIR", type=click.Path(path_type=Path))
@click.option("--star", help="Folder or name of the star; may be left out if there is only one.")
@click.option("--signal", required=True, help="Id of the signal in the verdict, such as S1.")
@click.option(
    "--decision",
    required=True,
    type=click.Choice(["announce", "observe", "set-aside"]),
    help="What is to be done about it.",
)
@click.option("--by", required=True, help="Who decides.")
@click.option("--note", required=True, help="What they want to say.")
@click.option("--reason", help="Why, where the decision departs from the grade.")
@click.option("--weighed-most", metavar="TEST", help="The test whose finding weighed most.")
def command(
    place: Path,
    star: str | None,
    signal: str,
    decision: str,
    by: str,
    note: str,
    reason: str | None,
    weighed_most: str | None,
) -> None:
    """Record a decision on a signal of a verdict in the ledger, for good.

    Announcing a signal that is not graded planetary, or setting aside one that is, needs a
    reason; on a terminal you are asked for it.
    """
    from screener.ledger import Request, departs_from_grade, open_place, record, signal_of

    where = open_place(place)
    verdict = where.verdict(where.find(star))
    item = signal_of(verdict, signal)
    if departs_from_grade(decision, item["grade"]) and reason is None and sys.stdin.isatty():
        click.echo(f"{item['id']} is graded {item['grade']}; '{decision}' departs from that.",
                   err=True)  # fmt: skip
        reason = click.prompt("Why", err=True)
    request = Request(item["id"], decision, by, note, reason, weighed_most)
    entry, warnings = record(where, verdict, request)
    for warning in warnings:
        click.echo(f"note: {warning}", err=True)
    click.echo(f"entry {entry.seq}: {entry.star} {entry.signal} {entry.decision}, {entry.hash}")
