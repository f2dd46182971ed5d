"""Small plants over whole months: an ethane plant whose days are set by hand, taken in and summed up."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd

from ingest.unit import Unit
from ingest.unitfile import load
from monitor.run import run_pass
from monitor.summary.identity import Stamp
from monitor.summary.making import summarise
from monitor.summary.span import Span, month_span
from monitor.summary.table import Summary
from tests.test_gotchas import LOAD, ethane_plant, half_converted, wide

STAMP = Stamp("A. Name", "0" * 64, "test")
HOUR = 6  # cells


def month_cells(year: int, month: int, zone: str) -> pd.DatetimeIndex:
    """Middles of the ten-minute cells of a month of the plant's calendar, UTC."""
    first = pd.Timestamp(year, month, 1).tz_localize(zone)
    after = (pd.Timestamp(year, month, 1) + pd.offsets.MonthBegin(1)).tz_localize(zone)
    starts = pd.date_range(first, after, freq="10min", inclusive="left")
    return (starts + pd.Timedelta(minutes=5)).tz_convert("UTC")


def take_in(
    folder: Path,
    cells: pd.DatetimeIndex,
    feed: np.ndarray,
    selectivity: np.ndarray,
    *,
    zone: str = "UTC",
    more: str = "",
    name: str = "made",
    tag: str = "T3",
) -> Unit:
    """Take an export of the ethane plant in: half of the feed is converted, a share of it to ethylene."""
    unit_path = folder / f"{name}.toml"
    text = ethane_plant(LOAD, more, windows='["1h"]', zone=zone).replace('tag = "T3"', f'tag = "{tag}"')
    unit_path.write_text(text, encoding="utf-8")
    rows = half_converted(feed, selectivity)
    stamps = [f"{one:%Y-%m-%dT%H:%M:%SZ}" for one in cells]
    unit = load(unit_path)
    passed(folder, unit, wide(stamps, rows).replace("T3", tag, 1))
    return unit


def passed(folder: Path, unit: Unit, export: str, *, name: str = "made.csv") -> None:
    """Take one export in."""
    (folder / name).write_text(export, encoding="utf-8")
    exports = [folder / name]
    done = run_pass([unit], folder / "store", exports, progress=lambda *_: None, settle=timedelta(0))
    assert not done.set_aside


def summed(folder: Path, unit: Unit, span: Span) -> Summary:
    """The summary of a span."""
    return summarise(folder / "store", unit, span, STAMP)


def month_of(folder: Path, unit: Unit, year: int, month: int) -> Summary:
    """The summary of a month."""
    return summed(folder, unit, month_span(unit.time_zone, year, month))


def row(summary: Summary, table: str, **keys: str) -> dict[str, object]:
    """The one row of a table with these keys."""
    frame = summary.tables[table]
    for name, value in keys.items():
        frame = frame[frame[name] == value]
    [found] = frame.to_dict("records")
    return {str(name): value for name, value in found.items()}
