"""Processor seconds and memory to take a reactor-year in: `python -m tests.bench.bench_store [years]`."""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from datetime import timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.intake import take_in
from ingest.ledger import Store
from ingest.unit import ExportRules
from tests.units_made import DAY, MIDNIGHT, MINUTE, made_instrument, made_unit

TAGS = [f"FI-{n + 1}.PV" for n in range(24)]
UNIT = made_unit(
    *(made_instrument(tag.removesuffix(".PV")) for tag in TAGS), exports=ExportRules("UTC", (), None)
)
ROWS = 525_600  # one year of minutes


def wide(path: Path, first_us: int, rows: int) -> Path:
    """A wide Parquet export of 24 tags, one row a minute, each reading as noisy as an instrument's."""
    random = np.random.default_rng(first_us // DAY)
    start = pa.array(first_us + MINUTE * np.arange(rows)).cast(pa.timestamp("us", "UTC"))
    columns = {tag: random.normal(80, 1, rows).round(3) for tag in TAGS}
    pq.write_table(pa.table({"time": start, **columns}), path)
    return path


def timed(store: Store, path: Path) -> tuple[float, float]:
    """Processor and clock seconds of one pass over one export."""
    processor, clock = time.process_time(), time.perf_counter()
    with store.begin() as pass_:
        take_in(pass_, [UNIT], [path], settle=timedelta(0))
    return time.process_time() - processor, time.perf_counter() - clock


def peak_mb() -> float:
    """The most memory this process ever held."""
    return (
        resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / (1 if sys.platform == "darwin" else 1024) / 1.024
    )


def main() -> None:
    """Print one line per year and one for a day on top of them."""
    years = int(sys.argv[1]) if len(sys.argv) > 1 else 1
    # Exports are made in another process: their memory is not the program's.
    with tempfile.TemporaryDirectory() as name, ProcessPoolExecutor(1) as maker:
        store, first = Store(Path(name) / "store"), MIDNIGHT
        for year in range(years):
            path = maker.submit(wide, Path(name) / f"{year}.parquet", first, ROWS).result()
            seconds, clock = timed(store, path)
            say(f"year {year + 1}: {seconds:.2f} s processor, {clock:.2f} s clock, peak {peak_mb():.0f} MB")
            path.unlink()
            first += ROWS * MINUTE
        before = store.snapshot().parts
        seconds, clock = timed(store, maker.submit(wide, Path(name) / "day.parquet", first, 1440).result())
        after = store.snapshot().parts
        written = sum(after[key] != before.get(key) for key in after)
        say(f"one more day: {seconds:.2f} s processor, {clock:.2f} s clock, {written} of {len(after)} parts")
        size, readings = (sum(getattr(part, of) for part in after.values()) for of in ("size", "rows"))
        say(f"store: {size / 1e6:.0f} MB, {size / readings:.2f} bytes a reading")


def say(line: str) -> None:
    """Write a line at once."""
    sys.stdout.write(f"{line}\n")
    sys.stdout.flush()


if __name__ == "__main__":
    main()
