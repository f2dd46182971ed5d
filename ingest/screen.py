"""Is a reading fit to take part? Checks on readings before any averaging; each gives a condition.

Missing and stale are questions about time and are answered in `cells`. The other conditions are found
here. A check that cannot run on an instrument is named by `not_checked`, never passed in silence.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.readings import BAD, Readings, Series
from ingest.unit import Instrument, Unit

CONDITIONS = ("good", "missing", "stale", "bad quality", "out of range", "stuck", "calibrating")
GOOD, MISSING, STALE, BAD_QUALITY, OUT_OF_RANGE, STUCK = range(6)

Codes = NDArray[np.int8]
Flags = NDArray[np.bool_]

LARGEST = 3.4e38  # largest IEEE 754 single: historians fill with it or more, no instrument measures it

STUCK_AFTER = 2  # cycles without anything new: the second analysis in succession that repeats the one before
STUCK_GAP = 2  # cycles; readings further apart than this are not successive analyses
STUCK_CHANNELS = 2  # one channel alone repeats honestly, two and more to the last digit do not
STUCK_LOOKS_BACK = 6  # cycles: being stuck depends on no reading longer ago than this
STUCK_LOOKS_AHEAD = 3  # cycles: nor on any that follows later than this

# A 4 to 20 mA signal measures from 3.8 to 20.5 mA and fails beyond (NAMUR NE 43).
UNDER = (4.0 - 3.8) / 16.0
OVER = (20.5 - 20.0) / 16.0


@dataclass(frozen=True, slots=True)
class RangeRule:
    """How far a true reading can lie outside the stated range, as shares of the span, and why."""

    below: float
    above: float
    why: str


_TRANSMITTER = RangeRule(
    UNDER, OVER, "a meter at rest is noisy about zero, and the signal reaches past its ends"
)
_FRACTION = RangeRule(
    UNDER, 0.0, "noise about zero lies on both sides; above the calibrated range nobody checked"
)
RANGE_RULES = {
    "molar flow": _TRANSMITTER,
    "mass flow": _TRANSMITTER,
    "volume flow": _TRANSMITTER,
    "actual volume flow": _TRANSMITTER,
    "mole fraction": _FRACTION,
    "mass fraction": _FRACTION,
    "species flow": _TRANSMITTER,
    "flow ratio": _TRANSMITTER,
    "pressure": _TRANSMITTER,
    "temperature": _TRANSMITTER,
    "signal": RangeRule(0.0, 0.0, "a position or a status word has the limits as they are written"),
}


def limits(instrument: Instrument) -> tuple[float, float]:
    """Give the lowest and the highest reading that is taken.

    Parameters
    ----------
    instrument : Instrument

    Returns
    -------
    tuple of two floats
        In the instrument's own unit; infinite on a side without a stated range. With one side stated there
        is no span, and that side holds as it is written.
    """
    span = instrument.high - instrument.low
    if not np.isfinite(span):
        return instrument.low, instrument.high
    rule = RANGE_RULES[instrument.kind]
    return instrument.low - rule.below * span, instrument.high + rule.above * span


def screen(series: Series, instrument: Instrument) -> Codes:
    """Give each reading its condition from quality and range.

    Parameters
    ----------
    series : Series
        n readings of the instrument's tag.
    instrument : Instrument

    Returns
    -------
    array (n,) of int8
        Index into CONDITIONS. A value that is no number, or a filler, is of bad quality; uncertain and
        unknown quality are usable.
    """
    low, high = limits(instrument)
    codes = np.zeros(series.value.size, dtype=np.int8)
    codes[(series.value < low) | (series.value > high)] = OUT_OF_RANGE
    # Written so that NaN, which compares false with everything, is of bad quality too.
    codes[~(np.abs(series.value) < LARGEST) | (series.quality == BAD)] = BAD_QUALITY
    return codes


def stuck(channels: Sequence[Series], cycle: timedelta) -> tuple[Flags, ...]:
    """Find the readings of an analyzer that repeat an earlier analysis on all channels to the last digit.

    Counted in cycles: between two analyses an export may repeat each value as often as it likes. What
    repeats is stuck from the first analysis that brought nothing new, once a second one did not either.

    Parameters
    ----------
    channels : sequence of Series
        Every channel of one analyzer that has readings.
    cycle : timedelta
        Time between its results.

    Returns
    -------
    tuple of arrays of bool
        One array for each channel, as long as its readings. All false where fewer than STUCK_CHANNELS
        channels have had a number within STUCK_GAP cycles: that is not checked.
    """
    axis = _common_axis(channels)
    places = [_places(axis, series.time) for series in channels]
    cycle_us = cycle // timedelta(microseconds=1)
    breaks = np.zeros(axis.size, dtype=bool)
    alive = np.zeros(axis.size, dtype=np.int16)
    for series, place in zip(channels, places, strict=True):
        new, seen = _on_axis(series, place, axis.size, STUCK_GAP * cycle_us)
        breaks |= new
        alive += axis - seen <= STUCK_GAP * cycle_us
    found = _long_runs(axis, breaks | (alive < STUCK_CHANNELS), cycle_us)
    return tuple(found[place] for place in places)


def screened(unit: Unit, readings: Readings) -> tuple[Codes, ...]:
    """Give the condition of every reading of every instrument.

    Parameters
    ----------
    unit : Unit
        m instruments.
    readings : Readings

    Returns
    -------
    tuple of m arrays of int8
        Index into CONDITIONS, one for each reading of the instrument's tag; empty for a declared instrument
        and for a tag without readings.
    """
    empty = np.zeros(0, dtype=np.int8)
    codes = [
        screen(readings[i.tag], i) if i.tag is not None and i.tag in readings else empty
        for i in unit.instruments
    ]
    for members in _analyzers(unit).values():
        seen = [at for at in members if codes[at].size]
        if len(seen) >= STUCK_CHANNELS:
            channels = [readings[str(unit.instruments[at].tag)] for at in seen]
            for at, flags in zip(seen, stuck(channels, unit.instruments[seen[0]].cycle), strict=True):
                codes[at][flags & (codes[at] == GOOD)] = STUCK
    return tuple(codes)


def not_checked(unit: Unit, instrument: Instrument) -> dict[str, str]:
    """Name the conditions that cannot be found on an instrument, with the reason.

    Parameters
    ----------
    unit : Unit
    instrument : Instrument
        One of the unit's.

    Returns
    -------
    dict of str to str
        Condition to reason; empty when every check runs.
    """
    if instrument.tag is None:
        return dict.fromkeys(("bad quality", "out of range", "stuck"), "declared, not measured")
    reasons = {}
    if not np.isfinite(instrument.low) and not np.isfinite(instrument.high):
        reasons["out of range"] = "no range is stated"
    channels = [at for members in _analyzers(unit).values() for at in members]
    if instrument not in [unit.instruments[at] for at in channels]:
        reasons["stuck"] = "only an analyzer with two or more channels can be told from a steady process"
    return reasons


def _analyzers(unit: Unit) -> dict[str, list[int]]:
    """Where the channels of each analyzer stand among the instruments; single channels are left out."""
    found: dict[str, list[int]] = {}
    for at, instrument in enumerate(unit.instruments):
        if instrument.analyzer is not None and instrument.tag is not None and instrument.sampling == "held":
            found.setdefault(instrument.analyzer, []).append(at)
    return {name: members for name, members in found.items() if len(members) >= STUCK_CHANNELS}


def _common_axis(channels: Sequence[Series]) -> NDArray[np.int64]:
    """All times at which any channel has a reading; the channels of one export mostly share them."""
    first = channels[0].time
    if all(np.array_equal(first, series.time) for series in channels[1:]):
        return first
    return np.unique(np.concatenate([series.time for series in channels])).astype(np.int64)


def _places(axis: NDArray[np.int64], time: NDArray[np.int64]) -> slice | NDArray[np.int64]:
    """Where the times of one channel stand on the common axis."""
    return slice(None) if axis.size == time.size else np.searchsorted(axis, time)


def _on_axis(
    series: Series, place: slice | NDArray[np.int64], size: int, gap_us: int
) -> tuple[Flags, NDArray[np.int64]]:
    """When a channel brought something new, and when it was last seen to hold a number (far past: never)."""
    usable = np.abs(series.value) < LARGEST
    held = np.flatnonzero(usable)
    value, time = series.value[held], series.time[held]
    fresh = np.zeros(usable.size, dtype=bool)
    fresh[held[:1]] = True
    # What comes back after a gap counts as new: an answer must not hang on readings from long ago.
    fresh[held[1:]] = (value[1:] != value[:-1]) | (np.diff(time) > gap_us)
    new = np.zeros(size, dtype=bool)
    new[place] = fresh
    seen = np.full(size, np.iinfo(np.int64).min // 2)
    seen[place] = np.where(usable, series.time, seen[place])
    return new, np.maximum.accumulate(seen)


def _long_runs(axis: NDArray[np.int64], breaks: Flags, cycle_us: int) -> Flags:
    """Mark what lies a cycle or more after the start of a run that lasts STUCK_AFTER cycles."""
    starts = np.flatnonzero(breaks)
    starts = starts if starts.size and starts[0] == 0 else np.concatenate([[0], starts])
    lengths = np.diff(starts, append=axis.size)
    begin = axis[starts]
    end = axis[starts + lengths - 1]
    begun = np.repeat(np.where(end - begin >= STUCK_AFTER * cycle_us, begin, axis[-1]), lengths)
    found: Flags = axis - begun >= cycle_us
    return found
