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


def states_frame(problem: Problem, states: States) -> pd.DataFrame:
    """Lay states out as a frame to be stored; numbers as float32, which is far finer than any meter.

    Parameters
    ----------
    problem : Problem
        Names the flows and the balance instruments.
    states : States
        t cells.

    Returns
    -------
    DataFrame, shape (t, N + 2 m + 4)
        Index `start` (UTC). NaN as in `States`.
    """
    columns: dict[str, NDArray[np.generic]] = {}
    for place, (stream, species) in enumerate(problem.state):
        columns[f"flow {stream}: {species}"] = states.flow_kmol_h[:, place].astype(np.float32)
    for field in ("adjustment", "adjustment_sd"):
        for place, name in enumerate(problem.names):
            columns[f"{field} {name}"] = getattr(states, field)[:, place].astype(np.float32)
    columns["objective"] = states.objective.astype(np.float32)
    columns |= {field: getattr(states, field) for field in STATE_FIELDS[1:]}
    return pd.DataFrame(columns, index=utc_index(states.start, "start"))


def instrument_frame(frame: pd.DataFrame, field: str, names: Sequence[str]) -> pd.DataFrame:
    """Take one quantity per instrument out of stored states.

    Parameters
    ----------
    frame : DataFrame
        As `states_frame` gives it.
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


def flat(figures: pd.DataFrame) -> pd.DataFrame:
    """Give windowed figures one flat column per figure, mode and field; numbers as float32.

    Parameters
    ----------
    figures : DataFrame
        Columns (figure, mode, field), as `windows.window_figures` gives them.

    Returns
    -------
    DataFrame
        The same rows; columns `<figure> | <mode> | <field>`.
    """
    names = [BAR.join(levels) for levels in figures.columns.to_list()]
    arrays = [series.to_numpy() for _, series in figures.items()]
    short = [one.astype(np.float32) if one.dtype == np.float64 else one for one in arrays]
    return pd.DataFrame(dict(zip(names, short, strict=True)), index=figures.index)


def unflat(frame: pd.DataFrame) -> pd.DataFrame:
    """Give stored figures their three levels of columns back.

    Parameters
    ----------
    frame : DataFrame
        As `flat` gives it, or some of its columns.

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
    label = pa.array(pd.DatetimeIndex(frame.index).as_unit("us").asi8, pa.int64()).cast(
        pa.timestamp("us", "UTC")
    )
    columns = {str(name): pa.array(column.to_numpy()) for name, column in frame.items()}
    return pa.table({str(frame.index.name): label, **columns})


def utc_index(time_us: NDArray[np.int64], name: str) -> pd.DatetimeIndex:
    """Make an index of instants.

    Parameters
    ----------
    time_us : ndarray of int64, shape (t,)
        [us since 1970, UTC].
    name : str
        Of the index.

    Returns
    -------
    DatetimeIndex
        Zone-aware UTC, in microseconds.
    """
    return pd.DatetimeIndex(time_us.astype("datetime64[us]"), name=name).tz_localize("UTC")
