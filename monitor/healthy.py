"""How a unit looks while all is well: its residuals, its outlet's shares by operating point, their spread.

The healthy time is cut into windows as long as those that will be held against it, so that what is found in
them is what a window may show by itself.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields, replace
from datetime import timedelta
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.cells import RUNNING, Cells
from ingest.instruments import balance_columns
from ingest.residuals import Residuals, windowed
from ingest.unit import Unit
from monitor.coordinates import Shares, coordinates, operating_point, shares_of
from monitor.days import rows
from monitor.fit import counted, left_over
from monitor.ridge import Ridge, fit

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

LENGTH = timedelta(hours=8)
BLOCK = timedelta(hours=1)
PIECE = 42  # windows whose residuals are held at a time: 20 MB at cells of ten minutes
LEAST_WINDOWS = 6  # of a healthy time; with less there is nothing to hold a window against
LEAST_BLOCKS = 20  # per regressor, else the operating point is not corrected for


@dataclass(frozen=True, slots=True)
class Baseline:
    """How a unit looks while all is well.

    Parameters
    ----------
    first_us, last_us : int
        When it was [us UTC].
    there : array (m,)
        Which balance readings count; the others were missing in the window it is made for.
    whole : Residuals
        One window: all of it.
    pull : array (n, m)
        Pulls of its windows less those of the whole.
    shares : Shares or None
        None where the coordinates cannot be told.
    law : Ridge
        Coordinates by operating point.
    miss : array (n, q)
        Coordinates of its windows less what the operating point foretells.
    """

    first_us: int
    last_us: int
    there: Flags
    whole: Residuals
    pull: Floats
    shares: Shares | None
    law: Ridge
    miss: Floats


def baseline_of(unit: Unit, problem: Problem, cells: Cells, there: Flags) -> Baseline | None:
    """Learn how a unit looks while all is well; None where too few windows of it could be told.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        The healthy time, on one grid without holes.
    there : array (m,)
        Which balance readings count.
    """
    cells = masked(unit, cells, there)
    windows = _windows(unit, problem, cells)
    told = windows.coverage >= unit.least_coverage
    if told.sum() < LEAST_WINDOWS:
        return None
    windows = windows.take(np.flatnonzero(told))
    whole = _whole(windows)
    shares = shares_of(unit)
    point, value = blocks(unit, shares, cells)
    law = _law(point, value)
    miss = value - law.at(point[:, : len(law.centre)])
    return Baseline(
        first_us=int(cells.start[0]),
        last_us=int(cells.start[-1]) + unit.cell // timedelta(microseconds=1),
        there=there,
        whole=whole,
        pull=windows.pull - whole.pull,
        shares=shares,
        law=law,
        miss=_by_window(unit, miss)[: len(told)][told],
    )


def cells_in(unit: Unit, length: timedelta) -> int:
    """Give how many cells a length of time holds, one at least.

    Parameters
    ----------
    unit : Unit
        Gives the cell.
    length : timedelta
        Of a block or window.
    """
    return max(1, round(length / unit.cell))


def _windows(unit: Unit, problem: Problem, cells: Cells) -> Residuals:
    """Give the residuals of windows that follow one another; what fills none at the end is left out."""
    size = cells_in(unit, LENGTH)
    pieces = [
        windowed(left_over(unit, problem, piece), np.arange(0, len(piece.start), size), size)
        for piece in _pieces(cells, size)
    ]
    if not pieces:
        return windowed(left_over(unit, problem, cells), np.array([0]), len(cells.start)).take(slice(0, 0))
    kept: dict[str, Any] = {
        one.name: np.concatenate([getattr(piece, one.name) for piece in pieces])
        for one in fields(Residuals)
        if one.name != "names"
    }
    return replace(pieces[0], **kept)


def _pieces(cells: Cells, size: int) -> Iterator[Cells]:
    """Cut cells into pieces of whole windows."""
    whole = len(cells.start) // size * size
    return (rows(cells, slice(at, min(at + PIECE * size, whole))) for at in range(0, whole, PIECE * size))


def _whole(windows: Residuals) -> Residuals:
    """Give all windows as one."""
    weight = windows.coverage / windows.coverage.sum()
    mean: dict[str, Any] = {
        name: np.tensordot(weight, getattr(windows, name), axes=1)[None]
        for name in ("pull", "systematic", "slope", "response")
    }
    return replace(
        windows,
        **mean,
        random=np.tensordot(weight**2, windows.random, axes=1)[None],
        freedom=windows.freedom.max(keepdims=True),
        coverage=windows.coverage.mean(keepdims=True),
    )


def masked(unit: Unit, cells: Cells, there: Flags) -> Cells:
    """Take readings out of cells.

    Parameters
    ----------
    unit : Unit
        The reactor.
    cells : Cells
        Some of its cells.
    there : array (m,)
        Which balance readings stay.
    """
    value = cells.value.copy()
    value[:, balance_columns(unit)[~there]] = np.nan
    return replace(cells, value=value)


def blocks(unit: Unit, shares: Shares | None, cells: Cells) -> tuple[Floats, Floats]:
    """Give operating point, array (b, p), and coordinates, array (b, q), of blocks that follow one another.

    Parameters
    ----------
    unit : Unit
        The reactor.
    shares : Shares or None
        How its outlet tells the coordinates.
    cells : Cells
        On one grid without holes.

    Returns
    -------
    point : array (b, p)
    value : array (b, q)
        NaN where less than half of a block is there, or running.
    """
    size = cells_in(unit, BLOCK)
    readings = counted(unit, cells)
    reading = mean_of(np.where(cells.operating == RUNNING, readings.reading, np.nan).T, size)
    point = mean_of(operating_point(unit, cells), size)
    value = np.zeros((len(reading), 0)) if shares is None else coordinates(shares, reading)[0]
    return point, value


def mean_of(value: Floats, size: int) -> Floats:
    """Give the means of blocks of rows, array (b, n); NaN where less than half of a block is there.

    Parameters
    ----------
    value : array (t, n)
        Rows; what fills no block at the end is left out.
    size : int
        Rows of a block.
    """
    whole = len(value) // size * size
    parts = value[:whole].reshape(whole // size, size, value.shape[1])
    count = np.isfinite(parts).sum(axis=1)
    return np.where(2 * count >= size, np.nansum(parts, axis=1) / np.maximum(count, 1), np.nan)


def _law(point: Floats, value: Floats) -> Ridge:
    """Fit coordinates on the operating point, or take their mean where there is too little for more.

    A coordinate that is missing most of the time is no number here and holds up no other.
    """
    value = np.where(2 * np.isfinite(value).sum(axis=0) >= len(value), value, 0.0)
    told = np.isfinite(value).all(axis=1)
    if (told & np.isfinite(point).all(axis=1)).sum() < LEAST_BLOCKS * (1 + point.shape[1]):
        point = point[:, :0]
    return fit(point, value) if told.any() else fit(point[:, :0], np.zeros_like(value))


def _by_window(unit: Unit, miss: Floats) -> Floats:
    """Give the means of blocks over windows, array (windows, q)."""
    return mean_of(miss, max(1, cells_in(unit, LENGTH) // cells_in(unit, BLOCK)))
