"""Parquet exports: some rows at a time -> columns."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from os import SEEK_END
from pathlib import Path
from typing import Any, BinaryIO, NoReturn

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from numpy.typing import NDArray

from ingest import files, lines
from ingest.clocks import decide_clock
from ingest.columns import is_text
from ingest.dialect import Dialect
from ingest.errors import ExportError
from ingest.files import Told
from ingest.layouts import Layout, Place, decide_layout
from ingest.lines import Block
from ingest.qualities import decide_quality
from ingest.textfiles import value_columns
from ingest.unit import ExportRules
from ingest.values import decide_numbers

MAGIC = b"PAR1"
LONGEST_TEXT = 1 << 10  # bytes of one text in a column that is read
LARGEST_FOOTER = 32 << 20  # bytes; 25 columns in a thousand groups of rows take 4 MB
_ROWS, _CELLS = 1 << 16, 1 << 22  # read at a time
_BYTES, _CELL_BYTES = 32 << 20, 128  # bytes that a group of rows may take, in all and for each cell


@dataclass(frozen=True, slots=True)
class ParquetExport:
    """A Parquet export and the names of its columns."""

    path: Path
    header: tuple[str, ...]

    def look(self, columns: Sequence[int]) -> Iterator[tuple[NDArray[np.int64], list[Any]]]:
        """Show columns, some rows at a time.

        Parameters
        ----------
        columns : sequence of int
            Places in the header.

        Yields
        ------
        numpy.ndarray of int64 (n,)
            Numbers of the rows in the file.
        list of pyarrow.Array (n,)
            One per column; dictionaries as what they stand for.
        """
        for block in parquet_blocks(self, columns):
            yield block.rows, [_spread(block.columns[i]) for i in columns]


@contextmanager
def _opened(path: Path) -> Iterator[Any]:
    """The file, columns of text as dictionaries; what Arrow refuses becomes an ExportError."""
    try:
        with files.opened(path) as raw:
            _refuse_footer(path.name, raw)
            about = pq.read_metadata(raw)
            with pq.ParquetFile(
                raw,
                metadata=about,
                read_dictionary=[c.path for c in about.schema if c.name == c.path and _is_utf8(c)],
                buffer_size=lines.BLOCK,
                pre_buffer=False,
                page_checksum_verification=True,
                arrow_extensions_enabled=False,
            ) as file:
                yield file
    except (pa.ArrowException, OSError, UnicodeDecodeError) as error:
        said = str(error).splitlines()[0][:120]
        raise ExportError(
            f"{path.name}: the Parquet file is damaged or cut short ({said})",
            remedy="Export or copy the file again.",
        ) from error


def _look_at_zones(schema: Any) -> None:
    """Read the zone of each time column while damage is still told as such: its name may be no text."""
    for kind in filter(pa.types.is_timestamp, schema.types):
        str(kind.tz)


def _is_utf8(column: Any) -> bool:
    return bool(column.physical_type == "BYTE_ARRAY" and column.converted_type == "UTF8")


def open_parquet(
    path: Path, rules: ExportRules, wanted: Collection[str] | None, zone: str | None
) -> tuple[ParquetExport, Dialect]:
    """Find out how a Parquet export is to be read.

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

    Returns
    -------
    ParquetExport
        To read it with.
    Dialect
        To say it with.
    """
    with _opened(path) as raw:
        header = tuple(raw.schema_arrow.names)
        _refuse_size(path.name, raw.metadata, len(header))
        _look_at_zones(raw.schema_arrow)
    file = ParquetExport(path, header)
    layout = decide_layout(Place(path.name, 0), header, wanted or (), file.look)
    values = value_columns(header, layout, wanted)
    _refuse_types(path, layout, values)
    time = (layout.time, header[layout.time])
    clock = decide_clock(path.name, 0, time, layout.seen(file.look), zone=zone, rules=rules)
    numbers = decide_numbers(path.name, values, file.look, rules)
    quality = decide_quality(path.name, layout.quality, file.look, rules)
    return file, Dialect("", "", header, 0, layout, clock, numbers, quality)


def parquet_blocks(file: ParquetExport, columns: Sequence[int], told: Told | None = None) -> Iterator[Block]:
    """Read some columns of a Parquet export.

    Parameters
    ----------
    file : ParquetExport
        The export.
    columns : sequence of int
        Places in the header.
    told : callable or None
        Told the bytes of the file that the rows read so far stand for.

    Yields
    ------
    Block
        Rows numbered from 1.
    """
    names = [file.header[i] for i in columns]
    size = max(1, min(_ROWS, _CELLS // max(len(names), 1)))
    row = 1
    with _opened(file.path) as raw:
        _refuse_texts(file.path.name, raw.metadata)
        for batch in raw.iter_batches(batch_size=size, columns=names, use_threads=False):
            rows = np.arange(row, row + batch.num_rows)
            row += batch.num_rows
            if told is not None:
                told(file.path.lstat().st_size * (row - 1) // raw.metadata.num_rows)
            read = zip(columns, names, strict=True)
            yield Block(rows, {i: _plain(file.path.name, name, batch.column(name)) for i, name in read})


def _refuse_footer(export: str, raw: BinaryIO) -> None:
    """The last eight bytes tell how long the footer is, before it is read."""
    size = raw.seek(0, SEEK_END)
    raw.seek(max(size - 8, 0))
    length = int.from_bytes(raw.read(8)[:4], "little")
    raw.seek(0)
    if LARGEST_FOOTER < length <= size:
        raise ExportError(
            f"{export}: a footer of {length >> 20} MiB, more than {LARGEST_FOOTER >> 20}",
            remedy="Export the tags of the unit file only, or in long form.",
        )


def _refuse_texts(export: str, about: Any) -> None:
    """Hold what the footer says of each group against its rows; of odd columns Arrow dies when asked."""
    for group in map(about.row_group, range(about.num_row_groups)):
        most = _BYTES + _CELL_BYTES * group.num_rows * about.num_columns
        if group.total_byte_size > most:
            _refuse_text(export, f"{group.total_byte_size >> 20} MiB in {group.num_rows} rows")


def _refuse_text(place: str, how_much: str) -> NoReturn:
    raise ExportError(
        f"{place}: holds long texts, {how_much}",
        remedy="Export values as numbers, tags and qualities as short words.",
    )


def _refuse_size(export: str, about: Any, columns: int) -> None:
    """The footer tells how much there is to expand before anything is."""
    if about.num_rows == 0:
        raise ExportError(f"{export}: holds no rows", remedy="Export a span of time that has readings.")
    expanded = sum(about.row_group(i).total_byte_size for i in range(about.num_row_groups))
    if max(expanded, about.num_rows * columns * 8) > lines.LARGEST_EXPANDED:
        raise ExportError(
            f"{export}: expands to more than {lines.LARGEST_EXPANDED >> 20} MiB",
            remedy="Export shorter spans of time into several files.",
        )


def _refuse_types(path: Path, layout: Layout, values: Sequence[int]) -> None:
    """Values are numbers or text, tags and qualities whole numbers or text; a column of nulls may be any."""
    with _opened(path) as raw:
        schema = raw.schema_arrow
    names = [i for i in (layout.tag, layout.quality, layout.unit) if i is not None]
    for i in (*values, *names):
        kind = schema.field(i).type
        inner = kind.value_type if pa.types.is_dictionary(kind) else kind
        fits = is_text(inner) or pa.types.is_integer(inner) or pa.types.is_floating(inner)
        if not fits and not (i in values and (pa.types.is_decimal(inner) or pa.types.is_null(inner))):
            raise ExportError(
                f"{path.name} [{schema.field(i).name}]: neither numbers nor text but {kind}",
                remedy="Export values as numbers, tags and qualities as text.",
            )


def _plain(export: str, name: str, column: Any) -> Any:
    """A column in a type that is read: dictionaries hold short text, nulls alone are numbers."""
    kind = column.type
    if pa.types.is_null(kind):
        return column.cast(pa.float64())
    if not pa.types.is_dictionary(kind):
        return column.cast(pa.string()) if pa.types.is_string_view(kind) else column
    if not is_text(kind.value_type):
        return column.dictionary_decode()
    try:
        column.validate(full=True)  # every row has its place in the dictionary, and the text is text
    except pa.ArrowInvalid as error:
        raise ExportError(
            f"{export} [{name}]: holds text that is not UTF-8", remedy="Export text as UTF-8."
        ) from error
    longest = pc.max(pc.binary_length(column.dictionary)).as_py() or 0
    if longest > LONGEST_TEXT:
        _refuse_text(f"{export} [{name}]", f"one of {longest} bytes")
    return column


def _spread(column: Any) -> Any:
    return column.dictionary_decode() if pa.types.is_dictionary(column.type) else column
