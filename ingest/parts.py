"""Parquet parts: one file holds one stage of one unit for one month (UTC) and never changes once written."""

from __future__ import annotations

import errno
import hashlib
import os
import re
import shutil
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from ingest.columns import plain, single
from ingest.errors import StoreError

TIME_COLUMNS = ("time", "start", "end")  # what labels a row: readings, cells and states, figures
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
NAME = re.compile(r"(?P<stage>[a-z0-9][a-z0-9-]*)-(?P<month>\d{4}-\d{2})-(?P<hash>[0-9a-f]{12})\.parquet")
RIGHT = "Give this account the right to write there"
ROOM = "Make room"
REMEDIES = {
    errno.ENOSPC: ROOM,
    errno.EDQUOT: ROOM,
    errno.EFBIG: ROOM,
    errno.EACCES: RIGHT,
    errno.EPERM: RIGHT,
    errno.EROFS: RIGHT,
    errno.EIO: "Look to the disk",
}
UNFINISHED = re.compile(r"\.[a-z0-9-]+\.unfinished(\.part)?")


@dataclass(frozen=True, slots=True)
class Part:
    """What the ledger knows of one part; `file` is relative to the store and written with '/'."""

    unit: str
    stage: str
    month: str
    file: str
    sha256: str
    rows: int
    size: int
    made_by: int  # number of the pass


def month_of(time_us: int) -> str:
    """Give the month (UTC) that an instant lies in, as 2026-03.

    Parameters
    ----------
    time_us : int
        Instant [us since 1970, UTC].

    Returns
    -------
    str
    """
    return str(np.datetime64(time_us, "us").astype("datetime64[M]"))


def month_edges(month: str) -> tuple[int, int]:
    """Give the first instant of a month and the first of the next.

    Parameters
    ----------
    month : str
        As 2026-03.

    Returns
    -------
    tuple of int
        [us since 1970, UTC]; the second no longer belongs to the month.
    """
    start = np.datetime64(month, "M")
    first, after = (int(edge.astype("datetime64[us]").astype(np.int64)) for edge in (start, start + 1))
    return first, after


def instant_us(instant: int | datetime) -> int:
    """Give an instant in whole microseconds.

    Parameters
    ----------
    instant : int or datetime
        Microseconds since 1970, or a time with a zone.

    Returns
    -------
    int
        [us since 1970, UTC].
    """
    if isinstance(instant, datetime):
        return (instant - EPOCH) // timedelta(microseconds=1)
    return instant


def times_us(table: pa.Table) -> NDArray[np.int64]:
    """Give what labels the rows of a table: its column `time`, `start` or `end`.

    Parameters
    ----------
    table : pyarrow.Table
        The label is int64 [us since 1970, UTC] or a timestamp with a zone, without nulls.

    Returns
    -------
    ndarray of int64, shape (t,)
        [us since 1970, UTC].
    """
    name = next((name for name in TIME_COLUMNS if name in table.column_names), None)
    if name is None:
        raise ValueError(f"no column {' or '.join(TIME_COLUMNS)} among {table.column_names}")
    column = table.column(name)
    if pa.types.is_timestamp(column.type):
        column = column.cast(pa.timestamp("us", column.type.tz)).cast(pa.int64())
    if column.null_count:
        raise ValueError(f"column {name} holds rows without a time")
    return plain(single(column), np.int64)


def by_month(table: pa.Table) -> dict[str, pa.Table]:
    """Cut a table where the month (UTC) changes.

    Parameters
    ----------
    table : pyarrow.Table
        Rows in ascending time.

    Returns
    -------
    dict of str to pyarrow.Table
        Month -> its rows; months without rows do not appear.
    """
    time = times_us(table)
    if np.any(np.diff(time) < 0):
        raise ValueError("rows must stand in ascending time")
    months = time.astype("datetime64[us]").astype("datetime64[M]")
    edges = [0, *(np.flatnonzero(months[1:] != months[:-1]) + 1).tolist(), len(time)]
    return {str(months[s]): table.slice(s, e - s) for s, e in pairwise(edges) if e > s}


def write_table(path: Path, table: pa.Table) -> None:
    """Write a table so that equal tables give equal bytes.

    Parameters
    ----------
    path : Path
        Floats are stored by byte planes, whole numbers and times as differences, all else by dictionary.
    table : pyarrow.Table
    """
    table = table.replace_schema_metadata(None).combine_chunks()  # neither may leave a trace in the bytes
    encoding = {f.name: _encoding(f.type) for f in table.schema if _encoding(f.type)}
    rest = [name for name in table.column_names if name not in encoding]
    rows = max(table.num_rows, 1)
    pq.write_table(
        table,
        path,
        compression="zstd",
        use_dictionary=rest or False,
        column_encoding=encoding or None,
        row_group_size=rows,
    )


def _encoding(kind: pa.DataType) -> str:
    """Name the encoding that a column's type asks for; empty for the dictionary."""
    if pa.types.is_floating(kind):
        return "BYTE_STREAM_SPLIT"
    return "DELTA_BINARY_PACKED" if pa.types.is_int64(kind) or pa.types.is_temporal(kind) else ""


def read_part(
    path: Path, columns: Iterable[str] | None, first_us: int | None, last_us: int | None
) -> pa.Table:
    """Read the rows of one part with first_us <= label < last_us.

    Parameters
    ----------
    path : Path
    columns : iterable of str or None
        None for all; a column that this month does not have is left out.
    first_us, last_us : int or None
        [us since 1970, UTC]; None for no limit.

    Returns
    -------
    pyarrow.Table
        In the order written.
    """
    with pq.ParquetFile(path) as file:
        names = file.schema_arrow.names
        kept = names if columns is None else [name for name in columns if name in names]
        label = [name for name in TIME_COLUMNS if name in names][:1]
        table = file.read(columns=list(dict.fromkeys([*kept, *label])))
    if first_us is not None or last_us is not None:
        time = times_us(table)
        inside = np.ones(len(time), dtype=bool)
        inside &= time >= first_us if first_us is not None else True
        inside &= time < last_us if last_us is not None else True
        table = table if inside.all() else table.filter(_mask(inside))
    return table.select(kept)


def _mask(inside: NDArray[np.bool_]) -> pa.BooleanArray:
    """An Arrow mask straight from bits: `pa.array` would import pandas, a third of a second."""
    bits = pa.py_buffer(np.packbits(inside, bitorder="little"))
    return pa.BooleanArray.from_buffers(pa.bool_(), len(inside), [None, bits])


def make_folder(folder: Path) -> None:
    """Make a folder, and those above it, so that their names outlast a power cut.

    Parameters
    ----------
    folder : Path
        Left alone if it is there.
    """
    new = [path for path in (folder, *folder.parents) if not path.exists()]
    folder.mkdir(parents=True, exist_ok=True)
    sync_folders(path.parent for path in new)


def make_part(
    folder: Path, key: tuple[str, str, str], *, made_by: int, rows: int, fill: Callable[[Path], None]
) -> Part:
    """Write one part whole or not at all, under a name that its content gives it.

    Parameters
    ----------
    folder : Path
        The store.
    key : tuple of str
        Unit, stage, month.
    made_by : int
        Number of the pass.
    rows : int
    fill : callable
        Writes the Parquet file at the path it is given.

    Returns
    -------
    Part
        On disk, not yet known to the ledger. `sync_folders` must follow before the ledger names it.
    """
    unit, stage, month = key
    home = folder / _safe(unit)
    home.mkdir(exist_ok=True)
    draft = home / f".{stage}-{month}-{os.getpid()}.unfinished"
    try:
        fill(draft)
        _sync(draft, os.O_RDWR)
        digest = sha256_of(draft)
        target = home / f"{stage}-{month}-{digest[:12]}.parquet"
        size = draft.stat().st_size
        draft.replace(target)
    finally:
        draft.unlink(missing_ok=True)
    if not NAME.fullmatch(target.name):
        raise ValueError(f"{target.name}: not a name that the sweep would know")
    return Part(unit, stage, month, f"{unit}/{target.name}", digest, rows, size, made_by)


def disk_trouble(folder: Path, fault: OSError, needed: int = 0) -> StoreError:
    """Say in words why the store cannot be written, and how much room is needed.

    Parameters
    ----------
    folder : Path
        The store.
    fault : OSError
    needed : int
        At most so many [bytes]; 0 when not known.

    Returns
    -------
    StoreError
        To be raised from `fault`.
    """
    room, remedy = "", REMEDIES.get(fault.errno or 0, f"{ROOM} or {RIGHT[0].lower()}{RIGHT[1:]}")
    if needed and remedy is not RIGHT:
        free = shutil.disk_usage(folder).free
        room = f"; the next part needs up to {needed / 1e6:.2f} MB, {free / 1e6:.2f} MB are free"
    return StoreError(
        f"{folder}: nothing was taken in: {fault.strerror or fault}{room}",
        remedy=f"{remedy}, then run the same pass again.",
    )


def sha256_of(path: Path) -> str:
    """Hash a file.

    Parameters
    ----------
    path : Path

    Returns
    -------
    str
        64 hexadecimal digits.
    """
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def sync_folders(folders: Iterable[Path]) -> None:
    """Make new names in folders outlast a power cut (needed and possible on POSIX only).

    Parameters
    ----------
    folders : iterable of Path
    """
    if os.name == "posix":
        for folder in folders:
            _sync(folder, os.O_RDONLY)


def leftovers(folder: Path, named: Iterable[str]) -> list[Path]:
    """List what dead passes left: our own kinds of file that the ledger does not name.

    Parameters
    ----------
    folder : Path
        The store.
    named : iterable of str
        `Part.file` of every part that is in use.

    Returns
    -------
    list of Path
    """
    used = {folder / file for file in named}
    found = (path for path in sorted(folder.glob("*/*")) if path not in used)
    return [p for p in found if NAME.fullmatch(p.name) or UNFINISHED.fullmatch(p.name)]


def _sync(path: Path, how: int) -> None:
    """Force a file or folder to the disk."""
    handle = os.open(path, how)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _safe(unit: str) -> str:
    """Give a unit's key back if it can name a folder of the store and nothing above it."""
    if unit != Path(unit).name or unit in ("", ".", "..") or "\\" in unit:
        raise StoreError(f"unit {unit!r}: cannot name a folder", remedy="Rename the unit file.")
    return unit
