"""How does this export write time? Form, order of day and month, offset or zone.

As in `dialect`: what has two meanings is settled by the unit file or refused, with both readings of one row.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import Any, NoReturn
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from ingest.columns import NOTHING, Look, first_match, flags, is_text, matches, single
from ingest.errors import ExportError
from ingest.timestamps import (
    DAY_NUMBERS,
    EARLIEST_US,
    EPOCHS,
    LATEST_US,
    MONTH_LEADS,
    MONTH_NAMED,
    PATTERNS,
    SHORT,
    Clock,
    numbered,
)
from ingest.unit import ExportRules

_NUMBERS = {
    "epoch s": r"^\s*\d{9,10}([.,]\d+)?\s*$",
    "epoch ms": r"^\s*\d{12,13}([.,]\d+)?\s*$",
    "day number": r"^\s*[3-7]\d{4}([.,]\d+)?\s*$",
}
_NUMBER = r"^\s*\d+([.,]\d+)?\s*$"
_ORDERS = ("day first", "month first", "year first")
_DAY, _MONTH = r"(0?[1-9]|[12]\d|3[01])", r"(0?[1-9]|1[0-2])"
# Dates that there can be in each order of their parts; of a year with four digits nobody asks.
_POSSIBLE = {
    "day first": rf"^\s*{_DAY}[-/.]{_MONTH}[-/.]\d",
    "month first": rf"^\s*{_MONTH}[-/.]{_DAY}[-/.]\d",
    "year first": rf"^\s*\d\d?[-/.]{_MONTH}[-/.]{_DAY}(\D|$)",
}
_STATED = r"\d(, ?|[T ]+)\d.*(Z|[+-]\d{2}(:?\d{2})?)\s*$"
_HALF = r"\d[ \x{a0}\x{202f}]?[AaPp]\.?[Mm]\b"
_DAY_US = 86_400_000_000
_UTC = {"UTC", "Etc/UTC", "GMT"}


@dataclass(frozen=True, slots=True)
class _Date:
    """One date as it stands in the file, and the orders of its parts that it allows."""

    row: int
    text: str
    orders: tuple[str, ...]


def decide_clock(
    export: str,
    header_row: int,
    column: tuple[int, str],
    look: Look,
    *,
    zone: str | None,
    rules: ExportRules,
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
    rules : ExportRules
        Order of dates and origin of day numbers for a file that does not tell.

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
    named = is_text(times.type) and 2 * matches(times, MONTH_NAMED) > len(times)
    leads = named and 2 * matches(times, MONTH_LEADS) > len(times)
    times = numbered(times) if named else times
    form, count = _form(export, rows, times) if is_text(times.type) else (_form_of_numbers(place, times), 0)
    if form in EPOCHS:
        return Clock(form, offset=True, zone=None, fraction=0)
    if form == "day number":
        origin = f"{form} {rules.day_numbers or 'from 1900'}"
        return Clock(origin, offset=False, zone=_zone(place, zone, name), fraction=3)
    if named and form != "year first":  # letters tell the month, and nobody puts two digits of a year first
        form = form.replace("day first", "month first") if leads else form
    elif form != "year first":
        more = SHORT if form.endswith(SHORT) else ""
        form = _date_order(export, at, look, rules.date_order, _ORDERS if more else _ORDERS[:2]) + more
    offset = 2 * matches(times, _STATED) > count
    digits = 9 if matches(times, r"[.,]\d{7,9}\D*$") else 6
    halves = 2 * matches(times, _HALF) > count
    return Clock(form, offset, None if offset else _zone(place, zone, name), digits, halves, named)


def _form(export: str, rows: Any, times: Any) -> tuple[str, int]:
    """The form that most of the first block's times have, and how many; no text has two of these forms."""
    forms = {**PATTERNS, **_NUMBERS}
    counts = {form: matches(times, forms[form]) for form in forms}
    counts["day first"] = max(counts["day first"], counts.pop("month first"))
    short = max(counts.pop(order + SHORT) for order in _ORDERS)
    counts["day first" + SHORT] = short
    second, first = sorted(counts, key=lambda name: counts[name])[-2:]
    if first == "day number" and matches(times, _NUMBER) > counts[first]:
        counts[first] = 0  # seconds or minutes that pass by such numbers
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
    said = _said_zone(name)
    if said is not None and zone != said and {zone, said} - _UTC:
        raise ExportError(
            f"{place}: the column {name!r} does not hold times of the stated zone {zone!r}",
            remedy=f"Set time_zone under [exports] to {said!r} in the unit file.",
        )
    try:
        return ZoneInfo(zone).key
    except (ZoneInfoNotFoundError, ValueError) as error:
        raise ExportError(f"{place}: there is no time zone {zone!r}", remedy=remedy) from error


def _said_zone(name: str) -> str | None:
    """The zone that a column's name states, if it states UTC or a fixed distance from it."""
    found = re.search(r"\b(?:utc|gmt)(?:\s*([+-])\s*0?(\d{1,2})(?::?00)?)?\b", name.casefold())
    if found is None:
        return None
    if not int(found[2] or 0):
        return "UTC"
    return f"Etc/GMT{'-' if found[1] == '+' else '+'}{found[2]}"  # POSIX counts to the west


def _form_of_numbers(place: str, column: Any) -> str:
    """Day numbers, seconds and milliseconds of 1990 to 2099 cannot be mistaken for one another."""
    numeric = pa.types.is_integer(column.type) or pa.types.is_floating(column.type)
    number = pc.drop_null(column).cast(pa.float64(), safe=False) if numeric else pa.array([], pa.float64())
    of_1970 = DAY_NUMBERS["day number from 1900"]
    for form, us, shift in (
        *((form, us, 0) for form, us in EPOCHS.items()),
        ("day number", _DAY_US, of_1970),
    ):
        low, high = EARLIEST_US / us + shift, LATEST_US / us + shift
        within = np.count_nonzero(flags(pc.and_(pc.greater_equal(number, low), pc.less(number, high))))
        if 2 * within > len(number) and (form in EPOCHS or within == len(number)):
            return form
    raise ExportError(
        f"{place}: what stands in the time column ({column.type}) is no seconds or milliseconds since 1970,"
        " nor day numbers of a spreadsheet",
        remedy="Export times as 2026-03-29T01:30Z.",
    )


def _date_order(export: str, at: int, look: Look, stated: str | None, orders: Sequence[str]) -> str:
    """The order of day, month and year: the only one that all dates allow, else as stated."""
    stated = stated if stated in orders else None
    against: dict[str, _Date] = {}
    unclear = _Date(0, "", ())
    for rows, (column,) in look([at]):
        seen = _telling(rows, column, orders)
        against = {**seen, **against}
        if stated in against or len(against) == len(orders):
            _refuse_order(export, against, stated)
        if len(against) == len(orders) - 1:
            return next(order for order in orders if order not in against)
        first = first_match(column, "|".join(_POSSIBLE[order] for order in orders))
        unclear = unclear if unclear.row or not first else _Date(int(rows[first[0]]), first[1], ())
    left = [order for order in orders if order not in against]
    return stated or _refuse_either_order(export, unclear, left)


def _telling(rows: Any, column: Any, orders: Sequence[str]) -> dict[str, _Date]:
    """For each order the first date that cannot be in it, but in another."""
    fits = {order: flags(pc.match_substring_regex(column, _POSSIBLE[order])) for order in orders}
    some = np.logical_or.reduce(list(fits.values()))
    found = {}
    for order in orders:
        if (some & ~fits[order]).any():
            i = int(np.argmax(some & ~fits[order]))
            others = tuple(other for other in orders if fits[other][i])
            found[order] = _Date(int(rows[i]), column[i].as_py().strip(), others)
    return found


def _refuse_order(export: str, against: dict[str, _Date], stated: str | None) -> NoReturn:
    """The dates contradict the stated order, or one another."""
    first, *others = sorted(against.values(), key=lambda date: date.row)
    date = first if stated is None else against[stated]
    what = f"{export}:{date.row}: {date.text!r} can only be {_or(date.orders)}"
    if stated is not None:
        raise ExportError(
            f"{what}, but date_order = {stated!r} is stated",
            remedy="Mend or remove date_order under [exports] in the unit file.",
        )
    other = next(date for date in others if date.orders != first.orders)
    raise ExportError(
        f"{what}, but {other.text!r} in row {other.row} can only be {_or(other.orders)}",
        remedy="Export times as 2026-03-29T01:30Z.",
    )


def _refuse_either_order(export: str, date: _Date, orders: Collection[str]) -> NoReturn:
    ways = " but ".join(f"{_as_iso(date.text, order)} {order}" for order in orders)
    stated = _or([repr(order) for order in orders])
    raise ExportError(
        f"{export}:{date.row}: {date.text!r} is {ways}, and no date in the file tells which",
        remedy=f"Write date_order = {stated} under [exports] in the unit file.",
    )


def _as_iso(text: str, order: str) -> str:
    """A date as it would be in one order of its parts."""
    places = {"day first": (2, 1, 0), "month first": (2, 0, 1), "year first": (0, 1, 2)}[order]
    parts = re.findall(r"\d+", text)[:3]
    year, month, day = (int(parts[place]) for place in places)
    return f"{year if year > 99 else year + (1900 if year >= 90 else 2000)}-{month:02}-{day:02}"


def _or(words: Sequence[str]) -> str:
    return " or ".join(words)
