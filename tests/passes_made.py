"""Readings of a made-up unit that arrive in a store bit by bit, and what is worked out of them."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd

from ingest.archive import SITE, STAGE
from ingest.ledger import Store
from ingest.readings import Series, by_month, join, read_months, write_month
from ingest.unit import Unit
from monitor.catchup import Worked, catch_up
from monitor.days import plan_of
from monitor.watched import bring_up
from tests.units_made import DAY, HOUR, MINUTE, made_unit

FIRST = int(pd.Timestamp("2026-01-20T00:00Z").timestamp()) * 1_000_000
DAYS = 75  # January to April, so that two whole months lie inside
MONTH_END = int(pd.Timestamp("2026-03-01T00:00Z").timestamp()) * 1_000_000


def told_nobody(what: str, done: int, total: int) -> None:
    assert 0 <= done <= total, what


def unit_made(**changes: object) -> Unit:
    usual = {"cell": timedelta(hours=1), "windows": (timedelta(hours=8), timedelta(days=7))}
    return made_unit(**{**usual, **changes})


def readings_made(unit: Unit, days: int = DAYS) -> dict[str, Series]:
    """A signal for each tag over some days; down for a day in every ten, and over the end of February."""
    found = {}
    for number, one in enumerate(i for i in unit.instruments if i.tag):
        step = 5 * MINUTE if one.analyzer is None else one.cycle // timedelta(microseconds=1)
        time = np.arange(FIRST, FIRST + days * DAY, step, dtype=np.int64)
        noise = np.random.default_rng(number).standard_normal(len(time))
        value = 49 + 0.3 * noise
        if one.analyzer is None:
            down = (time // DAY % 10 == 7) | (np.abs(time - MONTH_END + 30 * MINUTE) < 3 * HOUR)
            value = np.where(down, 1.0, 100 + noise)
        count = len(time)
        found[one.tag or ""] = Series(
            time, value, np.full(count, 2, np.int8), np.ones(count, np.int32), np.arange(count)
        )
    return found


def cut(readings: dict[str, Series], first: int, last: int) -> dict[str, Series]:
    return {tag: s.take(slice(*np.searchsorted(s.time, [first, last]))) for tag, s in readings.items()}


def arrive(folder: Path, unit: Unit, readings: dict[str, Series]) -> Worked:
    """Put readings into the archive of a store and catch up, as a pass does after its intake."""
    with Store(folder).begin() as pass_:
        before = pass_.view()
        for month, new in by_month(readings).items():
            part = before.parts.get((SITE, STAGE, month))
            held = stored_readings(folder / part.file) if part else {}
            whole = {tag: join([held[tag], s] if tag in held else [s])[0] for tag, s in new.items()}
            whole = {**held, **whole}
            pass_.write_file(
                SITE, STAGE, month, rows=1, size=0, fill=lambda path, whole=whole: write_month(path, whole)
            )
        edges = [(int(s.time[0]), int(s.time[-1]) + 1) for s in readings.values()]
        span = min(first for first, _ in edges), max(last for _, last in edges)
        worked = catch_up(pass_, before, plan_of(unit), [span], told_nobody)
        bring_up(pass_, unit, plan_of(unit).figures, worked.since_us)
        return worked


def stored_readings(path: Path) -> dict[str, Series]:
    return read_months([path], ["FI-1.PV", "AI-2 n-butane.PV", "AI-2 isobutane.PV"], -(2**62), 2**62)


def derived(folder: Path) -> dict[tuple[str, str, str], str]:
    """What was worked out of the readings: the hash of every part."""
    parts = Store(folder).snapshot().parts
    return {key: part.sha256 for key, part in parts.items() if key[0] != SITE}


def otherwise(readings: dict[str, Series], first: int, last: int) -> dict[str, Series]:
    """The readings of a span, the flow half a percent higher than it was."""
    found = cut(readings, first, last)
    return {**found, "FI-1.PV": replace(found["FI-1.PV"], value=1.005 * found["FI-1.PV"].value)}
