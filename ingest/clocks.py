"""How does this export write time? Form, order of day and month, offset or zone.

As in `dialect`: what has two meanings is settled by the unit file or refused, with both readings of one row.
"""

from __future__ import annotations

import re
from typing import Any, NoReturn
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from ingest.columns import NOTHING, Look, first_match, flags, matches, single
from ingest.errors import ExportError
from ingest.timestamps import EARLIEST_US, EPOCHS, LATEST_US, PATTERNS, Clock
from ingest.values import is_text

_EPOCH = {"epoch s": r"^\s*\d{9,10}([.,]\d+)?\s*$", "epoch ms": r"^\s*\d{12,13}([.,]\d+)?\s*$"}
_DAY, _MONTH = r"(1[3-9]|2\d|3[01])", r"(0?[1-9]|1[0-2])"
_ORDERS = {"day first": rf"^\s*{_DAY}[-/.]{_MONTH}[-/.]\d", "month first": rf"^\s*{_MONTH}[-/.]{_DAY}[-/.]\d"}
_STATED = r"\d[T ]+\d.*(Z|[+-]\d{2}(:?\d{2})?)\s*$"


def decide_clock(
    export: str,
    header_row: int,
    column: tuple[int, str],
    look: Look,
    *,
    zone: str | None,
    date_order: str | None,
) -> Clock:
    """Find how the export writes time.

    Parameters
    ----------
    export : str
        Its name, for the error.
    header_row : int
        Number of the header line; 0 in Parquet.
    column : tuple of int and str
        Where the times stand, and the column's name.
    look : callable
        Gives columns.
    zone : str or None
        Zone of times without offset; None where nobody stated one.
    date_order : str or None
        'day first' or 'month first' for a file that does not tell; None where nobody stated one.

    Returns
    -------
    Clock
        With `zone` set where it is needed.
    """
    at, name = column
    place = f"{export}:{header_row}" if header_row else export
    rows, (times,) = next(look([at]), NOTHING)
    times = single(times)
    if pa.types.is_timestamp(times.type):
        offset = times.type.tz is not None
        return Clock("timestamp", offset, None if offset else _zone(place, zone, name), 6)
    if not is_text(times.type):
        return _clock_of_numbers(place, times)
    form, count = _form(export, rows, times)
    if form in EPOCHS:
        return Clock(form, offset=True, zone=None, fraction=0)
    if form != "year first":
        form = _date_order(export, at, look, date_order)
    offset = 2 * matches(times, _STATED) > count
    digits = 9 if matches(times, r"[.,]\d{7,9}\D*$") else 6
    return Clock(form, offset, None if offset else _zone(place, zone, name), digits)


def _form(export: str, rows: Any, times: Any) -> tuple[str, int]:
    """The form that most of the first block's times have, and how many; no text has two of these forms."""
    forms = {**PATTERNS, **_EPOCH}
    counts = {form: matches(times, forms[form]) for form in forms if form != "month first"}
    counts["day first"] = max(counts["day first"], matches(times, forms["month first"]))
    second, first = sorted(counts, key=lambda name: counts[name])[-2:]
    if counts[first] > counts[second]:
        return first, counts[first]
    at, text = first_match(times, r"\S") or (0, "")
    said = "is one of several forms of time in this file" if counts[first] else "is no known form of time"
    row = int(rows[at]) if len(rows) else 1
    raise ExportError(f"{export}:{row}: {text!r} {said}", remedy="Export times as 2026-03-29T01:30Z.")


def _zone(place: str, zone: str | None, name: str) -> str:
    """The stated zone, if there is such a zone and the column's name does not speak against it."""
    remedy = "Set time_zone under [exports] in the unit file, e.g. to 'Europe/Berlin' or 'UTC'."
    if zone is None:
        raise ExportError(f"{place}: times state no offset, and no time zone is stated", remedy=remedy)
    if {"utc", "gmt"} & set(re.findall(r"[a-z]+", name.casefold())) and zone not in ("UTC", "Etc/UTC", "GMT"):
        raise ExportError(
            f"{place}: the column {name!r} does not hold times of the stated zone {zone!r}",
            remedy="Set time_zone under [exports] to 'UTC' in the unit file.",
        )
    try:
        return ZoneInfo(zone).key
    except (ZoneInfoNotFoundError, ValueError) as error:
        raise ExportError(f"{place}: there is no time zone {zone!r}", remedy=remedy) from error


def _clock_of_numbers(place: str, column: Any) -> Clock:
    """Seconds and milliseconds since 1970 cannot be mistaken for one another between 1990 and 2100."""
    numeric = pa.types.is_integer(column.type) or pa.types.is_floating(column.type)
    number = pc.drop_null(column).cast(pa.float64(), safe=False) if numeric else pa.array([], pa.float64())
    for form, us in EPOCHS.items():
        within = pc.and_(pc.greater_equal(number, EARLIEST_US / us), pc.less(number, LATEST_US / us))
        if 2 * np.count_nonzero(flags(within)) > len(number):
            return Clock(form, offset=True, zone=None, fraction=0)
    raise ExportError(
        f"{place}: what stands in the time column ({column.type}) is no seconds or milliseconds since 1970",
        remedy="Export times as 2026-03-29T01:30Z.",
    )


def _date_order(export: str, at: int, look: Look, stated: str | None) -> str:
    """Day first or month first: whichever the first dates with a number above 12 allow, else as stated."""
    unclear = (0, "")
    for rows, (column,) in look([at]):
        told = {order: first_match(column, pattern) for order, pattern in _ORDERS.items()}
        found = {order: (int(rows[m[0]]), m[1]) for order, m in told.items() if m}
        if len(found) > 1 or found.keys() - {stated or next(iter(found), "")}:
            _refuse_order(export, found, stated)
        if found:
            return next(iter(found))
        first = first_match(column, PATTERNS["day first"])
        unclear = unclear if unclear[0] or not first else (int(rows[first[0]]), first[1])
    if stated is None:
        _refuse_either_order(export, *unclear)
    return stated


def _refuse_order(export: str, found: dict[str, tuple[int, str]], stated: str | None) -> NoReturn:
    """The dates contradict the stated order, or one another."""
    others = {order: shown for order, shown in found.items() if order != stated}
    order, (row, text) = next(iter(others.items()))
    what = f"{export}:{row}: {text!r} can only be {order}"
    if stated is not None:
        raise ExportError(
            f"{what}, but date_order = {stated!r} is stated",
            remedy="Mend or remove date_order under [exports] in the unit file.",
        )
    _, (other_row, other) = list(others.items())[1]
    raise ExportError(
        f"{what}, but {other!r} in row {other_row} can only be the other way round",
        remedy="Export times as 2026-03-29T01:30Z.",
    )


def _refuse_either_order(export: str, row: int, text: str) -> NoReturn:
    first, second, *rest = text.replace("/", ".").replace("-", ".").split(".")
    year = rest[0][:4]
    raise ExportError(
        f"{export}:{row}: {text!r} is {year}-{second:0>2}-{first:0>2} day first"
        f" but {year}-{first:0>2}-{second:0>2} month first, and no date in the file tells which",
        remedy="Write date_order = 'day first' or 'month first' under [exports] in the unit file.",
    )
