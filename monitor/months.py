"""One month of one unit from readings to figures: the grain of work, a pure function of its arguments.

What a month holds follows from the readings in it and near it, from the cells of the longest window before
it, and from nothing else. Late data, one more day and a rebuild of ten years are therefore the same work on
the same input, and give the same bits.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, fields, replace
from datetime import timedelta
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from ingest.balance import Problem, problem_of
from ingest.cells import Carried, Cells, cells_frame, make_cells
from ingest.errors import Problem as Fault
from ingest.errors import UnitFileError
from ingest.readings import Readings
from ingest.reconcile import STATUS
from ingest.unit import Unit
from monitor.amounts import Amounts, amount_names, amounts_of, with_formed
from monitor.figures import Figure, figures_of
from monitor.layout import figure_stage, figure_table, states_frame, table_of
from monitor.windows import judged_windows

PIECE = 8192  # cells reconciled in one go; keeps the errors of one piece within some tens of MB
PER_CELL = ("start", "kmol", "random", "systematic", "operating")
SOLVED, UNSOLVED = STATUS.index("solved"), STATUS.index("did not converge")
_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Plan:
    """What all months of a unit share."""

    unit: Unit
    problem: Problem
    figures: tuple[Figure, ...]

    @property
    def cell_us(self) -> int:
        """Give the length of a cell [us]."""
        return self.unit.cell // _US

    @property
    def lead_us(self) -> int:
        """Give how long before its first cell a month looks back: the longest window, in whole cells [us]."""
        longest = max(self.unit.windows) // _US
        one_before = self.cell_us if self.unit.hold_up else 0  # what is formed begins in the cell before
        return -(-longest // self.cell_us) * self.cell_us + one_before


@dataclass(frozen=True, slots=True)
class Month:
    """What one month holds: a table for each stage as it is stored, its cells, and how many were solved."""

    stages: Mapping[str, pa.Table]
    cells: int
    solved: int


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
        A watch, the budget or the guarantee names a figure that the unit does not have.
    """
    figures = figures_of(unit, amount_names(unit))
    names = [figure.name for figure in figures]
    lost = [
        Fault(f"watch[{place}].figure", f"the unit has no figure '{watch.figure}'", f"write one of {names}")
        for place, watch in enumerate(unit.watches, start=1)
        if watch.figure not in names
    ]
    lost += [
        Fault(f"{section}.{name}", "the unit has no such figure", f"write one of {names}")
        for section in ("budget", "guarantee")
        for name, _ in getattr(unit, section)
        if name not in names
    ]
    if lost:
        raise UnitFileError(unit.key, lost)
    return Plan(unit, problem_of(unit), figures)


def work(
    plan: Plan, readings: Readings, edges: tuple[int, int, int], *, before: Cells, carried: Carried
) -> Month:
    """Work one month out.

    Parameters
    ----------
    plan : Plan
        Of the unit.
    readings : dict of str to Series
        From `cells.look_back` before the first cell to `cells.reach` after the last.
    edges : tuple of int
        First cell start, end of the cells, end of the month [us UTC]; no cells when the first two are one.
    before : Cells
        Those of the longest window before the first cell, without holes; none where the record begins.
    carried : Carried
        What the cells before have told about the operating condition.

    Returns
    -------
    Month
        Stages cells, states, figures-...; figures have a row for each window end from the first cell start
        to before the end of the month, so that the month's last window stands in the next month.
    """
    first, last, after = edges
    cells = make_cells(plan.unit, readings, first, last, carried=carried)
    states: list[pa.Table] = []
    figures: list[dict[timedelta, pa.Table]] = []
    solved = 0
    held, unsolved = None, np.zeros(0, dtype=bool)
    for piece in (*_pieces(before), *_pieces(cells)):
        begin = int(piece.start[0])
        found, amounts = amounts_of(plan.unit, plan.problem, piece)
        held = amounts if held is None else _joined(_since(held, begin - plan.lead_us), amounts)
        held = with_formed(plan.unit, held)
        unsolved = np.concatenate([unsolved, found.status == UNSOLVED])[-len(held.start) :]
        since = max(begin, first - plan.cell_us)
        if piece.start[-1] >= since:
            figures.append(_figures(plan, held, since, after, unsolved))
        if begin >= first:
            states.append(table_of(states_frame(plan.problem, found)))
            solved += int((found.status == SOLVED).sum())
    stages = {"cells": table_of(cells_frame(plan.unit, cells))}
    stages |= {"states": pa.concat_tables(states)} if states else {}
    for window in figures[0] if figures else ():
        stages[figure_stage(window)] = pa.concat_tables([part[window] for part in figures])
    return Month(stages, len(cells.start), solved)


def rows(cells: Cells, which: slice) -> Cells:
    """Keep some rows of cells.

    Parameters
    ----------
    cells : Cells
        t cells.
    which : slice
        Along the axis of cells.

    Returns
    -------
    Cells
        Views.
    """
    return Cells(*(getattr(cells, field.name)[which] for field in fields(Cells)))


def _pieces(cells: Cells) -> Iterator[Cells]:
    return (rows(cells, slice(at, at + PIECE)) for at in range(0, len(cells.start), PIECE))


def _since(amounts: Amounts, first_us: int) -> Amounts:
    """Drop the cells before an instant."""
    kept = slice(int(np.searchsorted(amounts.start, first_us)), None)
    return replace(amounts, **{name: getattr(amounts, name)[kept] for name in PER_CELL})


def _joined(earlier: Amounts, later: Amounts) -> Amounts:
    """Put the cells of one piece behind those of another."""
    pairs: dict[str, Any] = {
        name: np.concatenate([getattr(earlier, name), getattr(later, name)]) for name in PER_CELL
    }
    return replace(later, **pairs)


def _figures(
    plan: Plan, amounts: Amounts, since: int, after: int, unsolved: NDArray[np.bool_]
) -> dict[timedelta, pa.Table]:
    """Lay out the figures from an instant on; a window that ends with the month belongs to the next one."""
    ends_us, judged = judged_windows(plan.unit, amounts, plan.figures, since_us=since, unsolved=unsolved)
    rows = int(np.searchsorted(ends_us, after))
    return {window: figure_table(plan.figures, ends_us, one).slice(0, rows) for window, one in judged.items()}
