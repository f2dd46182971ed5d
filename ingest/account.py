"""What became of every reading of one export; the counts add up exactly.

One unit of account for both layouts: a row of a long export holds one reading, a row of a wide export as
many readings as the header names tags, whatever became of the row. A row whose columns cannot be told
apart counts as rejected with all its readings; else a reading whose tag nobody asked for counts as unasked,
whatever stands in it; else a blank cell of a wide export counts as empty, whatever its time; else the reading
is accepted or rejected for one reason.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from ingest.shown import shown

KEPT = 3  # rows kept as evidence for each reason, tags named where more were not asked for
TEXT = 120  # characters kept of each
_SHOWN = 80  # characters of a tag in a sentence

# Codes of what can be wrong with one reading, in the order of the table below; 0 is nothing. The ledger keeps
# them: a new one goes to the end.
(
    ACCEPTED,
    COLUMNS,
    QUOTES,
    RETURN,
    TIME,
    OFFSET,
    YEAR,
    GAP,
    TWICE,
    TAG,
    NUMBER,
    INFINITE,
    QUALITY,
) = range(13)
_FILE = "under [exports] in the unit file"
_ONE_LINE = "Close every quote, and export without line breaks inside a field."
_WITH_OFFSET = "Export every time with its offset from UTC, as 2026-03-29T01:30Z."
REASONS: tuple[tuple[str, str], ...] = (
    ("accepted", ""),
    (
        "has another number of columns than the header",
        "Export numbers with a decimal point or columns with semicolons; mend a row that is cut short.",
    ),
    ("has a quote that does not open and close with its field", _ONE_LINE),
    ("has a carriage return inside the row", _ONE_LINE),
    (
        "is not a time",
        "Write the time like those of the other rows; a row of units or sums may stay, it is left out.",
    ),
    ("is a time without offset among times that have one", _WITH_OFFSET),
    ("lies outside the years 1990 to 2099", "Mend the time."),
    (
        "is a time that the clock skipped when summer time began",
        f"Set time_zone {_FILE} to the zone that the export is written in. Or: {_WITH_OFFSET}",
    ),
    (
        "lies in the hour that comes twice when summer time ends, and the order of rows does not tell which",
        _WITH_OFFSET,
    ),
    ("names no tag", "Give each row its tag."),
    (
        "is not a number",
        f"If it stands for no value, add it to missing_words {_FILE};"
        " else export plain numbers, without units or marks between thousands.",
    ),
    ("is no finite number", f"Leave such cells blank, or (CSV) add the word to missing_words {_FILE}."),
    ("is no known quality", f"Set quality {_FILE} to 'words', 'opc ua' or 'opc da', or mend the code."),
)


# Lines of a text export that hold no readings, and are no fault.
ASIDES = {
    "above": "above the header",
    "descriptions": "of descriptions",
    "units": "of units",
    "sums": "of sums or ends",
}


@dataclass(frozen=True, slots=True)
class Aside:
    """A line that holds no readings: number in the file, what it is (a key of ASIDES), and its text."""

    row: int
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class Evidence:
    """One rejected row or reading: where it stands, what stands there, and a place in REASONS."""

    row: int
    tag: str | None
    text: str
    reason: int

    def describe(self, export: str) -> str:
        """Say what is wrong in one line that begins with the place.

        Parameters
        ----------
        export : str
            Name of the export.

        Returns
        -------
        str
            `march.csv:4182 [AI-204]: 'n.a.' is not a number`.
        """
        tag = f" [{shown(self.tag, _SHOWN)}]" if self.tag is not None else ""
        return f"{export}:{self.row}{tag}: {self.text!r} {REASONS[self.reason][0]}"


@dataclass(frozen=True, slots=True)
class Account:
    """What became of each reading of one export.

    `readings = accepted + superseded + duplicates + rejected + unasked + empty`. `empty` are blank cells of a
    wide export: nothing was stored for that tag at that time. `bad` and `unknown` are those of the readings
    taken from the file that have bad quality or no stated quality. `rejections` holds (reason's place in
    REASONS, readings); `unasked_tags` (tag, readings). Lines that hold no readings are no rows: `asides`
    holds (key of ASIDES, lines), `aside_lines` (row, key, text) of the first of each. `converted` holds (tag,
    unit of the export, unit of the unit file) of the values that were converted.
    `superseded_by` holds (number of the export in the ledger, readings that it replaced).
    """

    export: str
    rows: int
    readings: int
    accepted: int
    bad: int
    unknown: int
    superseded: int
    duplicates: int
    unasked: int
    empty: int
    rejections: tuple[tuple[int, int], ...]
    evidence: tuple[Evidence, ...]
    unasked_tags: tuple[tuple[str, int], ...]
    asides: tuple[tuple[str, int], ...] = ()
    aside_lines: tuple[tuple[int, str, str], ...] = ()
    converted: tuple[tuple[str, str, str], ...] = ()
    superseded_by: tuple[tuple[int, int], ...] = ()

    @classmethod
    def from_stored(cls, stored: Mapping[str, Any]) -> Self:
        """Give the account that the ledger holds as text; what an older one did not count is nought.

        Parameters
        ----------
        stored : mapping
            Of an export that was taken in, as it comes back from JSON.

        Returns
        -------
        Account
        """
        empty = {"str": "", "int": 0}
        known = {one.name: stored.get(one.name, empty.get(str(one.type), ())) for one in fields(cls)}
        lists = {name: tuple(map(_tuple, value)) for name, value in known.items() if isinstance(value, list)}
        return cls(**(known | lists | {"evidence": tuple(Evidence(**one) for one in known["evidence"])}))

    @property
    def rejected(self) -> int:
        """Give the readings rejected for any reason."""
        return sum(count for _, count in self.rejections)

    @property
    def adds_up(self) -> bool:
        """Tell whether every reading is in exactly one place of the account."""
        return self.readings == (
            self.accepted + self.superseded + self.duplicates + self.rejected + self.unasked + self.empty
        )

    def settled(self, *, superseded: int, duplicates: int) -> Account:
        """Move accepted readings that lost in `readings.join` or `readings.merge` to where they belong.

        Parameters
        ----------
        superseded, duplicates : int
            Readings of this export that were replaced, or said again what was known.

        Returns
        -------
        Account
            It adds up as before.
        """
        return replace(
            self,
            accepted=self.accepted - superseded - duplicates,
            superseded=self.superseded + superseded,
            duplicates=self.duplicates + duplicates,
        )

    def describe(self) -> tuple[str, ...]:
        """Say what became of the readings, one sentence a line.

        Returns
        -------
        tuple of str
            Counts first, then the first rows of each fault with what to do.
        """
        size = f"{_counted(self.rows, 'row')}, {_counted(self.readings, 'reading')}"
        lines = [f"{size}: {', '.join(self._counts())}."]
        for reason, count in self.rejections:
            what, remedy = REASONS[reason]
            lines.append(f"{count} rejected: the row or cell {what}. {remedy}")
            lines += [f"  {e.describe(self.export)}" for e in self.evidence if e.reason == reason]
        return (*lines, *self.beside())

    def beside(self) -> Iterator[str]:
        """Say which lines hold no readings, with the first of each kind.

        Yields
        ------
        str
            One line.
        """
        if self.asides:
            kinds = ", ".join(f"{count} {ASIDES[kind]}" for kind, count in self.asides)
            yield f"Lines that hold no readings: {kinds}."
            for row, kind, text in self.aside_lines:
                yield f"  {self.export}:{row}: {text!r} is {ASIDES[kind]}"

    def _counts(self) -> Iterator[str]:
        """What became of the readings; places of the account without a reading are left out."""
        taken = ((self.bad, "of bad quality"), (self.unknown, "without a stated quality"))
        of_these = ", ".join(f"{count} {words}" for count, words in taken if count)
        yield f"{self.accepted} accepted" + (f" (as read: {of_these})" if of_these else "")
        if self.empty:
            yield f"{_counted(self.empty, 'cell')} left blank"
        if self.superseded:
            yield f"{self.superseded} superseded by a later row or file"
        if self.duplicates:
            yield f"{self.duplicates} known already"
        if self.unasked:
            names = [shown(name, _SHOWN) or "a column without name" for name, _ in self.unasked_tags]
            more = f" and {len(names) - KEPT} more" if len(names) > KEPT else ""
            yield f"{self.unasked} of tags that no unit file names ({', '.join(names[:KEPT])}{more})"
        yield f"{self.rejected} rejected"


def _tuple(item: Any) -> Any:
    """A pair as it was before it went into JSON."""
    return tuple(item) if isinstance(item, list) else item


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


@dataclass(slots=True)
class Tally:
    """The account while the export is being read."""

    export: str
    rows: int = 0
    readings: int = 0
    accepted: int = 0
    bad: int = 0
    unknown: int = 0
    empty: int = 0
    unasked: Counter[str] = field(default_factory=Counter)
    rejections: Counter[int] = field(default_factory=Counter)
    evidence: list[Evidence] = field(default_factory=list)
    asides: Counter[str] = field(default_factory=Counter)
    aside_lines: list[Aside] = field(default_factory=list)

    def put_aside(self, asides: Iterable[Aside]) -> None:
        """Count lines that hold no readings and keep the first of each kind.

        Parameters
        ----------
        asides : iterable of Aside
            In the order of the file.
        """
        for one in asides:
            if self.asides[one.kind] < KEPT:
                self.aside_lines.append(one)
            self.asides[one.kind] += 1

    def room(self, reason: int) -> int:
        """Tell how many more rows are kept as evidence for a reason.

        Parameters
        ----------
        reason : int
            Place in REASONS.

        Returns
        -------
        int
            0 to KEPT.
        """
        return KEPT - sum(e.reason == reason for e in self.evidence)

    def keep(self, row: int, tag: str | None, text: object, reason: int) -> None:
        """Keep one row as evidence.

        Parameters
        ----------
        row : int
            Line or row in the file, from 1.
        tag : str or None
            None where the whole row is meant.
        text : object
            What stands there.
        reason : int
            Place in REASONS.
        """
        self.evidence.append(Evidence(row, tag, str("" if text is None else text)[:TEXT], reason))

    def reject(
        self,
        reasons: NDArray[np.int8],
        rows: NDArray[np.int64],
        tag: Callable[[int], str | None],
        text: Callable[[int, int], object],
    ) -> None:
        """Count the readings that have a reason against them and keep the first of each as evidence.

        Parameters
        ----------
        reasons : numpy.ndarray of int8 (n,)
            Places in REASONS; 0 where the reading is accepted.
        rows : numpy.ndarray of int64 (n,)
            Their rows in the file.
        tag : callable of int
            Gives the tag of the i-th reading.
        text : callable of int, int
            Gives what stands there, for the i-th reading and a reason.
        """
        if not reasons.any():
            return
        for reason, count in enumerate(np.bincount(reasons).tolist()):
            if reason == ACCEPTED or not count:
                continue
            self.rejections[reason] += count
            for i in np.flatnonzero(reasons == reason)[: self.room(reason)].tolist():
                self.keep(int(rows[i]), tag(i), text(i, reason), reason)

    def account(self) -> Account:
        """Close the account.

        Returns
        -------
        Account
            As read, before the archive's merge.
        """
        return Account(
            export=self.export,
            rows=self.rows,
            readings=self.readings,
            accepted=self.accepted,
            bad=self.bad,
            unknown=self.unknown,
            superseded=0,
            duplicates=0,
            unasked=self.unasked.total(),
            empty=self.empty,
            rejections=tuple(sorted(self.rejections.items())),
            evidence=tuple(sorted(self.evidence, key=lambda e: (e.reason, e.row))),
            unasked_tags=tuple(sorted(self.unasked.items())),
            asides=tuple((kind, self.asides[kind]) for kind in ASIDES if self.asides[kind]),
            aside_lines=tuple((one.row, one.kind, one.text[:TEXT]) for one in self.aside_lines),
        )
