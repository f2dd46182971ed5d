"""The archive of a site's readings while a pass adds to it: months wait in memory, then are written once.

All units of a site share one archive, since an export does not know of units: its account is one account.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass, field
from itertools import groupby, pairwise

import numpy as np
from numpy.typing import NDArray

from ingest import parts
from ingest.passes import Pass
from ingest.readings import Readings, Series, by_month, empty, join, merge, read_months, replaced, write_month
from ingest.snapshot import Snapshot

SITE = "site"  # the archive's place in the store, beside those of the units
STAGE = "readings"
BUDGET = 4_000_000  # readings that may wait in memory, about 100 MB
READING_BYTES = 29  # time, value, quality, source and row as they are in memory
DAY_US = 86_400_000_000

Span = tuple[int, int]  # first <= t < last [us since 1970, UTC]


@dataclass(slots=True)
class Merged:
    """What merging did: readings lost or repeated by number of the export, spans changed by tag.

    `winners` tells to which export readings were lost: (number of the loser, number of the winner) -> count.
    """

    superseded: Counter[int] = field(default_factory=Counter)
    duplicates: Counter[int] = field(default_factory=Counter)
    touched: dict[str, list[Span]] = field(default_factory=dict)
    winners: Counter[tuple[int, int]] = field(default_factory=Counter)

    def lose(self, lost: Mapping[int, int], winner: int) -> None:
        """Count readings that were replaced.

        Parameters
        ----------
        lost : mapping of int to int
            Number of the export -> readings.
        winner : int
            Number of the export that replaced them.
        """
        self.superseded.update(lost)
        self.winners.update({(loser, winner): count for loser, count in lost.items() if count})

    def copy(self) -> Merged:
        """Give a copy that later merging leaves alone.

        Returns
        -------
        Merged
        """
        touched = {tag: list(spans) for tag, spans in self.touched.items()}
        return Merged(self.superseded.copy(), self.duplicates.copy(), touched, self.winners.copy())


@dataclass(slots=True)
class _Waiting:
    """Readings that wait to be written: month -> tag -> pieces in the order of exports and rows."""

    months: dict[str, dict[str, list[Series]]] = field(default_factory=dict)
    count: int = 0

    def append(self, month: str, arriving: Mapping[str, list[Series]]) -> None:
        """Put pieces behind those that wait already."""
        held = self.months.setdefault(month, {})
        for tag, pieces in arriving.items():
            held.setdefault(tag, []).extend(pieces)
            self.count += sum(map(len, pieces))

    def pop(self, month: str) -> dict[str, list[Series]]:
        """Take a month out."""
        held = self.months.pop(month, {})
        self.count -= sum(len(series) for pieces in held.values() for series in pieces)
        return held


class Archive:
    """The readings of one pass on their way into month parts.

    Each export is added batch by batch and then kept or dropped; `finish` writes what still waits.
    `merged` is complete after that.
    """

    def __init__(self, pass_: Pass, tags: Collection[str]) -> None:
        """Know the pass to write in and all tags that the archive may hold."""
        self.merged = Merged()
        self._pass = pass_
        self._tags = tuple(tags)
        self._kept = _Waiting()
        self._open = _Waiting()
        self._mark: tuple[Snapshot, Merged] | None = None  # where to go back to when the open export fails

    def add(self, readings: Readings) -> None:
        """Take one batch of the open export.

        Parameters
        ----------
        readings : dict of str to Series
            In the order of the file, all of one export.
        """
        months = by_month(readings)
        for month, batch in months.items():
            self._open.append(month, {tag: [series] for tag, series in batch.items()})
        if self._kept.count + self._open.count > BUDGET:
            self._make_room(busy=max(months, default=""))

    def keep(self) -> None:
        """Close the open export: its readings stay."""
        for month, pieces in self._open.months.items():
            self._kept.append(month, pieces)
        self._open, self._mark = _Waiting(), None

    def drop(self) -> None:
        """Close the open export as if it had never been added."""
        if self._mark is not None:
            view, self.merged = self._mark
            self._pass.go_back(view)
        self._open, self._mark = _Waiting(), None

    def finish(self) -> None:
        """Write all months of exports that were kept."""
        self._write(self._kept, set(self._kept.months))

    def _make_room(self, busy: str) -> None:
        """Write what waits; the month in which readings are arriving only if nothing else helps."""
        self.finish()
        if self._open.count > BUDGET:
            self._mark = self._mark or (self._pass.view(), self.merged.copy())
            self._write(self._open, set(self._open.months) - {busy})
        if self._open.count > BUDGET:
            self._write(self._open, {busy})

    def _write(self, waiting: _Waiting, months: set[str]) -> None:
        for month in sorted(months):
            self._write_month(month, waiting.pop(month))

    def _write_month(self, month: str, arriving: Mapping[str, list[Series]]) -> None:
        """Merge what arrives in one month with what the archive holds and write it."""
        start, end = parts.month_edges(month)
        paths = self._pass.view().paths(SITE, STAGE, first=start, last=end)
        whole = read_months(paths, self._tags, start, end)
        for tag, pieces in arriving.items():
            for series in self._joined(pieces):
                whole[tag] = self._insert(tag, whole.get(tag, empty()), series)
        rows = sum(len(series) for series in whole.values())
        self._pass.write_file(
            SITE,
            STAGE,
            month,
            rows=rows,
            size=rows * READING_BYTES,
            fill=lambda path: write_month(path, whole),
        )

    def _joined(self, pieces: list[Series]) -> Iterator[Series]:
        """One series per export, in the order in which they came."""
        for number, group in groupby(pieces, key=_number):
            series, superseded, duplicates = join(list(group))
            self.merged.lose({number: superseded}, number)
            self.merged.duplicates[number] += duplicates
            yield series

    def _insert(self, tag: str, old: Series, new: Series) -> Series:
        """Merge one export's readings of a tag; exports of a higher number, if there already, win over it."""
        number = _number(new)
        is_later = old.source > number
        later = old.take(is_later)
        before = old.take(~is_later) if len(later) else old
        self.merged.lose(replaced(before, new), number)
        whole, _, duplicates = merge(before, new)
        self.merged.duplicates[number] += duplicates
        if len(later):
            whole = self._put_over(whole, later)
        self.merged.touched.setdefault(tag, []).extend(_spans(whole.time[whole.source == number]))
        return whole

    def _put_over(self, whole: Series, later: Series) -> Series:
        """Merge what exports of higher numbers said back over a series."""
        result, _, _ = merge(whole, later)
        numbers, counts = np.unique(later.source, return_counts=True)
        for number, count in zip(numbers.tolist(), counts.tolist(), strict=True):
            self.merged.lose(replaced(whole, later.take(later.source == number)), number)
            self.merged.duplicates[number] += count - int(np.count_nonzero(result.source == number))
        return result


def spans_of(touched: Mapping[str, list[Span]], tags: Collection[str]) -> tuple[Span, ...]:
    """Give the spans in which any of some tags changed; changes less than a day apart are one span.

    Parameters
    ----------
    touched : mapping of str to list of tuple
        Tag -> spans, from `Archive.merged`.
    tags : collection of str

    Returns
    -------
    tuple of tuple
        first <= t < last [us since 1970, UTC], ascending.
    """
    found: list[Span] = []
    for first, last in sorted(span for tag in tags for span in touched.get(tag, ())):
        if found and first - found[-1][1] < DAY_US:
            found[-1] = (found[-1][0], max(last, found[-1][1]))
        else:
            found.append((first, last))
    return tuple(found)


def _spans(time: NDArray[np.int64]) -> list[Span]:
    """Where times stand less than a day apart."""
    if len(time) == 0:
        return []
    edges = [0, *(np.flatnonzero(np.diff(time) >= DAY_US) + 1).tolist(), len(time)]
    return [(int(time[a]), int(time[b - 1]) + 1) for a, b in pairwise(edges)]


def _number(series: Series) -> int:
    """The export that a series not yet merged comes from; it is never empty."""
    return int(series.source[0])
