"""What a catalyst charge has done so far: age, time on stream, tonnes, and its figures over all of it.

A charge may be years old. Its figures are ratios of sums of all its stored states; their half-widths come
from whole days spread evenly over it, since over so long a time only calibration is left of the errors.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
from datetime import datetime, timedelta

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.cells import DOWN, RUNNING, Cells, cells_from_frame
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.amounts import amounts_of, reconciled_rows
from monitor.coarse import coarse, coarse_unit
from monitor.figures import Figure, evaluate, weighted
from monitor.summary.differences import Level, responses
from monitor.summary.record import EXCLUDED, filled, inside
from monitor.windows import MODES, TWO_SIDED_95

SAMPLED_DAYS = 20
DAY = timedelta(days=1)

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Charge:
    """One charge up to some instant; tonnes by product, in all the time that was seen.

    `level` is NaN for figures that take raw readings or what is formed inside: states do not hold these.
    """

    charged: datetime
    age_days: float
    on_stream_h: float
    made_t: float
    record_from: pd.Timestamp
    level: Level


def charge_of(
    snapshot: Snapshot,
    unit: Unit,
    problem: Problem,
    figures: Sequence[Figure],
    *,
    span: tuple[datetime, datetime],
    left_out: pd.DataFrame,
) -> Charge | None:
    """Sum up a catalyst charge.

    Parameters
    ----------
    snapshot : Snapshot
        The store as one pass left it.
    unit : Unit
        One reactor.
    problem : Problem
        Its balance.
    figures : sequence of Figure
    span : tuple of datetime
        When it was charged and up to when, zone-aware.
    left_out : DataFrame
        Columns start and end: spans that people left out of the steady figures.

    Returns
    -------
    Charge or None
        None where the store holds no state of it.
    """
    rows = reconciled_rows(unit, problem.state)
    table = _states(snapshot, unit, problem, span)
    if not table.num_rows:
        return None
    kmol = _kmol(table, rows, problem, unit.cell / timedelta(hours=1))
    start = table.column("start").cast(pa.int64()).to_numpy()
    operating = _operating(snapshot, unit, span, start)
    operating = np.where(inside(start, left_out) & (operating == RUNNING), EXCLUDED, operating)
    cell_h = unit.cell / timedelta(hours=1)
    value = _values(figures, rows, kmol, operating, cell_h)
    response = _sampled(snapshot, unit, problem, figures, start)
    mass = next(one.molar_mass_kg_kmol for one in unit.species if one.name == unit.wanted) / 1000
    return Charge(
        charged=span[0],
        age_days=(span[1] - span[0]) / DAY,
        on_stream_h=float((operating != DOWN).sum() * cell_h),
        made_t=float(np.nansum(kmol[f"made {unit.wanted}"][operating != DOWN]) * mass),
        record_from=pd.Timestamp(int(start[0]), unit="us", tz="UTC"),
        level=Level(value, TWO_SIDED_95 * np.sqrt((response**2).sum(axis=2)), response),
    )


def _operating(
    snapshot: Snapshot, unit: Unit, span: tuple[datetime, datetime], start: NDArray[np.int64]
) -> NDArray[np.int8]:
    """Read the operating condition of the cells that have a state."""
    table = snapshot.read(unit.key, "cells", first=span[0], last=span[1], columns=["start", "operating"])
    place = np.searchsorted(table.column("start").cast(pa.int64()).to_numpy(), start)
    codes: NDArray[np.int8] = table.column("operating").to_numpy().astype(np.int8)[place]
    return codes


def _states(snapshot: Snapshot, unit: Unit, problem: Problem, span: tuple[datetime, datetime]) -> pa.Table:
    """Read the flows of every state of a charge."""
    flows = [f"flow {stream}: {species}" for stream, species in problem.state]
    return snapshot.read(unit.key, "states", first=span[0], last=span[1], columns=["start", *flows])


def _kmol(table: pa.Table, rows: dict[str, Floats], problem: Problem, cell_h: float) -> dict[str, Floats]:
    """Amounts per cell from stored flows; NaN where a flow with a weight is not seen."""
    names = [f"flow {stream}: {species}" for stream, species in problem.state]
    flow = np.stack([table.column(name).to_numpy().astype(np.float64) for name in names], axis=1)
    return {name: weighted(flow, row) * cell_h for name, row in rows.items()}


def _values(
    figures: Sequence[Figure],
    rows: dict[str, Floats],
    kmol: dict[str, Floats],
    operating: NDArray[np.generic],
    cell_h: float,
) -> Floats:
    """Figures over all cells in both modes, (f, 2)."""
    modes = (operating != DOWN, operating == RUNNING)
    found = np.full((len(figures), len(MODES)), np.nan)
    for f, figure in enumerate(figures):
        if not rows.keys() >= set(figure.needs):
            continue
        seen = np.all([np.isfinite(kmol[name]) for name in figure.needs], axis=0)
        for m, mode in enumerate(modes):
            counts = seen & mode
            sums = np.array([[kmol[n][counts].sum() if n in kmol else 0.0 for n in figure.amounts]])
            found[f, m] = evaluate(figure, sums, hours=np.array([counts.sum() * cell_h]))[0][0]
    return found


def _sampled(
    snapshot: Snapshot, unit: Unit, problem: Problem, figures: Sequence[Figure], start: NDArray[np.int64]
) -> Floats:
    """Responses of the figures over days spread evenly over a charge, (f, 2, s)."""
    day_us = DAY // timedelta(microseconds=1)
    days = np.unique(start // day_us)
    chosen = days[np.linspace(0, len(days) - 1, min(SAMPLED_DAYS, len(days))).round().astype(int)]
    rough, edges = (
        coarse_unit(unit),
        [(int(day * day_us), int((day + 1) * day_us)) for day in np.unique(chosen)],
    )
    pieces = [coarse(rough, _cells(snapshot, unit, one)) for one in edges]
    names = [field.name for field in fields(Cells)]
    cells = Cells(*(np.concatenate([getattr(one, name) for one in pieces]) for name in names))
    amounts = amounts_of(rough, problem, cells)[1]
    return responses(rough, amounts, figures, int(cells.start[0]), int(cells.start[-1]) + 1)


def _cells(snapshot: Snapshot, unit: Unit, edges: tuple[int, int]) -> Cells:
    """Read the cells between two instants [us UTC] without holes."""
    table = snapshot.read(unit.key, "cells", first=edges[0], last=edges[1])
    frame = table.to_pandas(ignore_metadata=True).set_index("start")
    return filled(cells_from_frame(unit, frame), unit.cell // timedelta(microseconds=1))
