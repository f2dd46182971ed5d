"""A watch tried on the past: which episodes it would have given, what it caught and how late, what was false.

What is known to have happened comes from people: alerts that they closed as reactor or instrument, and events
of the unit file. An episode that lies on an alert nobody has closed yet is not judged. One that lies on
nothing known counts as false, since nobody found a cause for it.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.cells import RUNNING
from ingest.errors import OutletError
from ingest.unit import Unit, Watch
from monitor.alerts import Alert, State
from monitor.drift import HOUR_US, limit_episodes
from monitor.figures import Figure
from monitor.wording import decimals_for, utc

CAUGHT, EXPLAINED, OPEN, FALSE, SUPPRESSED = WORDS = (
    "caught",
    "explained",
    "not judged yet",
    "false",
    "suppressed by design",
)
REACH = timedelta(days=7)  # after an event of the unit file, in which an episode belongs to it
LEAD = timedelta(days=1)  # before something known: an episode that began earlier was not about it
MONTH_H = 30.4375 * 24.0
STEPS = 25  # limits on a curve
SPREADS = 3.0  # of the figure, by which the limits of a curve lie on either side

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Known:
    """Something that happened, or may have: from `first` to `last`, UTC; `word` is one of WORDS."""

    name: str
    first: datetime
    last: datetime
    word: str


@dataclass(frozen=True, slots=True)
class Rows:
    """What a watch looks at, r rows: window ends [us UTC], values, half-widths, operating condition."""

    end_us: NDArray[np.int64]
    value: Array
    half_width: Array
    operating: NDArray[np.int8]

    @property
    def running_h(self) -> float:
        """Give the running hours that the rows tell of."""
        if len(self.end_us) < 2:
            return 0.0
        return float((self.operating == RUNNING).sum() * np.diff(self.end_us).min() / HOUR_US)


@dataclass(frozen=True, slots=True)
class Tried:
    """One episode of a trial: times UTC, worst value, how it is judged, and by what."""

    raised: datetime
    cleared: datetime | None
    worst: float
    word: str
    by: str


@dataclass(frozen=True, slots=True)
class Catch:
    """Something known, and how long after its beginning it was told [h]; below zero earlier; None: missed."""

    name: str
    first: datetime
    late_h: float | None


@dataclass(frozen=True, slots=True)
class Trial:
    """What a watch would have given over some past time."""

    watch: Watch
    first: datetime
    last: datetime
    running_h: float
    tried: tuple[Tried, ...]
    catches: tuple[Catch, ...]

    def count(self, word: str) -> int:
        """Count the episodes that were judged so.

        Parameters
        ----------
        word : str
            One of WORDS.
        """
        return sum(one.word == word for one in self.tried)

    @property
    def false_per_month(self) -> float:
        """Give the false ones per month of running; NaN where it never ran."""
        return self.count(FALSE) / self.running_h * MONTH_H if self.running_h > 0 else math.nan

    @property
    def delay_h(self) -> float:
        """Give the mean delay of what was caught [h]; NaN where nothing was."""
        late = [one.late_h for one in self.catches if one.late_h is not None]
        return sum(late) / len(late) if late else math.nan

    @property
    def missed(self) -> int:
        """Count what is known and was not caught."""
        return sum(one.late_h is None for one in self.catches)


@dataclass(frozen=True, slots=True)
class Point:
    """One limit of a curve [figure's unit]: false ones per month, mean delay [h], known things missed."""

    low: float | None
    high: float | None
    false_per_month: float
    delay_h: float
    caught: int
    missed: int
    is_asked: bool


def known_of(
    unit: Unit, found: Iterable[tuple[Alert, State]], last: datetime, begun: Mapping[str, datetime]
) -> tuple[Known, ...]:
    """Gather what is known to have happened, and what has not been judged yet.

    Parameters
    ----------
    unit : Unit
        Its events.
    found : iterable of (Alert, State)
        Its alerts.
    last : datetime
        End of the record.
    begun : mapping of str to datetime
        When what an alert is about began, by its verdict; else that is when its limit was first crossed.

    Returns
    -------
    tuple of Known
        In the order of time. Notes of the unit file have to be caught, as what was closed as reactor or
        instrument has; its other events, and what was closed as data or planned, explain an episode.
    """
    events = [
        Known(f"{one.kind}: {one.name}", one.at, one.at + REACH, CAUGHT if one.kind == "note" else EXPLAINED)
        for one in unit.events
    ]
    words = {"reactor": CAUGHT, "instrument": CAUGHT, "data": EXPLAINED, "planned": EXPLAINED, "": OPEN}
    alerts = [
        Known(
            _name(alert, state),
            begun.get(alert.id, alert.first_crossed),
            alert.cleared or last,
            words[state.closed_as],
        )
        for alert, state in found
        if state.closed_as in words and not alert.withdrawn and not alert.suppressed
    ]
    return tuple(sorted((*events, *alerts), key=lambda one: one.first))


def _name(alert: Alert, state: State) -> str:
    return f"{alert.id}, closed as {state.closed_as}" if state.closed_as else f"{alert.id}, not closed yet"


def proposed(unit: Unit, figures: Sequence[Figure], watch: Watch) -> Watch:
    """Check that a watch can be tried.

    Parameters
    ----------
    unit : Unit
        Has to have its window.
    figures : sequence of Figure
        Have to hold its figure.
    watch : Watch
        With limits, or a test for drift.

    Returns
    -------
    Watch
        The same.

    Raises
    ------
    OutletError
        It names a figure or window that is not there, or its limits cannot be.
    """
    names = [figure.name for figure in figures]
    low, high = watch.low, watch.high
    if watch.figure not in names:
        raise _cannot(f"there is no figure {watch.figure!r}", f"Write one of {', '.join(names)}.")
    if watch.window not in unit.windows:
        raise _cannot("the unit has no such window", f"Write one of {_windows(unit)}.")
    if watch.test != "limits" and (low is not None or high is not None):
        raise _cannot("a test for drift has no limits", "Try a figure and a window instead of that watch.")
    if watch.test == "limits" and low is None and high is None:
        raise _cannot("there is no limit", "Write a low or a high one, or both.")
    if low is not None and high is not None and low + watch.deadband >= high:
        raise _cannot(
            f"{low:g} with a deadband of {watch.deadband:g} is not below {high:g}",
            "Write the lower limit as low, and less of a deadband.",
        )
    return watch


def _windows(unit: Unit) -> str:
    return ", ".join(f"{window / timedelta(hours=1):g}h" for window in unit.windows)


def _cannot(why: str, remedy: str) -> OutletError:
    return OutletError(f"these limits cannot be tried: {why}", remedy=remedy)


def tried(watch: Watch, rows: Rows, known: Sequence[Known]) -> Trial:
    """Try limits on the past.

    Parameters
    ----------
    watch : Watch
        With limits.
    rows : Rows
        What it looks at; not changed.
    known : sequence of Known
        From `known_of`.

    Returns
    -------
    Trial
    """
    found = limit_episodes(watch, rows.end_us, rows.value, rows.half_width, rows.operating)
    return judged(watch, found, rows, known)


def judged(watch: Watch, episodes: pd.DataFrame, rows: Rows, known: Sequence[Known]) -> Trial:
    """Hold the episodes of a watch against what is known.

    Parameters
    ----------
    watch : Watch
        Whose they are.
    episodes : DataFrame
        Columns `drift.EPISODE_COLUMNS`; not changed.
    rows : Rows
        The time that was looked at.
    known : sequence of Known
        From `known_of`.

    Returns
    -------
    Trial
        Something known is caught by the first episode that was told within a day before it began, or
        while it lasted.
    """
    if not len(rows.end_us):
        raise OutletError("there are no figures in this span", remedy="Choose another span.")
    first, last = utc(int(rows.end_us[0])), utc(int(rows.end_us[-1]))
    there = [one for one in known if one.last >= first and one.first <= last]
    told = [row for row in episodes.to_dict("records") if first <= row["raised"] <= last]
    moments = [None if row["suppressed"] else row["announced"].to_pydatetime() for row in told]
    wanted = [one for one in there if one.word == CAUGHT and one.first >= first]
    return Trial(
        watch=watch,
        first=first,
        last=last,
        running_h=rows.running_h,
        tried=tuple(
            Tried(
                row["raised"].to_pydatetime(),
                None if pd.isna(row["cleared"]) else row["cleared"].to_pydatetime(),
                float(row["worst"]),
                *_judgement(moment, there),
            )
            for row, moment in zip(told, moments, strict=True)
        ),
        catches=tuple(Catch(one.name, one.first, _late_h(one, moments)) for one in wanted),
    )


def _judgement(moment: datetime | None, known: Sequence[Known]) -> tuple[str, str]:
    """How an episode is judged, and by what; the strongest word wins."""
    if moment is None:
        return SUPPRESSED, ""
    about = [one for one in known if _belongs(moment, one)]
    best = min(about, key=lambda one: WORDS.index(one.word), default=None)
    return (best.word, best.name) if best else (FALSE, "")


def _belongs(moment: datetime, one: Known) -> bool:
    return one.first - LEAD <= moment <= one.last


def _late_h(one: Known, moments: Sequence[datetime | None]) -> float | None:
    late = [
        (moment - one.first) / timedelta(hours=1) for moment in moments if moment and _belongs(moment, one)
    ]
    return min(late, default=None)


def curve(watch: Watch, rows: Rows, known: Sequence[Known]) -> tuple[Point, ...]:
    """Try limits on either side of those asked for.

    Parameters
    ----------
    watch : Watch
        With limits; where it has two, both move apart or together.
    rows : Rows
        What it looks at; not changed.
    known : sequence of Known
        From `known_of`.

    Returns
    -------
    tuple of Point
        From the tightest limits to the widest; the limits asked for are among them.
    """
    return tuple(_point(one, tried(one, rows, known), asked=one == watch) for one in _moved(watch, rows))


def _moved(watch: Watch, rows: Rows) -> Iterator[Watch]:
    """The watch with its limits wider and wider, by steps that the spread of the figure makes sensible."""
    seen = rows.value[np.isfinite(rows.value) & (rows.operating == RUNNING)]
    spread = 1.4826 * float(np.median(np.abs(seen - np.median(seen)))) if seen.size else 0.0
    if spread <= 0:
        yield watch
        return
    places = decimals_for(spread)
    steps = np.unique(np.round(np.linspace(-SPREADS, SPREADS, STEPS) * spread, places))
    for step in np.union1d(steps, [0.0]).tolist():
        low = None if watch.low is None else round(watch.low - step, 9)
        high = None if watch.high is None else round(watch.high + step, 9)
        if low is None or high is None or low + watch.deadband < high:
            yield replace(watch, low=low, high=high)


def _point(watch: Watch, trial: Trial, *, asked: bool) -> Point:
    caught = len(trial.catches) - trial.missed
    return Point(
        watch.low, watch.high, trial.false_per_month, trial.delay_h, caught, trial.missed, is_asked=asked
    )
