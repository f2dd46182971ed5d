"""What the store holds of one span, brought to amounts once more: cells without holes, states, amounts."""

from __future__ import annotations

from dataclasses import dataclass, fields
from datetime import datetime
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.cells import NOT_KNOWN, RUNNING, Cells, cells_from_frame
from ingest.conditions import MISSING
from ingest.parts import instant_us
from ingest.reconcile import NOT_CONVERGED, SOLVED, States
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.amounts import Amounts, amounts_of, with_formed
from monitor.coarse import coarse, coarse_unit

PIECE = 8192  # cells reconciled in one go; keeps the errors of one piece within some tens of MB
EXCLUDED = -1  # operating condition of cells that people left out: neither down nor running
PER_CELL = ("start", "kmol", "random", "systematic", "operating")


@dataclass(frozen=True, slots=True)
class Record:
    """One span on one grid: t cells from the first to the last that the store holds, holes filled in."""

    cells: Cells
    states: States
    amounts: Amounts

    @property
    def unsolved(self) -> NDArray[np.bool_]:
        """Tell which cells' balance did not converge."""
        found: NDArray[np.bool_] = self.states.status == NOT_CONVERGED
        return found

    @property
    def solved(self) -> NDArray[np.bool_]:
        """Tell which cells' balance was solved."""
        found: NDArray[np.bool_] = self.states.status == SOLVED
        return found


def read(
    snapshot: Snapshot,
    unit: Unit,
    problem: Problem,
    edges: tuple[datetime, datetime],
    excluded: pd.DataFrame,
    *,
    coarsely: bool = False,
) -> Record | None:
    """Read the cells of a span and work out their amounts.

    Parameters
    ----------
    snapshot : Snapshot
        The store as one pass left it.
    unit : Unit
        One reactor.
    problem : Problem
        Its balance.
    edges : tuple of datetime
        From the first cell start to before the second, zone-aware.
    excluded : DataFrame
        Columns start and end: spans that people left out of the steady figures.
    coarsely : bool
        Join cells to those of `coarse.coarse_unit`, for what is looked at by the hour.

    Returns
    -------
    Record or None
        None where the store holds no cell of the span. Amounts carry EXCLUDED where a running cell starts in
        an excluded span.
    """
    table = snapshot.read(unit.key, "cells", first=edges[0], last=edges[1])
    if not table.num_rows:
        return None
    frame = table.to_pandas(ignore_metadata=True).set_index("start")
    cells = filled(cells_from_frame(unit, frame), int(unit.cell.total_seconds() * 1e6))
    if coarsely:
        unit = coarse_unit(unit)
        cells = coarse(unit, cells)
    states, amounts = _worked(unit, problem, cells)
    out = inside(cells.start, excluded) & (cells.operating == RUNNING)
    operating = np.where(out, EXCLUDED, amounts.operating).astype(np.int8)
    return Record(cells, states, _with(amounts, operating=operating))


def filled(cells: Cells, cell_us: int) -> Cells:
    """Put cells on a grid without holes; what is put in is missing and of no known condition.

    Parameters
    ----------
    cells : Cells
        At least one, ascending.
    cell_us : int
        Length of a cell [us].

    Returns
    -------
    Cells
        The same where there were no holes.
    """
    count = int(cells.start[-1] - cells.start[0]) // cell_us + 1
    if count == len(cells.start):
        return cells
    at = (cells.start - cells.start[0]) // cell_us
    shape = (count, cells.value.shape[1])
    new = Cells(
        start=cells.start[0] + cell_us * np.arange(count),
        value=np.full(shape, np.nan),
        share=np.zeros(shape, np.float32),
        condition=np.full(shape, MISSING, np.int8),
        operating=np.full(count, NOT_KNOWN, np.int8),
    )
    for field in fields(Cells)[1:]:
        getattr(new, field.name)[at] = getattr(cells, field.name)
    return new


def inside(start_us: NDArray[np.int64], spans: pd.DataFrame) -> NDArray[np.bool_]:
    """Tell which instants lie in any of some spans.

    Parameters
    ----------
    start_us : ndarray of int64, shape (t,)
        [us UTC].
    spans : DataFrame
        Columns start and end, zone-aware; the end is outside.

    Returns
    -------
    ndarray of bool, shape (t,)
    """
    found = np.zeros(len(start_us), dtype=bool)
    for first, last in zip(spans["start"], spans["end"], strict=True):
        found |= (start_us >= instant_us(first)) & (start_us < instant_us(last))
    return found


def _worked(unit: Unit, problem: Problem, cells: Cells) -> tuple[States, Amounts]:
    """Bring the cells to balance, some at a time, into room that is there once."""
    count = len(cells.start)
    slices = [slice(at, min(at + PIECE, count)) for at in range(0, count, PIECE)]
    states, amounts = amounts_of(unit, problem, _rows(cells, slices[0]))
    rooms = {field.name: _room(getattr(states, field.name), count) for field in fields(States)}
    joined = {name: _room(getattr(amounts, name), count) for name in PER_CELL}
    for rows in slices[1:]:
        found, more = amounts_of(unit, problem, _rows(cells, rows))
        for name, room in rooms.items():
            room[rows] = getattr(found, name)
        for name, room in joined.items():
            room[rows] = getattr(more, name)
    return States(**rooms), with_formed(unit, _with(amounts, **joined))


def _room(first: NDArray[Any], count: int) -> NDArray[Any]:
    """Room for so many cells, the first of them filled."""
    room = np.empty((count, *first.shape[1:]), first.dtype)
    room[: len(first)] = first
    return room


def _rows(cells: Cells, which: slice) -> Cells:
    return Cells(*(getattr(cells, field.name)[which] for field in fields(Cells)))


def _with(amounts: Amounts, **changed: NDArray[np.generic]) -> Amounts:
    return Amounts(**{**{f.name: getattr(amounts, f.name) for f in fields(Amounts)}, **changed})
