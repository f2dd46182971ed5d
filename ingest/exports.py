"""Open an export, a file of readings as a historian wrote it; say how it is read and what became of it."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from types import MappingProxyType

import numpy as np

from ingest.account import Account, Tally
from ingest.batches import Batches
from ingest.dialect import Dialect
from ingest.errors import ExportError
from ingest.files import Told
from ingest.lines import Block, opened
from ingest.measures import Stated
from ingest.parquets import MAGIC, open_parquet, parquet_blocks
from ingest.readings import QUALITIES, Readings
from ingest.shown import shown
from ingest.textfiles import open_text, text_blocks, value_columns
from ingest.unit import ExportRules

NO_UNITS: Mapping[str, tuple[Stated, ...]] = MappingProxyType({})
_SAMPLE = 3  # rows that `describe` shows


@dataclass(frozen=True, slots=True)
class SampleRow:
    """One row as read: number in the file, time [us, UTC], (tag, value, quality word) of each reading."""

    row: int
    time_us: int
    readings: tuple[tuple[str, float, str], ...]


@dataclass(frozen=True, slots=True)
class Description:
    """How an export is read: the dialect in sentences, its first rows as read, and its account."""

    export: str
    dialect: tuple[str, ...]
    sample: tuple[SampleRow, ...]
    account: Account


def open_export(
    path: Path,
    *,
    number: int,
    rules: ExportRules,
    wanted: frozenset[str] | None,
    time_zone: str | None,
    units: Mapping[str, tuple[Stated, ...]] = NO_UNITS,
    told: Told | None = None,
) -> Batches:
    """Find out how an export is to be read and begin to read it.

    Parameters
    ----------
    path : pathlib.Path
        CSV text, compressed where its name ends in .gz or .zst, or Parquet.
    number : int
        Number of the export in the ledger; becomes `Series.source`.
    rules : ExportRules
        What the unit file fixes; its time zone stands above `time_zone`.
    wanted : frozenset of str or None
        Tags somebody asks for; None takes all.
    time_zone : str or None
        Zone of times without offset where the rules name none; None refuses such times.
    units : mapping of str to tuple of Stated
        What the unit files state about the unit of each tag, to hold a row of units against.
    told : callable or None
        Told, while the batches are read, the bytes of the file that were read so far.

    Returns
    -------
    Batches
        Iterate for `Readings`, then call `account()`.
    """
    zone = rules.time_zone or time_zone
    file_dialect, blocks = _opened(path, rules, wanted, zone, units=units, told=told)
    return Batches(number, file_dialect, wanted, blocks, Tally(shown(path.name)), units)


def describe(
    path: Path,
    *,
    rules: ExportRules,
    wanted: frozenset[str] | None,
    time_zone: str | None,
    units: Mapping[str, tuple[Stated, ...]] = NO_UNITS,
) -> Description:
    """Read a whole export and tell how; nothing is stored.

    Parameters
    ----------
    path : pathlib.Path
        The export.
    rules : ExportRules
        What the unit file fixes.
    wanted : frozenset of str or None
        Tags somebody asks for; None takes all.
    time_zone : str or None
        As in `open_export`.
    units : mapping of str to tuple of Stated
        As in `open_export`.

    Returns
    -------
    Description
        Its account is as read: nothing is merged.
    """
    batches = open_export(path, number=0, rules=rules, wanted=wanted, time_zone=time_zone, units=units)
    sample: tuple[SampleRow, ...] = ()
    for readings in batches:
        sample = sample or _sample(readings)
    return Description(path.name, batches.dialect.describe(), sample, batches.account())


def _opened(
    path: Path,
    rules: ExportRules,
    wanted: Collection[str] | None,
    zone: str | None,
    *,
    units: Mapping[str, tuple[Stated, ...]],
    told: Told | None,
) -> tuple[Dialect, Iterator[Block]]:
    """The dialect and the blocks to come; what begins like Parquet is Parquet, whatever its name."""
    parquet = path.suffix.lower() in (".parquet", ".pq")
    with opened(path) as raw:
        magic = raw.read(len(MAGIC))
    if not magic:
        raise ExportError(f"{path.name}: is empty", remedy="Export it again; an empty file holds no reading.")
    if not (parquet or magic == MAGIC):
        text, dialect = open_text(path, rules, wanted, zone, units=units)
        columns = value_columns(dialect.header, dialect.layout, wanted)
        return dialect, text_blocks(replace(text, told=told), dialect, columns, wanted or ())
    file, dialect = open_parquet(path, rules, wanted, zone)
    layout = dialect.layout
    columns = [layout.time, *value_columns(dialect.header, layout, wanted), *layout.others]
    return dialect, parquet_blocks(file, columns, told)


def _sample(readings: Readings) -> tuple[SampleRow, ...]:
    """The first rows of a batch."""
    found: dict[int, tuple[int, list[tuple[str, float, str]]]] = {}
    firsts = np.unique(
        np.concatenate([s.row[:_SAMPLE] for s in readings.values()] or [np.zeros(0, np.int64)])
    )
    for tag, series in readings.items():
        for i in np.flatnonzero(np.isin(series.row[:_SAMPLE], firsts[:_SAMPLE])).tolist():
            _, shown = found.setdefault(int(series.row[i]), (int(series.time[i]), []))
            shown.append((tag, float(series.value[i]), QUALITIES[series.quality[i]]))
    return tuple(SampleRow(row, time, tuple(rows)) for row, (time, rows) in sorted(found.items()))
