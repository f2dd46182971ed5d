"""One month of one unit from cells to tables: the grain of what is stored, made of days that are worked out.

What a day holds follows from the cells of that day, its figures from those of the longest window before their
ends, and from nothing else. Late data, one more day and a rebuild of ten years are therefore the same work
on the same input, and give the same bits.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence
from datetime import timedelta

import numpy as np
import pyarrow as pa

from ingest.cells import Cells
from monitor.days import DAY_US, Day, Plan, days_of, rows, work_day
from monitor.layout import figure_stage, figure_table
from monitor.windows import rolled

Run = tuple[int, int]  # first and last of days in a row, counted from 1970-01-01 (UTC)


def runs_of(days: Iterable[int]) -> list[Run]:
    """Give the runs of days that follow one another.

    Parameters
    ----------
    days : iterable of int
        In any order.

    Returns
    -------
    list of tuple
        First and last day of each, ascending.
    """
    runs: list[Run] = []
    for day in sorted(set(days)):
        if runs and day == runs[-1][1] + 1:
            runs[-1] = (runs[-1][0], day)
        else:
            runs.append((day, day))
    return runs


def days_before(plan: Plan, run: Run) -> Run:
    """Give the days whose cells the figures of a run need: its own and those of the longest window before.

    Parameters
    ----------
    plan : Plan
        Of the unit.
    run : tuple of int
        First and last day.

    Returns
    -------
    tuple of int
    """
    return (run[0] * DAY_US - plan.lead_us) // DAY_US, run[1]


def worked_out(plan: Plan, cells: Cells, wanted: Collection[int], known: Mapping[int, Day]) -> dict[int, Day]:
    """Work out the days that are wanted and not yet known.

    Parameters
    ----------
    plan : Plan
        Of the unit.
    cells : Cells
        All cells of the days that are not known.
    wanted : collection of int
        Days; those without cells stay out.
    known : mapping of int to Day
        Worked out before.

    Returns
    -------
    dict of int to Day
        Those known and those wanted.
    """
    found = dict(known)
    for day, place in days_of(cells).items():
        if day in wanted and day not in found:
            before = found.get(day - 1)
            found[day] = work_day(plan, rows(cells, place), before.last if before else None)
    return found


def figure_tables(plan: Plan, days: Mapping[int, Day], run: Run) -> dict[str, pa.Table]:
    """Lay out the figures of a run of days as they are stored.

    Parameters
    ----------
    plan : Plan
        Of the unit.
    days : mapping of int to Day
        Holds those of `days_before` for which the record has cells.
    run : tuple of int
        First and last day; a window belongs to the day in which it ends, at midnight to the day that begins.

    Returns
    -------
    dict of str to pyarrow.Table
        A stage for each window; without cells none.
    """
    used = _unbroken(days, days_before(plan, run))
    if not used:
        return {}
    step = plan.step // timedelta(microseconds=1)
    count = sum(one.tally.idle.shape[1] for one in used)
    ends_us = used[0].first_us + step * np.arange(1, count + 1, dtype=np.int64)
    skip = int(np.searchsorted(ends_us, run[0] * DAY_US))
    stop = int(np.searchsorted(ends_us, min(used[-1].end_us + 1, (run[1] + 1) * DAY_US)))
    tallies = [one.tally for one in used]
    judged = rolled(plan.unit, plan.figures, tallies, skip=skip, step=plan.step)
    return {
        figure_stage(window): figure_table(plan.figures, ends_us[skip:], one).slice(0, stop - skip)
        for window, one in judged.items()
    }


def _unbroken(days: Mapping[int, Day], span: Run) -> Sequence[Day]:
    """Give the days of a span from the last hole on."""
    there = [day for day in range(span[0], span[1] + 1) if day in days]
    runs = runs_of(there)
    return [days[day] for day in range(runs[-1][0], runs[-1][1] + 1)] if runs else []
