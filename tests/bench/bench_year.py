"""Processor time and memory of a whole pass over one reactor-year of wide Parquet: 525,600 rows x 24 tags.

`python -m tests.bench.bench_year [share of a year, default 1] [--write]`; each pass in its own process.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
from datetime import timedelta
from pathlib import Path

from demo_data.exports import UNIT_FILE, bench_year
from ingest.unitfile import load
from monitor.run import run_pass
from tests.bench.marked import show, table

CELLS = ("10min", "1min")
THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "ARROW_NUM_THREADS")  # more only burn processor time


def passed(unit_file: Path, export: Path, store: Path) -> dict[str, float]:
    """Processor seconds of one pass by step, peak memory [MB] and cells; called in a process of its own."""
    result = run_pass([load(unit_file)], store, [export], progress=lambda *_: None, settle=timedelta(0))
    kilobytes = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / (1024 if sys.platform == "darwin" else 1)
    return {**result.processor_s, "peak": kilobytes / 1024, "cells": result.units[0].cells}


def alone(folder: Path, cell: str, export: Path) -> dict[str, float]:
    """One pass with cells of some length, in a process of its own."""
    unit_file = folder / f"cells-{cell}.toml"
    stated = UNIT_FILE.read_text("utf-8").replace('cell = "10min"', f'cell = "{cell}"', 1)
    unit_file.write_text(stated, "utf-8")
    words = [sys.executable, "-m", "tests.bench.bench_year", "--pass", unit_file, export, folder / cell]
    done = subprocess.run(
        words, env=os.environ | dict.fromkeys(THREADS, "1"), capture_output=True, text=True, check=True
    )
    return json.loads(done.stdout)


def main() -> None:
    """Make the year, pass over it with each length of cells, and show what it took."""
    share = next((float(word) for word in sys.argv[1:] if not word.startswith("-")), 1.0)
    lines = []
    with tempfile.TemporaryDirectory() as name:
        export = bench_year(Path(name) / "year.parquet", days=round(365 * share))
        for cell in CELLS:
            took = alone(Path(name), cell, export)
            steps = [took[step] for step in ("exports", "months", "episodes")]
            whole = sum(steps)
            per_cell = f"{1e6 * whole / took['cells']:.0f}"
            seconds = [f"{step:.2f}" for step in (*steps, whole)]
            lines.append([cell, f"{took['cells']:,}", *seconds, per_cell, f"{took['peak']:.0f}"])
    head = [
        "cell",
        "cells",
        "exports [s]",
        "months [s]",
        "episodes [s]",
        "whole [s]",
        "us per cell",
        "peak [MB]",
    ]
    show("bench year", table(head, lines))


if __name__ == "__main__":
    if sys.argv[1:2] == ["--pass"]:
        sys.stdout.write(json.dumps(passed(*map(Path, sys.argv[2:]))))
    else:
        main()
