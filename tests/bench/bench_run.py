"""What one more day and three corrected days cost on top of what is kept, in processor seconds and memory.

`python -m tests.bench.bench_run [years, default 10] [--write]`; ten-minute cells, exports of a row a minute,
each pass in a process of its own, one thread. One invented year is repeated as often as needed: what is timed
does not depend on the values.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

from tests.bench.marked import show, table
from tests.memory import peak_mb

STEP = "--step"
YEAR, DAY_US = 365, 86_400_000_000
THREADS = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "ARROW_NUM_THREADS")  # more only burn processor time
HEAD = (
    "kept",
    "one more day in process [s]",
    "the same by a new outlet run [s]",
    "three corrected days in process [s]",
    "days worked out",
    "peak [MB]",
)


def step(store: Path, export: Path) -> None:
    """One pass in this process."""
    from demo_data.exports import UNIT_FILE
    from ingest.unitfile import load
    from monitor.run import run_pass

    unit = load(UNIT_FILE)
    begun = time.process_time()
    result = run_pass([unit], store, [export], progress=lambda *_: None, settle=timedelta(0))
    passed = time.process_time() - begun
    told = {"passed": passed, "peak": peak_mb(), "days": result.units[0].days, "steps": result.processor_s}
    sys.stdout.write(json.dumps(told))


def piece(year: Path, export: Path, first: int, last: int, *, factor: float = 1.0) -> Path:
    """Write the days first <= day < last of the repeated year, all values times a factor."""
    import pyarrow as pa
    import pyarrow.compute as pc
    import pyarrow.parquet as pq

    whole, minutes, parts = pq.read_table(year), 1440, []
    while first < last:
        turn, day = divmod(first, YEAR)
        count = min(last - first, YEAR - day)
        part = whole.slice(day * minutes, count * minutes)
        moved = pc.add(part["time"].cast(pa.int64()), turn * YEAR * DAY_US).cast(pa.timestamp("us", "UTC"))
        values = [moved, *(pc.multiply(part[name], factor) for name in part.column_names[1:])]
        parts.append(pa.Table.from_arrays(values, part.column_names))
        first += count
    pq.write_table(pa.concat_tables(parts), export)
    os.utime(export, (0, 0))  # at rest since long ago
    return export


def alone(store: Path, export: Path) -> dict[str, float]:
    """One pass in a process of its own."""
    words = [sys.executable, "-m", "tests.bench.bench_run", STEP, store, export]
    done = subprocess.run(words, check=True, env=environment(), capture_output=True, text=True)
    sys.stderr.write(f"{export.name} {done.stdout}\n")
    return json.loads(done.stdout)


def by_command(store: Path, export: Path) -> float:
    """Processor seconds of a whole `outlet run`, its start included."""
    from demo_data.exports import UNIT_FILE

    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    words = [sys.executable, "-m", "monitor", "run", "--unit", UNIT_FILE, "--store", store, export]
    subprocess.run(words, check=True, env=environment(), capture_output=True)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def environment() -> dict[str, str]:
    """One thread."""
    return os.environ | dict.fromkeys(THREADS, "1")


def lines(folder: Path, lengths: tuple[int, ...]) -> Iterator[list[str]]:
    """Let a store grow to some numbers of days, and at each tell what comes on top costs."""
    from demo_data.exports import bench_year

    year, store, kept = bench_year(folder / "year.parquet", days=YEAR), folder / "store", 0
    for length in lengths:
        for last in [*range(kept + YEAR, length, YEAR), length]:
            alone(store, piece(year, folder / f"to-{last}.parquet", kept, last))
            kept = last
        day = alone(store, piece(year, folder / f"day-{kept}.parquet", kept, kept + 1))
        run_s = by_command(store, piece(year, folder / f"day-{kept + 1}.parquet", kept + 1, kept + 2))
        kept += 2
        # Their first reading ends the last interval of the day before, which is a fourth day.
        other = piece(year, folder / f"other-{kept}.parquet", kept - 14, kept - 11, factor=1.001)
        three = alone(store, other)
        peak = max(day["peak"], three["peak"])
        yield [
            f"{length} days",
            f"{day['passed']:.2f}",
            f"{run_s:.2f}",
            f"{three['passed']:.2f}",
            f"{three['days']:.0f}",
            f"{peak:.0f}",
        ]


def main(years: int) -> None:
    """Show what one more day costs on a month, on a year and on many years."""
    with tempfile.TemporaryDirectory() as name:
        show("bench run", table(HEAD, list(lines(Path(name), (30, YEAR, years * YEAR)))))


if __name__ == "__main__":
    if STEP in sys.argv:
        step(Path(sys.argv[2]), Path(sys.argv[3]))
    else:
        main(next((int(word) for word in sys.argv[1:] if word.isdigit()), 10))
