"""How long a year of windows and ten years of one watch take: `python -m tests.bench.bench_windows`.

The amounts are those of the demo plant in number (p amounts, s sources, two hold classes), the values are
random; what is timed does not depend on them.
"""

from __future__ import annotations

import resource
import sys
import time
from datetime import timedelta

import numpy as np

from ingest.unit import Watch
from monitor.amounts import Amounts
from monitor.drift import limit_episodes
from monitor.figures import figures_of
from monitor.windows import calendar_days, window_figures
from tests.amounts_made import reaction
from tests.units_made import MIDNIGHT

UNWANTED = ("C4H6O2", "C2H4O2", "C3H6O", "CO", "CO2")
WINDOWS = (timedelta(hours=1), timedelta(hours=8), timedelta(hours=24), timedelta(days=7))
UNIT = reaction("C4H8", "C4H6O", UNWANTED, ("O2", "H2O"), windows=WINDOWS)
CELLS_PER_YEAR = 365 * 144
SOURCES = 18


def names() -> tuple[str, ...]:
    """The amounts of the unit with three raw closures."""
    made = [f"made {name}" for name in ("C4H6O", *UNWANTED, "O2", "H2O", "all unwanted")]
    raw = [f"raw {way} {element}" for element in "CNO" for way in ("in", "out")]
    return ("fed C4H8", "consumed C4H8", *made, *raw, "raw made C", "raw consumed C")


def year() -> Amounts:
    """A year of ten-minute cells, a twentieth without a solution, a week down."""
    rng, axis = np.random.default_rng(1), names()
    p = len(axis)
    kmol = rng.uniform(1, 2, (CELLS_PER_YEAR, p))
    kmol[rng.random(CELLS_PER_YEAR) < 0.05] = np.nan
    kmol[rng.random(CELLS_PER_YEAR) < 0.05, 2] = np.nan
    root = 0.01 * rng.standard_normal((2, p, p))
    operating = np.zeros(CELLS_PER_YEAR, dtype=np.int8)
    operating[9000:10000] = 2
    operating[10000:10024] = 1
    return Amounts(
        names=axis,
        start=MIDNIGHT + np.arange(CELLS_PER_YEAR) * 600_000_000,
        kmol=kmol,
        random=np.broadcast_to(root @ root.transpose(0, 2, 1), (CELLS_PER_YEAR, 2, p, p)).copy(),
        hold=(timedelta(minutes=1), timedelta(minutes=6)),
        systematic=0.01 * rng.standard_normal((p, SOURCES, CELLS_PER_YEAR)).transpose(2, 0, 1),
        sources=tuple(f"source {s}" for s in range(SOURCES)),
        operating=operating,
    )


def clocked(what: str, call, *args, **settings) -> None:
    """Run once and tell processor and wall time and the greatest memory so far."""
    wall, cpu = time.perf_counter(), time.process_time()
    call(*args, **settings)
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    peak_mb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    sys.stdout.write(f"{what:45s} {wall:7.3f} s wall {cpu:7.3f} s cpu {peak_mb:7.0f} MB peak\n")


def main() -> None:
    """Time windows over a year, days of a year, a watch over ten years."""
    amounts = year()
    figures = figures_of(UNIT, amounts.names)
    clocked(f"(amounts, {len(figures)} figures)", lambda: None)
    clocked("year, four windows, two modes", window_figures, UNIT, amounts, figures)
    since_us = int(amounts.start[-144])
    clocked("last day of it", window_figures, UNIT, amounts, figures, since_us=since_us)
    clocked("days of the year", calendar_days, UNIT, amounts, figures)
    watch = Watch(
        "w", "f", WINDOWS[1], 76.0, 79.0, "low", 0.3, timedelta(hours=1), timedelta(hours=2), steady=True
    )
    value = 77 + np.repeat(np.random.default_rng(1).standard_normal(CELLS_PER_YEAR // 6), 60)
    end_us = MIDNIGHT + np.arange(len(value)) * 600_000_000
    rest = (value, np.full(len(value), 0.2), np.zeros(len(value), dtype=np.int8))
    clocked("ten years of one watch, both sides", limit_episodes, watch, end_us, *rest)


if __name__ == "__main__":
    main()
