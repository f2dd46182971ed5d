"""Which columns of an export hold what: times, tags, values, qualities.

Columns are found by their names; times also by what stands below, since a column of any name may hold them.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc

from ingest.columns import NOTHING, Look, is_text, matches
from ingest.errors import ExportError
from ingest.lines import LONGEST_NAME
from ingest.timestamps import MONTH_NAMED, PATTERNS

MOST_COLUMNS = 5_000

# Names of columns, small letters, blanks for _ - and so on; common practice, no source.
ROLES = {
    "time": (
        *("time", "timestamp", "time stamp", "datetime", "date time", "date/time", "date", "time of day"),
        *("zeit", "zeitstempel", "datum", "uhrzeit"),
    ),
    "tag": ("tag", "tag name", "tagname", "point", "signal"),
    "value": ("value", "val", "reading", "wert"),
    "unit": ("unit", "units", "uom", "eu", "eng unit", "eng units", "engineering units", "einheit"),
    "quality": ("quality", "status", "quality code", "status code", "qualität"),
}

_DATE_ALONE = r"^\s*\d{1,4}[-/.]\d{1,2}[-/.]\d{1,4}\s*$"
_CLOCK_ALONE = r"^\s*\d{1,2}:\d{2}(:\d{2}([.,]\d+)?)?([ \x{a0}\x{202f}]?[AaPp]\.?[Mm]\.?)?\s*$"
_TAG_LINE = re.compile(
    rf"""^["\s\#*/]*(?:{"|".join(ROLES["tag"])})"?\s*[:=,;|\t]["\s:=,;|]*(.+?)["\s,;|]*$""", re.IGNORECASE
)
_NO_FILE_NAME = re.compile(r'[\\/:*?"<>|\s]')  # may stand in a tag but not in every file's name


@dataclass(frozen=True, slots=True)
class Layout:
    """Which columns hold what.

    A wide export has a column for each tag: `tag`, `value` and `quality` are None. Else a row holds one
    reading, of the tag in its column `tag`, or all of the one tag `only`, and perhaps its `unit`. `clock` is
    the time of day where it stands apart from its date in `time`.
    """

    time: int
    tag: int | None = None
    value: int | None = None
    quality: int | None = None
    clock: int | None = None
    only: str | None = None
    unit: int | None = None

    @property
    def is_long(self) -> bool:
        """Tell whether a row holds one reading."""
        return self.value is not None

    @property
    def others(self) -> tuple[int, ...]:
        """Give the columns that are read beside time and values."""
        return tuple(i for i in (self.tag, self.quality, self.clock, self.unit) if i is not None)

    def times(self, columns: dict[int, Any]) -> Any:
        """Give the times of some rows as one column.

        Parameters
        ----------
        columns : dict of int to pyarrow.Array (n,)
            Columns of the export by their place; `time` and `clock` among them.

        Returns
        -------
        pyarrow.Array (n,)
            Date and time of day joined by a blank where they stand apart.
        """
        if self.clock is None:
            return columns[self.time]
        parts = (pc.utf8_trim_whitespace(columns[i]) for i in (self.time, self.clock))
        return pc.binary_join_element_wise(*parts, " ")

    def seen(self, look: Look) -> Look:
        """Show columns with date and time of day joined.

        Parameters
        ----------
        look : callable
            Gives columns.

        Returns
        -------
        callable
            Gives the joined times in place of the column `time` asked for alone.
        """
        if self.clock is None:
            return look
        pair = [self.time, self.clock]
        return lambda _: (
            (rows, [self.times(dict(zip(pair, block, strict=True)))]) for rows, block in look(pair)
        )


@dataclass(frozen=True, slots=True)
class Place:
    """Where the header of an export stands, for errors, and what else may name a tag."""

    export: str
    row: int  # 0 in Parquet
    above: tuple[str, ...] = ()  # lines above the header

    def __str__(self) -> str:
        """Give `file:row`, or the file alone."""
        return f"{self.export}:{self.row}" if self.row else self.export


def roles(header: Sequence[str], wanted: Collection[str]) -> dict[str, list[int]]:
    """Find the columns that bear one of the names of each role.

    Parameters
    ----------
    header : sequence of str
        Names of the columns.
    wanted : collection of str
        Tags somebody asked for; a column of such a name is a tag.

    Returns
    -------
    dict of str to list of int
        Role to places.
    """
    plain = [" ".join(name.casefold().replace("_", " ").replace("-", " ").split()) for name in header]
    mine = [i for i, name in enumerate(header) if name not in wanted]
    return {role: [i for i in mine if plain[i] in names] for role, names in ROLES.items()}


def decide_layout(place: Place, header: Sequence[str], wanted: Collection[str], look: Look) -> Layout:
    """Find which columns hold what, by their names; the time column also by what it holds.

    Parameters
    ----------
    place : Place
        Of the header.
    header : sequence of str
        Names of the columns.
    wanted : collection of str
        Tags somebody asked for; a column of such a name is a tag.
    look : callable
        Gives columns.

    Returns
    -------
    Layout
        Long where a tag and a value column are named, of one tag where only values are, else wide.
    """
    _refuse_header(place, header)
    named = roles(header, wanted)
    time, clock = _time_columns(place, header, named["time"], look)
    tag, value, quality, units = (
        [i for i in named[name] if i not in (time, clock)] for name in ("tag", "value", "quality", "unit")
    )
    rest = [i for i in range(len(header)) if i not in (time, clock, *tag, *value, *quality)]
    one, unit = (found[0] if len(found) == 1 else None for found in (quality, units))
    if len(tag) == len(value) == 1 and len(quality) <= 1:
        return Layout(time, tag[0], value[0], one, clock, unit=unit)
    if not tag and len(value) == 1 and len(quality) <= 1:
        only = _only_tag(place, header[value[0]], wanted)
        return Layout(time, None, value[0], one, clock, only, unit)
    if not tag and not value and len(quality) == len(rest) == 1:
        return Layout(time, None, rest[0], one, clock, header[rest[0]])
    found = [header[i] for i in (*tag, *value, *quality)]
    if found or len(header) < 2:
        raise ExportError(
            f"{place}: columns {', '.join(map(repr, found or header))} are neither a long nor a wide export",
            remedy="Long: name the columns time, tag, value and, if there is one, quality."
            " Wide: name them time and the tags, even if it is one tag only.",
        )
    return Layout(time, clock=clock)


def _refuse_header(place: Place, header: Sequence[str]) -> None:
    if len(header) > MOST_COLUMNS:
        raise ExportError(
            f"{place}: {len(header)} columns, more than {MOST_COLUMNS}",
            remedy="Export the tags of the unit file only, or in long form.",
        )
    longest = max(map(len, header), default=0)
    if longest > LONGEST_NAME:
        raise ExportError(
            f"{place}: a name of {longest} characters, more than {LONGEST_NAME}",
            remedy="Give columns and tags shorter names.",
        )
    twice = sorted({name for name in header if header.count(name) > 1})
    if twice:
        raise ExportError(
            f"{place}: more than one column is named {twice[0]!r}", remedy="Give every column its own name."
        )


def _time_columns(
    place: Place, header: Sequence[str], named: list[int], look: Look
) -> tuple[int, int | None]:
    """The column called so, else the only one that holds times; and that of the time of day where apart."""
    found = named or [i for i in range(len(header)) if _holds_times(next(look([i]), NOTHING)[1][0])]
    if not found:
        raise ExportError(
            f"{place}: no time column", remedy="Name the column of times 'time' or 'timestamp'."
        )
    dates = [i for i in found if _mostly(i, _DATE_ALONE, look)]
    others = found if len(found) > 1 else [i for i in range(len(header)) if i not in found]
    if len(dates) == 1:
        clocks = [i for i in others if _mostly(i, _CLOCK_ALONE, look)]
        if len(clocks) == 1 and set(found) <= {*dates, *clocks}:
            return dates[0], clocks[0]
        found = [*found, *(i for i in clocks if i not in found)]
    if len(found) == 1:
        return found[0], None
    names = ", ".join(repr(header[i]) for i in found)
    raise ExportError(
        f"{place}: {names} may each be the time", remedy="Export one time column, named 'time'."
    )


def _mostly(i: int, pattern: str, look: Look) -> bool:
    """Whether most of the first cells of a column match a pattern."""
    column = next(look([i]), NOTHING)[1][0]
    return is_text(column.type) and matches(column, pattern) > len(column) / 2


def _holds_times(column: Any) -> bool:
    if len(column) == 0:
        return False
    if pa.types.is_timestamp(column.type):
        return True
    patterns = (*PATTERNS.values(), MONTH_NAMED)
    return is_text(column.type) and max(matches(column, p) for p in patterns) > len(column) / 2


def _only_tag(place: Place, column: str, wanted: Collection[str]) -> str:
    """The tag of an export of one tag: the one that a line above the header states, or the file's name."""
    stated = {found[1] for line in place.above if (found := _TAG_LINE.match(line))}
    stated |= {line for line in (one.strip(' "#;,|\t') for one in place.above) if line in wanted}
    in_name = _in_name(place.export, wanted)
    tags = sorted({*stated, *in_name})
    if len(tags) == 1:
        return tags[0]
    means = [f"{tag!r} by the lines above the header" for tag in sorted(stated)]
    means += [f"{tag!r} by the file's name" for tag in in_name]
    said = f"may belong to {' or '.join(means)}" if tags else "state no tag"
    raise ExportError(
        f"{place}: the values in {column!r} {said}",
        remedy="Name the column of values after its tag, write a line 'Tag: ' and the tag above the header,"
        " or name the file after the tag alone.",
    )


def _in_name(export: str, wanted: Collection[str]) -> list[str]:
    """Tags somebody asked for that stand in a file's name as whole words; where one is the name, it alone."""
    stem = re.sub(r"(\.(csv|txt|tsv|gz|zst|parquet|pq))+$", "", export.casefold())
    plain = {tag: _NO_FILE_NAME.sub("_", tag.casefold()) for tag in sorted(wanted)}
    same = [tag for tag, name in plain.items() if name == stem]
    inside = (
        tag for tag, name in plain.items() if re.search(rf"(?<![^\W_]){re.escape(name)}(?![^\W_])", stem)
    )
    return same or list(inside)
