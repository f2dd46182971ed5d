"""What stands at the head of a text export: lines above the header, the header, descriptions, units.

The header is the line whose fields are names, of as many columns as the rows below; one that names a time
column or tags that somebody asked for goes before others.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from ingest.errors import ExportError
from ingest.layouts import Layout, roles
from ingest.values import MISSING_WORDS

SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "bar"}

_MOST_BELOW = 3  # rows of descriptions and units
TIME_LIKE = re.compile(
    r"\d{1,4}[-/.]\d{1,2}[-/.]\d{2,4}([T ,].*)?|\d{1,2}:\d{2}(:\d{2}.*)?"
    r"|\d{1,4}[- ][A-Za-z]{3}[- ]\d{2,4}( .*)?"
)
_NUMBER = re.compile(r"[+\-\u2212]?[\d.,' ]*\d[\d.,' ]*([eE][+-]?\d+)?")
_UNITS = re.compile(r"(?:(?:eng(?:ineering|\.)? ?)?units?|uom|eu|einheit(?:en)?)", re.IGNORECASE)
# What engineering units look like; only to tell a row of units from one of descriptions.
_UNIT = re.compile(
    r"(mol|vol|wt|mass|m|v|w)?[ .-]*%.*|pp[mb].*|.{1,12}/ ?(h|hr|hour|s|sec|min|d|day|m3|k?g|k?mol|mol|l)"
    r"|°?[CFK]|°? ?deg ?[CFK]|[kmh]?pa.*|m?bar.*|psi.*|atm|s?cf[hmd]|mm(hg|h2o|wc)|rpm|hz|[km]?[vaw]|-",
    re.IGNORECASE,
)


@dataclass(frozen=True, slots=True)
class NamesRow:
    """A row of descriptions or of units below the header: number in the file, kind, and its cells."""

    row: int
    kind: str  # 'descriptions' or 'units'
    cells: tuple[str, ...]


_UNIT_LINE = re.compile(
    rf"""^["\s\#*/]*{_UNITS.pattern}"?\s*[:=,;|\t]["\s:=,;|]*(.+?)["\s,;|]*$""", re.IGNORECASE
)
_ZONE_LINE = re.compile(r"""^["\s\#*/]*(?:time ?zone|zeitzone)"?\s*[:=,;|\t](.*)$""", re.IGNORECASE)
_BRACKETED = re.compile(r"(.+?)\s*[(\[]([^()\[\]]+)[)\]]")


@dataclass(frozen=True, slots=True)
class Heading:
    """The head of a text export; `row` is the number of the header line, `last` of its last line."""

    separator: str
    header: tuple[str, ...]  # tags without the units that stand in brackets behind them
    row: int
    last: int
    above: tuple[tuple[int, str], ...]  # lines that are not blank, with their numbers
    below: tuple[NamesRow, ...]
    bracketed: tuple[tuple[str, str], ...]  # tag, unit

    def said_of(self, column: int) -> str:
        """Give all that is said of a column of times: its name, what stands below it, the zone above.

        Parameters
        ----------
        column : int
            Its place.

        Returns
        -------
        str
            In one line.
        """
        zones = (match[1] for _, text in self.above if (match := _ZONE_LINE.match(text)))
        return " ".join([self.header[column], *(row.cells[column] for row in self.below), *zones])

    def units(self, layout: Layout) -> tuple[int, dict[str, str]]:
        """Find the units that are written for the tags.

        Parameters
        ----------
        layout : Layout
            Which columns hold what.

        Returns
        -------
        int
            The row they stand in.
        dict of str to str
            Tag to unit as written; a column of tags takes none.
        """
        for one in self.below:
            if one.kind == "units" and layout.only is not None and layout.value is not None:
                return one.row, {layout.only: one.cells[layout.value]}
            if one.kind == "units" and layout.value is None:
                apart = (layout.time, *layout.others)
                return one.row, {name: one.cells[i] for i, name in enumerate(self.header) if i not in apart}
        for row, text in self.above if layout.only is not None else ():
            if found := _UNIT_LINE.match(text):
                return row, {layout.only or "": found[1]}
        return self.row, dict(self.bracketed)


def decide_heading(export: str, lines: Sequence[tuple[int, str]], wanted: Collection[str]) -> Heading:
    """Find the header among the first lines, and what stands above and below it.

    Parameters
    ----------
    export : str
        Name of the export, for the error.
    lines : sequence of (int, str)
        The first lines that are not blank, with their numbers; at least one.
    wanted : collection of str
        Tags somebody asked for.

    Returns
    -------
    Heading
    """
    at = _header_place([text for _, text in lines], wanted)
    row = lines[at][0]
    separator = decide_separator(export, [text for _, text in lines[at:]], row)
    cells = fields(lines[at][1], separator)
    _refuse_values(f"{export}:{row}", cells, wanted)
    split = [_BRACKETED.fullmatch(cell) if cell not in wanted else None for cell in cells]
    parts = [(found[1], found[2]) if found and found[1] in wanted else None for found in split]
    header = tuple(part[0] if part else cell for part, cell in zip(parts, cells, strict=True))
    below = _below(header, [(n, fields(text, separator)) for n, text in lines[at + 1 :]])
    last = below[-1].row if below else row
    return Heading(separator, header, row, last, tuple(lines[:at]), below, tuple(filter(None, parts)))


def _refuse_values(place: str, cells: Sequence[str], wanted: Collection[str]) -> None:
    """A row of readings taken for the header would be lost, and its values taken for tags."""
    times = [cell for cell in cells if TIME_LIKE.fullmatch(cell) and cell not in wanted]
    if times:
        raise ExportError(
            f"{place}: {times[0]!r} is a time, but this line should name the columns",
            remedy="Export with the names of the columns in one line above the rows.",
        )


def _header_place(lines: Sequence[str], wanted: Collection[str]) -> int:
    """The line most like a header; the first where none has as many columns as the rows below it."""
    found = []
    for separator in SEPARATORS:
        rows = [fields(line, separator) for line in lines]
        widths = [len(row) for row in rows]
        for i, row in enumerate(rows[:-1]):
            if len(row) > 1 and 2 * widths[i + 1 :].count(len(row)) >= len(rows) - i - 1:
                found.append((*_likeness(row, wanted), -i))
    best = max(found, default=(-1, 0, 0, 0))
    return -best[-1] if best[0] >= 0 else 0


def _likeness(row: Sequence[str], wanted: Collection[str]) -> tuple[int, int, int]:
    """How much a line is like a header: time named, known names, names at all; -1 for one of values."""
    named = roles(row, wanted)
    timed = bool(named["time"])
    others = [cell for cell in row if cell not in wanted]
    if any(map(TIME_LIKE.fullmatch, others)) or (not timed and any(map(_NUMBER.fullmatch, others))):
        return -1, 0, 0
    tags = (cell in wanted or _BRACKETED.sub(r"\1", cell) in wanted for cell in row)
    known = sum(map(len, named.values())) + sum(tags)
    return int(timed), known, 0 if timed else sum(map(bool, row))


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
    fits = [s for s in fits if roles(fields(lines[0], s), frozenset())["time"]] or fits
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


def _below(header: Sequence[str], lines: Sequence[tuple[int, list[str]]]) -> tuple[NamesRow, ...]:
    """Rows of descriptions and units that follow the header."""
    named = roles(header, ())
    beside = {i for role in ("time", "tag", "quality") for i in named[role]}
    tags = named["tag"] if named["value"] else []  # else it is a label of the rows
    found: list[NamesRow] = []
    for row, cells in lines[:_MOST_BELOW]:
        named_tag = any(cells[i] for i in tags if i < len(cells))
        values = [cell for i, cell in enumerate(cells) if i not in beside]
        if len(cells) != len(header) or named_tag or not _are_names(cells, values):
            break
        found.append(NamesRow(row, _kind(cells, values), tuple(cells)))
    return tuple(found)


def _are_names(cells: Sequence[str], values: Sequence[str]) -> bool:
    """Whether a row holds words in place of times and numbers, and more than words for no value."""
    if any(TIME_LIKE.fullmatch(cell) or _NUMBER.fullmatch(cell) for cell in cells):
        return False
    return any(value.casefold() not in MISSING_WORDS for value in values)


def _kind(cells: Sequence[str], values: Sequence[str]) -> str:
    """Units by their name, or where most cells look like some."""
    told = [value for value in values if value]
    like = sum(_UNIT.fullmatch(value) is not None for value in told)
    named = any(_UNITS.fullmatch(cell.strip("[]() :")) for cell in cells)
    return "units" if named or 2 * like > len(told) else "descriptions"
