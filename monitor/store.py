"""What a pass left in the store, as the frames that people look at; opened anew for every question."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import pandas as pd
import pyarrow as pa

from ingest.archive import SITE, STAGE
from ingest.balance import problem_of
from ingest.cells import RUNNING, Cells, cells_from_frame
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.parts import instant_us
from ingest.readings import read_months
from ingest.records import Export
from ingest.screen import Finding, tally
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor import deliveries
from monitor.amounts import amounts_of
from monitor.axes import microseconds
from monitor.figures import figures_of
from monitor.layout import BAR, figure_stage, instrument_frame, unflat
from monitor.windows import FIELDS, SPAN_FIELDS, window_at

NEXT = timedelta(microseconds=1)  # the store reads up to, not including
EPISODE_TIMES = ("raised", "cleared", "worst_at")


def version(folder: Path) -> str | None:
    """Tell in a few microseconds whether anything was committed since the last look.

    Parameters
    ----------
    folder : Path
        The store.

    Returns
    -------
    str or None
        Another text after every commit; None when there is no store.
    """
    ledger, ahead = folder / "ledger.sqlite", folder / "ledger.sqlite-wal"
    if not ledger.exists():
        return None
    stats = []
    for path in (ledger, ahead):
        with suppress(FileNotFoundError):  # who closes the ledger last takes the file ahead of it away
            stats.append(path.stat())
    # A reader makes an empty write-ahead file and takes it away again: that is no commit.
    return " ".join(f"{s.st_ino}:{s.st_mtime_ns}:{s.st_size}" for s in stats if s.st_size)


def edges(folder: Path, unit: str) -> tuple[pd.Timestamp, pd.Timestamp] | None:
    """Give the starts of the first and of the last cell.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.

    Returns
    -------
    tuple of Timestamp or None
        None when the unit has no cells.
    """
    return Store(folder).look(lambda snapshot: _edges(snapshot, unit))


def _edges(snapshot: Snapshot, unit: str) -> tuple[pd.Timestamp, pd.Timestamp] | None:
    months = snapshot.months(unit, "cells")
    if not months:
        return None
    after_first = pd.Timestamp(months[0], tz="UTC") + pd.offsets.MonthBegin(1)
    head = _frame(snapshot.read(unit, "cells", last=after_first, columns=["start"]), "start")
    tail = _frame(
        snapshot.read(unit, "cells", first=pd.Timestamp(months[-1], tz="UTC"), columns=["start"]), "start"
    )
    return head.index[0], tail.index[-1]


def cells(folder: Path, unit: Unit, span: tuple[datetime, datetime]) -> Cells:
    """Give the cells of a span.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    span : tuple of datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    Cells

    Raises
    ------
    StoreError
        There are none.
    """
    table = Store(folder).read(unit.key, "cells", first=span[0], last=span[1])
    if not table.num_rows:
        raise _nothing(folder, unit.key, f"no cells of {unit.key} from {span[0]:%F} to {span[1]:%F}")
    return cells_from_frame(unit, _frame(table, "start"))


def findings(folder: Path, unit: Unit, span: tuple[datetime, datetime]) -> tuple[Finding, ...]:
    """Ask every check what it says of the readings of a span.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    span : tuple of datetime
        From the first reading to before the second, zone-aware.

    Returns
    -------
    tuple of Finding
        For each instrument with a tag and each check, in their order. At both ends a check may look at
        fewer readings than it did when the cells were made.
    """
    first, last = (instant_us(edge) for edge in span)
    tags = [one.tag for one in unit.instruments if one.tag is not None]

    def look(view: Snapshot) -> tuple[Finding, ...]:
        paths = view.paths(SITE, STAGE, first=first, last=last)
        return tally(unit, read_months(paths, tags, first, last))

    return Store(folder).look(look)


def last_running(folder: Path, unit: Unit, length: timedelta) -> Cells:
    """Give the cells of some time up to and with the last in which the unit was running.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    length : timedelta
        How far back from there.

    Returns
    -------
    Cells

    Raises
    ------
    StoreError
        The unit never ran as far as the store tells.
    """
    snapshot = Store(folder).snapshot()
    for month in reversed(snapshot.months(unit.key, "cells")):
        first = pd.Timestamp(month, tz="UTC")
        span = (first, first + pd.offsets.MonthBegin(1))
        condition = operating(folder, unit.key, span)["operating"]
        running = condition.index[condition == RUNNING]
        if len(running):
            last = running[-1] + unit.cell
            return cells(folder, unit, (last - length, last))
    raise _nothing(folder, unit.key, f"no cell in which {unit.key} was running")


def days(folder: Path, unit: Unit, first: date | None, last: date | None) -> tuple[datetime, datetime]:
    """Give the span of some days of the unit's calendar, both included.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    first, last : date or None
        None for a week in all, up to the end of the record.

    Returns
    -------
    tuple of datetime
        From the first instant to the end, zone-aware; the end of the record when no last day is named.

    Raises
    ------
    StoreError
        The unit has no cells.
    """
    if last is None:
        found = edges(folder, unit.key)
        if found is None:
            raise _nothing(folder, unit.key, f"no cells of {unit.key}")
        end = found[1] + unit.cell
    else:
        end = pd.Timestamp(last + timedelta(days=1), tz=unit.time_zone)
    return end - timedelta(days=7) if first is None else pd.Timestamp(first, tz=unit.time_zone), end


def _nothing(folder: Path, key: str, lacking: str) -> StoreError:
    """Say what the store does not hold."""
    return StoreError(
        f"{folder}: holds {lacking}",
        remedy=f"Take exports in: outlet run --unit {key}.toml --store {folder} EXPORT...",
    )


def figures(
    folder: Path,
    unit: str,
    window: timedelta,
    wanted: Sequence[tuple[str, str]] | None,
    span: tuple[datetime, datetime],
) -> pd.DataFrame:
    """Give the figures of one window length over a span.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    window : timedelta
        One of the unit's windows.
    wanted : sequence of (str, str) or None
        Figure and mode; None for all.
    span : tuple of datetime
        First and last window end, both included, zone-aware.

    Returns
    -------
    DataFrame
        Columns (figure, mode, field), index `end` (UTC); empty when nothing is there.
    """
    columns = None
    if wanted is not None:
        columns = ["end", *(BAR.join((*name, field)) for name in wanted for field in FIELDS)]
    table = Store(folder).read(
        unit, figure_stage(window), first=span[0], last=span[1] + NEXT, columns=columns
    )
    return unflat(_frame(table, "end")) if table.num_rows else pd.DataFrame()


def operating(folder: Path, unit: str, span: tuple[datetime, datetime]) -> pd.DataFrame:
    """Give the operating condition of each cell.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    span : tuple of datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    DataFrame
        Column `operating` (code), index `start` (UTC).
    """
    table = Store(folder).read(unit, "cells", first=span[0], last=span[1], columns=["start", "operating"])
    return _frame(table, "start", "operating")


def adjustments(
    folder: Path, unit: str, names: Sequence[str], span: tuple[datetime, datetime]
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Give the adjustment of each balance instrument in each cell, and the spread it should have.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    names : sequence of str
        Balance instruments.
    span : tuple of datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    tuple of DataFrame
        Adjustments and their standard deviations, one column per name; NaN where no reading took part.
    """
    fields = ("adjustment", "adjustment_sd")
    columns = [f"{field} {name}" for field in fields for name in names]
    frame = _frame(
        Store(folder).read(unit, "states", first=span[0], last=span[1], columns=["start", *columns]),
        "start",
        *columns,
    )
    first, second = (instrument_frame(frame, field, names) for field in fields)
    return first, second


def objective(folder: Path, unit: str, span: tuple[datetime, datetime]) -> pd.DataFrame:
    """Give the objective and the degrees of freedom of each cell.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    span : tuple of datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    DataFrame
        Columns objective and freedom, index `start` (UTC).
    """
    columns = ("objective", "freedom")
    table = Store(folder).read(unit, "states", first=span[0], last=span[1], columns=["start", *columns])
    return _frame(table, "start", *columns)


def sums(folder: Path, unit: Unit, span: tuple[datetime, datetime]) -> pd.DataFrame:
    """Work out once more, from the stored cells, what the figures of one span are a ratio of.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    span : tuple of datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    DataFrame
        As `windows.window_at` gives it; empty when there are no cells.
    """
    table = Store(folder).read(unit.key, "cells", first=span[0], last=span[1])
    if not table.num_rows:
        return pd.DataFrame(columns=list(SPAN_FIELDS))
    cells = cells_from_frame(unit, _frame(table, "start"))
    _, amounts = amounts_of(unit, problem_of(unit), cells)
    edges = microseconds(pd.DatetimeIndex(span))
    return window_at(unit, amounts, figures_of(unit, amounts.names), int(edges[0]), int(edges[1]))


def episodes(folder: Path, unit: str) -> pd.DataFrame:
    """Give all episodes of a unit.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.

    Returns
    -------
    DataFrame
        One row per episode; `cleared` is NaT while it is open.
    """
    frame = Store(folder).snapshot().episodes(unit)
    if not frame.empty:
        return frame
    words = {name: pd.Series(dtype=object) for name in ("watch", "figure", "side", "priority")}
    numbers = {name: pd.Series(dtype=float) for name in ("limit", "worst")}
    times = {name: pd.Series(dtype="datetime64[us, UTC]") for name in EPISODE_TIMES}
    return pd.DataFrame({**words, **numbers, **times, "suppressed": pd.Series(dtype=bool)})


def exports(folder: Path) -> pd.DataFrame:
    """Give all exports taken in or set aside.

    Parameters
    ----------
    folder : Path
        The store.

    Returns
    -------
    DataFrame
        As `deliveries.table` gives it, newest first.
    """
    return deliveries.table(Store(folder).exports())


def entries(folder: Path, numbers: Sequence[int]) -> list[Export]:
    """Give some exports with all that the ledger holds of them.

    Parameters
    ----------
    folder : Path
        The store.
    numbers : sequence of int
        Of the exports.

    Returns
    -------
    list of Export
        In the order of the numbers.
    """
    known = {one.number: one for one in Store(folder).exports()}
    return [known[number] for number in numbers]


def last_export(folder: Path) -> datetime | None:
    """Say when the last export was taken in.

    Parameters
    ----------
    folder : Path
        The store.

    Returns
    -------
    datetime or None
        Zone-aware UTC; None when none was.
    """
    taken = [export.taken_at for export in Store(folder).exports() if export.status == "taken"]
    return datetime.fromisoformat(max(taken)).astimezone(UTC) if taken else None


def _frame(table: pa.Table, label: str, *columns: str) -> pd.DataFrame:
    """Turn a table into a frame with its label as index; an empty one keeps the columns asked for."""
    frame: pd.DataFrame = table.to_pandas(ignore_metadata=True)
    if label not in frame:
        nothing = pd.DatetimeIndex([], tz="UTC", name=label)
        return pd.DataFrame({name: pd.Series(dtype=float) for name in columns}, index=nothing)
    frame[label] = pd.to_datetime(
        frame[label], utc=True, unit="us" if frame[label].dtype.kind == "i" else None
    )
    return frame.set_index(label)
