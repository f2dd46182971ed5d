"""A pass ended, or let down by the disk, at each of the steps by which it changes the disk.

Started as a process of its own with `disksteps` loaded before libc: it writes JSON.
"""

from __future__ import annotations

import ctypes
import json
import os
import shutil
import sqlite3
import sys
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

from ingest import documents
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.passes import Pass
from tests.store_made import FEBRUARY, JANUARY, cells, episodes_made, export, fill

MODES = {"count": 0, "kill": 1, "tear": 2, "full": 3, "fault": 4}
OURS = {"ledger.sqlite", "pass.lock"}  # what a store at rest holds besides its parts
Told = dict[str, Any]


def correct(pass_: Pass) -> None:
    """Change what `fill` wrote: a month anew, one added, one without rows any more, exports, episodes."""
    pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0, 4.0]))
    pass_.write("north", "cells", "2026-01", cells(JANUARY, []))
    pass_.splice("south", "figures-1h", cells(FEBRUARY, [6.0]))
    pass_.record_export(export(1, "a", account={"readings": 3, "accepted": 1}, made_by=pass_.number))
    pass_.record_export(export(2, "b", made_by=pass_.number))
    pass_.replace_episodes("north", episodes_made().iloc[:1])
    pass_.at_commit(partial(documents.put, unit="north", kind="band", key="yield", body={"low": 70.5}))


def replace_a_month(pass_: Pass) -> None:
    """Leave a part that the next pass has to sweep."""
    pass_.write("north", "figures-1h", "2026-02", cells(FEBRUARY, [5.5]))


PASSES: dict[str, tuple[Callable[[Pass], None], ...]] = {
    "first pass": (fill,),
    "next pass": (fill, replace_a_month, correct),
}


def run(folder: Path, body: Callable[[Pass], None]) -> None:
    """One pass."""
    with Store(folder).begin() as pass_:
        body(pass_)


def spawned(task: Callable[[], Told]) -> tuple[int, int]:
    """Begin something in a forked child: its number, and the pipe that it tells through."""
    ours, theirs = os.pipe()
    child = os.fork()
    if child == 0:
        try:
            os.write(theirs, json.dumps(task()).encode())
        finally:
            os._exit(0)
    os.close(theirs)
    return child, ours


def told_by(child: tuple[int, int]) -> Told:
    """Wait for a child and give what it told: nothing at all if it was killed or failed."""
    with os.fdopen(child[1], "rb") as pipe:
        text = pipe.read()
    os.waitpid(child[0], 0)
    return json.loads(text) if text else {}


def in_child(task: Callable[[], Told]) -> Told:
    """Do something in a forked child and give what it told."""
    return told_by(spawned(task))


def armed(folder: Path, body: Callable[[Pass], None], mode: str, at: int) -> Told:
    """Run a pass with one of its steps marked; a fault of the disk lasts while the store is looked at."""
    steps = ctypes.CDLL(os.environ["LD_PRELOAD"])
    steps.told.restype = ctypes.c_char_p
    plain = sqlite3.connect

    def traced(*args: Any, **kwargs: Any) -> sqlite3.Connection:
        ledger = plain(*args, **kwargs)
        ledger.set_trace_callback(lambda text: steps.note(f"sql {text.splitlines()[0]}".encode()))
        return ledger

    sqlite3.connect = traced
    steps.arm(MODES[mode], ctypes.c_long(at))
    told: Told = {"outcome": "done", "words": ""}
    try:
        run(folder, body)
    except StoreError as fault:
        told = {"outcome": "told", "words": str(fault)}
        told["seen"] = looked(folder)
    steps.disarm()
    sqlite3.connect = plain
    return {**told, "steps": steps.told().decode().splitlines()}


def looked(folder: Path) -> Told:
    """What a reader sees of a store: its hash, or why it cannot be read, and what `verify` finds."""
    try:
        store = Store(folder)
        return {"hash": store.content_hash(), "findings": [str(one) for one in store.verify()]}
    except StoreError as fault:
        return {"hash": None, "findings": [], "words": str(fault)}


def at_rest(folder: Path) -> Told:
    """What a reader sees, and the files that the ledger does not name."""
    named = {part.file for part in Store(folder).snapshot().parts.values()}
    there = {str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file()}
    return {**looked(folder), "left": sorted(there - named - OURS), "missing": sorted(named - there)}


def again(folder: Path, body: Callable[[Pass], None]) -> Told:
    """What a reader sees of a store as it was left, and after the same pass once more."""
    seen = looked(folder)
    run(folder, body)
    return {"seen": seen, "after": at_rest(folder)}


class Trials:
    """One kind of pass with its steps told one by one, and what came of each."""

    def __init__(self, work: Path, kind: str) -> None:
        """Make the store that each trial begins with, and the one that an undisturbed pass leaves."""
        *earlier, self.body = PASSES[kind]
        self.base, self.store = work / "base", work / "store"
        self.base.mkdir(parents=True)
        for body in earlier:
            in_child(lambda body=body: run(self.base, body) or {})
        before = in_child(lambda: looked(self.base))["hash"]
        self.steps = self.tried("count", 0)["steps"]
        self.after = in_child(lambda: at_rest(self.store))
        self.states = {before, self.after["hash"]}
        if not earlier:  # a ledger without rows is a store too
            run_idle = partial(run, self.base, lambda _: None)
            self.states.add(in_child(lambda: run_idle() or looked(self.base))["hash"])
            shutil.rmtree(self.base)
            self.base.mkdir()

    def tried(self, mode: str, at: int) -> Told:
        """Run the pass once on a fresh copy."""
        shutil.rmtree(self.store, ignore_errors=True)
        shutil.copytree(self.base, self.store)
        return in_child(lambda: armed(self.store, self.body, mode, at))

    def wrong(self, mode: str, at: int) -> list[str]:
        """What does not hold when the pass is let down at one step."""
        told = self.tried(mode, at)
        then = in_child(lambda: again(self.store, self.body))
        return [f"{mode} at {at} ({self.steps[at - 1]}): {one}" for one in self._faults(mode, told, then)]

    def _faults(self, mode: str, told: Told, then: Told) -> list[str]:
        found = []
        if mode in ("full", "fault") and not told:
            found.append("ended with something else than StoreError")
        for seen in (then["seen"], told.get("seen", then["seen"])):
            if seen["hash"] not in self.states or seen["findings"]:
                found.append(f"a reader sees {seen}")
        # What the pass replaced may stay until the next one; nothing else may.
        if then["after"] not in (self.after, {**self.after, "left": []}):
            found.append(f"run again it leaves {then['after']} for {self.after}")
        return found


def main(work: Path, kind: str, mode: str, which: str) -> None:
    """Let a kind of pass down at each step (or of a run of writes, at its first) and tell what is wrong."""
    trials = Trials(work, kind)
    before = ["", *trials.steps]
    tried = [
        at
        for at, step in enumerate(trials.steps, 1)
        if which == "each" or (which == "few" and (step != "write" or before[at - 1] != "write"))
    ]
    wrong = [one for at in tried for one in trials.wrong(mode, at)]
    told = {"steps": trials.steps, "after": trials.after, "tried": len(tried), "wrong": wrong}
    sys.stdout.write(json.dumps(told))


if __name__ == "__main__":
    main(Path(sys.argv[1]), sys.argv[2], sys.argv[3], sys.argv[4])
