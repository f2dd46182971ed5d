"""Is an analyzer stuck? Results that repeat an earlier analysis on all channels to the last digit.

One channel alone repeats honestly, and a meter may rest on one value: how long either does so while it is
healthy has to be stated before a longer run can be told from it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.channels import common_axis, places_on
from ingest.conditions import LARGEST, Flags
from ingest.readings import Series

STUCK_AFTER = 2  # cycles without anything new: the second analysis in succession that repeats the one before
STUCK_GAP = 2  # cycles; readings further apart than this are not successive analyses
STUCK_CHANNELS = 2  # one channel alone repeats honestly, two and more to the last digit do not
STUCK_ALONE = 1.5  # times the longest healthy run: what repeats longer on one channel is stuck
STUCK_LOOKS_BACK = 6  # cycles: being stuck depends on no reading longer ago than this
STUCK_LOOKS_AHEAD = 3  # cycles: nor on any that follows later than this


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
    axis = common_axis(channels)
    places = [places_on(axis, series.time) for series in channels]
    cycle_us = cycle // timedelta(microseconds=1)
    breaks = np.zeros(axis.size, dtype=bool)
    alive = np.zeros(axis.size, dtype=np.int16)
    for series, place in zip(channels, places, strict=True):
        new, seen = _on_axis(series, place, axis.size, STUCK_GAP * cycle_us)
        breaks |= new
        alive += axis - seen <= STUCK_GAP * cycle_us
    found = _long_runs(axis, breaks | (alive < STUCK_CHANNELS), cycle_us, STUCK_AFTER)
    return tuple(found[place] for place in places)


def stuck_alone(series: Series, cycle: timedelta, longest: float) -> Flags:
    """Find the readings of one signal that repeat a result for longer than it ever did while healthy.

    Counted in cycles, as for a whole analyzer: a value that an export shows again within one is one result.
    What repeats is stuck from the first result that brought nothing new, once the run holds more than
    STUCK_ALONE times as many results as the longest healthy one.

    Parameters
    ----------
    series : Series
        n readings.
    cycle : timedelta
        Time between its results.
    longest : float
        Longest run of equal results in its healthy past [results].

    Returns
    -------
    array (n,) of bool
        False for what is no number. A gap of more than STUCK_GAP cycles ends a run.
    """
    found = np.zeros(len(series), dtype=bool)
    held = np.flatnonzero(np.abs(series.value) < LARGEST)
    if held.size:
        cycle_us = cycle // timedelta(microseconds=1)
        new, _ = _on_axis(series, slice(None), len(series), STUCK_GAP * cycle_us)
        found[held] = _long_runs(series.time[held], new[held], cycle_us, repeats(longest))
    return found


def repeats(longest: float) -> int:
    """Give how many cycles a run lasts at least that holds more than STUCK_ALONE times the longest.

    Parameters
    ----------
    longest : float
        [results]

    Returns
    -------
    int
        One less than the number of results: n results in succession lie n - 1 cycles apart.
    """
    return math.floor(STUCK_ALONE * longest)


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


def _long_runs(axis: NDArray[np.int64], breaks: Flags, cycle_us: int, after: int) -> Flags:
    """Mark what lies a cycle or more after the start of a run that lasts so many cycles."""
    starts = np.flatnonzero(breaks)
    starts = starts if starts.size and starts[0] == 0 else np.concatenate([[0], starts])
    lengths = np.diff(starts, append=axis.size)
    begin = axis[starts]
    end = axis[starts + lengths - 1]
    begun = np.repeat(np.where(end - begin >= after * cycle_us, begin, axis[-1]), lengths)
    found: Flags = axis - begun >= cycle_us
    return found
