"""What is printed about exports: the list of them, the account of one, and a pass in one line."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from datetime import datetime
from typing import Any

import pandas as pd

from ingest.records import Export
from monitor import deliveries, wording
from monitor.run import PassResult, UnitResult

COLUMNS = ("rows", "readings", *deliveries.PLACES)


def listed(frame: pd.DataFrame) -> Iterator[str]:
    """Tell the exports of a store, one a line.

    Parameters
    ----------
    frame : DataFrame
        As `deliveries.table` gives it.

    Yields
    ------
    str
        One line.
    """
    if frame.empty:
        yield "no export"
        return
    heads = ["number", "taken in", "status", *(deliveries.PLACES.get(name, name) for name in COLUMNS), "name"]
    rows = [heads, *(_cells(row) for row in frame.to_dict("records"))]
    wide = [max(map(len, column)) for column in zip(*rows, strict=True)]
    for row in rows:
        words = (_padded(cell, size, place) for place, (cell, size) in enumerate(zip(row, wide, strict=True)))
        yield "  ".join(words).rstrip()


def as_rows(frame: pd.DataFrame) -> list[dict[Any, Any]]:
    """Give the exports of a store for other programs.

    Parameters
    ----------
    frame : DataFrame
        As `deliveries.table` gives it.

    Returns
    -------
    list of dict
        One per export, times in ISO 8601.
    """
    times = frame["taken_at"].map(pd.Timestamp.isoformat) if len(frame) else frame["taken_at"]
    return frame.assign(taken_at=times).to_dict("records")


def _cells(row: dict[Any, Any]) -> list[str]:
    """One export as the cells of its line."""
    moment = wording.local_time(row["taken_at"].to_pydatetime(), "UTC")
    counts = (_number(row[name]) for name in COLUMNS)
    return [str(row["number"]), moment, row["status"], *counts, row["name"]]


def _padded(cell: str, size: int, place: int) -> str:
    """Words begin at the left of their column, numbers end at its right."""
    return cell.ljust(size) if place in (1, 2, 3 + len(COLUMNS)) else cell.rjust(size)


def told(export: Export, names: Mapping[int, str]) -> Iterator[str]:
    """Tell the whole account of one export.

    Parameters
    ----------
    export : Export
        Of the ledger.
    names : mapping of int to str
        Of all exports by number.

    Yields
    ------
    str
        One line.
    """
    moment = wording.local_time(datetime.fromisoformat(export.taken_at), "UTC")
    size = f"{_number(export.size)} bytes"
    yield f"{export.number} {export.name}: {deliveries.status_of(export)}, {moment}, {size}"
    account = deliveries.account_of(export)
    if account is None:
        yield from (f"  {line}" for line in export.error.splitlines())
        return
    yield from (f"  {line}" for line in export.account.get("dialect", ()))
    places = " + ".join(f"{_number(count)} {words}" for count, words in deliveries.sum_of(account))
    yield f"  {_number(account.rows)} rows; {_number(account.readings)} readings = {places}"
    if account.bad or account.unknown:
        unknown = f"{_number(account.unknown)} without a stated quality"
        yield f"  as read: {_number(account.bad)} of bad quality, {unknown}"
    yield from (f"  {line}" for line in deliveries.winners(account, export.number, names))
    yield from (f"  {line}" for line in account.beside())
    for what, remedy, rows in deliveries.faults(account):
        yield f"  {what}. {remedy}"
        yield from (f"    {row}" for row in rows)
    for tag, count in account.unasked_tags:
        yield f"  not asked for: {tag or 'a column without name'}, {_number(count)} readings"


def as_table(export: Export) -> dict[str, Any]:
    """Give the account of one export for other programs.

    Parameters
    ----------
    export : Export
        Of the ledger.

    Returns
    -------
    dict
        The entry of the ledger with status in words and each reason for which readings were rejected.
    """
    account = deliveries.account_of(export)
    found = deliveries.faults(account) if account else ()
    return {
        "number": export.number,
        "name": export.name,
        "sha256": export.sha256,
        "size": export.size,
        "taken_at": export.taken_at,
        "status": deliveries.status_of(export),
        "error": export.error,
        "account": dict(export.account),
        "rejected": [{"what": what, "remedy": remedy, "rows": rows} for what, remedy, rows in found],
    }


def in_one_line(result: PassResult, now: datetime, zone: str) -> str:
    """Tell a pass in one line.

    Parameters
    ----------
    result : PassResult
        As `run.run_pass` gives it.
    now : datetime
        When it ended, zone-aware.
    zone : str
        IANA name of the plant's zone.

    Returns
    -------
    str
        `14 Apr 2026 09:20 CEST  pass 12: 1 taken (144 readings accepted); demo: 6 cells, 1 episode open`.
    """
    counts = pd.Series([one.status for one in result.exports], dtype=str).value_counts()
    files = ", ".join(f"{count} {status}" for status, count in counts.items()) or "no export"
    accounts = [one.account for one in result.exports if one.account]
    taken = f" ({_readings(sum(one.accepted for one in accounts))} accepted" if accounts else ""
    rejected = sum(one.rejected for one in accounts)
    taken += (f", {_number(rejected)} rejected)" if rejected else ")") if taken else ""
    units = (f"{one.unit}: {_worked(one)}" for one in result.units)
    return "; ".join([f"{wording.local_time(now, zone)}  pass {result.number}: {files}{taken}", *units])


def _worked(one: UnitResult) -> str:
    """What a pass did for one unit."""
    still = sum(episode.cleared is None for episode in one.episodes)
    return f"{_number(one.cells)} cells, {still or 'no'} episode{'s' if still > 1 else ''} open"


def _readings(count: int) -> str:
    return f"{_number(count)} reading" if count == 1 else f"{_number(count)} readings"


def _number(count: int) -> str:
    return wording.number(count, 0)
