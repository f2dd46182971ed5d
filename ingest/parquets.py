"""Parquet exports: some rows at a time -> columns."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from ingest import lines
from ingest.clocks import decide_clock
from ingest.columns import is_text
from ingest.dialect import Dialect
from ingest.errors import ExportError
from ingest.layouts import Layout, Place, decide_layout
from ingest.lines import Block
from ingest.qualities import decide_quality
from ingest.textfiles import value_columns
from ingest.unit import ExportRules
from ingest.values import decide_numbers

MAGIC = b"PAR1"
_ROWS = 1 << 16  # read at a time


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
    """The file; what Arrow refuses becomes an ExportError."""
    try:
        with pq.ParquetFile(path) as file:
            yield file
    except (pa.ArrowException, OSError) as error:
        said = str(error).splitlines()[0][:120]
        raise ExportError(
            f"{path.name}: the Parquet file is damaged or cut short ({said})",
            remedy="Export or copy the file again.",
        ) from error


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
    file = ParquetExport(path, header)
    layout = decide_layout(Place(path.name, 0), header, wanted or (), file.look)
    values = value_columns(header, layout, wanted)
    _refuse_types(path, layout, values)
    time = (layout.time, header[layout.time])
    clock = decide_clock(path.name, 0, time, layout.seen(file.look), zone=zone, rules=rules)
    numbers = decide_numbers(path.name, values, file.look, rules)
    quality = decide_quality(path.name, layout.quality, file.look, rules)
    return file, Dialect("", "", header, 0, layout, clock, numbers, quality)


def parquet_blocks(file: ParquetExport, columns: Sequence[int]) -> Iterator[Block]:
    """Read some columns of a Parquet export.

    Parameters
    ----------
    file : ParquetExport
        The export.
    columns : sequence of int
        Places in the header.

    Yields
    ------
    Block
        Rows numbered from 1.
    """
    names = [file.header[i] for i in columns]
    row = 1
    with _opened(file.path) as raw:
        for batch in raw.iter_batches(batch_size=_ROWS, columns=names, use_threads=False):
            rows = np.arange(row, row + batch.num_rows)
            row += batch.num_rows
            read = zip(columns, names, strict=True)
            yield Block(rows, {i: _plain(batch.column(name)) for i, name in read})


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
    names = [i for i in (layout.tag, layout.quality) if i is not None]
    for i in (*values, *names):
        kind = schema.field(i).type
        inner = kind.value_type if pa.types.is_dictionary(kind) else kind
        fits = is_text(inner) or pa.types.is_integer(inner) or pa.types.is_floating(inner)
        if not fits and not (i in values and (pa.types.is_decimal(inner) or pa.types.is_null(inner))):
            raise ExportError(
                f"{path.name} [{schema.field(i).name}]: neither numbers nor text but {kind}",
                remedy="Export values as numbers, tags and qualities as text.",
            )


def _plain(column: Any) -> Any:
    """A column in a type that is read: dictionaries hold text, text is plain, nulls alone are numbers."""
    kind = column.type
    if pa.types.is_dictionary(kind) and not is_text(kind.value_type):
        return column.dictionary_decode()
    if pa.types.is_null(kind):
        return column.cast(pa.float64())
    return column.cast(pa.string()) if pa.types.is_string_view(kind) else column


def _spread(column: Any) -> Any:
    return column.dictionary_decode() if pa.types.is_dictionary(column.type) else column
