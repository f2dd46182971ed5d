"""A watch tried on what a store holds: figures, operating condition, alerts; nothing is written."""

from __future__ import annotations

from datetime import datetime, timedelta
from pathlib import Path

import numpy as np

from ingest.ledger import Store
from ingest.unit import Unit, Watch
from monitor import desk, store
from monitor.amounts import amount_names
from monitor.axes import microseconds
from monitor.dossier import verdicts
from monitor.drift import MICROSECOND, whole_episodes
from monitor.drifting import drifted
from monitor.figures import figures_of
from monitor.trials import Known, Point, Rows, Trial, curve, judged, known_of, proposed, tried
from monitor.watched import BEGINNING
from monitor.windows import MODES
from monitor.wording import utc


def rows_of(folder: Path, unit: Unit, watch: Watch, span: tuple[datetime, datetime]) -> Rows:
    """Read what a watch looks at.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    watch : Watch
        Names figure, window and mode.
    span : tuple of datetime
        First and last window end, both included, zone-aware.

    Returns
    -------
    Rows
    """
    mode = MODES[1] if watch.steady else MODES[0]
    frame = store.figures(folder, unit.key, watch.window, ((watch.figure, mode),), span)
    if frame.empty:
        nothing = np.zeros(0)
        return Rows(np.zeros(0, np.int64), nothing, nothing, np.zeros(0, np.int8))
    cells = store.operating(folder, unit.key, (span[0] - unit.cell, span[1]))
    end_us, start_us = microseconds(frame.index), microseconds(cells.index)
    place = np.searchsorted(start_us, end_us - unit.cell // MICROSECOND)
    value, half_width = (
        frame[watch.figure, mode, field].to_numpy(float) for field in ("value", "half_width")
    )
    return Rows(end_us, value, half_width, cells["operating"].to_numpy(np.int8)[place])


def trial(
    folder: Path, unit: Unit, watch: Watch, span: tuple[datetime, datetime], *, now: datetime
) -> tuple[Trial, tuple[Point, ...]]:
    """Try a watch on a span of the past, and limits on either side of its own.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    watch : Watch
        Real or proposed.
    span : tuple of datetime
        First and last window end, both included, zone-aware.
    now : datetime
        With a zone.

    Returns
    -------
    Trial
    tuple of Point
        Empty for a test for drift.

    Raises
    ------
    OutletError
        It cannot be tried, or nothing is stored of that span.
    """
    figures = figures_of(unit, amount_names(unit))
    proposed(unit, figures, watch)
    rows = rows_of(folder, unit, watch, span)
    known = _known(folder, unit, span[1], now)
    if watch.test == "limits":
        return tried(watch, rows, known), curve(watch, rows, known)
    view = Store(folder).snapshot()
    named = {figure.name: figure for figure in figures}
    nothing = whole_episodes([])
    found = drifted(view, unit, watch, figures=named, stored=nothing, since_us=BEGINNING)
    return judged(watch, found.episodes, rows, known), ()


def _known(folder: Path, unit: Unit, last: datetime, now: datetime) -> tuple[Known, ...]:
    """What is known to have happened, each since when its verdict says that it began."""
    found = desk.read(folder, unit.key, now)
    told = verdicts(found, store.episodes(folder, unit.key))
    begun = {name: utc(one.onset_us) for name, one in told.items() if one.onset_us is not None}
    return known_of(unit, found, last, begun)


def whole_span(folder: Path, unit: Unit, length: timedelta | None) -> tuple[datetime, datetime]:
    """Give the last part of the record.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    length : timedelta or None
        How much of it; None for all.

    Returns
    -------
    tuple of datetime
        UTC.
    """
    first, last = store.days(folder, unit, None, None)
    known = store.edges(folder, unit.key)
    begin = known[0].to_pydatetime() if known else first
    return (begin if length is None else max(begin, last - length)), last
