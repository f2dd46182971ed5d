"""Limits with deadband and delays become episodes: a pure function of figures and watches.

The terms are those of ISA-18.2 / IEC 62682: an alarm is raised when its condition has stood for the
on-delay, and returns to normal when the figure has been back inside the limit by the deadband for the
off-delay. Whole histories are evaluated, with no state kept between calls: what is known at a time
depends on nothing later, and no chunk can move an episode.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.cells import DOWN, STARTING, TURNED_DOWN
from ingest.errors import OutletError
from ingest.unit import Unit, Watch
from monitor.windows import MODES

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Places = NDArray[np.intp]
Times = NDArray[np.int64]

EPISODE_COLUMNS = (
    "watch",
    "figure",
    "window",
    "side",
    "limit",
    "priority",
    "first_crossed",
    "raised",
    "cleared",
    "announced",
    "worst",
    "worst_at",
    "sure",
    "suppressed",
    "suppressed_h",
)
SUPPRESSED = (DOWN, STARTING, TURNED_DOWN)  # "not known" is none of them: what is not known hides nothing
MICROSECOND = timedelta(microseconds=1)
HOUR_US = 3_600_000_000


@dataclass(frozen=True, slots=True)
class Raised:
    """Episodes of one side as places in the rows; `cleared` is the number of rows while it is open."""

    first: Places
    raised: Places
    cleared: Places
    worst: Places
    sure: Array


def unit_episodes(
    unit: Unit, frames: Mapping[timedelta, pd.DataFrame], operating: NDArray[np.int8]
) -> pd.DataFrame:
    """Episodes of every limit watch of a unit, in the order they were raised.

    Parameters
    ----------
    unit : Unit
        Gives the watches.
    frames : mapping of timedelta to DataFrame
        Figures by window as `windows.window_figures` gives them, all on the same window ends; of their
        columns only those that a watch names are read.
    operating : ndarray of int8, shape (rows,)
        Operating condition of the cell that ends at each row, index into `cells.OPERATING`.

    Returns
    -------
    DataFrame
        Columns `EPISODE_COLUMNS`, as in `limit_episodes`.

    Raises
    ------
    OutletError
        A watch names a figure or window that is not there.
    """
    found = []
    for watch in unit.watches:
        figure = _watched(watch, frames)
        end_us = np.asarray(pd.DatetimeIndex(figure.index).tz_convert(None), dtype="datetime64[us]").astype(
            np.int64
        )
        value, half_width = (figure[field].to_numpy(np.float64) for field in ("value", "half_width"))
        found.append(limit_episodes(watch, end_us, value, half_width, operating))
    return whole_episodes(found)


def whole_episodes(found: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Put episodes together, in the order they were raised.

    Parameters
    ----------
    found : sequence of DataFrame
        As `limit_episodes` gives them; those raised at one time keep their order.

    Returns
    -------
    DataFrame
        Columns `EPISODE_COLUMNS`.
    """
    whole = pd.concat([one for one in found if len(one)] or [_none()], ignore_index=True)
    return whole.sort_values("raised", kind="stable", ignore_index=True)


def limit_episodes(
    watch: Watch, end_us: Times, value: Array, half_width: Array, operating: NDArray[np.int8]
) -> pd.DataFrame:
    """Episodes of one watch: raised after the on-delay beyond a limit, cleared after the off-delay inside.

    Parameters
    ----------
    watch : Watch
        Limits and deadband in the figure's unit, delays.
    end_us : ndarray of int64, shape (rows,)
        Window ends, ascending [us UTC].
    value : ndarray, shape (rows,)
        The figure in the mode that the watch asks for. NaN neither raises nor clears: the condition stays
        what it was, and missing time counts towards neither delay and interrupts neither.
    half_width : ndarray, shape (rows,)
        95 % half-width of the figure. The value alone raises; this only says how sure that was.
    operating : ndarray of int8, shape (rows,)
        Condition of the cell that ends at each row. Down, starting and turned down suppress: the episode
        is there all the same and says so.

    Returns
    -------
    DataFrame
        Columns `EPISODE_COLUMNS`. Times in UTC; `first_crossed` begins the on-delay; `cleared` is NaT while
        open; `announced` is the first time from the raise on that was not suppressed, NaT if none
        (`suppressed` is then true); `worst` at `worst_at` since the first crossing; `sure` is the share of
        the seen time since then in which the whole 95 % interval lay beyond the limit.

    Raises
    ------
    ValueError
        The arrays differ in length.

    Notes
    -----
    ANSI/ISA-18.2-2016 for the terms (quoted in an open teaching text; the standard itself not seen). A value
    on the limit is inside.
    """
    if not len(end_us) == len(value) == len(half_width) == len(operating):
        msg = f"rows differ: {len(end_us)} ends, {len(value)} values, {len(operating)} operating conditions"
        raise ValueError(msg)
    idle = np.isin(operating, SUPPRESSED)
    parts = []
    for side, limit, way in (("low", watch.low, -1.0), ("high", watch.high, 1.0)):
        if limit is not None:
            counted = _counted(way * value, end_us, watch)
            found = _raised(counted, way * limit, half_width, end_us, watch=watch)
            parts.append(episodes_frame(watch, side, limit, found, (end_us, way * counted, idle)))
    return whole_episodes(parts)


def _watched(watch: Watch, frames: Mapping[timedelta, pd.DataFrame]) -> pd.DataFrame:
    """Give the fields of the figure that a watch names."""
    if watch.window not in frames:
        raise OutletError(
            f"watch '{watch.name}': the unit has no window of {watch.window}",
            remedy=f"Write one of {', '.join(str(window) for window in frames)}.",
        )
    frame = frames[watch.window]
    names = frame.columns.get_level_values(0).unique()
    if watch.figure not in names:
        raise OutletError(
            f"watch '{watch.name}': the unit has no figure '{watch.figure}'",
            remedy=f"Write one of {', '.join(names)}.",
        )
    mode = MODES[1] if watch.steady else MODES[0]
    return pd.DataFrame({field: frame[watch.figure, mode, field] for field in ("value", "half_width")})


def _counted(value: Array, end_us: Times, watch: Watch) -> Array:
    """The value that so many of the last windows reach or pass, windows that do not overlap."""
    if watch.among == 1 or not len(value):
        return value
    back = np.arange(watch.among)[:, None] * (watch.window // MICROSECOND)
    place = np.searchsorted(end_us, end_us - back)
    there = np.isin(end_us - back, end_us) & np.isfinite(value[place])
    ordered = np.sort(np.where(there, value[place], -np.inf), axis=0)
    return np.where(np.isfinite(value), ordered[watch.among - watch.count], np.nan)


def _raised(value: Array, limit: float, half_width: Array, end_us: Times, *, watch: Watch) -> Raised:
    """Find the episodes above a high limit; a low one is the same with the signs of both turned."""
    row = np.flatnonzero(np.isfinite(value))
    seen = value[row]
    beyond, inside = seen > limit, seen <= limit - watch.deadband
    if not beyond.any():
        nothing = np.zeros(0, dtype=np.intp)
        return Raised(nothing, nothing, nothing, nothing, np.zeros(0))
    clock, begun = _seen_clock(end_us, row), _run_starts(beyond)
    on = beyond & (clock - clock[begun] >= watch.on_delay // MICROSECOND)
    off = inside & (clock - clock[_run_starts(inside)] >= watch.off_delay // MICROSECOND)
    raised, cleared = latched(on, off)
    first = begun[raised]
    stop = np.append(row, len(value))[cleared]
    worst = np.array(
        [row[a + seen[a:z].argmax()] for a, z in zip(first, cleared, strict=True)], dtype=np.intp
    )
    sure = np.concatenate([[0], np.cumsum(seen - half_width[row] > limit)])
    return Raised(
        first=row[first],
        raised=row[raised],
        cleared=stop,
        worst=worst,
        sure=(sure[cleared] - sure[first]) / (cleared - first),
    )


def _seen_clock(end_us: Times, row: Places) -> Times:
    """Time that has passed at each seen row, counting only steps between neighbours that were both seen."""
    step = np.diff(end_us).min(initial=np.iinfo(np.int64).max)
    passed = np.diff(end_us[row])
    return np.concatenate([[0], np.cumsum(np.where(passed == step, passed, 0))])


def _run_starts(flags: Mask) -> Places:
    """Give for each row the first row of the run it is in, where the flag stands."""
    starts = np.flatnonzero(flags & ~np.concatenate([[False], flags[:-1]]))
    begun = np.zeros(len(flags), dtype=np.intp)
    begun[starts] = starts
    return np.maximum.accumulate(begun)


def latched(on: Mask, off: Mask) -> tuple[Places, Places]:
    """Give the rows where a latch goes on, and where it next goes off.

    Parameters
    ----------
    on, off : ndarray of bool, shape (n,)
        What turns it on and what turns it off; `on` wins.

    Returns
    -------
    tuple of ndarray
        As many rows off as on; the number of rows where it does not go off.
    """
    event = np.where(on | off, np.arange(len(on)), -1)
    last = np.maximum.accumulate(event)
    state = np.concatenate([[False], (last >= 0) & on[last]])
    change = np.flatnonzero(state[1:] != state[:-1])
    raised, cleared = change[::2], change[1::2]
    return raised, np.append(cleared, len(on))[: len(raised)]


def episodes_frame(
    watch: Watch, side: str, limit: float | Array, found: Raised, rows: tuple[Times, Array, Mask]
) -> pd.DataFrame:
    """Tell episodes of one side by times and values.

    Parameters
    ----------
    watch : Watch
        Whose they are.
    side : str
        'low' or 'high'.
    limit : float or ndarray
        What the figure was beyond, for all of them or one for each [the figure's unit].
    found : Raised
        Places in the rows.
    rows : tuple of ndarray
        Window ends [us UTC], values, and whether the unit was not running then.

    Returns
    -------
    DataFrame
        Columns `EPISODE_COLUMNS`.
    """
    end_us, value, idle = rows
    count = len(found.raised)
    free = np.append(np.where(idle, len(idle), np.arange(len(idle))), len(idle))
    announced = np.minimum.accumulate(free[::-1])[::-1][found.raised]
    announced = np.where(announced < found.cleared, announced, len(idle))
    idle_rows = np.concatenate([[0], np.cumsum(idle)])
    step_h = np.diff(end_us).min(initial=np.iinfo(np.int64).max) / HOUR_US if len(end_us) > 1 else 0.0
    return pd.DataFrame(
        {
            "watch": [watch.name] * count,
            "figure": [watch.figure] * count,
            "window": pd.TimedeltaIndex([watch.window] * count),
            "side": [side] * count,
            "limit": np.full(count, limit),
            "priority": [watch.priority] * count,
            "first_crossed": _instants(end_us, found.first),
            "raised": _instants(end_us, found.raised),
            "cleared": _instants(end_us, found.cleared),
            "announced": _instants(end_us, announced),
            "worst": value[found.worst],
            "worst_at": _instants(end_us, found.worst),
            "sure": found.sure,
            "suppressed": announced == len(idle),
            "suppressed_h": step_h * (idle_rows[found.cleared] - idle_rows[found.raised]),
        }
    )


def _instants(end_us: Times, places: Places) -> pd.DatetimeIndex:
    """Window ends at some places; NaT past the last row."""
    padded = np.append(end_us.astype("datetime64[us]"), np.datetime64("NaT"))
    return pd.DatetimeIndex(padded[places]).tz_localize("UTC")


def _none() -> pd.DataFrame:
    """No episodes, with every column of its kind."""
    kinds = dict.fromkeys(("limit", "worst", "sure", "suppressed_h"), "float64")
    times = ("first_crossed", "raised", "cleared", "announced", "worst_at")
    kinds |= dict.fromkeys(times, "datetime64[us, UTC]")
    kinds |= {"suppressed": "bool", "window": "timedelta64[us]"}
    return pd.DataFrame({name: pd.Series(dtype=kinds.get(name, "str")) for name in EPISODE_COLUMNS})
