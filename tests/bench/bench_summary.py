"""What a month costs, and do its intervals hold? `python -m tests.bench.bench_summary [--write] [SEEDS]`.

One unit and forty (copies of the demo plant's, whose store is made first): `outlet month` as people run it,
all forms. Then months that cantera made, read with errors as stated: how often the true value lies within.
"""

from __future__ import annotations

import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from datetime import timedelta
from pathlib import Path

import numpy as np

from demo_data import exports
from ingest.ledger import Store
from ingest.unitfile import load
from monitor.run import run_pass
from tests.bench.marked import show, table
from tests.source import ROOT
from tests.test_summary_cantera import held

UNITS = 40
STAGES = ("cells", "states")


def store_of(folder: Path) -> list[Path]:
    """A store with the demo plant and copies of it under other names; give their unit files."""
    made = exports.make(folder, days=60)
    run_pass(
        [load(exports.UNIT_FILE)],
        folder / "store",
        made.exports,
        progress=lambda *_: None,
        settle=timedelta(0),
    )
    store = Store(folder / "store")
    view = store.snapshot()
    files = [
        Path(shutil.copy(exports.UNIT_FILE, folder / f"unit{number:02d}.toml")) for number in range(UNITS)
    ]
    with store.begin() as pass_:
        for file in files:
            for stage in STAGES:
                for month in view.months("demo", stage):
                    whole = view.read("demo", stage)
                    here = [
                        at
                        for at, one in enumerate(whole.column("start").to_pylist())
                        if f"{one:%Y-%m}" == month
                    ]
                    pass_.write(file.stem, stage, month, whole.slice(here[0], len(here)))
    return files


def timed(words: list[str]) -> tuple[float, float]:
    """Wall and processor time of one command [s]."""
    before, begun = resource.getrusage(resource.RUSAGE_CHILDREN), time.monotonic()
    subprocess.run([sys.executable, "-m", "monitor", *words], cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
    wall, after = time.monotonic() - begun, resource.getrusage(resource.RUSAGE_CHILDREN)
    return wall, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def costs(folder: Path) -> list[list[str]]:
    """One unit, then all of them."""
    files = store_of(folder)
    rows = []
    for chosen in (files[:1], files):
        units = [word for file in chosen for word in ("--unit", str(file))]
        words = ["month", "2026-04", *units, "--store", str(folder / "store"), "--out", str(folder / "out")]
        wall, processor = timed([*words, "--by", "bench", "--draft"])
        busy = f"{os.getloadavg()[0]:.1f}"
        rows.append(
            [f"{len(chosen)}", f"{processor:.1f}", f"{processor / len(chosen):.2f}", f"{wall:.1f}", busy]
        )
    return rows


def main() -> None:
    """Print both tables."""
    seeds = int(next((word for word in sys.argv[1:] if word.isdigit()), "100"))
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    with tempfile.TemporaryDirectory() as name:
        head = ["units", "processor [s]", "processor per unit [s]", "wall [s]", "load of the machine"]
        show("bench summary", table(head, costs(Path(name))))
        found = held(Path(name), range(seeds))
    share = 100 * np.mean([one for each in found.values() for one in each])
    head = ["months made by cantera", "figures", "true value within the half-width [%]"]
    show("bench summary intervals", table(head, [[str(seeds), str(2 * len(found)), f"{share:.1f}"]]))


if __name__ == "__main__":
    main()
