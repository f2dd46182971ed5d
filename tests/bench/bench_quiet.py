"""Does what is no loss of yield raise a yield alert? `python -m tests.bench.bench_quiet [unit-days]`.

Each plant is 60 days of the demo plant with another seed: 29 healthy days to learn from, then 30 with two
outages and their start-ups, two stuck analyzers, lost readings and gaps at drawn times, calibrations every
day and week, a clock change in two plants of three, and the export of the middle twenty days taken in last.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections import Counter
from dataclasses import replace
from datetime import date, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from demo_data import exports, scenario
from demo_data.scenario import Event, Scenario
from ingest.unit import Healthy, Unit
from ingest.unitfile import load
from monitor.run import run_pass
from monitor.store import episodes

DAYS, LEARNT, WATCHED = 60, (1, 30), 30
STARTS = (date(2026, 3, 1), date(2026, 9, 20), date(2026, 6, 1))  # clock changes on days 28 and 35, and none
HOURS = {"outage": 20.0, "analyzer stuck": 7.0, "historian gap": 0.2, "reading lost": 0.5}
TAGS = {"analyzer stuck": "AI-220", "reading lost": "TI-212.PV"}
AFTER_D = 31.0  # the first event that is put in


def happenings(rng: np.random.Generator) -> tuple[Event, ...]:
    """Each kind twice, in the fortnight before day 45 and in that after it, none on top of another."""
    begins = AFTER_D + np.concatenate([14 * k + 3.5 * rng.permutation(4) for k in range(2)])
    begins += rng.uniform(0, 2.0, 8)
    return tuple(
        Event(kind, float(begin), HOURS[kind], TAGS.get(kind))
        for kind, begin in zip((*HOURS, *HOURS), begins, strict=True)
    )


def unit_of(start: date) -> Unit:
    """The demo unit, its yield watched by limit and for drift, learnt from the days before all happenings."""
    first, last = (
        datetime.combine(start + timedelta(days=n), datetime.min.time(), ZoneInfo(scenario.TIME_ZONE))
        for n in LEARNT
    )
    stated = load(exports.UNIT_FILE)
    assert stated.healthy is not None
    healthy = Healthy(first, last, stated.healthy.operating_point)
    drift = next(one for one in stated.watches if one.test == "cusum")
    more = tuple(replace(drift, name=test, test=test) for test in ("ewma", "slope"))
    return replace(stated, healthy=healthy, events=(), watches=(*stated.watches, *more))


def alerts(store: Path, unit: Unit) -> list[str]:
    """Yield alerts that were announced, in words."""
    found = episodes(store, unit.key)
    told = found[(found["figure"] == "yield on feed") & ~found["suppressed"].astype(bool)]
    return [f"{row.watch} {pd.Timestamp(row.raised):%F %H:%M}" for row in told.itertuples()]


def plant(seed: int, counts: Counter[str]) -> list[str]:
    """What one plant raised, after each of two passes."""
    rng = np.random.default_rng(seed)
    start, put_in = STARTS[seed % 3], scenario.load()
    unit = unit_of(start)
    mine = Scenario(start, seed, happenings(rng), put_in.calibrations)
    with tempfile.TemporaryDirectory() as folder:
        made = exports.make(Path(folder), days=DAYS, seed=seed, put_in=mine)
        early, middle, late = made.exports
        told = []
        for batch in ((early, late), (middle,)):
            run_pass([unit], Path(folder) / "store", batch, progress=lambda *_: None, settle=timedelta(0))
            told += alerts(Path(folder) / "store", unit)
    counts.update(one.kind for one in mine.events)
    counts["clock change"] += seed % 3 < 2
    counts["late export"] += 1
    return [f"seed {seed}: {one}" for one in told]


def main() -> None:
    """Simulate until the days asked for are full, then print what was raised."""
    wanted = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    counts, told, seed = Counter[str](), [], 0
    while seed * WATCHED < wanted:
        told += plant(seed, counts)
        seed += 1
        sys.stderr.write(f"{seed * WATCHED} d, {len(told)} alerts, {time.process_time():.0f} s\n")
    sys.stdout.write(f"{seed * WATCHED} unit-days with {dict(counts)}: {len(told)} yield alerts\n")
    sys.stdout.writelines(f"{one}\n" for one in told)


if __name__ == "__main__":
    main()
