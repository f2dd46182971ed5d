"""Cells joined to longer ones: what is looked at over hours needs no minutes, and is cheaper without them."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.cells import RUNNING, Cells
from ingest.conditions import GOOD
from ingest.unit import Unit

LONGEST = timedelta(minutes=10)
_HOUR, _US = timedelta(hours=1), timedelta(microseconds=1)


def coarse_unit(unit: Unit) -> Unit:
    """Give a unit whose cells are joined to at most ten minutes that divide an hour.

    Parameters
    ----------
    unit : Unit
        One with cells of ten minutes or more is given back as it is.
    """
    joined = [n for n in range(1, LONGEST // unit.cell + 1) if not _HOUR % (n * unit.cell)]
    return replace(unit, cell=max(joined, default=1) * unit.cell)


def coarse(unit: Unit, cells: Cells) -> Cells:
    """Join cells: values are means by their share, and a joined cell runs only where all of it did.

    Parameters
    ----------
    unit : Unit
        As `coarse_unit` gives it; its cell is a whole number of those given.
    cells : Cells
        On one grid without holes; what fills no joined cell at either end is left out.
    """
    step_us = unit.cell // _US
    if len(cells.start) < 2 or (size := step_us // int(cells.start[1] - cells.start[0])) <= 1:
        return cells
    first = int(np.searchsorted(cells.start, -(-int(cells.start[0]) // step_us) * step_us))
    whole = (len(cells.start) - first) // size * size
    shape = (-1, size, cells.value.shape[1])
    value = cells.value[first : first + whole].reshape(shape)
    share = cells.share[first : first + whole].reshape(shape)
    operating = cells.operating[first : first + whole].reshape(-1, size)
    weight = np.where(np.isfinite(value), share, 0.0).astype(np.float64)
    total = weight.sum(axis=1)
    mean = (weight * np.nan_to_num(value)).sum(axis=1) / np.where(total > 0, total, 1.0)
    return Cells(
        start=cells.start[first : first + whole : size],
        value=np.where(2 * total >= size, mean, np.nan),
        share=(total / size).astype(np.float32),
        condition=_worst(cells.condition[first : first + whole].reshape(shape)),
        operating=np.where((operating == RUNNING).all(axis=1), RUNNING, operating.max(axis=1)).astype(
            np.int8
        ),
    )


def _worst(condition: NDArray[np.int8]) -> NDArray[np.int8]:
    """Give good where at least half of a joined cell was, else the last of the conditions in it."""
    good = 2 * (condition == GOOD).sum(axis=1) >= condition.shape[1]
    return np.where(good, np.int8(GOOD), condition.max(axis=1)).astype(np.int8)
