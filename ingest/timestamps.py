"""Time stamps as they come -> us since the epoch, UTC; the doubled and the skipped hour included."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest.account import GAP, OFFSET, TIME, YEAR
from ingest.columns import coded, flags, plain, present, single

EARLIEST_US = 631_152_000_000_000  # 1990-01-01
LATEST_US = 4_102_444_800_000_000  # 2100-01-01
_PER_SECOND = {"s": 1, "ms": 1_000, "us": 1_000_000, "ns": 1_000_000_000}
EPOCHS = {"epoch s": 1_000_000.0, "epoch ms": 1_000.0}  # us in one unit
# Day numbers of spreadsheets: the number of 1970-01-01 in each system. That the older one counts a 29th of
# February 1900 matters before March 1900 only. Those of 1990 to 2099 are 32874 to 73050.
DAY_NUMBERS = {"day number from 1900": 25_569, "day number from 1904": 24_107}
_DAY_MS = 86_400_000

_PLACES = {"year first": ("y", "m", "d"), "day first": ("d", "m", "y"), "month first": ("m", "d", "y")}
SHORT = ", two digits of the year"


def _date(order: str, year: str) -> str:
    """Pattern of a date; in one date the same mark stands twice, or as good as."""
    digits = {"y": year, "m": r"\d{1,2}", "d": r"\d{1,2}"}
    return "[-/.]".join(f"(?P<{part}>{digits[part]})" for part in _PLACES[order])


_CLOCK = (
    r"(?:(?:, ?|[T ]+)(?P<H>\d{1,2})(?::(?P<M>\d{2})(?::(?P<S>\d{2})(?:[.,](?P<f>\d{1,9}))?)?)?"
    r"(?:[ \x{a0}\x{202f}]?(?P<p>[AaPp])\.?[Mm]\.?)?)?"
)
_OFFSET = r"(?: ?(?P<z>Z|[+-]\d{2}(?::?\d{2})?))?"
PATTERNS = {
    order + more: rf"^\s*{_date(order, year)}{_CLOCK}{_OFFSET}\s*$"
    for more, year in (("", r"\d{4}"), (SHORT, r"\d{2}"))
    for order in _PLACES
}

# Beginnings of the names of months, English and German, small letters.
_MONTHS = ("jan", "feb", "m[aä]r|mrz", "apr", "ma[yi]", "jun", "jul", "aug", "sep", "o[ck]t", "nov", "de[cz]")
MONTH_NAMED = rf"(?i)^\s*(\d{{1,4}}[-/. ]*)?({'|'.join(_MONTHS)})\pL*[-/., ]*\d"
MONTH_LEADS = r"^\s*\pL"

Times = NDArray[np.int64]
Codes = NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class Clock:
    """How an export writes time.

    `form` is 'timestamp' or a key of PATTERNS, EPOCHS or DAY_NUMBERS; `offset` tells whether the times state
    their offset from UTC; `zone` is the zone of those that do not. Where `halves`, the clock has 12 hours and
    each time says which half of the day it means; where `named`, months are in letters.
    """

    form: str
    offset: bool
    zone: str | None
    fraction: int  # digits of a second written
    halves: bool = False
    named: bool = False

    def read(self, column: Any) -> Stamps:
        """Read a column of times.

        Parameters
        ----------
        column : pyarrow.Array (n,)
            Text, timestamps or numbers, whichever the reader could make of it.

        Returns
        -------
        Stamps
            (n,) times.
        """
        column = single(column)
        kind = column.type
        if pa.types.is_timestamp(kind):
            return self._placed(*_from_timestamps(column), stated=np.bool_(kind.tz is not None))
        if self.form in EPOCHS:
            time, reason = _from_numbers(column, EPOCHS[self.form])
            return self._placed(time, reason, stated=np.True_)
        if self.form in DAY_NUMBERS:
            time, reason = _from_day_numbers(column, DAY_NUMBERS[self.form])
            return self._placed(time, reason, stated=np.False_)
        codes, words = coded(column)  # each distinct text is read once
        words = numbered(words) if self.named else words
        time, reason, stated = _from_words(words, self.form, halves=self.halves)
        time, reason, stated = time[codes], reason[codes], stated[codes]
        return self._placed(time, reason, stated=stated)

    def _placed(self, time: Times, reason: Codes, *, stated: Any) -> Stamps:
        """Times moved to UTC where they state no offset."""
        doubled = np.zeros(len(time), np.bool_)
        if np.all(stated):
            return Stamps(time, _bounded(time, reason), doubled)
        if self.zone is None:
            reason = np.where((reason == 0) & ~stated, OFFSET, reason).astype(np.int8)
            return Stamps(time, _bounded(time, reason), doubled)
        reason = _bounded(time, reason)
        utc, gap, twice = localised(np.where(reason == 0, time, EARLIEST_US), self.zone)
        reason = np.where((reason == 0) & gap & ~stated, GAP, reason).astype(np.int8)
        return Stamps(np.where(stated, time, utc), reason, twice & ~stated & (reason == 0))


@dataclass(frozen=True, slots=True)
class Stamps:
    """Times [us, UTC], a place in account.REASONS for each, and which stand in an hour that comes twice.

    A doubled time is still wall-clock time: `resolved` places it once all rows around it are known.
    """

    time: Times
    reason: Codes
    doubled: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Changes:
    """Every change of a zone's clock: wall-clock times at which it begins and ends, offsets [us]."""

    low: Times
    high: Times
    before: Times
    after: Times


@lru_cache(maxsize=8)
def changes(zone: str) -> Changes:
    """Find the changes of a zone's offset between 1989 and 2100.

    Parameters
    ----------
    zone : str
        IANA name, 'Europe/Berlin'.

    Returns
    -------
    Changes
        (k,) ascending; the first stands before 1990 and holds the offset that applies from there.
    """
    info = ZoneInfo(zone)
    step = timedelta(days=7)  # no zone changes its clock and back within a week
    at = datetime(1989, 6, 1, tzinfo=UTC)
    start = _offset(at, info)
    found = [(_micros(at), start, start)]
    while at.year < 2101:
        if _offset(at, info) != _offset(at + step, info):
            found.append(_change(at, at + step, info))
        at += step
    instant, before, after = (np.array(column, np.int64) for column in zip(*found, strict=True))
    return Changes(instant + np.minimum(before, after), instant + np.maximum(before, after), before, after)


def numbered(texts: Any) -> Any:
    """Write months as numbers where they are in letters.

    Parameters
    ----------
    texts : pyarrow.StringArray (n,)
        `13-Mar-2026 06:00`, `March 13, 2026 06:00`.

    Returns
    -------
    pyarrow.StringArray (n,)
        `13-3-2026 06:00`, `3-13-2026 06:00`; other texts as they are.
    """
    for number, name in enumerate(_MONTHS, 1):
        month = rf"(?:{name})\pL*[-/., ]*"
        texts = pc.replace_substring_regex(texts, rf"(?i)^\s*(\d+)[-/. ]*{month}(\d)", rf"\1-{number}-\2")
        leading = rf"(?i)^\s*{month}(\d+)[-/., ]+(\d)"
        texts = pc.replace_substring_regex(texts, leading, rf"{number}-\1-\2")
    return texts


def localised(wall: Times, zone: str) -> tuple[Times, NDArray[np.bool_], NDArray[np.bool_]]:
    """Move wall-clock times to UTC.

    Parameters
    ----------
    wall : numpy.ndarray of int64 (n,)
        Wall-clock times as if they were UTC [us].
    zone : str
        IANA name.

    Returns
    -------
    time : numpy.ndarray of int64 (n,)
        UTC; left as wall-clock time where `twice`.
    gap : numpy.ndarray of bool (n,)
        The clock skipped this time.
    twice : numpy.ndarray of bool (n,)
        The clock showed this time twice.
    """
    known = changes(zone)
    none = np.zeros(len(wall), np.bool_)
    if len(wall) == 0:
        return wall, none, none
    first, last = (int(np.searchsorted(known.low, t, side="right")) - 1 for t in (wall.min(), wall.max()))
    if first == last and wall.min() >= known.high[first]:
        return wall - known.after[first], none, none
    place = np.searchsorted(known.low, wall, side="right") - 1
    inside = wall < known.high[place]
    gap = inside & (known.after[place] > known.before[place])
    twice = inside & (known.after[place] < known.before[place])
    return np.where(twice, wall, wall - known.after[place]), gap, twice


def resolved(wall: Times, zone: str, *, ascending: bool) -> tuple[Times, NDArray[np.bool_]]:
    """Tell the two passes of a doubled hour apart by the order of one tag's rows.

    The second pass begins where the times step back once (newest row first: where they step forward once).

    Parameters
    ----------
    wall : numpy.ndarray of int64 (n,)
        Doubled wall-clock times of one tag in the order of the file [us].
    zone : str
        IANA name.
    ascending : bool
        Whether time runs forward down the file.

    Returns
    -------
    time : numpy.ndarray of int64 (n,)
        UTC.
    told : numpy.ndarray of bool (n,)
        False where the order does not tell; `time` is meaningless there.
    """
    known = changes(zone)
    place = np.searchsorted(known.low, wall, side="right") - 1
    late, told = np.zeros(len(wall), np.bool_), np.zeros(len(wall), np.bool_)
    for hour in np.unique(place):
        rows = np.flatnonzero(place == hour)
        rows = rows if ascending else rows[::-1]
        step = np.diff(wall[rows])
        back = step < 0 if np.any(step < 0) else step == 0
        if np.count_nonzero(back) == 1:
            told[rows] = True
            late[rows] = np.append(False, np.cumsum(back) > 0)
    return wall - np.where(late, known.after[place], known.before[place]), told


def _offset(at: datetime, info: ZoneInfo) -> int:
    """Offset from UTC at an instant [us]."""
    return int(at.astimezone(info).utcoffset() / timedelta(microseconds=1))  # type: ignore[operator]


def _micros(at: datetime) -> int:
    return int(at.timestamp()) * 1_000_000


def _change(low: datetime, high: datetime, info: ZoneInfo) -> tuple[int, int, int]:
    """The instant between two at which the offset changes, and the offsets on both sides [us]."""
    before = _offset(low, info)
    while high - low > timedelta(seconds=1):
        middle = low + timedelta(seconds=(high - low) // timedelta(seconds=2))
        low, high = (middle, high) if _offset(middle, info) == before else (low, middle)
    return _micros(high), before, _offset(high, info)


def _bounded(time: Times, reason: Codes) -> Codes:
    outside = (time < EARLIEST_US) | (time >= LATEST_US)
    if not outside.any():
        return reason
    return np.where(outside & (reason == 0), YEAR, reason).astype(np.int8)


def _from_timestamps(column: Any) -> tuple[Times, Codes]:
    """Arrow timestamps of any unit."""
    per = _PER_SECOND[column.type.unit]
    raw = plain(column, np.int64)
    reason = np.where(present(column), 0, TIME).astype(np.int8)
    if per == 1_000_000:
        return raw, reason
    if per > 1_000_000:
        return raw // (per // 1_000_000), reason
    scale = 1_000_000 // per
    return np.clip(raw, -(2**62) // scale, 2**62 // scale) * scale, reason


def _from_numbers(column: Any, us: float) -> tuple[Times, Codes]:
    """Seconds or milliseconds since the epoch."""
    number, there = _numbers(column)
    micros = np.rint(number * us)
    fine = np.isfinite(micros) & (np.abs(micros) < 2.0**62)
    return np.where(fine, micros, 0).astype(np.int64), np.where(there, 0, TIME).astype(np.int8)


def _from_day_numbers(column: Any, of_1970: int) -> tuple[Times, Codes]:
    """Days and their parts, local time, rounded to the ms: a float holds them to some microseconds."""
    number, there = _numbers(column)
    ms = np.rint((number - of_1970) * _DAY_MS)
    fine = np.isfinite(ms) & (np.abs(ms) < 2.0**52)
    return np.where(fine, ms, 0).astype(np.int64) * 1_000, np.where(there, 0, TIME).astype(np.int8)


def _numbers(column: Any) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Plain numbers with a point or a comma, and where there are any."""
    number = column
    if not pa.types.is_floating(column.type) and not pa.types.is_integer(column.type):
        text = pc.utf8_trim_whitespace(column)
        fits = pc.match_substring_regex(text, r"^\d+([.,]\d+)?$")
        number = pc.replace_substring(pc.if_else(fits, text, None), ",", ".")
    number = single(number.cast(pa.float64()))
    there = present(number)
    return np.where(there, plain(number, np.float64), 0.0), there


def _from_words(words: Any, form: str, *, halves: bool) -> tuple[Times, Codes, NDArray[np.bool_]]:
    """Distinct texts and one more for null: time [us], what is wrong, and whether it states its offset."""
    found = pc.extract_regex(words, PATTERNS[form])
    good = present(found)
    part = dict(zip((f.name for f in found.type), found.flatten(), strict=True))
    day, exists = _days(part, short=form.endswith(SHORT))
    clock, runs = _seconds(part, halves=halves)
    shift, placed = _shifts(part["z"])
    good &= exists & runs & placed
    fraction = _whole(pc.utf8_slice_codeunits(pc.utf8_rpad(part["f"], 6, "0"), 0, 6))
    micros = (day * 86_400 + clock - shift) * 1_000_000 + fraction
    stated = flags(pc.not_equal(part["z"], ""))
    reason = np.where(np.append(good, False), 0, TIME).astype(np.int8)
    return np.append(np.where(good, micros, 0), 0), reason, np.append(stated, True)


def _shifts(offset: Any) -> tuple[Times, NDArray[np.bool_]]:
    """Seconds that the clock of an offset is ahead of UTC, and whether there is such an offset."""
    digits = pc.replace_substring_regex(offset, r"[^\d]", "")
    hour, minute = (_whole(pc.utf8_slice_codeunits(digits, *cut)) for cut in ((0, 2), (2, 4)))
    west = flags(pc.starts_with(offset, "-"))
    return (hour * 60 + minute) * np.where(west, -60, 60), (hour < 24) & (minute < 60)


def _days(part: Mapping[str, Any], *, short: bool) -> tuple[Times, NDArray[np.bool_]]:
    """Days since 1970, and whether there is such a day; years of two digits are 1990 to 2089."""
    y, m, d = (_whole(part[k]) for k in "ymd")
    if short:
        y = np.where(y >= 90, 1900, 2000) + y
    good = (m >= 1) & (m <= 12) & (d >= 1)
    month = np.where(good, (y - 1970) * 12 + m - 1, 0).astype("datetime64[M]")
    day = month.astype("datetime64[D]").astype(np.int64) + d - 1
    return day, good & (day < (month + 1).astype("datetime64[D]").astype(np.int64))


def _seconds(part: Mapping[str, Any], *, halves: bool) -> tuple[Times, NDArray[np.bool_]]:
    """Whole seconds of the day, and whether the clock shows such a time; noon is 12 PM, midnight 12 AM."""
    hour, minute, second = (_whole(part[k]) for k in "HMS")
    half = pc.utf8_lower(part["p"])
    afternoon = flags(pc.equal(half, "p"))
    marked = afternoon | flags(pc.equal(half, "a"))
    unmarked_ok = flags(pc.equal(part["H"], "")) if halves else True
    good = (
        (minute < 60)
        & (second < 60)
        & np.where(marked, (hour >= 1) & (hour <= 12), (hour < 24) & unmarked_ok)
    )
    hour = np.where(marked, hour % 12 + 12 * afternoon, hour)
    return hour * 3_600 + minute * 60 + second, good


def _whole(text: Any) -> Times:
    """Digits as whole numbers; nothing gives 0."""
    digits = pc.if_else(pc.fill_null(pc.equal(text, ""), True), "0", text)
    return plain(single(digits.cast(pa.int64())), np.int64)
