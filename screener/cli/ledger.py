"""``screener ledger``: the recorded decisions, shown, verified, exported."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from screener.ledger import Reading, Standing

__all__ = ["command"]

_PLACE = click.argument("place", metavar="RUN_OR_DIR", type=click.Path(path_type=Path))
_STAR = click.option("--star", help="Only the decisions on this star.")


@click.group("ledger")
def command() -> None:
    """Show, verify or export the recorded decisions."""


@command.command("show")
@_PLACE
@_STAR
@click.option("--json", "as_json", is_flag=True, help="Print the entries as JSON on stdout.")
def show(place: Path, star: str | None, as_json: bool) -> None:
    """The history of each star: what was decided, by whom, and what became of it.

    A decision whose verdict has changed since is shown as outdated, with what changed. Ends with
    code 2 if the ledger itself is damaged.
    """
    reading, found, _ = _read(place, star)
    if as_json:
        content = [
            {**s.entry.to_dict(), "state": s.state, "replaced_by": s.replaced_by,
             "changes": [{"what": c.what, "before": c.before, "now": c.now} for c in s.changes]}
            for s in found
        ]  # fmt: skip
        click.echo(json.dumps(content, indent=1, allow_nan=False))
    elif not found:
        click.echo("Nothing has been decided yet.")
    else:
        for name in dict.fromkeys(s.entry.star for s in found):
            _print_star([s for s in found if s.entry.star == name])
    _refuse_damaged(place, reading)


@command.command("verify")
@_PLACE
@_STAR
@click.option("--holds", metavar="HASH", help="Hash of an entry, noted elsewhere, to look for.")
def verify_command(place: Path, star: str | None, holds: str | None) -> None:
    """Name every byte that is not as it was: in the ledger, the verdicts and their inputs.

    Ends with code 0 if all is as it was, else with 2 and one message per fault. Verdict and
    inputs are held against the latest decision of each star. Not to be seen from the files alone:
    ledger and head file both put back to an earlier state, both deleted, or both written anew as
    a whole. Give --holds a hash that was noted elsewhere to see these as well.
    """
    from screener.core import InputFaults
    from screener.ledger import open_place, verify

    where = open_place(place)
    only = None if star is None else where.find(star)
    result = verify(where, holds, only)
    for note in result.notes:
        click.echo(f"note: {note}", err=True)
    if result.faults:
        raise InputFaults(result.faults)
    words = [
        f"{n} {one if n == 1 else many}"
        for n, one, many in (
            (len(result.reading.entries), "entry", "entries"),
            (result.n_verdicts, "verdict", "verdicts"),
            (result.n_inputs, "input", "inputs"),
        )
    ]
    click.echo(f"intact: {', '.join(words)}; last hash {result.reading.last_hash}")


@command.command("export")
@_PLACE
@_STAR
@click.option(
    "--to", "targets", type=click.Path(path_type=Path), multiple=True,
    help="File to write: .ecsv or .csv for a table, .html or .md for a statement; may be given "
    "several times. Default: decisions.ecsv and decisions.html beside the ledger, or in the "
    "star's folder.",
)  # fmt: skip
def export_command(place: Path, star: str | None, targets: tuple[Path, ...]) -> None:
    """Write the decisions as a table and as a statement of one page."""
    from screener.core import InputFault
    from screener.ledger import open_place
    from screener.ledger.export import FORMATS, export

    for target in targets:
        if target.suffix.lower() not in FORMATS:
            raise InputFault(str(target), f"the ending {target.suffix!r} is unknown",
                             f"Use one of {', '.join(FORMATS)}")  # fmt: skip
    reading, found, name = _read(place, star)
    _refuse_damaged(place, reading)
    where = open_place(place)
    folder = where.folder
    title = folder.absolute().name
    if name is not None:
        title = found[-1].entry.star_name if found else name
        folder = (folder / where.file(name)).parent
    for target in targets or (folder / "decisions.ecsv", folder / "decisions.html"):
        export(found, target, title)
        click.echo(str(target))


def _read(place: Path, star: str | None) -> tuple[Reading, tuple[Standing, ...], str | None]:
    """The ledger's content, the decisions asked for, and the star's folder name if one was."""
    from screener.core import InputFault
    from screener.ledger import Journal, open_place, standings

    where = open_place(place)
    reading = Journal(where.folder).read()
    name = where.named if star is None else star
    decided = {entry.star for entry in reading.entries}
    if name is not None and name not in decided:  # the verdict of a decided star may be gone
        try:
            name = where.find(name)
        except InputFault:
            same = {e.star for e in reading.entries if e.star_name.casefold() == name.casefold()}
            if len(same) != 1:
                raise
            name = same.pop()
    return reading, standings(where, reading.entries, name), name


def _refuse_damaged(place: Path, reading: Reading) -> None:
    from screener.core import InputFault, InputFaults

    for note in reading.notes:
        click.echo(f"note: {note}", err=True)
    if reading.faults:
        raise InputFaults(
            InputFault(str(place), fault, "'screener ledger verify' says what else is changed")
            for fault in reading.faults
        )


def _print_star(found: list[Standing]) -> None:
    from screener.ledger.export import printable

    entry = found[-1].entry
    same = entry.star == entry.star_name
    click.echo(printable(entry.star_name if same else f"{entry.star_name} ({entry.star})"))
    for standing in found:
        for line in _lines(standing):
            click.echo(printable(line))
    click.echo()


def _lines(standing: Standing) -> list[str]:
    from screener.ledger.export import departs, test_named

    entry, then = standing.entry, standing.entry.snapshot
    number = "{:.5g}".format
    period, k, score = (
        number(then[key]) if isinstance(then.get(key), float | int) else "?"
        for key in ("period_d", "k_m_s", "score")
    )
    when = entry.time[:16].replace("T", " ")
    lines = [
        f"  {entry.seq}. {when} UTC  {entry.signal} {entry.decision}, by {entry.by}",
        f"     graded {then.get('grade')}, score {score}; period {period} d, K {k} m/s",
        *(f"     {line}" for line in entry.note.splitlines()),
    ]
    if entry.reason:
        why = "departs from the grade because" if departs(entry) else "reason"
        lines.append(f"     {why}: {entry.reason}")
    if entry.weighed_most:
        lines.append(f"     weighed most: {test_named(entry.weighed_most)}")
    if standing.replaced_by is not None:
        lines.append(f"     replaced by entry {standing.replaced_by}")
    if standing.state != "current":
        told = "the verdict has changed since" if standing.changes else "not the present verdict"
        lines.append(f"     {standing.state.upper()}: {told}")
        lines += [f"       {change}" for change in standing.changes]
    return lines
