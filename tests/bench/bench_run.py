"""Processor seconds and peak memory of a whole pass, a reactor-year and one more day.

`python -m tests.bench.bench_run [years, default 1]`; each step in its own process, one thread.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from datetime import timedelta
from pathlib import Path

STEP = "--step"


def step(store: Path, export: Path) -> None:
    """One pass in this process."""
    from demo_data.exports import UNIT_FILE
    from ingest.unitfile import load
    from monitor.run import run_pass

    begun = time.process_time()
    result = run_pass([load(UNIT_FILE)], store, [export], progress=lambda *_: None, settle=timedelta(0))
    passed = time.process_time() - begun
    # Linux: ru_maxrss would count the parent's memory at the fork as well.
    status = Path("/proc/self/status").read_text(encoding="utf-8")
    peak = int(status.split("VmHWM:")[1].split()[0]) / 1024
    cells = result.units[0].cells
    sys.stdout.write(
        f"{export.name:14} {cells:7} cells {passed:6.2f} s in process,"
        f" {time.process_time():6.2f} s in all {peak:6.0f} MiB {result.processor_s}\n"
    )


def main(years: int) -> None:
    """Write the exports, take the years in, then one day more."""
    import pyarrow.parquet as pq

    from demo_data.exports import bench_year

    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        whole = pq.read_table(bench_year(folder / "all.parquet", days=365 * years + 1))
        day = 24 * 60
        exports = {
            "years.parquet": whole.slice(0, len(whole) - day),
            "day.parquet": whole.slice(len(whole) - day),
        }
        for export, table in exports.items():
            pq.write_table(table, folder / export)
            words = [sys.executable, "-m", "tests.bench.bench_run", STEP, folder / "store", folder / export]
            subprocess.run(words, check=True, env={**os.environ, "OPENBLAS_NUM_THREADS": "1"})


if __name__ == "__main__":
    if STEP in sys.argv:
        step(Path(sys.argv[2]), Path(sys.argv[3]))
    else:
        main(int(sys.argv[1]) if len(sys.argv) > 1 else 1)
