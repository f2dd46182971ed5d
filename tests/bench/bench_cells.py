"""Processor seconds from readings to cells for a reactor-year: `python -m tests.bench.bench_cells`."""

from __future__ import annotations

import sys
import time
from datetime import timedelta

import numpy as np

from ingest.cells import Cells, make_cells
from ingest.readings import Readings, Series
from ingest.unit import Unit
from tests.units_made import DAY, MIDNIGHT, MINUTE, made_channel, made_instrument, made_unit

METERS, CHANNELS = 12, 12  # 24 tags
MINUTES = 525_600  # one year
BAD_SHARE = 0.001  # of readings, spread at random: a year of real data is never clean


def year(unit: Unit) -> Readings:
    """One-minute readings for a year, analyzer results repeated for their cycle, a few of them bad."""
    random = np.random.default_rng(1)
    stamps = MIDNIGHT + np.arange(MINUTES) * MINUTE
    ones = np.ones(MINUTES, dtype=np.int32)
    found = {}
    for instrument in unit.instruments:
        repeated = instrument.cycle // timedelta(minutes=1)
        value = np.repeat(random.normal(80, 1, MINUTES // repeated + 1), repeated)[:MINUTES]
        quality = np.where(random.random(MINUTES) < BAD_SHARE, 0, 2).astype(np.int8)
        found[str(instrument.tag)] = Series(stamps, value, quality, ones, np.arange(MINUTES))
    return found


def timed(unit: Unit, readings: Readings, step_us: int) -> tuple[float, Cells]:
    """Processor seconds to make the year's cells in chunks of step_us, and the last chunk."""
    begun = time.process_time()
    for first in range(MIDNIGHT, MIDNIGHT + MINUTES * MINUTE, step_us):
        last = make_cells(unit, readings, first, min(first + step_us, MIDNIGHT + MINUTES * MINUTE))
    return time.process_time() - begun, last


def main() -> None:
    """Print one line per cell length and chunk."""
    instruments = [made_instrument(f"FI-{n + 1}") for n in range(METERS)]
    instruments += [made_channel(f"AI-{n + 1}", "isobutane") for n in range(CHANNELS)]
    unit = made_unit(*instruments)
    readings = year(unit)
    for minutes in (10, 1):
        for name, step_us in (("year", MINUTES * MINUTE), ("30 days", 30 * DAY), ("day", DAY)):
            changed = made_unit(*instruments, cell=timedelta(minutes=minutes))
            spent, cells = timed(changed, readings, step_us)
            sys.stdout.write(
                f"{minutes:2d}-minute cells, chunk {name:>7}: {spent:5.2f} s for "
                f"{len(instruments)} tags x {MINUTES} rows (valid share {cells.share.mean():.4f})\n"
            )


if __name__ == "__main__":
    main()
