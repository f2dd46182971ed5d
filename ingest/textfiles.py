"""CSV exports: a block of whole lines at a time -> columns."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pcsv
from numpy.typing import NDArray

from ingest.account import REASONS
from ingest.asides import without_sums
from ingest.clocks import decide_clock
from ingest.columns import plain, present, single
from ingest.dialect import Dialect
from ingest.encodings import decide_encoding
from ingest.errors import ExportError
from ingest.files import Told
from ingest.headings import Heading, decide_heading
from ingest.layouts import Layout, Place, decide_layout
from ingest.lines import BLOCK, Block, Lines, blocks, opened, screened, wrong_columns
from ingest.measures import Stated, conversions
from ingest.qualities import decide_quality
from ingest.timestamps import EARLIEST_US, EPOCHS, LATEST_US
from ingest.unit import ExportRules
from ingest.values import decide_numbers

_LF, _CR = b"\n\r"
_WORDS = pa.dictionary(pa.int32(), pa.string())
_FIRST_LINES = 100  # what the head of an export is looked for in
_LOOK = BLOCK  # bytes by which a decision is judged, however few are read at a time
_PATIENCE = 8  # blocks that must be read as text before the quick way is given up


@dataclass(frozen=True, slots=True)
class TextFile:
    """An open CSV export: what is known of it before the columns are."""

    path: Path
    codec: str
    heading: Heading
    told: Told | None = None  # told the bytes read, as the rows are

    @property
    def separator(self) -> str:
        """Give the character between fields."""
        return self.heading.separator

    def lines(self, size: int | None = None) -> Iterator[Lines]:
        """Read the rows below the head.

        Parameters
        ----------
        size : int or None
            Bytes read at a time; None for the usual.

        Yields
        ------
        Lines
            May be empty.
        """
        for row, data in blocks(self.path, self.codec, self.told, size=size):
            skip = self.heading.last + 1 - row  # lines of the head that stand in this block
            rest = data.split(b"\n", skip)[-1] if skip > 0 else data
            if rest:
                yield screened(max(row, row + skip), rest, self.separator)

    def look(self, columns: Sequence[int]) -> Iterator[tuple[NDArray[np.int64], list[Any]]]:
        """Show columns as text, block by block.

        Parameters
        ----------
        columns : sequence of int
            Places in the header.

        Yields
        ------
        numpy.ndarray of int64 (n,)
            Numbers of the rows in the file.
        list of pyarrow.Array (n,)
            One per column.
        """
        for lines in self.lines(_LOOK):
            block = self.parse(lines, dict.fromkeys(columns, pa.string()))
            if block is not None and len(block.rows):
                yield block.rows, [single(block.columns[i]) for i in columns]

    def parse(self, lines: Lines, types: dict[int, Any], **convert: Any) -> Block | None:
        """Split lines into columns of given types.

        Parameters
        ----------
        lines : Lines
            Rows.
        types : dict of int to pyarrow.DataType
            The columns wanted.
        **convert : Any
            Further settings of pyarrow.csv.ConvertOptions.

        Returns
        -------
        Block or None
            None where something does not fit its type.
        """
        if len(lines.rows) == 0:
            nothing = {i: pa.array([], kind) for i, kind in types.items()}
            return Block(lines.rows, nothing, lines.faults, lines.asides)
        wrong: list[int] = []

        def leave_out(row: Any) -> str:
            wrong.append(row.number - 1)
            return "skip"

        names = [str(i) for i in range(len(self.heading.header))]
        try:
            table = pcsv.read_csv(
                pa.BufferReader(lines.data),
                pcsv.ReadOptions(use_threads=False, block_size=len(lines.data) + 1, column_names=names),
                pcsv.ParseOptions(
                    delimiter=self.separator,
                    quote_char='"' if b'"' in lines.data else False,
                    ignore_empty_lines=False,
                    invalid_row_handler=leave_out,
                ),
                pcsv.ConvertOptions(
                    column_types={str(i): kind for i, kind in types.items()},
                    include_columns=[str(i) for i in types],
                    check_utf8=False,  # the block was checked as a whole
                    **convert,
                ),
            )
        except pa.ArrowInvalid:
            return None
        return self._block(lines, {i: single(table.column(str(i))) for i in types}, wrong)

    def _block(self, lines: Lines, columns: dict[int, Any], wrong: list[int]) -> Block:
        """The columns with the number of each row."""
        count = len(next(iter(columns.values())))
        if count + len(wrong) != len(lines.rows):
            raise ExportError(
                f"{self.path.name}:{lines.rows[0]}: the rows from here on cannot be told apart",
                remedy="Export without quotes or line breaks inside fields.",
            )
        if not wrong:
            return Block(lines.rows, columns, lines.faults, lines.asides)
        at = np.array(wrong, np.int64)
        faults = (*lines.faults, wrong_columns(lines, at))
        return Block(np.delete(lines.rows, at), columns, faults, lines.asides)


def open_text(
    path: Path,
    rules: ExportRules,
    wanted: Collection[str] | None,
    zone: str | None,
    *,
    units: Mapping[str, tuple[Stated, ...]],
) -> tuple[TextFile, Dialect]:
    """Find out how a CSV export is to be read.

    Parameters
    ----------
    path : pathlib.Path
        The export.
    rules : ExportRules
        What the unit file fixes.
    wanted : collection of str or None
        Tags somebody asks for; None: all.
    zone : str or None
        Zone of times without offset.
    units : mapping of str to tuple of Stated
        What the unit files state about the unit of each tag.

    Returns
    -------
    TextFile
        To read it with.
    Dialect
        To say it with.
    """
    file, encoding = _begin(path, wanted or ())
    heading = file.heading
    header, place = heading.header, Place(path.name, heading.row, tuple(text for _, text in heading.above))
    if next(file.look([0]), None) is None:
        _refuse_no_rows(file, place)
    layout = decide_layout(place, header, wanted or (), file.look)
    time = (layout.time, heading.said_of(layout.time))
    look = layout.seen(file.look)
    clock = decide_clock(path.name, heading.row, time, look, zone=zone, rules=rules)
    numbers = decide_numbers(path.name, value_columns(header, layout, wanted), file.look, rules)
    quality = decide_quality(path.name, layout.quality, file.look, rules)
    row, written = heading.units(layout)
    converted = conversions(f"{path.name}:{row}", written, units)
    decided = (encoding, file.separator, header, heading.row)
    return file, Dialect(*decided, layout, clock, numbers, quality, converted, heading)


def _refuse_no_rows(file: TextFile, place: Place) -> NoReturn:
    """There is nothing below the header, or nothing that can be split into fields."""
    for fault in (fault for lines in file.lines() for fault in lines.faults):
        row, text = fault.first[0]
        what, remedy = REASONS[fault.reason]
        raise ExportError(
            f"{file.path.name}:{row}: {text[:60]!r} {what}, and no row can be read", remedy=remedy
        )
    raise ExportError(
        f"{place}: holds a header and no rows", remedy="Export a span of time that has readings."
    )


def value_columns(header: Sequence[str], layout: Layout, wanted: Collection[str] | None) -> list[int]:
    """Find the columns whose values somebody asks for.

    Parameters
    ----------
    header : sequence of str
        Names of the columns.
    layout : Layout
        Which column holds what.
    wanted : collection of str or None
        Tags asked for; None: all.

    Returns
    -------
    list of int
        Places in the header, ascending; the value column of a long export.
    """
    if layout.value is not None:
        return [layout.value]
    asked = {name for name in header if name} if wanted is None else wanted
    apart = (layout.time, *layout.others)
    return [i for i, name in enumerate(header) if i not in apart and name in asked]


def text_blocks(
    file: TextFile, dialect: Dialect, columns: Sequence[int], wanted: Collection[str]
) -> Iterator[Block]:
    """Read a CSV export: numbers at once where a whole block is clean, else as text for a closer look.

    Parameters
    ----------
    file : TextFile
        The export.
    dialect : Dialect
        How it is read.
    columns : sequence of int
        Columns of values.
    wanted : collection of str
        Tags somebody asks for, which are no names of sums.

    Yields
    ------
    Block
        Time column and values as text wherever anything in the block is not a clean time or number.
    """
    text = _types(dialect, columns, quick=False)
    spoilt = 0
    worded = pa.types.is_string(_types(dialect, columns, quick=True)[dialect.layout.time])
    for whole in file.lines():
        lines = without_sums(whole, file.separator, wanted) if worded else whole
        block = _quick(file, dialect, columns, lines) if spoilt < _PATIENCE else None
        if not worded and (block is None or block.faults):  # times that are none would have been seen
            lines = without_sums(whole, file.separator, wanted)
            if lines is not whole:
                block = _quick(file, dialect, columns, lines)
        spoilt = spoilt + 1 if block is None else 0
        block = file.parse(lines, text) if block is None else block
        if block is None:
            raise ExportError(
                f"{file.path.name}:{lines.rows[0]}: the rows from here on cannot be split into columns",
                remedy="Export as CSV text with one row per line.",
            )
        yield block


def _quick(file: TextFile, dialect: Dialect, columns: Sequence[int], lines: Lines) -> Block | None:
    """A block with its values as numbers; None where it is not clean.

    Null can mean one thing only: in a wide block that has blank cells it means these, and a word is not
    clean; else it means a word, and becomes NaN.
    """
    blanks = not dialect.layout.is_long and _holds_blanks(lines.data, ord(file.separator))
    words = frozenset({""}) if blanks else dialect.numbers.missing
    if dialect.clock.form in EPOCHS and (b"0x" in lines.data or b"0X" in lines.data):
        return None  # Arrow reads whole numbers in base 16, too
    block = file.parse(lines, _types(dialect, columns, quick=True), **_settings(dialect, words))
    if block is None or not _clean(block, dialect, columns):
        return None
    if not blanks:
        worded = (i for i in columns if block.columns[i].null_count)
        block.columns.update({i: pc.fill_null(block.columns[i], np.nan) for i in worded})
    return block


def _holds_blanks(data: bytes, separator: int) -> bool:
    """Whether there is a cell with nothing in it: a separator or a line's edge beside another, or quotes."""
    raw = np.frombuffer(data, np.uint8)
    mark = raw == separator
    edge = mark | (raw == _LF) | (raw == _CR)
    return bool(
        mark[:1].any() or (mark[:-1] & edge[1:]).any() or (edge[:-1] & mark[1:]).any() or b'""' in data
    )


def _begin(path: Path, wanted: Collection[str]) -> tuple[TextFile, str]:
    """Encoding, and what stands at the head."""
    with opened(path) as raw:
        codec, encoding = decide_encoding(path.name, raw.read(BLOCK))
    lines = _first_lines(path, codec)
    if not lines:
        raise ExportError(f"{path.name}: holds blank lines only", remedy="Export it again.")
    row, first = lines[0]
    if "\r" in first:
        raise ExportError(
            f"{path.name}:{row}: the lines end in carriage returns alone",
            remedy="Export with line feeds at the ends of lines.",
        )
    heading = decide_heading(path.name, lines, wanted)
    header = next(text for number, text in lines if number == heading.row)
    if screened(heading.row, header.encode() + b"\n", heading.separator).faults:
        raise ExportError(
            f"{path.name}:{heading.row}: a quote in the header does not open and close with its field",
            remedy="Quote whole names or none.",
        )
    return TextFile(path, codec, heading), encoding


def _first_lines(path: Path, codec: str) -> list[tuple[int, str]]:
    """The first lines, blank ones left out, each with its number."""
    found: list[tuple[int, str]] = []
    for row, data in blocks(path, codec, size=_LOOK):
        head = data.decode().split("\n")[:-1]
        found += [(row + i, line.rstrip("\r")) for i, line in enumerate(head) if line.strip()]
        if len(found) >= _FIRST_LINES:
            break
    return found[:_FIRST_LINES]


def _types(dialect: Dialect, columns: Sequence[int], *, quick: bool) -> dict[int, Any]:
    """What each column is read as."""
    layout, clock = dialect.layout, dialect.clock
    time = pa.string()
    plain_clock = layout.clock is None and not clock.halves and not clock.named
    if quick and clock.form == "year first" and plain_clock:
        time = pa.timestamp("ns" if clock.fraction > 6 else "us", "UTC" if clock.offset else None)
    elif quick and clock.form in EPOCHS:
        time = pa.int64()  # as a float, 1.79e9 would be a time
    types = {layout.time: time, **dict.fromkeys(columns, pa.float64() if quick else pa.string())}
    types |= {layout.clock: pa.string()} if layout.clock is not None else {}
    return types | {i: _WORDS for i in (layout.tag, layout.quality, layout.unit) if i is not None}


def _settings(dialect: Dialect, words: Collection[str]) -> dict[str, Any]:
    """Some words become null at once, as they are and in the usual capitals."""
    forms = {form for word in words for form in (word, word.upper(), word.title(), word.capitalize())}
    forms |= {"NaN"} if "nan" in words else set()
    return {
        "null_values": sorted(forms),
        "timestamp_parsers": [pcsv.ISO8601],
        "decimal_point": dialect.numbers.decimal,
    }


def _clean(block: Block, dialect: Dialect, columns: Sequence[int]) -> bool:
    """Whether every time is there and within bounds, and every number finite."""
    time = block.columns[dialect.layout.time]
    if time.null_count:
        return False
    if not pa.types.is_string(time.type) and len(time):
        raw = plain(time, np.int64)
        fine = pa.types.is_timestamp(time.type) and time.type.unit == "ns"
        unit = 1000 if fine else 1 / EPOCHS.get(dialect.clock.form, 1.0)
        if not (EARLIEST_US * unit <= raw.min() and raw.max() < LATEST_US * unit):
            return False
    return all(_finite(block.columns[i]) for i in columns)


def _finite(column: Any) -> bool:
    odd = ~np.isfinite(plain(column, np.float64))
    return not odd.any() or not (odd & present(column)).any()
