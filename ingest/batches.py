"""Blocks of an export -> batches of readings, and a tally in which every reading has its place."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.account import (
    ACCEPTED,
    GAP,
    NUMBER,
    OFFSET,
    QUALITY,
    TAG,
    TIME,
    TWICE,
    YEAR,
    Account,
    Tally,
)
from ingest.asides import of_heading
from ingest.columns import coded, said
from ingest.dialect import Dialect
from ingest.errors import ExportError
from ingest.lines import LONGEST_NAME, Block
from ingest.measures import Conversion, Stated, conversions
from ingest.qualities import read_qualities, texts
from ingest.readings import BAD, UNKNOWN, Readings, Series, concatenated
from ingest.textfiles import value_columns
from ingest.timestamps import Stamps, resolved
from ingest.values import Values

MOST_TAGS = 100_000
_UNASKED, _NAMELESS = -1, -2

Codes = NDArray[np.int8]
Places = NDArray[np.signedinteger[Any]]


@dataclass(slots=True)
class Batches:
    """One export being read: iterate over it once, then ask for the account.

    An ExportError can come with any batch; the batches before it are then worth nothing.
    """

    number: int
    dialect: Dialect
    wanted: frozenset[str] | None
    blocks: Iterator[Block]
    tally: Tally
    units: Mapping[str, tuple[Stated, ...]]
    converted: dict[tuple[str, str], tuple[Conversion, ...]] = field(default_factory=dict)
    first_us: int | None = None  # the first and last time down the file that have one meaning only
    last_us: int | None = None
    doubled: dict[str, list[Series]] = field(default_factory=dict)
    shared: list[Series] = field(default_factory=list)  # rows of a wide export in hours that come twice

    def __iter__(self) -> Iterator[Readings]:
        """Give the readings batch by batch in the order of the file; hours that come twice come last."""
        if self.dialect.heading is not None:
            self.tally.put_aside(of_heading(self.dialect.heading))
        for block in self.blocks:
            self._count_rows(block)
            if len(block.rows):
                yield self._long(block) if self.dialect.layout.is_long else self._wide(block)
        if self.doubled:
            yield {tag: self._resolved(tag, concatenated(parts)) for tag, parts in self.doubled.items()}

    def account(self) -> Account:
        """Close the account after the last batch.

        Returns
        -------
        Account
            Every reading of the file is in it.
        """
        done = (*self.dialect.conversions, *(one for found in self.converted.values() for one in found))
        converted = sorted({(one.tag, one.written, one.stated) for one in done if one.changes})
        return replace(self.tally.account(), converted=tuple(converted))

    def _count_rows(self, block: Block) -> None:
        tally, width = self.tally, self.dialect.width
        tally.put_aside(block.asides)
        for fault in block.faults:
            for row, text in fault.first[: tally.room(fault.reason)]:
                tally.keep(row, None, text, fault.reason)
            tally.rejections[fault.reason] += fault.count * width
        rows = len(block.rows) + sum(fault.count for fault in block.faults)
        tally.rows += rows
        tally.readings += rows * width

    def _stamps(self, block: Block) -> Stamps:
        """The times of a block; remembers which way time runs down the file."""
        stamps = self.dialect.clock.read(self.dialect.layout.times(block.columns))
        sure = np.flatnonzero((stamps.reason == ACCEPTED) & ~stamps.doubled)
        if len(sure):
            first, last = (int(stamps.time[i]) for i in (sure[0], sure[-1]))
            self.first_us = first if self.first_us is None else self.first_us
            self.last_us = last
        return stamps

    def _wide(self, block: Block) -> Readings:
        stamps = self._stamps(block)
        if stamps.doubled.any():
            none = np.full(len(block.rows), np.nan)
            rows = self._series(stamps.time, none, _unstated(none), block.rows)
            self.shared.append(rows.take(stamps.doubled))
        header, layout = self.dialect.header, self.dialect.layout
        asked = value_columns(header, layout, self.wanted)
        for i in set(range(len(header))) - {layout.time, *layout.others, *asked}:
            self.tally.unasked[header[i]] += len(block.rows)
        return {header[i]: self._column(header[i], block, i, stamps) for i in asked}

    def _column(self, tag: str, block: Block, place: int, stamps: Stamps) -> Series:
        """One tag of a wide block; where its cell is blank nothing was stored, and there is no reading."""
        values = self._values(tag, block.columns[place])
        reason = _either(stamps.reason, values.reason)
        if values.blank.any():
            reason = np.where(values.blank, np.int8(ACCEPTED), reason)
            self.tally.empty += int(np.count_nonzero(values.blank))
        self.tally.reject(reason, block.rows, lambda _: tag, self._text(block, place))
        series = self._series(stamps.time, values.value, _unstated(values.value), block.rows)
        fine = (reason == ACCEPTED) & ~values.blank
        if stamps.doubled.any():
            self._put_aside(tag, series.take(stamps.doubled & fine))
        elif fine.all():
            return self._accept(series)
        return self._accept(series.take(~stamps.doubled & fine))

    def _long(self, block: Block) -> Readings:
        layout = self.dialect.layout
        places, names = self._tags(block)
        stamps = self._stamps(block)
        value, quality, reason = self._judged(
            block, self._values(layout.only, block.columns[layout.value or 0])
        )
        if layout.unit is not None:
            value = self._united(block, places, names, value)
        reason = _either(stamps.reason, reason)
        if len(places) and places.min() < 0:
            reason = np.where(
                places == _NAMELESS, TAG, np.where(places == _UNASKED, ACCEPTED, reason)
            ).astype(np.int8)
        text = self._text(block, layout.value or 0)
        self.tally.reject(reason, block.rows, lambda i: names[places[i]] if places[i] >= 0 else None, text)
        series = self._series(stamps.time, value, quality, block.rows)
        fine = (places >= 0) & (reason == ACCEPTED)
        if stamps.doubled.any():
            for place, part in self._split(series, places, fine & stamps.doubled):
                self._put_aside(names[place], part)
        split = self._split(series, places, fine & ~stamps.doubled)
        return {names[place]: self._accept(part) for place, part in split}

    def _judged(self, block: Block, values: Values) -> tuple[NDArray[np.float64], Codes, Codes]:
        """Values of a long block with their quality; a reading of bad quality needs no number."""
        place, form = self.dialect.layout.quality, self.dialect.quality
        if place is None or form is None:
            return values.value, _unstated(values.value), values.reason
        quality, wrong = read_qualities(block.columns[place], form)
        bad = quality == BAD
        excused = bad & (values.reason == NUMBER) & (wrong == ACCEPTED)
        value = np.where(bad, np.nan, values.value) if bad.any() else values.value
        empty = np.isnan(value)
        quality = np.where(empty, np.int8(BAD), quality) if empty.any() else quality
        reason = np.where(excused, np.int8(ACCEPTED), values.reason) if excused.any() else values.reason
        return value, quality, _either(reason, wrong)

    def _values(self, tag: str | None, column: Any) -> Values:
        """A column of values in the unit of the unit file."""
        values = self.dialect.numbers.read(column)
        for one in self.dialect.conversions:
            if one.tag == tag and one.changes:
                return replace(values, value=values.value * one.factor + one.offset)
        return values

    def _united(
        self, block: Block, places: Places, names: list[str], value: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Values in the units of the unit file, where a column states the unit of each."""
        codes, words = coded(block.columns[self.dialect.layout.unit or 0])
        written = [*(text.strip() for text in texts(words)), ""]  # the last for cells that are empty
        pairs = np.where(places < 0, -1, places.astype(np.int64) * len(written) + codes % len(written))
        for pair, first in zip(*np.unique(pairs, return_index=True), strict=True):
            if pair >= 0:
                tag, unit = names[pair // len(written)], written[pair % len(written)]
                if (tag, unit) not in self.converted:
                    place = f"{self.tally.export}:{block.rows[first]}"
                    self.converted[tag, unit] = conversions(place, {tag: unit}, self.units)
                for one in self.converted[tag, unit]:
                    value = np.where(pairs == pair, value * one.factor + one.offset, value)
        return value

    def _tags(self, block: Block) -> tuple[Places, list[str]]:
        """For each row the place of its tag among the names; negative where it has none or nobody asked."""
        layout = self.dialect.layout
        if layout.tag is None:
            codes, names = np.zeros(len(block.rows), np.int32), [layout.only or ""]
        else:
            codes, words = coded(block.columns[layout.tag])
            names = [name.strip() for name in texts(words)]
        self._refuse_long(names, int(block.rows[0]))
        known = sorted({name for name in names if name and (self.wanted is None or name in self.wanted)})
        order = {name: place for place, name in enumerate(known)}
        table = [order.get(name, _UNASKED) if name else _NAMELESS for name in names]
        if _UNASKED in table:
            counts = np.bincount(codes[codes >= 0], minlength=len(names)).tolist()
            spare = [
                (name, n) for name, n, place in zip(names, counts, table, strict=True) if place == _UNASKED
            ]
            self._leave(spare)
        small = len(known) < 2**15  # 16 bits sort faster
        lookup: Places = np.array([*table, _NAMELESS], np.int16 if small else np.int32)
        return lookup[codes], known

    def _refuse_long(self, names: list[str], row: int) -> None:
        """Names are kept in the account, so that they have a greatest length."""
        longest = max(map(len, names), default=0)
        if longest > LONGEST_NAME:
            raise ExportError(
                f"{self.tally.export}:{row}: from here on a name of {longest} characters,"
                f" more than {LONGEST_NAME}",
                remedy="Give columns and tags shorter names.",
            )

    def _leave(self, spare: list[tuple[str, int]]) -> None:
        """Count readings of tags nobody asked for."""
        for name, count in spare:
            self.tally.unasked[name] += count
        if len(self.tally.unasked) > MOST_TAGS:
            raise ExportError(
                f"{self.tally.export}: more than {MOST_TAGS} different tags",
                remedy="Check which column holds the tags; name it 'tag'.",
            )

    def _series(self, time: Any, value: Any, quality: Any, rows: Any) -> Series:
        """Readings of this export; their common source takes no memory."""
        return Series(time, value, quality, np.broadcast_to(np.int32(self.number), len(time)), rows)

    def _split(
        self, series: Series, places: Places, which: NDArray[np.bool_]
    ) -> Iterator[tuple[int, Series]]:
        """The readings of each tag, in the order of the file."""
        rows = np.flatnonzero(which)
        if len(rows) == 0:
            return
        rows = rows[np.argsort(places[rows], kind="stable")]
        counts = np.bincount(places[rows])
        ends = np.cumsum(counts)
        whole = self._series(series.time[rows], series.value[rows], series.quality[rows], series.row[rows])
        for place in np.flatnonzero(counts).tolist():
            yield place, whole.take(slice(ends[place] - counts[place], ends[place]))

    def _accept(self, series: Series) -> Series:
        self.tally.accepted += len(series)
        self.tally.bad += int(np.count_nonzero(series.quality == BAD))
        self.tally.unknown += int(np.count_nonzero(series.quality == UNKNOWN))
        return series

    def _put_aside(self, tag: str, series: Series) -> None:
        if len(series):
            self.doubled.setdefault(tag, []).append(series)

    def _text(self, block: Block, value: int) -> Callable[[int, int], object]:
        """What stands in a row of a block, in the column that a reason is about."""
        layout = self.dialect.layout
        about = {TAG: layout.tag or 0, QUALITY: layout.quality or 0}
        at_fault = (TIME, OFFSET, YEAR, GAP)
        return lambda i, reason: (
            said(layout.times({k: column[i : i + 1] for k, column in block.columns.items()}), 0)
            if reason in at_fault
            else said(block.columns[about.get(reason, value)], i)
        )

    def _resolved(self, tag: str, series: Series) -> Series:
        """One tag's readings in hours that come twice, once the whole file is known.

        All rows of a wide export tell the order, whichever of their cells are blank.
        """
        rows = concatenated(self.shared) if self.shared else series
        told, time = np.zeros(len(rows), np.bool_), rows.time
        zone, first, last = self.dialect.clock.zone, self.first_us, self.last_us
        if zone is not None and first is not None and last is not None and first != last:
            time, told = resolved(rows.time, zone, ascending=first < last)
        at = np.searchsorted(rows.row, series.row)
        time, told = time[at], told[at]
        reason = np.where(told, ACCEPTED, TWICE).astype(np.int8)
        self.tally.reject(
            reason, series.row, lambda _: tag, lambda i, _: series.time[i].astype("datetime64[us]").item()
        )
        return self._accept(self._series(time, series.value, series.quality, series.row).take(told))


def _either(first: Codes, second: Codes) -> Codes:
    """The first reason against each reading, if any."""
    return np.where(first != ACCEPTED, first, second) if first.any() else second


def _unstated(value: NDArray[np.float64]) -> Codes:
    """Quality where the export states none: bad without a value, else unknown."""
    missing = np.isnan(value)
    if missing.any():
        return np.where(missing, np.int8(BAD), np.int8(UNKNOWN))
    return np.broadcast_to(np.int8(UNKNOWN), len(value))
