"""Recording a decision: checked against the verdict it is about, then appended."""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from typing import Any

from screener.core import InputFault, InputFaults
from screener.ledger.entry import DECISIONS, Entry
from screener.ledger.inputs import find_input, recorded_inputs
from screener.ledger.journal import Journal
from screener.ledger.place import Place, ReadVerdict
from screener.report.verdict_json import plain

__all__ = ["Request", "check", "departs_from_grade", "record", "signal_of", "snapshot"]

_MAX_TEXT = 20_000
_SIGNAL_KEYS = (
    "grade",
    "score",
    "period_d",
    "period_err_d",
    "k_m_s",
    "k_err_m_s",
    "eccentricity",
    "false_alarm_probability",
)
_VERDICT_KEYS = ("rules", "rules_sha256", "screener", "seed", "depth")


@dataclass(frozen=True)
class Request:
    """What a person decided; see ``Entry`` for the fields."""

    signal: str
    decision: str
    by: str
    note: str
    reason: str | None = None
    weighed_most: str | None = None


def departs_from_grade(decision: str, grade: str) -> bool:
    """Whether a decision needs a reason: announcing what is not graded planetary, or setting
    aside what is."""
    if decision == "announce":
        return grade != "planetary"
    return decision == "set-aside" and grade == "planetary"


def signal_of(verdict: ReadVerdict, signal: str) -> dict[str, Any]:
    """The signal of that id.

    Raises
    ------
    InputFault
        If the verdict has none such; the message lists those it has.
    """
    for item in verdict.content["signals"]:
        if str(item["id"]).casefold() == signal.casefold():
            return dict(item)
    known = ", ".join(
        f"{s['id']} ({s['period_d']:.5g} d, {s['grade']})"
        if isinstance(s["period_d"], float | int)
        else f"{s['id']} ({s['grade']})"
        for s in verdict.content["signals"]
    )
    raise InputFault(
        verdict.file,
        f"has no graded signal {signal!r}",
        f"It has {known}" if known else "It has none at all, so there is nothing to decide",
    )


def snapshot(verdict: ReadVerdict, signal: str) -> dict[str, Any]:
    """The deciding numbers of a signal, and what they were made with."""
    item = signal_of(verdict, signal)
    numbers = {key: item.get(key) for key in _SIGNAL_KEYS}
    made = {key: verdict.content.get(key) for key in _VERDICT_KEYS}
    result: dict[str, Any] = plain({**numbers, **made})
    return result


def check(place: Place, verdict: ReadVerdict, request: Request) -> tuple[str, ...]:
    """Whether the decision can be recorded.

    Returns
    -------
    tuple of str
        Warnings.

    Raises
    ------
    InputFaults
        Everything that stands against it, in one go.
    """
    faults: list[InputFault] = []

    def fault(file: str, problem: str, cure: str) -> None:
        faults.append(InputFault(file, problem, cure))

    item = signal_of(verdict, request.signal)
    if request.decision not in DECISIONS:
        fault("--decision", f"{request.decision!r} is none", f"There is {', '.join(DECISIONS)}")
    for name in ("by", "note", "reason"):
        text = getattr(request, name)
        if text is not None and not text.strip():
            fault(f"--{name}", "is empty", "Write it out; the record is read in years to come")
        elif text is not None and len(text) > _MAX_TEXT:
            fault(f"--{name}", f"has more than {_MAX_TEXT} characters", "Shorten it")
    tests = [str(f["test"]) for f in item["findings"]]
    if request.weighed_most is not None and request.weighed_most not in tests:
        close = difflib.get_close_matches(request.weighed_most, tests, n=1)
        problem = f"{item['id']} has no finding {request.weighed_most!r}"
        cure = f"Did you mean {close[0]!r}?" if close else f"There is {', '.join(tests)}"
        fault("--weighed-most", problem, cure)
    if departs_from_grade(request.decision, item["grade"]) and request.reason is None:
        problem = f"{request.decision} departs from the grade of {item['id']}, {item['grade']}"
        fault("--reason", problem, "Say why with --reason")
    warnings = []
    for kind, record in recorded_inputs(verdict.content).items():
        if record is None:
            continue
        folder = (place.folder / verdict.file).parent
        found = find_input(kind, record["file"], record["sha256"], folder)
        if found.path is None:
            warnings.append(f"{record['file']}: the {kind} cannot be checked, {found.problem}")
        elif not found.same:
            problem = f"the {kind} is not what {verdict.file} was made from any more"
            fault(str(found.path), problem, "Screen the star again and decide on what comes of it")
    if faults:
        raise InputFaults(faults)
    return tuple(warnings)


def record(place: Place, verdict: ReadVerdict, request: Request) -> tuple[Entry, tuple[str, ...]]:
    """Check a decision and append it to the ledger.

    Returns
    -------
    (Entry, tuple of str)
        The entry as it stands in the ledger, and warnings.

    Raises
    ------
    InputFault, InputFaults
        If the decision cannot stand as it is, or the ledger is damaged or cannot be had.
    OSError
        If the ledger cannot be written.
    """
    warnings = check(place, verdict, request)
    item = signal_of(verdict, request.signal)
    draft = plain(
        {
            "star": verdict.star,
            "star_name": verdict.content["star"],
            "signal": item["id"],
            "decision": request.decision,
            "by": request.by.strip(),
            "note": request.note.strip(),
            "reason": request.reason.strip() if request.reason is not None else None,
            "weighed_most": request.weighed_most,
            "verdict": {"file": verdict.file, "sha256": verdict.sha256},
            "inputs": recorded_inputs(verdict.content),
            "snapshot": snapshot(verdict, item["id"]),
        }
    )
    entry, notes = Journal(place.folder).append(draft)
    return entry, (*warnings, *notes)
