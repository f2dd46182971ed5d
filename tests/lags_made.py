"""Simulated days of the demo plant with a known dead time, and days in which nothing tells the lag."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace
from datetime import timedelta
from functools import lru_cache

import numpy as np

from demo_data import meters, plant, scenario
from demo_data.exports import UNIT_FILE
from ingest.lag import Lag, lags
from ingest.readings import Readings, Series
from ingest.unit import Unit
from ingest.unitfile import load

HOUR_US = 60 * scenario.MINUTE_US
UNIT = load(UNIT_FILE)
DECLARED_MIN = 4  # what config/demo.toml says
FEEDS = ("FI-201.PV", "FI-202.PV", "FI-203.PV")
CHANNELS = tuple(one.tag for one in UNIT.instruments if one.analyzer and one.tag)
# Another plant's analyses, moved by this, meet feeds they know nothing of; its load changes at other hours.
APART_US = 253 * scenario.MINUTE_US


def with_dead_time(minutes: float, unit: Unit = UNIT) -> Unit:
    """The demo unit whose analyzer states another dead time."""
    changed = [
        replace(one, dead_time=timedelta(minutes=minutes)) if one.analyzer else one
        for one in unit.instruments
    ]
    return replace(unit, instruments=tuple(changed))


@lru_cache(maxsize=16)
def days(seed: int, dead_min: float, count: int) -> tuple[tuple[int, int], Readings]:
    """First and last instant, and readings, of days without faults; the analyzer is late by `dead_min`."""
    truth = plant.simulate(count, seed)
    put_in = scenario.load()
    measured = meters.measure(truth, with_dead_time(dead_min), seed + 1, calibrations=put_in.calibrations)
    return (int(truth.time[0]), int(truth.time[-1])), meters.as_readings(measured.results)


def unrelated(seed: int, dead_min: float, count: int) -> tuple[tuple[int, int], Readings]:
    """Feeds of one plant and analyses of another: both move, and neither because of the other."""
    span, readings = days(seed, dead_min, count)
    other = days(seed + 1, dead_min, count)[1]
    moved = {tag: replace(other[tag], time=other[tag].time + APART_US) for tag in CHANNELS}
    return span, readings | moved


def unmoved(seed: int, dead_min: float, count: int) -> tuple[tuple[int, int], Readings]:
    """Feeds that stand still but for the noise of their meters, under analyses that move."""
    span, readings = days(seed, dead_min, count)
    rng = np.random.default_rng(seed)
    return span, readings | {tag: _still(readings[tag], rng) for tag in FEEDS}


def _still(series: Series, rng: np.random.Generator) -> Series:
    """The mean reading with noise of 0.4 %."""
    noise = 1 + 0.004 * rng.standard_normal(len(series))
    return replace(series, value=np.nanmean(series.value) * noise)


def edges(span: tuple[int, int], hours: int) -> list[int]:
    """Spans of so many hours, a day after the beginning up to a day before the end."""
    return list(range(span[0] + 24 * HOUR_US, span[1] - 24 * HOUR_US, hours * HOUR_US))


def judged(made: Iterable[tuple[tuple[int, int], Readings]], hours: int) -> list[list[Lag]]:
    """All spans of several runs of days, by run."""
    return [list(lags(UNIT, readings, edges(span, hours))) for span, readings in made]
