"""How the unit stands now: the key figures against their limits, since when, and the open episodes."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.chemistry import ELEMENT_NAMES
from ingest.unit import Unit, Watch
from monitor import wording
from monitor.axes import microseconds
from monitor.figures import Figure
from monitor.series import runs
from monitor.windows import REASONS
from monitor.wording import PRIORITY_RANK, Standing, Told

MODES = ("as operated", "steady")
SHIFT = timedelta(hours=8)


@dataclass(frozen=True, slots=True)
class Reading:
    """One figure of one window: value and half-width [figure's unit], coverage 0..1, reason when missing."""

    value: float
    half_width: float
    coverage: float
    reason: str
    end: datetime  # of the window, zone-aware UTC


@dataclass(frozen=True, slots=True)
class Row:
    """One key figure as the first view shows it; readings by (window, mode)."""

    figure: Figure
    watch: Watch | None
    standing: Standing
    since: datetime | None  # None: longer than the series that was looked at
    readings: Mapping[tuple[timedelta, str], Reading]


def key_figures(unit: Unit, figures: Sequence[Figure]) -> tuple[Figure, ...]:
    """Choose the figures that the first view shows, in the order in which they are read.

    Parameters
    ----------
    unit : Unit
        Names the key element.
    figures : sequence of Figure
        All figures of the unit.

    Returns
    -------
    tuple of Figure
        Those of the six that the unit has.
    """
    element = ELEMENT_NAMES.get(unit.key_element, unit.key_element)
    wanted = (
        "conversion", "overall selectivity to all unwanted", "selectivity on converted", "yield on feed",
        f"{element} closure", "converted closure",
    )  # fmt: skip
    by_name = {figure.name: figure for figure in figures}
    return tuple(by_name[name] for name in wanted if name in by_name)


def reading(frame: pd.DataFrame, figure: str, mode: str) -> Reading | None:
    """Take the newest window of one figure.

    Parameters
    ----------
    frame : DataFrame
        Columns (figure, mode, field), index of window ends.
    figure, mode : str
        Which column group.

    Returns
    -------
    Reading or None
        None when there is no window at all.
    """
    if frame.empty or (figure, mode, "value") not in frame.columns:
        return None
    last = {
        field: frame[(figure, mode, field)].iloc[-1]
        for field in ("value", "half_width", "coverage", "reason")
    }
    return Reading(
        value=float(last["value"]),
        half_width=float(last["half_width"]),
        coverage=float(last["coverage"]),
        reason=REASONS[int(last["reason"])],
        end=pd.Timestamp(frame.index[-1]).to_pydatetime(),
    )


def watch_on(unit: Unit, figure: str) -> Watch | None:
    """Find the watch whose limits are drawn with a figure: the 8-hour one where there are several.

    Parameters
    ----------
    unit : Unit
        Its watches.
    figure : str
        Name of the figure.

    Returns
    -------
    Watch or None
        None when no limit is set on this figure.
    """
    watches = [watch for watch in unit.watches if watch.figure == figure]
    return min(watches, key=lambda w: abs(w.window - SHIFT), default=None)


def mode_of(watch: Watch | None) -> str:
    """Name the mode that a watch looks at.

    Parameters
    ----------
    watch : Watch or None
        None: no watch, as operated.

    Returns
    -------
    str
        One of MODES.
    """
    return MODES[1] if watch and watch.steady else MODES[0]


def row(unit: Unit, figure: Figure, latest: Mapping[timedelta, pd.DataFrame], recent: pd.DataFrame) -> Row:
    """Put one key figure together: its windows, how it stands, and since when.

    Parameters
    ----------
    unit : Unit
        Gives the watches.
    figure : Figure
        The figure.
    latest : mapping of timedelta to DataFrame
        Window -> figures of at least the newest window end.
    recent : DataFrame
        The watched window and mode of this figure over the last days: `value`, index of window ends.

    Returns
    -------
    Row
        Standing "missing" where the watched window has no value.
    """
    watch = watch_on(unit, figure.name)
    readings = {
        (length, mode): found
        for length, frame in latest.items()
        for mode in MODES
        if (found := reading(frame, figure.name, mode)) is not None
    }
    judged = readings.get((watch.window if watch else SHIFT, mode_of(watch)))
    low, high = (watch.low, watch.high) if watch else (None, None)
    value, half = (judged.value, judged.half_width) if judged else (math.nan, math.nan)
    held = wording.standing(value, half, low=low, high=high, unit=figure.unit)
    return Row(figure, watch, held, since(recent["value"], low=low, high=high), readings)


def since(value: pd.Series[float], *, low: float | None, high: float | None) -> datetime | None:
    """Find the window end from which a value has stood on its present side of the limits.

    Parameters
    ----------
    value : Series, shape (t,)
        The figure [its unit], NaN where missing; index of window ends, UTC.
    low, high : float or None
        Limits [figure's unit].

    Returns
    -------
    datetime or None
        None when the side did not change within the series, or when there is nothing to judge.
    """
    numbers = value.to_numpy(float)
    side = np.zeros(numbers.size, np.int8)
    side[numbers < (-np.inf if low is None else low)] = 1
    side[numbers > (np.inf if high is None else high)] = 2
    side[~np.isfinite(numbers)] = 3
    changed = np.flatnonzero(np.diff(side))
    if (low is None and high is None) or changed.size == 0:
        return None
    return pd.Timestamp(value.index[changed[-1] + 1]).to_pydatetime()


def operating_runs(cells: pd.DataFrame, words: Sequence[str], step: timedelta) -> pd.DataFrame:
    """Join cells of one operating condition into spans.

    Parameters
    ----------
    cells : DataFrame, shape (t, >= 1)
        Column `operating` (index into `words`), index of cell starts, UTC.
    words : sequence of str
        The operating conditions.
    step : timedelta
        Length of a cell.

    Returns
    -------
    DataFrame
        Columns start, end (UTC) and word, in order of start.
    """
    start_us, code = microseconds(cells.index), cells["operating"].to_numpy()
    step_us = int(step / timedelta(microseconds=1))
    spans = []
    for index, word in enumerate(words):
        begin, end = runs(start_us, code == index, step_us=step_us)
        spans.append(pd.DataFrame({"start": _utc(begin), "end": _utc(end), "word": word}))
    return pd.concat(spans, ignore_index=True).sort_values("start", ignore_index=True)


def _utc(us: NDArray[np.int64]) -> pd.DatetimeIndex:
    return pd.DatetimeIndex(us.astype("datetime64[us]")).tz_localize("UTC")


def shaded(spans: pd.DataFrame, *, steady: bool, zone: str) -> pd.DataFrame:
    """Choose the time that a figure leaves out: down always, all but running for the steady one.

    Parameters
    ----------
    spans : DataFrame
        As `operating_runs` gives it.
    steady : bool
        Whether the steady figure is drawn.
    zone : str
        IANA name of the plant's zone, for the words.

    Returns
    -------
    DataFrame
        Columns start, end, word, text.
    """
    left_out = (spans["word"] != "running") if steady else spans["word"].isin(["down", "not known"])
    kept = spans[left_out].reset_index(drop=True)
    return kept.assign(
        text=[_span_words(a, b, zone) for a, b in zip(kept["start"], kept["end"], strict=True)]
    )


def _span_words(start: pd.Timestamp, end: pd.Timestamp, zone: str) -> str:
    """Write a span in plant time with its length."""
    ends = f"{wording.local_time(start, zone)} to {wording.local_time(end, zone)}"
    return f"{ends} ({wording.duration(end - start)})"


def drift_watches(unit: Unit) -> frozenset[str]:
    """Name the watches that hold a figure against its expectation.

    Parameters
    ----------
    unit : Unit
        Its watches.
    """
    return frozenset(watch.name for watch in unit.watches if watch.test != "limits")


def told(
    episodes: pd.DataFrame, figures: Mapping[str, Figure], drifts: frozenset[str] = frozenset()
) -> list[Told]:
    """Make what the sentences need out of the episodes of a unit.

    Parameters
    ----------
    episodes : DataFrame
        One row per episode: figure, side, limit, raised, cleared, worst, worst_at.
    figures : mapping of str to Figure
        Name -> figure.
    drifts : frozenset of str
        Watches whose limit is what was expected.

    Returns
    -------
    list of Told
        In the order of the rows.
    """
    return [
        _told(row, figures.get(str(row["figure"])), drift=row.get("watch") in drifts)
        for row in episodes.to_dict("records")
    ]


def _told(row: Mapping[Hashable, Any], figure: Figure | None, *, drift: bool) -> Told:
    """One row; an episode of a figure that the unit no longer has keeps its bare name."""
    return Told(
        figure=figure.label if figure else str(row["figure"]),
        unit=figure.unit if figure else "",
        side=str(row["side"]),
        limit=float(row["limit"]),
        raised=row["raised"].to_pydatetime(),
        cleared=None if pd.isna(row["cleared"]) else row["cleared"].to_pydatetime(),
        worst=float(row["worst"]),
        worst_at=None if pd.isna(row["worst_at"]) else row["worst_at"].to_pydatetime(),
        drift=drift,
    )


def worst_first(episodes: pd.DataFrame) -> pd.DataFrame:
    """Order open episodes: suppressed ones last, by priority, by the share of the limit beyond it, by age.

    Parameters
    ----------
    episodes : DataFrame
        One row per episode: suppressed, priority, cleared, worst, limit, raised.

    Returns
    -------
    DataFrame
        The open ones only.
    """
    still = episodes[episodes["cleared"].isna()]
    rank = still["priority"].map(PRIORITY_RANK).fillna(len(PRIORITY_RANK))
    beyond = -(still["worst"] - still["limit"]).abs() / still["limit"].abs().clip(lower=1e-12)
    order = still[["suppressed", "raised"]].assign(rank=rank, beyond=beyond)
    return still.loc[order.sort_values(["suppressed", "rank", "beyond", "raised"]).index]


def marked(
    episodes: pd.DataFrame,
    figures: Mapping[str, Figure],
    *,
    now: datetime,
    zone: str,
    drifts: frozenset[str] = frozenset(),
) -> pd.DataFrame:
    """Turn episodes into spans for a chart: an open one reaches to the end of what is known.

    Parameters
    ----------
    episodes : DataFrame
        As for `told`.
    figures : mapping of str to Figure
        Name -> figure.
    now : datetime
        End of what is known, zone-aware.
    zone : str
        IANA name of the plant's zone.
    drifts : frozenset of str
        Watches whose limit is what was expected.

    Returns
    -------
    DataFrame
        Columns start, end, word, text.
    """
    tales = told(episodes, figures, drifts)
    words = [t.beyond.removesuffix(f" {t.unit}") for t in tales]
    text = [wording.episode(t, value=math.nan, half_width=math.nan, now=now, zone=zone) for t in tales]
    start = pd.to_datetime(episodes["raised"], utc=True)
    end = pd.to_datetime(episodes["cleared"], utc=True).fillna(pd.Timestamp(now))
    return pd.DataFrame({"start": start, "end": end, "word": words, "text": text}).reset_index(drop=True)
