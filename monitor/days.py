"""One day of one unit from cells to tallies: the grain of work, a pure function of its arguments.

A day (UTC) is always brought to balance by itself, whole, whatever else is worked out with it: the last bits
of a matrix product depend on how many columns it has. A day that is worked out again from the same cells
gives therefore the same bits, and so does everything that is made of days.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from datetime import timedelta
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, problem_of
from ingest.cells import Cells
from ingest.errors import Problem as Fault
from ingest.errors import UnitFileError
from ingest.reconcile import STATUS, States
from ingest.unit import Unit
from monitor.amounts import Amounts, amount_names, amounts_of, with_formed
from monitor.figures import Figure, figures_of
from monitor.sums import Functionals, functionals
from monitor.tallies import Tally, tally

DAY_US = 86_400_000_000
LONGEST_STEP = timedelta(minutes=10)  # figures over hours say nothing new every minute
PER_CELL = ("start", "kmol", "random", "systematic", "operating")
UNSOLVED = STATUS.index("did not converge")
_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Plan:
    """What all days of a unit share."""

    unit: Unit
    problem: Problem
    figures: tuple[Figure, ...]
    functionals: Functionals

    @property
    def cell_us(self) -> int:
        """Give the length of a cell [us]."""
        return self.unit.cell // _US

    @property
    def step(self) -> timedelta:
        """Give the time from one row of figures to the next: whole cells, in every window a whole number."""
        return figure_step(self.unit)

    @property
    def lead_us(self) -> int:
        """Give how long before its first window end a day looks back: the longest window [us]."""
        one_before = self.cell_us if self.unit.hold_up else 0  # what is formed begins in the cell before
        return max(self.unit.windows) // _US + one_before

    @property
    def days_after(self) -> int:
        """Give how many days after a day have windows that hold cells of it."""
        return 1 + (self.lead_us - self.cell_us) // DAY_US


@dataclass(frozen=True, slots=True)
class Day:
    """What one day holds: states, sums by steps of figures, and its last cell if the next day needs it."""

    first_us: int  # where its first step begins
    end_us: int  # end of its last cell; the step that this lies in is not whole
    states: States
    tally: Tally
    last: Amounts | None


def plan_of(unit: Unit) -> Plan:
    """Give the plan of a unit: its balance and its figures; every watch must find its figure.

    Parameters
    ----------
    unit : Unit
        The reactor.

    Returns
    -------
    Plan

    Raises
    ------
    BalanceError
        The balance forces a flow to zero.
    UnitFileError
        A watch names a figure that the unit does not have.
    """
    figures = figures_of(unit, amount_names(unit))
    names = [figure.name for figure in figures]
    lost = [
        Fault(f"watch[{place}].figure", f"the unit has no figure '{watch.figure}'", f"write one of {names}")
        for place, watch in enumerate(unit.watches, start=1)
        if watch.figure not in names
    ]
    if lost:
        raise UnitFileError(unit.key, lost)
    return Plan(unit, problem_of(unit), figures, functionals(figures))


def figure_step(unit: Unit) -> timedelta:
    """Give the time from one row of figures to the next.

    Parameters
    ----------
    unit : Unit
        Gives cell and windows.

    Returns
    -------
    timedelta
        The longest whole number of cells within ten minutes of which every window and the day are whole
        multiples; one cell where cells are longer than that.
    """
    most = max(1, LONGEST_STEP // unit.cell)
    spans = (*unit.windows, timedelta(days=1))
    steps = (count * unit.cell for count in range(most, 0, -1))
    return next(step for step in steps if not any(span % step for span in spans))


def work_day(plan: Plan, cells: Cells, before: Amounts | None) -> Day:
    """Work one day out.

    Parameters
    ----------
    plan : Plan
        Of the unit.
    cells : Cells
        All cells of one day (UTC) that the record holds, at least one, without holes.
    before : Amounts or None
        Of the last cell before them; None where the record begins, or nothing is held up.

    Returns
    -------
    Day
    """
    unit, step = plan.unit, plan.step // _US
    states, amounts = amounts_of(unit, plan.problem, _laid_out(cells))
    if before is not None:
        amounts = _cut(with_formed(unit, _joined(before, amounts)), slice(1, None))
    first, end = int(cells.start[0]) // step * step, int(cells.start[-1]) + plan.cell_us
    bounds = np.searchsorted(cells.start, np.arange(first, end + step, step))
    return Day(
        first_us=first,
        end_us=end,
        states=states,
        tally=tally(plan.functionals, amounts, states.status == UNSOLVED, bounds),
        last=_cut(amounts, slice(-1, None)) if unit.hold_up else None,
    )


def days_of(cells: Cells) -> dict[int, slice]:
    """Tell which cells lie in which day.

    Parameters
    ----------
    cells : Cells
        Ascending.

    Returns
    -------
    dict of int to slice
        Day, counted from 1970-01-01 (UTC) -> its cells; days without any are not there.
    """
    day = cells.start // DAY_US
    edges = [0, *(np.flatnonzero(np.diff(day)) + 1).tolist(), len(day)]
    return {int(day[a]): slice(a, z) for a, z in pairwise(edges) if z > a}


def rows(cells: Cells, which: Any) -> Cells:
    """Keep some rows of cells.

    Parameters
    ----------
    cells : Cells
        t cells.
    which : slice or ndarray
        Along the axis of cells.

    Returns
    -------
    Cells
        Views for a slice, else copies.
    """
    return Cells(*(getattr(cells, field.name)[which] for field in fields(Cells)))


def changed_days(old: Cells, new: Cells) -> list[int]:
    """Tell in which days two makings of the same cells differ in a bit, or one holds a cell more.

    Parameters
    ----------
    old, new : Cells
        Ascending; cells are never lost.

    Returns
    -------
    list of int
        Days, counted from 1970-01-01 (UTC), ascending.
    """
    if not len(old.start):
        return list(days_of(new))
    place = np.minimum(np.searchsorted(old.start, new.start), len(old.start) - 1)
    same = old.start[place] == new.start
    for name in ("value", "share", "condition", "operating"):
        a, b = getattr(old, name)[place], getattr(new, name)
        equal = _bits(a) == _bits(b)
        same &= equal if equal.ndim == 1 else equal.all(axis=1)
    return [int(day) for day in np.unique(new.start[~same] // DAY_US)]


def _laid_out(cells: Cells) -> Cells:
    """Lay the numbers out in memory in one way, wherever they come from: sums may depend on that, too."""
    value, share = np.ascontiguousarray(cells.value.T), np.ascontiguousarray(cells.share.T)
    return replace(cells, value=value.T, share=share.T)


def _bits(numbers: NDArray[Any]) -> NDArray[Any]:
    """Numbers as what they are in memory: a NaN is then equal to itself."""
    return numbers.view(f"i{numbers.dtype.itemsize}")


def _cut(amounts: Amounts, which: slice) -> Amounts:
    """Keep some cells."""
    return replace(amounts, **{name: getattr(amounts, name)[which] for name in PER_CELL})


def _joined(earlier: Amounts, later: Amounts) -> Amounts:
    """Put the cells of one day behind those of another."""
    pairs: Mapping[str, Any] = {
        name: np.concatenate([getattr(earlier, name), getattr(later, name)]) for name in PER_CELL
    }
    return replace(later, **pairs)
