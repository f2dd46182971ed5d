"""What kind of export is this? Encoding, separator, layout, times, decimal mark and quality codes.

Every decision rests on something that has one meaning only. What has two is refused, with both readings of
one row from the file, unless the unit file settles it, and never settled by a preference.
"""

from __future__ import annotations

import codecs
import csv
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from ingest.columns import NOTHING, Look, matches
from ingest.errors import ExportError
from ingest.timestamps import EPOCHS, PATTERNS, Clock
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
    (b"\x28\xb5\x2f\xfd", "a zst file without .zst in its name", "Rename it so that it ends in .csv.zst."),
)
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
    found = named or [i for i in range(len(header)) if _holds_times(next(look([i]), NOTHING)[1][0])]
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
    if not _mostly(next(look([time]), NOTHING)[1][0], _DATE_ALONE):
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
