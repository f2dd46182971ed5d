"""The archive of readings: one series per tag, a later export wins, one Parquet file per month."""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from ingest.columns import plain
from ingest.errors import GoneError, StoreError

BAD, UNCERTAIN, GOOD, UNKNOWN = range(4)
QUALITIES = ("bad", "uncertain", "good", "unknown")  # unknown: the export states none; usable

_TAGS = b"tags"  # key of the file's own list of tags, in the order of its row groups
_SCHEMA = pa.schema(
    [
        pa.field("tag", pa.string(), nullable=False),
        pa.field("time", pa.timestamp("us", "UTC"), nullable=False),
        pa.field("value", pa.float64(), nullable=False),
        pa.field("quality", pa.int8(), nullable=False),
        pa.field("source", pa.int32(), nullable=False),
        pa.field("row", pa.int64(), nullable=False),
    ]
)
_DTYPES = {"time": np.int64, "value": np.float64, "quality": np.int8, "source": np.int32, "row": np.int64}
_ENCODINGS = {
    "time": "DELTA_BINARY_PACKED",
    "value": "BYTE_STREAM_SPLIT",
    "quality": "DELTA_BINARY_PACKED",
    "source": "DELTA_BINARY_PACKED",
    "row": "DELTA_BINARY_PACKED",
}


@dataclass(frozen=True, slots=True)
class Series:
    """The readings of one tag; ascending unique times once `join` has seen them.

    `time` is int64 us since the epoch, UTC; `value` is NaN where the reading is bad; `quality` is a place in
    QUALITIES; `source` is the export's number in the ledger; `row` the line or row in that file, from 1.
    """

    time: NDArray[np.int64]
    value: NDArray[np.float64]
    quality: NDArray[np.int8]
    source: NDArray[np.int32]
    row: NDArray[np.int64]

    def __len__(self) -> int:
        """Give the number of readings."""
        return len(self.time)

    def take(self, which: Any) -> Series:
        """Keep the readings that a slice, mask or list of places names.

        Parameters
        ----------
        which : slice or numpy.ndarray
            What numpy takes as an index of one axis.

        Returns
        -------
        Series
            A view for a slice, else a copy.
        """
        return Series(*(getattr(self, f.name)[which] for f in fields(self)))


Readings = dict[str, Series]


def empty() -> Series:
    """Give a series without readings.

    Returns
    -------
    Series
        Every array has length 0.
    """
    return Series(*(np.zeros(0, dtype) for dtype in _DTYPES.values()))


def concatenated(pieces: Sequence[Series]) -> Series:
    """Put pieces one after the other.

    Parameters
    ----------
    pieces : sequence of Series
        A single one is handed on as it is.

    Returns
    -------
    Series
        Readings in the order given.
    """
    if len(pieces) == 1:
        return pieces[0]
    if not pieces:
        return empty()
    return Series(*(np.concatenate([getattr(p, f.name) for p in pieces]) for f in fields(Series)))


def join(pieces: Sequence[Series]) -> tuple[Series, int, int]:
    """Put one tag's pieces from one export in order of time, one reading for each time.

    Of two readings at the same time the one further down the file wins.

    Parameters
    ----------
    pieces : sequence of Series
        In any order, times in any order; not changed.

    Returns
    -------
    series : Series
        Ascending unique times.
    superseded : int
        Readings that a later row with another value or quality replaced.
    duplicates : int
        Readings that the next row of the same time repeats.
    """
    whole = concatenated(pieces)
    if _ascends(whole.time):
        return whole, 0, 0
    whole = whole.take(np.lexsort((whole.row, whole.time)))
    loses = whole.time[1:] == whole.time[:-1]
    repeated = loses & _same(whole.take(slice(None, -1)), whole.take(slice(1, None)))
    duplicates = int(np.count_nonzero(repeated))
    kept = whole.take(np.append(~loses, True))
    return kept, int(np.count_nonzero(loses)) - duplicates, duplicates


def merge(old: Series, new: Series) -> tuple[Series, int, int]:
    """Merge a later export's readings of one tag into the archive: the later export wins.

    Parameters
    ----------
    old, new : Series
        Each with ascending unique times; neither is changed.

    Returns
    -------
    series : Series
        Ascending unique times. A duplicate keeps the old file and row.
    superseded : int
        Readings of `old` that lost; `replaced` tells whose they were.
    duplicates : int
        Readings of `new` that say what `old` says already.
    """
    if len(old) == 0 or len(new) == 0:
        return (old if len(new) == 0 else new), 0, 0
    if new.time[0] > old.time[-1]:
        return concatenated([old, new]), 0, 0
    stays, comes, duplicates = _contest(old, new)
    whole = concatenated([old.take(stays), new.take(comes)])
    merged = whole.take(np.argsort(whole.time, kind="stable"))
    return merged, len(old) - int(np.count_nonzero(stays)), duplicates


def replaced(old: Series, new: Series) -> dict[int, int]:
    """Tell whose readings lose when `new` is merged into `old`.

    Parameters
    ----------
    old, new : Series
        Each with ascending unique times.

    Returns
    -------
    dict of int to int
        Number of the export in the ledger -> how many of its readings are superseded.
    """
    if len(old) == 0 or len(new) == 0 or new.time[0] > old.time[-1]:
        return {}
    stays, _, _ = _contest(old, new)
    sources, counts = np.unique(old.source[~stays], return_counts=True)
    return {int(source): int(count) for source, count in zip(sources, counts, strict=True)}


def by_month(readings: Readings) -> dict[str, Readings]:
    """Split readings by calendar month, UTC.

    Parameters
    ----------
    readings : dict of str to Series
        Times in any order.

    Returns
    -------
    dict of str to dict of str to Series
        '2026-10' -> tag -> series in the order given; months ascend, tags without readings are left out.
    """
    found: dict[str, Readings] = {}
    for tag, series in readings.items():
        for month, which in _months(series.time):
            found.setdefault(month, {})[tag] = series.take(which)
    return dict(sorted(found.items()))


def write_month(path: Path, readings: Readings) -> None:
    """Write one month's readings, whole or not at all; the same readings give the same bytes.

    Parameters
    ----------
    path : pathlib.Path
        The file to be; its folder exists.
    readings : dict of str to Series
        Each with ascending unique times; becomes one row group per tag.
    """
    tags = sorted(tag for tag, series in readings.items() if len(series))
    beside = path.with_name(path.name + ".part")
    with beside.open("wb") as file:
        with pq.ParquetWriter(
            file,
            _SCHEMA,
            compression="zstd",
            use_dictionary=["tag"],
            column_encoding=_ENCODINGS,
            store_schema=False,
        ) as writer:
            for tag in tags:
                writer.write_table(_table(tag, readings[tag]), row_group_size=len(readings[tag]))
            writer.add_key_value_metadata({_TAGS: json.dumps(tags).encode()})
        file.flush()
        os.fsync(file.fileno())
    beside.replace(path)


def read_months(paths: Iterable[Path], tags: Iterable[str], first_us: int, last_us: int) -> Readings:
    """Read the readings of some tags in a span of time back from month files.

    Parameters
    ----------
    paths : iterable of pathlib.Path
        Month files in any order; no two hold the same tag and time.
    tags : iterable of str
        The tags wanted.
    first_us, last_us : int
        first_us <= time < last_us [us since the epoch, UTC].

    Returns
    -------
    dict of str to Series
        Tags without a reading in the span are left out.
    """
    wanted = list(tags)
    return in_span([read_month(path, wanted) for path in paths], first_us, last_us)


def read_month(path: Path, tags: Iterable[str]) -> Readings:
    """Read the readings of some tags back from one month file; only their row groups are read.

    Parameters
    ----------
    path : pathlib.Path
    tags : iterable of str
        The tags wanted.

    Returns
    -------
    dict of str to Series
        In the order of the tags wanted; tags that the file does not hold are left out.
    """
    with _month(path) as file:
        groups = {tag: group for group, tag in enumerate(_tags_of(file))}
        return {tag: _series(file.read_row_group(groups[tag])) for tag in tags if tag in groups}


def month_tags(path: Path) -> tuple[str, ...]:
    """List the tags that a month file holds readings of, without reading these.

    Parameters
    ----------
    path : pathlib.Path
    """
    with _month(path) as file:
        return _tags_of(file)


def in_span(months: Iterable[Readings], first_us: int, last_us: int) -> Readings:
    """Join the readings of a span of time.

    Parameters
    ----------
    months : iterable of dict of str to Series
        In any order; no two hold the same tag and time.
    first_us, last_us : int
        first_us <= time < last_us [us since the epoch, UTC].

    Returns
    -------
    dict of str to Series
        Tags without a reading in the span are left out.
    """
    pieces: dict[str, list[Series]] = {}
    for month in months:
        for tag, series in month.items():
            low, high = np.searchsorted(series.time, [first_us, last_us])
            if high > low:
                pieces.setdefault(tag, []).append(series.take(slice(low, high)))
    ordered = {tag: sorted(parts, key=lambda s: int(s.time[0])) for tag, parts in pieces.items()}
    return {tag: concatenated(parts) for tag, parts in ordered.items()}


def _ascends(time: NDArray[np.int64]) -> bool:
    return bool(np.all(time[1:] > time[:-1]))


def _same(a: Series, b: Series) -> NDArray[np.bool_]:
    """Where two series of one length say the same; two bad readings do."""
    value = (a.value == b.value) | (np.isnan(a.value) & np.isnan(b.value))
    return np.asarray(value & (a.quality == b.quality))


def _contest(old: Series, new: Series) -> tuple[NDArray[np.bool_], NDArray[np.bool_], int]:
    """Which readings of `old` stay, which of `new` come in, and how many of `new` repeat `old`."""
    place = np.minimum(np.searchsorted(old.time, new.time), len(old) - 1)
    met = old.time[place] == new.time
    repeats = met & _same(old.take(place), new)
    stays = np.ones(len(old), np.bool_)
    stays[place[met & ~repeats]] = False
    return stays, ~repeats, int(np.count_nonzero(repeats))


def _months(time: NDArray[np.int64]) -> list[tuple[str, Any]]:
    """The months that occur and which readings lie in each: a slice where they lie together, else a mask."""
    if len(time) == 0:
        return []
    first, last = (np.datetime64(int(t), "us").astype("datetime64[M]") for t in (time.min(), time.max()))
    if first == last:
        return [(str(first), slice(None))]
    edges = np.arange(first, last + 2)
    edges_us = edges.astype("datetime64[us]").astype(np.int64)
    if np.all(time[1:] >= time[:-1]):  # the usual case; slices keep what the tags of a wide export share
        cuts = np.searchsorted(time, edges_us).tolist()
        return [
            (str(edges[k]), slice(*cuts[k : k + 2])) for k in range(len(edges) - 1) if cuts[k] < cuts[k + 1]
        ]
    place = np.searchsorted(edges_us, time, side="right") - 1
    return [(str(edges[k]), place == k) for k in np.unique(place)]


def _table(tag: str, series: Series) -> Any:
    """One tag's readings as an Arrow table."""
    columns = [pa.repeat(pa.scalar(tag), len(series))]
    columns += [pa.array(series.time, pa.int64()).view(pa.timestamp("us", "UTC"))]
    columns += [pa.array(getattr(series, name)) for name in ("value", "quality", "source", "row")]
    return pa.Table.from_arrays(columns, schema=_SCHEMA)


@contextmanager
def _month(path: Path) -> Iterator[pq.ParquetFile]:
    """Open a month file; a damaged one is told as such."""
    try:
        with pq.ParquetFile(path) as file:
            yield file
    except FileNotFoundError as error:
        raise GoneError(
            f"{path.name}: is no longer there",
            remedy="Look again: a later pass has replaced it. If that does not help run 'outlet verify'.",
        ) from error
    except (OSError, KeyError, TypeError, pa.ArrowException) as error:
        raise StoreError(
            f"{path.name}: not a whole month of readings ({type(error).__name__})",
            remedy="Run 'outlet verify' to see which files of the store are damaged.",
        ) from error


def _tags_of(file: pq.ParquetFile) -> tuple[str, ...]:
    return tuple(json.loads(file.metadata.metadata[_TAGS]))


def _series(table: Any) -> Series:
    """One row group as arrays."""
    columns = (table.column(name).combine_chunks() for name in _DTYPES)
    return Series(*(plain(column, dtype) for column, dtype in zip(columns, _DTYPES.values(), strict=True)))
