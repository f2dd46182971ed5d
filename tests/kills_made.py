"""A pass over the invented plant, killed at moments drawn by chance while another process reads the store.

Started as a process of its own, with little loaded but the program: it writes JSON.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import signal
import sys
import time
from datetime import timedelta
from pathlib import Path
from random import Random

import pyarrow as pa

from demo_data.exports import UNIT_FILE, make
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.snapshot import Snapshot
from ingest.unitfile import load
from monitor.run import run_pass
from tests.steps_made import Told, again, at_rest, in_child, looked, spawned, told_by

UNIT = load(UNIT_FILE)
TWICE = 2  # an undisturbed pass is timed so often


def exports_made(folder: Path, days: int) -> tuple[list[Path], list[Path]]:
    """The plant's first two exports; and all three, with one that corrects the end of the first."""
    first, second, third = make(folder / "exports", days=days).exports
    header, *lines = first.read_text(encoding="utf-8").splitlines(keepends=True)
    late = folder / "exports" / "larkmoor-4-corrected.csv"
    # Each row of the end gets the readings of another: the same times, other values.
    ends = [line.split(",", 1)[0] for line in lines[-200:]]
    rests = [line.split(",", 1)[1] for line in lines[-400:-200]]
    rows = [f"{end},{rest}" for end, rest in zip(ends, rests, strict=True)]
    late.write_text("".join([header, *rows]), encoding="utf-8")
    return [first, second], [first, second, third, late]


def passed(folder: Path, exports: list[Path]) -> Told:
    """One pass from exports to episodes."""
    result = run_pass([UNIT], folder, exports, progress=lambda *_: None, settle=timedelta(0))
    assert not result.set_aside
    return {"seconds": time.process_time()}


def kill_at(child: int, seconds: float) -> None:
    """Kill a child when it has had so much processor time [s]; other work does not shift that moment."""
    clock = (~child << 3) | 2  # as clock_getcpuclockid(3) of Linux makes it
    while time.clock_gettime(clock) < seconds:
        if os.waitid(os.P_PID, child, os.WEXITED | os.WNOHANG | os.WNOWAIT):
            return  # it ended before
        time.sleep(0.001)
    os.kill(child, signal.SIGKILL)


def fingerprint(view: Snapshot) -> tuple[int, str]:
    """The generation of a view and a hash of every row that is read through it."""
    told = hashlib.sha256()
    for unit, stage in sorted({(unit, stage) for unit, stage, _ in view.parts}):
        table = view.read(unit, stage).combine_chunks()
        sink = pa.BufferOutputStream()
        with pa.ipc.new_stream(sink, table.schema) as stream:
            stream.write_table(table)
        told.update(sink.getvalue())
    told.update(view.episodes(UNIT.key).to_csv().encode())
    return view.generation, told.hexdigest()


def reader(folder: Path, stop: Path, known: dict[int, str]) -> Told:
    """Read the whole store again and again: what is read must be what one pass left, and never go back."""
    wrong, looks, last = [], 0, 0
    while not stop.exists():
        try:
            generation, told = Store(folder).look(fingerprint)
        except StoreError as fault:
            wrong.append(str(fault))
            continue
        if told != known[min(generation, 2)] or generation < last:
            wrong.append(f"generation {generation} after {last} reads as {told[:8]}")
        looks, last = looks + 1, generation
    return {"wrong": wrong, "looks": looks}


class Kills:
    """The store before and after one pass, and trials that end this pass at some moment."""

    def __init__(self, work: Path, days: int) -> None:
        """Make the exports, the store that each trial begins with, and the one it must end with."""
        self.work, self.base, self.store = work, work / "base", work / "store"
        self.early, self.all = exports_made(work, days)
        in_child(lambda: passed(self.base, self.early))
        self.known = {1: self._read(self.base)}
        self.seconds = max(self._undisturbed() for _ in range(TWICE))
        self.known[2] = self._read(self.store)
        self.after = in_child(lambda: at_rest(self.store))
        self.states = {in_child(lambda: looked(self.base))["hash"], self.after["hash"]}

    def _read(self, folder: Path) -> str:
        told: str = in_child(lambda: {"told": Store(folder).look(fingerprint)[1]})["told"]
        return told

    def _fresh(self) -> None:
        shutil.rmtree(self.store, ignore_errors=True)
        shutil.copytree(self.base, self.store)

    def _undisturbed(self) -> float:
        """How much processor time the pass takes [s]."""
        self._fresh()
        took: float = in_child(lambda: passed(self.store, self.all))["seconds"]
        in_child(lambda: again(self.store, lambda _: None))
        return took

    def trial(self, moment: float) -> Told:
        """Kill the pass at some moment, run it again; what happened and what was wrong."""
        self._fresh()
        stop = self.work / "stop"
        reading = spawned(lambda: reader(self.store, stop, self.known))
        child = spawned(lambda: passed(self.store, self.all))
        kill_at(child[0], moment)
        ended = bool(told_by(child))
        seen = in_child(lambda: looked(self.store))
        assert in_child(lambda: passed(self.store, self.all))
        stop.touch()
        read = told_by(reading)
        stop.unlink()
        then = in_child(lambda: again(self.store, lambda _: None))["after"]
        wrong = [*read["wrong"], *([] if then == self.after else [f"run again it leaves {then}"])]
        if seen["hash"] not in self.states or seen["findings"]:
            wrong.append(f"left as {seen}")
        committed = seen["hash"] == self.after["hash"]
        return {"ended": ended, "committed": committed, "looks": read["looks"], "wrong": wrong}


def main(work: Path, days: int, kills: int) -> None:
    """Kill a pass at moments spread over all of it, one drawn by chance in each of as many equal spans."""
    trials = Kills(work, days)
    drawn = Random(1)  # noqa: S311 - moments, no secrets
    span = 1.05 * trials.seconds  # so that some fall into the commit, and behind it
    moments = [span * (n + drawn.random()) / kills for n in range(kills)]
    told = [trials.trial(moment) for moment in moments]
    sys.stdout.write(json.dumps({"seconds": trials.seconds, "trials": told}))


if __name__ == "__main__":
    main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
