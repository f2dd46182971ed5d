"""What kind of export is this? All that was decided about how one export is read, and in which words.

Every decision rests on something that has one meaning only. What has two is refused, with both readings of
one row from the file, unless the unit file settles it, and never settled by a preference.
"""

from __future__ import annotations

from dataclasses import dataclass

from ingest.headings import SEPARATORS, Heading
from ingest.layouts import Layout
from ingest.measures import Conversion
from ingest.timestamps import EPOCHS, Clock
from ingest.values import MARKS, Numbers

_QUALITIES = {
    "words": "in words",
    "opc ua": "as OPC UA status codes (0 is good)",
    "opc da": "as OPC DA qualities (192 is good)",
}
_CLOCKS = {
    "timestamp": "time stamps",
    "epoch s": "seconds since 1970",
    "epoch ms": "milliseconds since 1970",
    "day number from 1900": "day numbers of a spreadsheet (46092.25 is 2026-03-11 06:00)",
    "day number from 1904": "day numbers of a spreadsheet from 1904 (44630.25 is 2026-03-11 06:00)",
}


@dataclass(frozen=True, slots=True)
class Dialect:
    """How one export is read. `encoding` and `separator` are empty for Parquet."""

    encoding: str
    separator: str
    header: tuple[str, ...]
    header_row: int
    layout: Layout
    clock: Clock
    numbers: Numbers
    quality: str | None  # a key of qualities.QUALITY_FORMS; None where the export has no quality column
    conversions: tuple[Conversion, ...] = ()
    heading: Heading | None = None  # None in Parquet

    @property
    def width(self) -> int:
        """Give the readings that one row holds."""
        return 1 if self.layout.is_long else len(self.header) - 1 - (self.layout.clock is not None)

    def describe(self) -> tuple[str, ...]:
        """Say how the export is read.

        Returns
        -------
        tuple of str
            One decision per sentence.
        """
        return (*self._of_file(), *self._of_layout(), *self._of_time(), *self._of_values())

    def _of_file(self) -> tuple[str, ...]:
        if not self.encoding:
            return ("Parquet.",)
        return (
            f"Text in {self.encoding}, separated by {SEPARATORS[self.separator]};"
            f" line {self.header_row} names the columns.",
        )

    def _of_layout(self) -> tuple[str, ...]:
        time, layout = f"'{self.header[self.layout.time]}'", self.layout
        if layout.clock is not None:
            time = f"{time} and '{self.header[layout.clock]}'"
        if layout.value is None:
            tags = f"each of {self.width} tags" if self.width > 1 else "one tag"
            return (f"Wide: times in {time}, a column for {tags}.",)
        known = (layout.time, layout.value, *layout.others)
        spare = [name for i, name in enumerate(self.header) if i not in known]
        left = (f"Columns not read: {', '.join(spare)}.",) if spare else ()
        if layout.unit is not None:
            left = (f"Units in '{self.header[layout.unit]}', held against the unit file.", *left)
        value = self.header[layout.value]
        if layout.tag is None:
            return (f"One tag, {layout.only}: times in {time}, values in '{value}'.", *left)
        return (f"Long: times in {time}, tags in '{self.header[layout.tag]}', values in '{value}'.", *left)

    def _of_time(self) -> tuple[str, ...]:
        form = _CLOCKS.get(self.clock.form, f"calendar times, {self.clock.form}")
        form += ", months in letters" if self.clock.named else ""
        form += ", with AM or PM" if self.clock.halves else ""
        if self.clock.form in EPOCHS:
            return (f"Times are {form}, UTC.",)
        if self.clock.offset:
            return (f"Times are {form}, with their offset from UTC.",)
        return (f"Times are {form}, without offset: read as clock time of {self.clock.zone}.",)

    def _of_values(self) -> tuple[str, ...]:
        words = ", ".join(repr(word) for word in sorted(self.numbers.missing - {""}))
        blank = "bad quality" if self.layout.is_long else "nothing was stored then, no reading"
        quality = "No quality column: every number counts as usable."
        if self.quality is not None and self.layout.quality is not None:
            quality = f"Quality in '{self.header[self.layout.quality]}', {_QUALITIES[self.quality]}."
        mark, other = (MARKS[one] for one in (self.numbers.decimal, self.numbers.parts))
        return (
            f"Decimal mark: {mark}; a {other}, blank or apostrophe before three digits parts thousands.",
            f"Blank cells: {blank}.",
            f"Words that mean bad quality, whatever their capitals: {words}.",
            quality,
            *(conversion.describe() for conversion in self.conversions),
        )
