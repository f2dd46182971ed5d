"""What kind of export is this? Encoding, separator, layout, times, decimal mark and quality codes.

Every decision rests on something that has one meaning only. What has two is refused, with both readings of
one row from the file, and never settled by a preference.
"""

from __future__ import annotations

import codecs
import csv
import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import Any, NoReturn
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from ingest.columns import Look, first_match, flags, matches, single
from ingest.errors import ExportError
from ingest.timestamps import EARLIEST_US, EPOCHS, LATEST_US, PATTERNS, Clock
from ingest.values import MARKS, Numbers, is_text

MOST_COLUMNS = 5_000
SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar"}

# Names of columns, small letters, blanks for _ - and so on; common practice, no source.
ROLES = {
    "time": ("time", "timestamp", "time stamp", "datetime", "date time", "date", "zeit", "zeitstempel"),
    "tag": ("tag", "tag name", "tagname", "point", "signal"),
    "value": ("value", "val", "reading", "wert"),
    "quality": ("quality", "status", "quality code", "status code", "qualität"),
}

_QUALITIES = {
    "words": "in words",
    "opc ua": "as OPC UA status codes (0 is good)",
    "opc da": "as OPC DA qualities (192 is good)",
}
_NO_TEXT = (
    (b"PK\3\4", "a spreadsheet or zip file", "Export as CSV text (or .csv.gz) or as Parquet."),
    (b"\x1f\x8b", "a gz file without .gz in its name", "Rename it so that it ends in .csv.gz."),
)
_EPOCH = {"epoch s": r"^\s*\d{9,10}([.,]\d+)?\s*$", "epoch ms": r"^\s*\d{12,13}([.,]\d+)?\s*$"}
_DAY, _MONTH = r"(1[3-9]|2\d|3[01])", r"(0?[1-9]|1[0-2])"
_ORDERS = {"day first": rf"^\s*{_DAY}[-/.]{_MONTH}[-/.]\d", "month first": rf"^\s*{_MONTH}[-/.]{_DAY}[-/.]\d"}
_NOTHING = (np.zeros(0, np.int64), [pa.array([], pa.string())])  # what a file without blocks shows
_STATED = r"\d[T ]+\d.*(Z|[+-]\d{2}(:?\d{2})?)\s*$"
_DATE_ALONE = r"^\s*\d{1,4}[-/.]\d{1,2}[-/.]\d{1,4}\s*$"
_CLOCK_ALONE = r"^\s*\d{1,2}:\d{2}(:\d{2}([.,]\d+)?)?( ?[AaPp][Mm])?\s*$"


@dataclass(frozen=True, slots=True)
class Layout:
    """Which columns hold what. `tag`, `value` and `quality` are None in a wide export."""

    time: int
    tag: int | None = None
    value: int | None = None
    quality: int | None = None

    @property
    def is_long(self) -> bool:
        """Tell whether a row holds one reading."""
        return self.tag is not None


@dataclass(frozen=True, slots=True)
class Dialect:
    """How one export is read. `encoding` and `separator` are empty for Parquet."""

    encoding: str
    separator: str
    header: tuple[str, ...]
    header_row: int
    layout: Layout
    clock: Clock
    numbers: Numbers
    quality: str | None  # a key of values.QUALITY_FORMS; None where the export has no quality column

    @property
    def width(self) -> int:
        """Give the readings that one row holds."""
        return 1 if self.layout.is_long else len(self.header) - 1

    def describe(self) -> tuple[str, ...]:
        """Say how the export is read.

        Returns
        -------
        tuple of str
            One decision per sentence.
        """
        return (*self._of_file(), *self._of_layout(), *self._of_time(), *self._of_values())

    def _of_file(self) -> tuple[str, ...]:
        if not self.encoding:
            return ("Parquet.",)
        return (
            f"Text in {self.encoding}, separated by {SEPARATORS[self.separator]};"
            f" line {self.header_row} names the columns.",
        )

    def _of_layout(self) -> tuple[str, ...]:
        time, layout = self.header[self.layout.time], self.layout
        if layout.tag is None or layout.value is None:
            tags = f"each of {self.width} tags" if self.width > 1 else "one tag"
            return (f"Wide: times in '{time}', a column for {tags}.",)
        roles = (layout.time, layout.tag, layout.value, layout.quality)
        spare = [name for i, name in enumerate(self.header) if i not in roles]
        left = (f"Columns not read: {', '.join(spare)}.",) if spare else ()
        tag, value = self.header[layout.tag], self.header[layout.value]
        return (f"Long: times in '{time}', tags in '{tag}', values in '{value}'.", *left)

    def _of_time(self) -> tuple[str, ...]:
        forms = {
            "timestamp": "time stamps",
            "epoch s": "seconds since 1970",
            "epoch ms": "milliseconds since 1970",
        }
        form = forms.get(self.clock.form, f"calendar times, {self.clock.form}")
        if self.clock.form in EPOCHS:
            return (f"Times are {form}, UTC.",)
        if self.clock.offset:
            return (f"Times are {form}, with their offset from UTC.",)
        return (f"Times are {form}, without offset: read as clock time of {self.clock.zone}.",)

    def _of_values(self) -> tuple[str, ...]:
        words = ", ".join(repr(word) for word in sorted(self.numbers.missing - {""}))
        blank = "bad quality" if self.layout.is_long else "nothing was stored then, no reading"
        quality = "No quality column: every number counts as usable."
        if self.quality is not None and self.layout.quality is not None:
            quality = f"Quality in '{self.header[self.layout.quality]}', {_QUALITIES[self.quality]}."
        return (
            f"Decimal mark: {MARKS[self.numbers.decimal]}.",
            f"Blank cells: {blank}.",
            f"Words that mean bad quality, whatever their capitals: {words}.",
            quality,
        )


def decide_encoding(export: str, head: bytes) -> tuple[str, str]:
    """Find the encoding of a text export.

    Parameters
    ----------
    export : str
        Name of the export, for the error.
    head : bytes
        The file's beginning.

    Returns
    -------
    str
        Python's codec.
    str
        Its name for people.
    """
    if not head.strip():
        raise ExportError(f"{export}: is empty", remedy="Export it again; an empty file holds no reading.")
    for begins, what, remedy in _NO_TEXT:
        if head.startswith(begins):
            raise ExportError(f"{export}: is {what}", remedy=remedy)
    if head.startswith(codecs.BOM_UTF8):
        return "utf-8-sig", "UTF-8 with byte order mark"
    if head.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)) and not head.startswith(
        codecs.BOM_UTF32_LE
    ):
        return "utf-16", "UTF-16"
    if b"\0" in head:
        return _without_mark(export, head)
    try:
        codecs.getincrementaldecoder("utf-8")().decode(head)
    except UnicodeDecodeError as error:
        return _latin(export, head, error.start)
    return "utf-8", "UTF-8"


def _without_mark(export: str, head: bytes) -> tuple[str, str]:
    """UTF-16 shows by NUL in every second byte; anything else with NUL is no text."""
    even, odd = head[0::2].count(0), head[1::2].count(0)
    if not even and odd > len(head) // 5:
        return "utf-16-le", "UTF-16 without byte order mark"
    if not odd and even > len(head) // 5:
        return "utf-16-be", "UTF-16 without byte order mark"
    row = head.count(b"\n", 0, head.index(0)) + 1
    raise ExportError(
        f"{export}:{row}: holds NUL bytes, it is not text", remedy="Export as CSV text or as Parquet."
    )


def _latin(export: str, head: bytes, at: int) -> tuple[str, str]:
    """Latin-1 has no printing character at 0x80 to 0x9F."""
    if any(0x80 <= byte <= 0x9F for byte in head):
        row = head.count(b"\n", 0, at) + 1
        raise ExportError(
            f"{export}:{row}: byte 0x{head[at]:02X} is neither UTF-8, UTF-16 nor Latin-1",
            remedy="Save the export as UTF-8.",
        )
    return "latin-1", "Latin-1"


def decide_separator(export: str, lines: Sequence[str], first_row: int) -> str:
    """Find the character between fields: the one that gives the rows as many columns as the header.

    Parameters
    ----------
    export : str
        Name of the export, for the error.
    lines : sequence of str
        The header and the first rows.
    first_row : int
        Number of the header line.

    Returns
    -------
    str
        One of SEPARATORS.
    """
    place = f"{export}:{first_row}"
    widths = {s: [len(fields(line, s)) for line in lines] for s in SEPARATORS}
    splits = {s: w for s, w in widths.items() if w[0] > 1}
    if not splits:
        raise ExportError(
            f"{place}: the header {lines[0][:60]!r} names one column only",
            remedy="Export with the names of the columns, separated by comma, semicolon, tab or bar,"
            " in the first line.",
        )
    if len(lines) == 1:
        raise ExportError(
            f"{place}: holds a header and no rows", remedy="Export a span of time that has readings."
        )
    fits = [s for s, w in splits.items() if 2 * w[1:].count(w[0]) >= len(w) - 1]
    fits = [s for s in fits if _roles(fields(lines[0], s), frozenset())["time"]] or fits
    if len(fits) == 1:
        return fits[0]
    ways = ", ".join(f"{SEPARATORS[s]}: header {w[0]}, next row {w[1]} columns" for s, w in splits.items())
    raise ExportError(
        f"{place}: the separator cannot be told ({ways})",
        remedy="Export with semicolons, or quote the fields that hold a comma.",
    )


def fields(line: str, separator: str) -> list[str]:
    """Split one line.

    Parameters
    ----------
    line : str
        Without line end.
    separator : str
        The character between fields.

    Returns
    -------
    list of str
        Without the blanks around each.
    """
    if '"' not in line:
        return [name.strip() for name in line.split(separator)]
    try:
        return [name.strip() for name in next(csv.reader([line], delimiter=separator), [])]
    except csv.Error:  # a stray carriage return, or a field beyond all measure
        return [line]


def decide_layout(place: str, header: Sequence[str], wanted: Collection[str], look: Look) -> Layout:
    """Find which columns hold what, by their names; the time column also by what it holds.

    Parameters
    ----------
    place : str
        `file:row` of the header, for the error.
    header : sequence of str
        Names of the columns.
    wanted : collection of str
        Tags somebody asked for; a column of such a name is a tag.
    look : callable
        Gives columns.

    Returns
    -------
    Layout
        Wide, or long where a tag and a value column are named.
    """
    _refuse_header(place, header)
    roles = _roles(header, wanted)
    time = _time_column(place, header, roles["time"], look)
    _refuse_split_times(place, header, time, look)
    tag, value, quality = (roles[name] for name in ("tag", "value", "quality"))
    if len(tag) == len(value) == 1 and len(quality) <= 1:
        return Layout(time, tag[0], value[0], quality[0] if quality else None)
    found = [header[i] for i in (*tag, *value, *quality)]
    if found or len(header) < 2:
        raise ExportError(
            f"{place}: columns {', '.join(map(repr, found or header))} are neither a long nor a wide export",
            remedy="Long: name the columns time, tag, value and, if there is one, quality."
            " Wide: name them time and the tags, even if it is one tag only.",
        )
    return Layout(time)


def _refuse_header(place: str, header: Sequence[str]) -> None:
    if len(header) > MOST_COLUMNS:
        raise ExportError(
            f"{place}: {len(header)} columns, more than {MOST_COLUMNS}",
            remedy="Export the tags of the unit file only, or in long form.",
        )
    twice = sorted({name for name in header if header.count(name) > 1})
    if twice:
        raise ExportError(
            f"{place}: more than one column is named {twice[0]!r}", remedy="Give every column its own name."
        )


def _roles(header: Sequence[str], wanted: Collection[str]) -> dict[str, list[int]]:
    """Places of the columns that bear one of the names of each role."""
    plain = [" ".join(name.casefold().replace("_", " ").replace("-", " ").split()) for name in header]
    mine = [i for i, name in enumerate(header) if name not in wanted]
    return {role: [i for i in mine if plain[i] in names] for role, names in ROLES.items()}


def _time_column(place: str, header: Sequence[str], named: list[int], look: Look) -> int:
    """The column called so, else the only one that holds times."""
    found = named or [i for i in range(len(header)) if _holds_times(next(look([i]), _NOTHING)[1][0])]
    if len(found) == 1:
        return found[0]
    if found:
        names = ", ".join(repr(header[i]) for i in found)
        raise ExportError(
            f"{place}: {names} may each be the time", remedy="Export one time column, named 'time'."
        )
    raise ExportError(f"{place}: no time column", remedy="Name the column of times 'time' or 'timestamp'.")


def _refuse_split_times(place: str, header: Sequence[str], time: int, look: Look) -> None:
    """Dates whose times of day stand in another column would all be read as midnight."""
    if not _mostly(next(look([time]), _NOTHING)[1][0], _DATE_ALONE):
        return
    others = [i for i in range(len(header)) if i != time]
    shown = next(look(others), (None, []))[1] if others else []
    for i, column in zip(others, shown, strict=False):
        if _mostly(column, _CLOCK_ALONE):
            raise ExportError(
                f"{place}: the time of day stands in {header[i]!r}, apart from its date in {header[time]!r}",
                remedy="Export date and time of day in one column, as 2026-03-29T01:30Z.",
            )


def _mostly(column: Any, pattern: str) -> bool:
    return is_text(column.type) and matches(column, pattern) > len(column) / 2


def _holds_times(column: Any) -> bool:
    if len(column) == 0:
        return False
    if pa.types.is_timestamp(column.type):
        return True
    return is_text(column.type) and max(matches(column, p) for p in PATTERNS.values()) > len(column) / 2


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
    rows, (times,) = next(look([at]), _NOTHING)
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
