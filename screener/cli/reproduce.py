"""``screener reproduce``: a verdict made again from its recorded inputs, number by number."""

from __future__ import annotations

import json
import os
import warnings
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from screener.cli.progress import stage_progress

if TYPE_CHECKING:
    from screener.core import Observations
    from screener.ledger import Match
    from screener.rules import RuleSet

__all__ = ["command"]

_SHOWN = 20
EXIT_SAME, EXIT_DEFECT, EXIT_INPUT = 0, 1, 2


@dataclass(frozen=True)
class _Inputs:
    observations: Observations
    rules: RuleSet
    changed: tuple[str, ...]  # inputs and rules that are not as recorded
    hashes: tuple[str, ...]  # places in the verdict that say so themselves


@click.command("reproduce")
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@click.option("--table", type=click.Path(path_type=Path), help="The table, if it has moved.")
@click.option("--star", "sidecar", type=click.Path(path_type=Path), help="The sidecar likewise.")
@click.option(
    "--rules", "rule_file", type=click.Path(path_type=Path), help="The overlaid rules likewise."
)
@click.option("--all", "show_all", is_flag=True, help="List every value that differs.")
@click.option("--json", "as_json", is_flag=True, help="Print the outcome as JSON on stdout.")
@click.pass_context
def command(
    context: click.Context,
    folder: Path,
    table: Path | None,
    sidecar: Path | None,
    rule_file: Path | None,
    show_all: bool,
    as_json: bool,
) -> None:
    """Screen the star of DIR once more from its recorded inputs and compare with its verdict.

    With the same version on the same machine, every number must be exactly the same. Another
    machine's arithmetic may move a number by one part in a million; such numbers are listed, and
    the verdict still counts as the same. Nothing is written.

    Exit codes: 0 the verdict is the same; 2 an input, the rules or the version are not as
    recorded, or an input is missing; 1 the verdict differs though nothing has changed.
    """
    from screener import __version__
    from screener.core import Depth
    from screener.ledger import compare
    from screener.report.verdict_json import read_verdict, verdict_to_json

    then = read_verdict(folder)
    inputs = _inputs(then, folder, table, sidecar, rule_file)
    from screener.pipeline import screen  # after the inputs, because it takes a while

    for line in inputs.changed:
        click.echo(line, err=True)
    options = then.get("options") or {}
    with stage_progress(str(then["star"])) as progress, warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what matters is in the verdict's cautions
        screening = screen(
            inputs.observations, depth=Depth(then["depth"]), seed=then["seed"],
            rules=inputs.rules, period=options.get("period_d"), site=options.get("site"),
            progress=progress, with_products=False, workers=os.cpu_count() or 1,
        )  # fmt: skip
    now = json.loads(verdict_to_json(screening.verdict))
    match = compare(then, now, skip=(*inputs.hashes, "screener"))
    other_version = then["screener"] != __version__
    if as_json:
        click.echo(json.dumps(_as_json(then, inputs, match, __version__), indent=1))
    else:
        _tell(then, inputs, match, show_all)
        if other_version:
            click.echo(
                f"The verdict was made by version {then['screener']}; this is {__version__}."
            )
    if inputs.changed or (other_version and not match.same):
        context.exit(EXIT_INPUT)
    if not match.same:
        click.echo(
            "screener: inputs, rules, version and seed are as recorded, and yet the verdict "
            "differs; this is a defect of ours unless verdict.json was altered "
            "('screener ledger verify' tells, if it was decided on).",
            err=True,
        )
        context.exit(EXIT_DEFECT)
    context.exit(EXIT_SAME)


def _inputs(
    then: dict[str, Any],
    folder: Path,
    table: Path | None,
    sidecar: Path | None,
    rule_file: Path | None,
) -> _Inputs:
    """Find and read what the verdict was made from, and say what is not as it was.

    Raises
    ------
    InputFault, InputFaults
        Where something is missing, or cannot be read any more.
    """
    from screener.core import InputFault, InputFaults
    from screener.intake import read_star
    from screener.ledger.inputs import find_input, recorded_inputs
    from screener.rules import load_rules

    folder = folder if folder.is_dir() else folder.parent
    recorded = recorded_inputs(then)
    given = {"table": table, "sidecar": sidecar, "photometry": None}
    faults, paths, changed = [], dict(given), []
    for kind, record in recorded.items():
        if record is None or given[kind] is not None:
            continue
        found = find_input(kind, record["file"], record["sha256"], folder)
        paths[kind] = found.path
        if found.path is None and not (kind != "table" and table is not None):
            option = {"table": "--table", "sidecar": "--star"}.get(kind)
            cure = f"Name it with {option}" if option else "Put it back beside the table"
            problem = f"the {kind} of {then['star']}: {found.problem}"
            faults.append(InputFault(record["file"], problem, cure))
    if recorded["table"] is None and table is None:
        faults.append(InputFault(str(folder), "its verdict names no table", "Give --table"))
    if faults:
        raise InputFaults(faults)
    assert paths["table"] is not None
    try:
        observations = read_star(paths["table"], paths["sidecar"])
    except InputFaults as unreadable:
        changed = _changed_files(then, recorded, paths)
        if changed:
            click.echo("\n".join(changed), err=True)
        raise unreadable
    changed, hashes = _not_as_recorded(then, recorded, observations)
    if not changed:
        observations = _with_recorded_star(then, observations)
    options = then.get("options") or {}
    overlay = rule_file or (Path(options["rules_file"]) if options.get("rules_file") else None)
    rules = load_rules(overlay=overlay)
    if rules.sha256 != then.get("rules_sha256"):
        changed.append(
            f"{overlay or 'the default rules'}: not the rules of the verdict "
            f"({then['rules']} then, {rules.label} now)"
        )
        hashes.append("rules_sha256")
    return _Inputs(observations, rules, tuple(changed), tuple(hashes))


def _with_recorded_star(then: dict[str, Any], observations: Observations) -> Observations:
    """With the star as the verdict knew it, which may have been named after the table's path, or
    described in Python instead of a sidecar; rounded numbers do not replace the same unrounded."""
    from screener.core import Star
    from screener.report.verdict_json import STAR_KEYS, plain

    fields = {key: field for field, key in STAR_KEYS.items()}
    known = then.get("star_known") or {}
    recorded = Star(then["star"], **{fields[k]: v for k, v in known.items() if k in fields})
    if plain(recorded) == plain(observations.star):
        return observations
    return replace(observations, star=recorded)


def _changed_files(
    then: dict[str, Any], recorded: dict[str, dict[str, str] | None], paths: dict[str, Path | None]
) -> list[str]:
    """Which files are not as recorded, where they cannot even be read as a star any more."""
    from screener.core import InputFault
    from screener.ledger.inputs import input_hash

    lines = []
    for kind, path in paths.items():
        record = recorded[kind]
        if record is None or path is None:
            continue
        try:
            sha256 = input_hash(path)
        except InputFault:
            continue
        if sha256 != record["sha256"]:
            lines.append(_other(then, kind, str(path), record["sha256"], sha256))
    return lines


def _other(then: dict[str, Any], kind: str, path: str, before: str, now: str) -> str:
    return (
        f"{path}: the {kind} of {then['star']} was changed since "
        f"(SHA-256 {before[:12]}... then, {now[:12]}... now)"
    )


def _not_as_recorded(
    then: dict[str, Any], recorded: dict[str, dict[str, str] | None], observations: Observations
) -> tuple[list[str], list[str]]:
    record = observations.record
    present = {
        "table": (record.file, record.sha256, "input.sha256"),
        "sidecar": (record.sidecar, record.sidecar_sha256, "input.sidecar_sha256"),
        "photometry": (record.photometry, record.photometry_sha256, "input.photometry_sha256"),
    }
    changed, hashes = [], []
    for kind, (path, sha256, where) in present.items():
        before = recorded[kind]
        if before is None and sha256 is None:
            continue
        if before is None:
            changed.append(f"{path}: a {kind} of {then['star']} that was not there then")
        elif sha256 is None:
            changed.append(f"{before['file']}: the {kind} of {then['star']} is missing")
        elif sha256 != before["sha256"]:
            changed.append(_other(then, kind, str(path), before["sha256"], sha256))
        else:
            continue
        hashes.append(where)
    return changed, hashes


def _tell(then: dict[str, Any], inputs: _Inputs, match: Match, show_all: bool) -> None:
    from screener.ledger.comparison import RELATIVE
    from screener.ledger.export import printable

    star = printable(str(then["star"]))
    counted = f"{match.n_numbers} numbers and {match.n_words} words"
    if match.exact:
        moved = "though its inputs are not as recorded, " if inputs.changed else ""
        click.echo(f"{star}: {moved}the verdict is the same, {counted} compared, all equal.")
        return
    n = len(match.differences)
    if match.same:
        click.echo(
            f"{star}: the verdict is the same, {counted} compared; {n} differ by less than "
            f"{RELATIVE:g} of themselves, as another machine's arithmetic may."
        )
    else:
        click.echo(f"{star}: the verdict differs, {counted} compared, {n} are not the same:")
    shown = match.differences if show_all else match.differences[:_SHOWN]
    for difference in shown:
        click.echo(f"  {printable(str(difference))}")
    if len(shown) < n:
        click.echo(f"  and {n - len(shown)} more; --all lists them")


def _as_json(then: dict[str, Any], inputs: _Inputs, match: Match, version: str) -> dict[str, Any]:
    return {
        "star": then["star"],
        "same": match.same,
        "exact": match.exact,
        "changed_inputs": list(inputs.changed),
        "version_then": then["screener"],
        "version_now": version,
        "numbers": match.n_numbers,
        "words": match.n_words,
        "differences": [
            {"where": d.where, "before": d.before, "now": d.now} for d in match.differences
        ],
    }
