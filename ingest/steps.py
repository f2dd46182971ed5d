"""Does a signal step further than the process can? What goes back at once is a spike, the rest a doubt."""

from __future__ import annotations

from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.conditions import NOT_CHECKED, PASSED, REFUSED, SUSPECT, Codes, Flags
from ingest.readings import Series

SPIKE_CYCLES = 2  # a level that came by one step and left by the opposite one within so long is a spike
STEP_LOOKS_BACK = 3  # cycles, and one greatest gap: an answer depends on no reading longer ago than this
STEP_LOOKS_AHEAD = SPIKE_CYCLES  # cycles
_ROUNDING = 1 + 1e-9

Times = NDArray[np.int64]
Places = NDArray[np.intp]


def steps(
    series: Series, usable: Flags, *, largest: float, cycle: timedelta, greatest_gap: timedelta
) -> Codes:
    """Judge each reading by how far it lies from the one before.

    Over a gap of several cycles the signal may move as many steps. Which side of a step that stays is true
    nothing tells, so its first cycle is suspect and the rest is taken.

    Parameters
    ----------
    series : Series
        n readings.
    usable : array (n,) of bool
        Which of them may be looked at.
    largest : float
        Largest true change within one cycle, in the instrument's own unit.
    cycle : timedelta
        Time between results.
    greatest_gap : timedelta
        Across a longer gap nothing can be said.

    Returns
    -------
    array (n,) of int8
        Places in conditions.ANSWERS. Not checked: what is not usable, and the first cycle of readings that
        have none before them.
    """
    answers = np.full(usable.size, NOT_CHECKED, dtype=np.int8)
    at = np.flatnonzero(usable)
    if at.size:
        cycle_us, gap_us = (span // timedelta(microseconds=1) for span in (cycle, greatest_gap))
        answers[at] = _judged(series.time[at], series.value[at], largest, cycle_us, gap_us)
    return answers


def _judged(time: Times, value: NDArray[np.float64], largest: float, cycle_us: int, gap_us: int) -> Codes:
    """Cut the readings into levels between steps and gaps, and judge the levels."""
    change, gap = np.diff(value), np.diff(time)
    known = gap <= gap_us
    far = known & (np.abs(change) > _allowed(gap, largest, cycle_us))
    first = np.concatenate([[0], np.flatnonzero(far | ~known) + 1])
    size = np.diff(first, append=time.size)
    # How each level began: +1 or -1 by a step, 0 after a gap.
    came = np.concatenate([[0.0], np.where(far, np.sign(change), 0.0)[first[1:] - 1]])
    lasted = np.diff(time[first], append=np.iinfo(np.int64).max)
    spike = (came * np.append(came[1:], 0.0) < 0) & (lasted <= SPIKE_CYCLES * cycle_us)
    back = np.zeros(first.size, dtype=bool)
    after = np.flatnonzero(spike) + 1
    back[after] = _near(time, value, first[after], first[after - 1] - 1, (largest, cycle_us))
    level = np.select([spike, came == 0, back], [REFUSED, NOT_CHECKED, PASSED], SUSPECT).astype(np.int8)
    young = time - np.repeat(time[first], size) < cycle_us
    whole = np.repeat(level, size)
    return np.where(young | (whole == REFUSED), whole, np.int8(PASSED)).astype(np.int8, copy=False)


def _allowed(gap: Times, largest: float, cycle_us: int) -> NDArray[np.float64]:
    """How far the process can move in the time between two readings."""
    return largest * np.maximum(1.0, gap / cycle_us) * _ROUNDING


def _near(
    time: Times, value: NDArray[np.float64], here: Places, there: Places, limit: tuple[float, int]
) -> Flags:
    """Tell whether the process could have gone from one reading to another, whatever lies between."""
    return np.abs(value[here] - value[there]) <= _allowed(time[here] - time[there], *limit)
