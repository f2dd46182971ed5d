"""Months of the demo plant with outages, dead, stuck and silent meters, and what the program says of them.

Blocks of BLOCK days follow each other. Each holds one outage and one of FAULTS, both at drawn times.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from demo_data import exports, meters, plant, scenario
from demo_data.scenario import DAY_US, Event
from ingest.cells import DOWN, make_cells
from ingest.conditions import takes_part
from ingest.readings import Readings, Series
from ingest.screen import screened
from ingest.unit import Unit, Vote
from ingest.unitfile import load
from ingest.votes import voters
from tests.units_made import HOUR, MINUTE

UNIT = load(exports.UNIT_FILE)
CALIBRATIONS = scenario.load().calibrations
BLOCK = 5  # days
SOON_US = 25 * MINUTE  # in which a shutdown has to be found

# What is wrong with the voters, by name: how many of them, whether around the outage, and how they fail.
FAULTS = {
    "nothing": (0, False, "dead"),
    "one dead in running": (1, False, "dead"),
    "two dead in running": (2, False, "dead"),
    "load stuck through the outage": (1, True, "stuck"),
    "another dead through the outage": (1, True, "dead"),
    "load silent through the outage": (1, True, "silent"),
    "two silent through the outage": (2, True, "silent"),
}


@dataclass(frozen=True, slots=True)
class Made:
    """Readings of one plant, when it was truly down (from, to [us UTC]), and the fault of each block."""

    readings: Readings
    span_us: tuple[int, int]
    down_us: NDArray[np.int64]  # (k, 2)
    faults: tuple[str, ...]
    calibrating: dict[str, NDArray[np.bool_]]  # by tag: the reading is of the gas


@dataclass(frozen=True, slots=True)
class Told:
    """What the program made of it, counted; delays from the true moment to the end of the first cell."""

    shutdowns: int
    found_soon: int
    false: int
    beside: int  # cells called down further than SOON_US from all that is true
    delay_min: tuple[float, ...]
    missed: tuple[str, ...]  # fault of the block

    def __add__(self, other: Told) -> Told:
        return Told(
            self.shutdowns + other.shutdowns,
            self.found_soon + other.found_soon,
            self.false + other.false,
            self.beside + other.beside,
            self.delay_min + other.delay_min,
            self.missed + other.missed,
        )


def made(seed: int, days: int, *, unit: Unit = UNIT, faulty: bool = True) -> Made:
    """One plant, its meters, outages and faults; the same seed gives the same."""
    rng = np.random.default_rng(seed)
    events = tuple(
        Event("outage", block * BLOCK + rng.uniform(0.5, 2.5), rng.uniform(6, 36))
        for block in range(days // BLOCK)
    )
    truth = plant.simulate(days, seed, events)
    measured = meters.measure(truth, unit, seed + 1, calibrations=CALIBRATIONS)
    dead_time = max(one.dead_time for one in unit.instruments)
    results = measured.results | {
        exports.STATUS_TAG: meters.status(truth, CALIBRATIONS, dead_time),
    }
    gas = {tag: one.mark == meters.CALIBRATION for tag, one in results.items()}
    # As numbers of good quality: nothing but the status may tell the gas.
    shown = {tag: replace(one, mark=np.zeros_like(one.mark)) for tag, one in results.items()}
    first = int(truth.time[0])
    readings = meters.as_readings(shown)
    kinds = rng.choice(list(FAULTS), len(events)).tolist() if faulty else []
    for event, kind in zip(events, kinds, strict=False):
        readings = _with_fault(readings, kind, scenario.span_us(event, first), rng)
    return Made(readings, (first, int(truth.time[-1])), _truly_down(truth), tuple(kinds), gas)


def _truly_down(truth: plant.Truth) -> NDArray[np.int64]:
    """From the feed that truly came: below the load's lower limit until above its upper one."""
    rule = UNIT.operating
    assert rule is not None
    [meter] = (one for one in UNIT.instruments if one.name == rule.load)
    load = meters.true_reading(meter, truth, UNIT)
    low, high = load < rule.down_below, load > rule.running_above
    last = np.maximum.accumulate(np.where(low | high, np.arange(load.size), 0))
    edges = np.flatnonzero(np.diff(low[last].astype(int), prepend=0, append=0))
    return np.append(truth.time, truth.time[-1] + MINUTE)[edges].reshape(-1, 2)


def _with_fault(readings: Readings, kind: str, outage: tuple[int, int], rng: np.random.Generator) -> Readings:
    """One fault: around the outage from some hours before, or after it once all has come back."""
    number, around, way = FAULTS[kind]
    assert UNIT.operating is not None
    votes = voters(UNIT.operating)
    at = rng.permutation(len(votes))[:number].tolist()
    if kind.startswith("load"):
        at = [0]
    elif kind.startswith("another"):
        at = [1 + int(rng.integers(len(votes) - 1))]
    begin = outage[0] - int(rng.uniform(1, 6) * HOUR) if around else outage[1] + 3 * HOUR
    end = outage[1] + int(rng.uniform(1, 6) * HOUR) if around else begin + int(rng.uniform(4, 16) * HOUR)
    tags = {one.name: one.tag for one in UNIT.instruments}
    faulty = {str(tags[votes[n].instrument]): votes[n] for n in at}
    return readings | {tag: _broken(readings[tag], way, (begin, end), vote) for tag, vote in faulty.items()}


def _broken(series: Series, way: str, span: tuple[int, int], vote: Vote) -> Series:
    """A meter that shows the false side of its limits, rests on its last value, or stores nothing."""
    inside = (series.time >= span[0]) & (series.time < span[1])
    if way == "silent":
        return series.take(~inside)
    value = series.value.copy()
    dead = 0.0 if vote.down < vote.running else 20.9  # a flow without signal; a sample line full of air
    value[inside] = dead if way == "dead" else value[np.argmax(inside) - 1]
    return replace(series, value=value)


def told(one: Made, unit: Unit = UNIT) -> Told:
    """Shutdowns found and not found, and runs of cells that are called down while none of it is true."""
    cells = make_cells(unit, one.readings, *one.span_us)
    size = unit.cell.total_seconds() * 1e6
    down = cells.operating == DOWN
    edges = np.flatnonzero(np.diff(down.astype(int), prepend=0, append=0)).reshape(-1, 2)
    runs = cells.start[edges - [0, 1]] + [0, int(size)]  # from, to
    false = sum(not ((one.down_us[:, 0] < end) & (one.down_us[:, 1] > begin)).any() for begin, end in runs)
    near = (cells.start > one.down_us[:, :1] - SOON_US) & (cells.start < one.down_us[:, 1:] + SOON_US)
    beside = int((down & ~near.any(axis=0)).sum())
    delays, missed = [], []
    for number, (begin, end) in enumerate(one.down_us):
        inside = down & (cells.start + size > begin) & (cells.start < end)
        delay = (cells.start[np.argmax(inside)] + size - begin) / MINUTE if inside.any() else np.inf
        delays.append(float(delay))
        if delay > SOON_US / MINUTE:
            missed.append(one.faults[number] if one.faults else "nothing")
    return Told(len(delays), len(delays) - len(missed), false, beside, tuple(delays), tuple(missed))


def screens(one: Made, unit: Unit = UNIT) -> Counter[str]:
    """Good readings and those refused; calibration windows and those with every reading refused."""
    counts: Counter[str] = Counter()
    windows = scenario.windows_us(*one.span_us, CALIBRATIONS)
    windows = windows[windows[:, 0] > one.span_us[0] + DAY_US // 24]
    found = np.ones(len(windows), dtype=bool)
    for instrument, codes in zip(unit.instruments, screened(unit, one.readings), strict=True):
        if instrument.tag is None or instrument.kind == "signal":
            continue
        gas, time = one.calibrating[instrument.tag], one.readings[instrument.tag].time
        counts["good"] += int((~gas).sum())
        counts["good refused"] += int((~gas & ~takes_part(codes)).sum())
        passed = time[gas & takes_part(codes)]
        found &= np.searchsorted(passed, windows[:, 0]) == np.searchsorted(passed, windows[:, 1])
    counts["windows"], counts["windows found"] = len(windows), int(found.sum())
    return counts
