r"""How states and figures stand in the store: one flat column per quantity, and back again.

| stage | index | columns |
|---|---|---|
| states | start | `flow <stream>: <species>` [kmol/h], `adjustment <instrument>`, |
| | | `adjustment_sd <instrument>`, objective, freedom, status, iterations |
| figures-<window> | end | `<figure> \| <mode> \| <field>` |
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.reconcile import States
from monitor.figures import Figure
from monitor.windows import MODES, Judged

BAR = " | "
FIGURE_LEVELS = ("figure", "mode", "field")
HOUR = timedelta(hours=1)
STATE_FIELDS = ("objective", "freedom", "status", "iterations")


def figure_stage(window: timedelta) -> str:
    """Name the stage that holds the figures of a window: figures-8h; figures-7d from two days on.

    Parameters
    ----------
    window : timedelta
        Whole minutes.

    Returns
    -------
    str
    """
    minutes = window // timedelta(minutes=1)
    if minutes % 60:
        return f"figures-{minutes}min"
    hours = minutes // 60
    return f"figures-{hours // 24}d" if hours >= 48 and hours % 24 == 0 else f"figures-{hours}h"


def states_table(problem: Problem, parts: Sequence[States]) -> pa.Table:
    """Lay states out as they are stored; numbers as float32, which is far finer than any meter.

    Parameters
    ----------
    problem : Problem
        Names the flows and the balance instruments.
    parts : sequence of States
        One after the other, of t cells in all; at least one.

    Returns
    -------
    pyarrow.Table, t rows
        `start`, then N + 2 m + 4 columns. NaN as in `States`.
    """
    columns: dict[str, pa.Array] = {}

    def lay_out(field: str, names: Sequence[str]) -> None:
        whole = np.concatenate([getattr(one, field).T for one in parts], axis=-1, dtype=np.float32)
        columns.update({name: pa.array(row) for name, row in zip(names, np.atleast_2d(whole), strict=True)})

    lay_out("flow_kmol_h", [f"flow {stream}: {species}" for stream, species in problem.state])
    for field in ("adjustment", "adjustment_sd"):
        lay_out(field, [f"{field} {name}" for name in problem.names])
    lay_out("objective", ["objective"])
    for field in STATE_FIELDS[1:]:
        columns[field] = pa.array(np.concatenate([getattr(one, field) for one in parts]))
    return pa.table({"start": _instants(np.concatenate([one.start for one in parts])), **columns})


def instrument_frame(frame: pd.DataFrame, field: str, names: Sequence[str]) -> pd.DataFrame:
    """Take one quantity per instrument out of stored states.

    Parameters
    ----------
    frame : DataFrame
        As `states_table` lays them out, index `start`.
    field : str
        'adjustment' or 'adjustment_sd'.
    names : sequence of str
        Balance instruments.

    Returns
    -------
    DataFrame, shape (t, m)
        One column per name; NaN where no reading took part.
    """
    return frame[[f"{field} {name}" for name in names]].set_axis(list(names), axis=1)


def figure_table(figures: Sequence[Figure], ends_us: NDArray[np.int64], judged: Judged) -> pa.Table:
    """Lay windowed figures out as they are stored: a flat column per figure, mode and field; float32.

    Parameters
    ----------
    figures : sequence of Figure
    ends_us : ndarray of int64, shape (t,)
        Window ends [us UTC].
    judged : dict of str to ndarray
        As `windows.judged_windows` gives it for one window.

    Returns
    -------
    pyarrow.Table, t rows
        `end`, then the columns `<figure> | <mode> | <field>`.
    """
    rooms = {field: room if field == "reason" else room.astype(np.float32) for field, room in judged.items()}
    columns = {
        BAR.join((figure.name, mode, field)): pa.array(room[f, m])
        for f, figure in enumerate(figures)
        for m, mode in enumerate(MODES)
        for field, room in rooms.items()
    }
    return pa.table({"end": _instants(ends_us), **columns})


def unflat(frame: pd.DataFrame) -> pd.DataFrame:
    """Give stored figures their three levels of columns back.

    Parameters
    ----------
    frame : DataFrame
        As `figure_table` lays it out, index `end`, or some of its columns.

    Returns
    -------
    DataFrame
        Columns (figure, mode, field).
    """
    levels = pd.MultiIndex.from_tuples(
        [tuple(name.split(BAR)) for name in frame.columns], names=FIGURE_LEVELS
    )
    return frame.set_axis(levels, axis=1)


def table_of(frame: pd.DataFrame) -> pa.Table:
    """Turn a frame into the table that the store keeps: its index as first column, NaN as NaN.

    Parameters
    ----------
    frame : DataFrame
        Index of instants (UTC) with a name.

    Returns
    -------
    pyarrow.Table
    """
    label = _instants(pd.DatetimeIndex(frame.index).as_unit("us").asi8)
    columns = {str(name): pa.array(column.to_numpy()) for name, column in frame.items()}
    return pa.table({str(frame.index.name): label, **columns})


def _instants(time_us: NDArray[np.int64]) -> pa.Array:
    return pa.array(time_us, pa.int64()).cast(pa.timestamp("us", "UTC"))
