"""Bend the ledger in every way we can think of; each must be seen, and honest trouble must not.

``python -m tests.integration.tamper`` flips bytes of entries, hashes, head, verdict and inputs,
takes entries out, moves and forges them; writes 200 decisions from 8 processes at once; kills
writers in the middle of a write. ``--quick`` does a part of it. Ends with code 1 if anything bent
was not seen, or seen where nothing was bent.
"""

from __future__ import annotations

import argparse
import itertools
import os
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path

from screener.ledger import Entry, Journal, examine, open_place, verify
from screener.ledger.chain import HEAD, LEDGER, TORN
from tests.ledger_sample import STARS, decide, make_run

__all__ = ["concurrent", "flips_of_chain", "flips_on_disk", "killed", "killed_at_random", "lines",
           "main", "small_run"]  # fmt: skip

ROOT = Path(__file__).resolve().parents[2]
_MASKS = (0x01, 0x02, 0x04, 0x08, 0x10, 0x20, 0x40, 0x80)


def small_run(folder: Path, n_entries: int = 5) -> Path:
    """A run with a few decisions."""
    run = make_run(folder)
    for number in range(n_entries):
        star, word = STARS[number % 2], ("announce", "observe")[number // 2 % 2]
        decide(run, star, "S1", word, f"decision {number} \u2013 seen")
    return run


def _flipped(content: bytes, position: int, mask: int) -> bytes:
    return content[:position] + bytes([content[position] ^ mask]) + content[position + 1 :]


# -- bytes ----------------------------------------------------------------------------------------


def flips_of_chain(run: Path, masks: tuple[int, ...], step: int = 1) -> tuple[int, list[str]]:
    """Flip every ``step``-th byte of ledger and head; (how many, those not seen or not named)."""
    ledger, head = (run / LEDGER).read_bytes(), (run / HEAD).read_bytes()
    if examine(ledger, head, None).faults:
        return 0, ["the chain is called damaged before anything was bent"]
    tried, missed = 0, []
    for name, content in ((LEDGER, ledger), (HEAD, head)):
        for position in range(0, len(content), step if name == LEDGER else 1):
            for mask in masks:
                bent = _flipped(content, position, mask)
                reading = examine(*((bent, head) if name == LEDGER else (ledger, bent)), None)
                tried += 1
                if not any(name in fault for fault in reading.faults):
                    missed.append(f"{name}, byte {position}, mask {mask:#x}: {reading.faults}")
    return tried, missed


def _classes(entry: Entry) -> Iterator[tuple[str, bytes]]:
    """A piece of an entry's line for each kind of byte in it."""
    yield "hash", entry.hash.encode()
    yield "hash of the entry before", entry.previous.encode()
    yield "hash of the verdict", entry.verdict["sha256"].encode()
    yield "hash of the table", entry.inputs["table"]["sha256"].encode()
    yield "decision", f'"decision":"{entry.decision}"'.encode()
    yield "who", entry.by.encode()
    yield "note", b"decision "
    yield "time", entry.time.encode()
    yield "number", f'"seq":{entry.seq}'.encode()
    yield "grade then", b'"grade":"planetary"'
    yield "name of a field", b'"snapshot"'
    yield "sign of JSON", b'","'


def flips_on_disk(run: Path, n_positions: int = 40) -> tuple[int, list[str]]:
    """Flip bytes in the files themselves, a class at a time; ``verify`` must name the file."""
    place = open_place(run)
    entry = Journal(run).read().entries[-1]
    line = entry.line()
    tail = (run / LEDGER).stat().st_size - len(line)
    cases: list[tuple[Path, int, str]] = [(run / LEDGER, tail + len(line) - 1, "the line feed")]
    for what, piece in _classes(entry):
        start = line.index(piece)
        cases += [(run / LEDGER, tail + p, what) for p in (start, start + len(piece) - 1)]
    files = [run / HEAD, *(run / star / "verdict.json" for star in STARS)]
    files += [Path(r["file"]) for r in entry.inputs.values() if r is not None]
    for path in files:
        size = path.stat().st_size
        spread = {round(k * (size - 1) / (n_positions - 1)) for k in range(n_positions)}
        cases += [(path, position, "content") for position in sorted(spread)]
    missed = [str(f) for f in verify(place).faults]
    for number, (path, position, what) in enumerate(cases):
        content = path.read_bytes()
        path.write_bytes(_flipped(content, position, _MASKS[number % 8]))
        faults = verify(place).faults
        path.write_bytes(content)
        if not any(fault.file == str(path) for fault in faults):
            missed.append(f"{path.name}, byte {position} ({what}): {[str(f) for f in faults]}")
    missed += [str(f) for f in verify(place).faults]
    return len(cases), missed


def lines(run: Path) -> tuple[int, list[str]]:
    """Take entries out, move, double, cut and forge them."""
    ledger, head = (run / LEDGER).read_bytes(), (run / HEAD).read_bytes()
    rows = ledger.splitlines(keepends=True)
    n = len(rows)
    forged = rows[1].replace(b'"announce"', b'"observe"').replace(b"seen", b"SEEN")
    bent: dict[str, tuple[bytes | None, bytes | None]] = {
        "an empty line": (b"".join([*rows[:2], b"\n", *rows[2:]]), head),
        "a foreign line": (b"".join([*rows, b"{}\n"]), head),
        "a byte put in": (ledger[:100] + b" " + ledger[100:], head),
        "white space at the end of a line": (ledger.replace(b"}\n", b"} \n", 1), head),
        "a forged decision": (b"".join([rows[0], forged, *rows[2:]]), head),
        "no ledger": (None, head),
        "an empty ledger": (b"", head),
        "no head": (ledger, None),
        "an empty head": (ledger, b""),
    }
    for k in range(n):
        bent[f"entry {k + 1} taken out"] = (b"".join(rows[:k] + rows[k + 1 :]), head)
        bent[f"entry {k + 1} doubled"] = (b"".join([*rows[: k + 1], *rows[k:]]), head)
        bent[f"cut after {k} entries"] = (b"".join(rows[:k]), head)
        bent[f"cut within entry {k + 1}"] = (b"".join(rows[:k]) + rows[k][:200], head)
        bent[f"cut before the line feed of entry {k + 1}"] = (
            b"".join(rows[: k + 1])[:-1],
            head,
        )
        if k:
            swapped = [*rows[: k - 1], rows[k], rows[k - 1], *rows[k + 1 :]]
            bent[f"entries {k} and {k + 1} exchanged"] = (b"".join(swapped), head)
    missed = [
        f"{what}: not seen" for what, files in bent.items() if not examine(*files, None).faults
    ]
    return len(bent), missed


# -- many at once ---------------------------------------------------------------------------------


def _child(*arguments: str) -> subprocess.Popen[str]:
    environment = {**os.environ, "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    return subprocess.Popen(
        [sys.executable, "-m", "tests.integration.tamper", "--child", *arguments],
        cwd=ROOT, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip


def concurrent(folder: Path, n_processes: int = 8, n_each: int = 25) -> tuple[int, list[str]]:
    """Decisions from many processes at once: all there, in an intact chain."""
    run = make_run(folder)
    children = [_child("write", str(run), str(k), str(n_each)) for k in range(n_processes)]
    wrong, told = [], set()
    for child in children:
        out, err = child.communicate(timeout=600)
        told.update(out.split())
        if child.returncode:
            wrong.append(f"a writer ended with {child.returncode}: {err[-500:]}")
    result = verify(open_place(run))
    wrong += [str(fault) for fault in result.faults] + list(result.notes)
    entries = result.reading.entries
    wanted = {f"writer {k} number {i}" for k in range(n_processes) for i in range(n_each)}
    if {e.note for e in entries} != wanted or len(entries) != len(wanted):
        wrong.append(f"{len(entries)} entries instead of {len(wanted)}")
    if {e.hash for e in entries} != told:
        wrong.append("the hashes that the writers were told are not those in the ledger")
    writers = [e.note.split()[1] for e in entries]
    changes = sum(a != b for a, b in itertools.pairwise(writers))
    if changes < n_processes:
        wrong.append("the writers took turns: nothing was tested")
    return len(entries), wrong


# -- kills ----------------------------------------------------------------------------------------


def _die() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def _dying(stage: str) -> None:
    """Make this process kill itself at a certain point of the next write."""
    import screener.ledger.journal as journal

    def cut_write(_self: Journal, descriptor: int, line: bytes, _size: int) -> None:
        shares = {"nothing": 0, "a byte": 1, "half": len(line) // 2, "all but the line feed":
                  len(line) - 1, "all": len(line)}  # fmt: skip
        os.write(descriptor, line[: shares[stage]])
        _die()

    def before_rename(_path: Path, content: bytes) -> None:
        (_path.parent / f".{_path.stem}.0.tmp").write_bytes(content[:20])
        _die()

    if stage == "head":
        journal.write_bytes = before_rename  # type: ignore[assignment]
    elif stage == "side file":
        journal.os.ftruncate = lambda *_: _die()  # type: ignore[assignment]
    else:
        Journal._write = cut_write  # type: ignore[method-assign]


def killed(folder: Path) -> tuple[int, list[str]]:
    """Kill a writer at each step of a write; the chain stays whole and nothing told is lost."""
    run = small_run(folder, 3)
    wrong: list[str] = []
    stages = ("nothing", "a byte", "half", "side file", "nothing", "all but the line feed", "all",
              "head", "head")  # fmt: skip
    for stage in stages:
        before = Journal(run).read()
        child = _child("die", str(run), stage)
        _, err = child.communicate(timeout=120)
        if child.returncode != -signal.SIGKILL:
            wrong.append(f"{stage}: the writer was not killed: {child.returncode} {err[-500:]}")
        after = Journal(run).read()
        wrong += [f"killed at {stage!r}: {fault}" for fault in after.faults]
        if after.entries[: len(before.entries)] != before.entries:
            wrong.append(f"killed at {stage!r}: entries are gone")
        if verify(open_place(run)).faults:
            wrong.append(f"killed at {stage!r}: verify finds a fault")
    torn = Journal(run).read().torn
    entry, _ = decide(run, note="after all that")
    result = verify(open_place(run))
    wrong += [str(f) for f in result.faults] + list(result.notes)
    side = (run / TORN).read_bytes()
    answered = {h for e in result.reading.entries for h in e.set_aside}
    if len(side.splitlines()) != 3 or len(answered) != 3:
        wrong.append(f"{len(side.splitlines())} cut-off writes kept, {len(answered)} answered for")
    if result.reading.entries[-1] != entry or torn:
        wrong.append("the last entry is not the last decision")
    ledger, head = (run / LEDGER).read_bytes(), (run / HEAD).read_bytes()
    for position in range(0, len(side), 7):
        if not examine(ledger, head, _flipped(side, position, 0x01)).faults:
            wrong.append(f"{TORN}, byte {position}: not seen")
    if not examine(ledger, head, None).faults:
        wrong.append(f"{TORN} gone: not seen")
    return len(stages), wrong


def killed_at_random(folder: Path, n_kills: int, seed: int) -> tuple[int, list[str]]:
    """Kill writers at random moments: what they were told is written stays written."""
    run = make_run(folder)
    rng = random.Random(seed)
    wrong: list[str] = []
    told: set[str] = set()
    for _ in range(n_kills):
        pair = [_child("write", str(run), str(k), "100000") for k in range(2)]
        for child in pair:
            assert child.stdout is not None
            told.add(child.stdout.readline().strip())  # it is at work now
        time.sleep(rng.uniform(0.0, 0.2))
        for child in pair:
            child.kill()
        for child in pair:
            out, _ = child.communicate(timeout=120)
            told.update(line for line in out.split("\n")[:-1] if line)
        reading = Journal(run).read()
        wrong += list(reading.faults)
        if not told <= {e.hash for e in reading.entries}:
            wrong.append("an entry that a writer was told of is gone")
    decide(run, note="the last word")
    wrong += [str(f) for f in verify(open_place(run)).faults]
    return len(told), wrong


# -- the whole ------------------------------------------------------------------------------------


def _child_main(kind: str, run: Path, *rest: str) -> None:
    if kind == "die":
        _dying(rest[0])
        decide(run, note="never told")
        return
    writer, n_each = rest
    for number in range(int(n_each)):
        star = STARS[number % 2]
        entry, _ = decide(run, star, "S1", "announce", f"writer {writer} number {number}")
        print(entry.hash, flush=True)


def main(arguments: list[str] | None = None) -> int:
    """Run everything and print what came of it."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--kills", type=int, default=10, help="kills at random moments")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--child", nargs="+", help=argparse.SUPPRESS)
    options = parser.parse_args(arguments)
    if options.child:
        _child_main(options.child[0], Path(options.child[1]), *options.child[2:])
        return 0
    base = Path(tempfile.mkdtemp(prefix="tamper-"))
    masks = (0x01,) if options.quick else _MASKS
    kills = 2 if options.quick else options.kills
    parts: dict[str, Callable[[], tuple[int, list[str]]]] = {
        "flipped bytes in ledger and head": lambda: flips_of_chain(small_run(base / "a"), masks),
        "flipped bytes on disk": lambda: flips_on_disk(small_run(base / "b")),
        "entries moved, cut, forged": lambda: lines(small_run(base / "c")),
        "decisions from 8 processes": lambda: concurrent(base / "d"),
        "kills within a write": lambda: killed(base / "e"),
        "entries under random kills": lambda: killed_at_random(base / "f", kills, options.seed),
    }
    failed = False
    for name, part in parts.items():
        start = time.monotonic()
        count, wrong = part()
        failed |= bool(wrong)
        print(f"{name}: {count}, {len(wrong)} wrong ({time.monotonic() - start:.1f} s)", flush=True)
        for line in wrong[:10]:
            print(f"  {line}")
    shutil.rmtree(base)
    return int(failed)


if __name__ == "__main__":
    sys.exit(main())
