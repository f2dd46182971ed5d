"""What does not count, and why: by operating condition as the program finds it, and on a person's word.

Tonnes are never left out. Steady figures leave out all that is listed; those as operated only what is down.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pandas as pd

from ingest.cells import DOWN, NOT_KNOWN, RUNNING, STARTING, TURNED_DOWN, Cells
from ingest.errors import OutletError
from ingest.journal import Line
from ingest.unit import Unit
from monitor.summary.span import Span

EXCLUDE, INCLUDE = "exclude", "include"  # acts in the journal; the second takes back the first by its number
BY_CONDITION = {
    DOWN: ("DN", "down"),
    STARTING: ("ST", "starting"),
    TURNED_DOWN: ("TD", "turned down"),
    NOT_KNOWN: ("NK", "operating condition not known"),
}
BY_PEOPLE = {
    "test": ("TE", "test run"),
    "meter": ("ME", "analyzer or meter"),
    "data": ("DA", "data"),
    "feed": ("FE", "feed off its specification"),
    "planned": ("PL", "planned work"),
    "other": ("OT", "other"),
}
INSTANT = "datetime64[us, UTC]"
COLUMNS = ("start", "end", "hours", "code", "cause", "by", "note", "number")


def on_word(lines: Iterable[Line], span: Span) -> pd.DataFrame:
    """List the spans that people left out, as the journal tells.

    Parameters
    ----------
    lines : iterable of Line
        Of the unit's journal.
    span : Span
        Only what lies in it, cut at its edges.

    Returns
    -------
    DataFrame
        Columns `COLUMNS`, in the order of time; empty where nobody left anything out.
    """
    kept = {line.number: line for line in lines if line.act == EXCLUDE}
    back = {int(line.subject) for line in lines if line.act == INCLUDE and line.subject.isdecimal()}
    rows = [_row(line, span) for number, line in kept.items() if number not in back]
    frame = pd.DataFrame([row for row in rows if row["start"] < row["end"]], columns=list(COLUMNS))
    typed = frame.astype({"start": INSTANT, "end": INSTANT, "hours": float, "number": int})
    return typed.sort_values(["start", "number"], kind="stable", ignore_index=True)


def detail_of(first: datetime, last: datetime, cause: str) -> Mapping[str, str]:
    """Give what a journal line of an exclusion holds besides who wrote it and why.

    Parameters
    ----------
    first, last : datetime
        Zone-aware; the end is outside.
    cause : str
        A key of `BY_PEOPLE`.

    Returns
    -------
    dict of str
    """
    if not first < last:
        raise OutletError(f"exclude: {first:%F %R} is not before {last:%F %R}", remedy="Exchange the two.")
    return {"from": first.astimezone(UTC).isoformat(), "to": last.astimezone(UTC).isoformat(), "cause": cause}


def by_condition(unit: Unit, cells: Cells) -> pd.DataFrame:
    """List the stretches in which the unit was not running.

    Parameters
    ----------
    unit : Unit
        Gives the cell.
    cells : Cells
        On one grid without holes.

    Returns
    -------
    DataFrame
        Columns `COLUMNS`, in the order of time.
    """
    edges = np.flatnonzero(np.diff(cells.operating, prepend=-9, append=-9))
    code = cells.operating[edges[:-1]]
    kept = code != RUNNING
    cell_us = int(unit.cell.total_seconds() * 1e6)
    start = cells.start[edges[:-1]][kept]
    end = cells.start[edges[1:] - 1][kept] + cell_us
    words = [BY_CONDITION[int(one)] for one in code[kept]]
    return pd.DataFrame(
        {
            "start": pd.to_datetime(start, unit="us", utc=True).astype(INSTANT),
            "end": pd.to_datetime(end, unit="us", utc=True).astype(INSTANT),
            "hours": (end - start) / 3.6e9,
            "code": [one for one, _ in words],
            "cause": [cause for _, cause in words],
            "by": "operating condition",
            "note": "",
            "number": 0,
        }
    )


def _row(line: Line, span: Span) -> dict[str, Any]:
    """One exclusion, cut at the edges of a span."""
    code, cause = BY_PEOPLE.get(str(line.detail.get("cause")), BY_PEOPLE["other"])
    low, high = (pd.Timestamp(edge, unit="us", tz="UTC") for edge in (span.first_us, span.last_us))
    start, end = (pd.Timestamp(str(line.detail[key])).tz_convert("UTC") for key in ("from", "to"))
    start, end = max(start, low), min(end, high)
    return {
        "start": start,
        "end": end,
        "hours": (end - start) / pd.Timedelta(hours=1),
        "code": code,
        "cause": cause,
        "by": line.who,
        "note": line.note,
        "number": line.number,
    }
