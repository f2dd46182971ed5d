"""One truth, written as an export in every well-formed way that plants use, each with what must come out."""

from __future__ import annotations

import csv
import gzip
import io
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.measures import Stated
from ingest.readings import BAD, GOOD, UNCERTAIN, UNKNOWN
from ingest.unit import ExportRules
from tests.exports_made import NO_RULES, TAGS, Truth, made_truth, zst

UNITS = {
    "FI-1.PV": (Stated("FI-1", "mass flow", "kg/h"),),
    "AI-2.C4H8": (Stated("AI-2", "mole fraction", "mol%"),),
    "TI-3.PV": (Stated("TI-3", "temperature", "degC"),),
}
BERLIN, NEW_YORK = "Europe/Berlin", "America/New_York"
QUARTER = timedelta(minutes=15)
# The hours before each change of the clock, both zones, 2026 (IANA time zone database); 24 rows cross it.
CHANGES = {
    "spring in Berlin": (BERLIN, datetime(2026, 3, 28, 23, tzinfo=UTC)),  # 01:00 UTC on the 29th
    "autumn in Berlin": (BERLIN, datetime(2026, 10, 24, 22, tzinfo=UTC)),  # 01:00 UTC on the 25th
    "spring in New York": (NEW_YORK, datetime(2026, 3, 8, 5, tzinfo=UTC)),  # 07:00 UTC on the 8th
    "autumn in New York": (NEW_YORK, datetime(2026, 11, 1, 4, tzinfo=UTC)),  # 06:00 UTC on the 1st
}
TRUTH = made_truth(60, start=datetime(2026, 3, 13, 6, tzinfo=UTC))  # a day after the twelfth tells the order
PACKED: dict[str, Callable[[bytes], bytes]] = {"": bytes, ".gz": gzip.compress, ".zst": zst}
QUALITIES = {  # good, uncertain, bad
    "words": ("Good", "Uncertain", "Bad"),
    "symbolic names": ("Good", "UncertainLastUsableValue", "BadSensorFailure"),
    "OPC UA in hexadecimal": ("0x00000000", "0x40000000", "0x80050000"),
    "OPC UA in decimal": ("0", "1073741824", "2147811328"),
    "OPC DA": ("192", "64", "0"),
}


@dataclass(frozen=True)
class Form:
    """How times are written: the cells of one time, the names of their columns, and what has to be stated."""

    write: Callable[[datetime], Sequence[str]]
    columns: tuple[str, ...] = ("time",)
    zone: str | None = BERLIN
    rules: ExportRules = NO_RULES


def local(form: str, zone: str = BERLIN) -> Callable[[datetime], list[str]]:
    return lambda time: [time.astimezone(ZoneInfo(zone)).strftime(form)]


def twelve(form: str, am: str, pm: str, zone: str = BERLIN) -> Callable[[datetime], list[str]]:
    """A 12-hour clock without zeros before the hour, and its own words for both halves of the day."""

    def write(time: datetime) -> list[str]:
        wall = time.astimezone(ZoneInfo(zone))
        date = f"{wall.month}/{wall.day}/{wall.year}" if form == "US" else wall.strftime(form)
        return [f"{date} {wall.hour % 12 or 12}:{wall:%M:%S}{am if wall.hour < 12 else pm}"]

    return write


def day_number(origin: datetime, mark: str = ".", zone: str = BERLIN) -> Callable[[datetime], list[str]]:
    """Days and parts of days since an origin, ten decimals: 4 us, less than half a millisecond."""

    def write(time: datetime) -> list[str]:
        wall = time.astimezone(ZoneInfo(zone)).replace(tzinfo=UTC)
        return [f"{(wall - origin) / timedelta(days=1):.10f}".replace(".", mark)]

    return write


def apart(date: str, clock: str, zone: str = BERLIN) -> Callable[[datetime], list[str]]:
    return lambda time: [local(date, zone)(time)[0], local(clock, zone)(time)[0]]


def since_1970(ms: int) -> Callable[[datetime], list[str]]:
    return lambda time: [str(int(time.timestamp() * ms))]


_1900 = datetime(1899, 12, 30, tzinfo=UTC)  # so that day 60 and later are right: 2026-03-13 is 46094
_1904 = datetime(1904, 1, 1, tzinfo=UTC)
_TWO = ("Date", "Time")
FORMS = {
    "ISO with Z": Form(lambda t: [t.strftime("%Y-%m-%dT%H:%M:%SZ")], zone=None),
    "ISO with offset": Form(lambda t: [t.astimezone(ZoneInfo(BERLIN)).isoformat()], zone=None),
    "ISO local": Form(local("%Y-%m-%d %H:%M:%S")),
    "ISO local to the minute": Form(local("%Y-%m-%dT%H:%M")),
    "ISO local with milliseconds": Form(local("%Y-%m-%d %H:%M:%S.000")),
    "year first with slashes": Form(local("%Y/%m/%d %H:%M:%S")),
    "day first with dots": Form(local("%d.%m.%Y %H:%M:%S")),
    "day first with slashes": Form(local("%d/%m/%Y %H:%M")),
    "day first and a comma": Form(local("%d/%m/%Y, %H:%M:%S")),
    "month first": Form(local("%m/%d/%Y %H:%M:%S")),
    "day first, two digits": Form(local("%d.%m.%y %H:%M"), rules=replace(NO_RULES, date_order="day first")),
    "month first, two digits": Form(local("%m/%d/%y %H:%M")),  # 03/13/26 can be nothing else
    "year first, two digits": Form(local("%y-%m-%d %H:%M"), rules=replace(NO_RULES, date_order="year first")),
    "month in letters": Form(local("%d-%b-%Y %H:%M:%S")),
    "month in letters, two digits": Form(local("%d-%b-%y %H:%M")),
    "month in capitals, year first": Form(lambda t: [t.strftime("%Y-%b-%d %H:%M:%SZ").upper()], zone=None),
    "month in full, leading": Form(local("%B %d, %Y %I:%M %p")),
    "AM and PM": Form(twelve("US", " AM", " PM")),
    "am and pm": Form(twelve("US", " am", " pm")),
    "a.m. and p.m.": Form(twelve("%Y-%m-%d", " a.m.", " p.m.")),
    "AM without blank": Form(twelve("%d.%m.%Y", "AM", "PM")),
    "AM after a narrow blank": Form(twelve("US", "\u202fAM", "\u202fPM")),
    "seconds since 1970": Form(since_1970(1), zone=None),
    "milliseconds since 1970": Form(since_1970(1000), zone=None),
    "day numbers": Form(day_number(_1900)),
    "day numbers with a comma": Form(day_number(_1900, ",")),
    "day numbers from 1904": Form(day_number(_1904), rules=replace(NO_RULES, day_numbers="from 1904")),
    "date and time apart": Form(apart("%d/%m/%Y", "%H:%M:%S"), _TWO),
    "date and AM apart": Form(apart("%m/%d/%Y", "%I:%M:%S %p"), _TWO),
    "ISO date and time apart": Form(apart("%Y-%m-%d", "%H:%M"), _TWO),
}


@dataclass(frozen=True)
class Case:
    """One export, or one for each tag, and what must come out."""

    shape: str = "wide"  # 'long', or one tag a file by its 'header', 'name' or 'line' above the header
    form: Form = FORMS["ISO with Z"]
    truth: Truth = field(default_factory=lambda: TRUTH)
    separator: str = ";"
    decimal: str = "."
    thousands: str = ""
    minus: str = "-"
    plus: str = ""
    power: bool = False
    missing: str = "Bad"
    encoding: str = "utf-8"
    ending: str = "\n"
    quoting: int = csv.QUOTE_MINIMAL
    pack: str = ""
    qualities: str | None = None
    above: tuple[str, ...] = ()
    below: tuple[tuple[str, ...], ...] = ()  # rows of as many cells as there are tags, before them the first
    ends: tuple[str, ...] = ()
    factors: tuple[float, float, float] = (1.0, 1.0, 1.0)
    names: tuple[str, str, str] = TAGS

    def number(self, value: float) -> str:
        """Two decimals, in the case's own marks."""
        if np.isnan(value):
            return self.missing
        text = f"{abs(value):.8e}" if self.power else f"{abs(value):,.2f}"
        text = text.replace(",", "\0").replace(".", self.decimal).replace("\0", self.thousands)
        return (self.minus if value < 0 else self.plus) + text

    def quality(self, row: int, value: float) -> int:
        """Every seventh reading that is not bad is uncertain, where there are qualities."""
        if np.isnan(value):
            return BAD
        return UNKNOWN if self.qualities is None else UNCERTAIN if row % 7 == 3 else GOOD

    def files(self) -> Iterator[tuple[str, bytes]]:
        """Names and contents."""
        for name, header, rows in self._tables():
            text = io.StringIO()
            text.writelines(line + self.ending for line in self.above_of(name))
            writer = csv.writer(
                text, delimiter=self.separator, quoting=self.quoting, lineterminator=self.ending
            )
            writer.writerows([header, *self._below(len(header)), *rows])
            text.writelines(line + self.ending for line in self.ends)
            raw = text.getvalue().encode(self.encoding)
            yield f"{name}.csv{self.pack}", PACKED[self.pack](raw)

    def above_of(self, name: str) -> tuple[str, ...]:
        """Lines above the header; one of them names the tag where nothing else does."""
        return (*self.above, f"Tag: {TAGS[int(name[-1])]}") if self.shape == "line" else self.above

    def _below(self, width: int) -> list[list[str]]:
        spare = len(self.form.columns) - 1
        return [[row[0], *[""] * spare, *row[1:]][:width] for row in self.below]

    def _tables(self) -> Iterator[tuple[str, list[str], list[list[str]]]]:
        """Name, header and rows of each file."""
        cells = [[self._cell(r, c) for c in range(3)] for r in range(len(self.truth.times))]
        rows = [(list(self.form.write(time)), row) for time, row in zip(self.truth.times, cells, strict=True)]
        first, last = list(self.form.columns), ["quality"] if self.qualities else []
        if self.shape == "wide":
            yield "export", [*first, *self.names], [[*time, *(v for v, _ in row)] for time, row in rows]
        elif self.shape == "long":
            tagged = [(t, tag, *cell) for t, row in rows for tag, cell in zip(TAGS, row, strict=True)]
            yield "export", [*first, "tag", "value", *last], [[*t, tag, v, *q] for t, tag, v, q in tagged]
        else:
            for c, tag in enumerate(TAGS):
                name = f"history {tag} March" if self.shape == "name" else f"export-{c}"
                value = tag if self.shape == "header" else "value"
                yield name, [*first, value, *last], [[*t, row[c][0], *row[c][1]] for t, row in rows]

    def _cell(self, row: int, column: int) -> tuple[str, list[str]]:
        value = self.truth.values[row, column]
        written = self.number(value / self.factors[column])
        if self.qualities is None:
            return written, []
        word = {GOOD: 0, UNCERTAIN: 1, BAD: 2}[self.quality(row, value)]
        return (self.number(0.0) if np.isnan(value) else written), [QUALITIES[self.qualities][word]]


SHAPES = ("wide", "long", "header", "name", "line")
_MARKS = {  # decimal mark and mark between thousands
    "1234.5": (".", ""),
    "1234,5": (",", ""),
    "1,234.5": (".", ","),
    "1.234,5": (",", "."),
    "1 234,5": (",", " "),
    "1 234.5": (".", " "),
    "1 234,5 no-break": (",", "\u00a0"),
    "1 234,5 narrow": (",", "\u202f"),
    "1'234.5": (".", "'"),
    "1\u2019234.5": (".", "\u2019"),
}
_SEPARATORS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|"}
_TITLE = ("Report of unit 2", "Exported at: 14.03.2026 08:00", "Shift;B;;")
_NAMED = (("", "Feed flow", "Butene at the outlet", "Temperature"),)
_SUMS = ("Minimum;-30;0;1", "Maximum;1;2;3", "Average:;1.5;2.5;3.5", "", "End of report")


def _by_dialect() -> Iterator[tuple[str, Case]]:
    """Shapes crossed with times, packing and qualities."""
    for shape in SHAPES:
        for name, form in FORMS.items():
            yield f"{shape}, {name}", Case(shape, form)
    for shape in SHAPES:
        for pack in (".gz", ".zst"):
            yield f"{shape}, {pack}", Case(shape, pack=pack)
    for shape in SHAPES[1:]:
        for qualities in QUALITIES:
            yield f"{shape}, qualities as {qualities}", Case(shape, qualities=qualities)


def _by_text() -> Iterator[tuple[str, Case]]:
    """Two shapes crossed with encodings, separators and marks."""
    for shape in ("wide", "long"):
        for encoding in ("utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"):
            above = ("Bericht der Anlage für März",)
            yield f"{shape}, {encoding}", Case(shape, encoding=encoding, above=above)
        for word, separator in _SEPARATORS.items():
            for name, (decimal, thousands) in _MARKS.items():
                case = Case(shape, separator=separator, decimal=decimal, thousands=thousands)
                yield f"{shape}, {word}, {name}", case


def _by_detail() -> Iterator[tuple[str, Case]]:
    """What else may differ: line ends, quotes, signs, words, lines around the rows, changes of the clock."""
    for shape in ("wide", "long"):
        yield f"{shape}, CRLF", Case(shape, ending="\r\n")
        yield f"{shape}, all quoted", Case(shape, quoting=csv.QUOTE_ALL)
        yield f"{shape}, quoted and CRLF", Case(shape, quoting=csv.QUOTE_ALL, ending="\r\n")
        yield f"{shape}, Unicode minus", Case(shape, minus="\u2212")
        yield f"{shape}, leading plus", Case(shape, plus="+")
        yield f"{shape}, exponents", Case(shape, power=True)
        yield f"{shape}, exponents and comma", Case(shape, power=True, decimal=",")
        for word in ("NaN", "nan", "No Data", "#N/A", "-", "err"):
            yield f"{shape}, {word} for no value", Case(shape, missing=word)
        yield f"{shape}, lines above", Case(shape, above=_TITLE)
        yield f"{shape}, blank lines above", Case(shape, above=("", *_TITLE, ""))
        yield f"{shape}, lines of sums", Case(shape, ends=_SUMS)
    yield "wide, descriptions", Case(below=_NAMED)
    yield "wide, same units", Case(below=(("Unit", "kg/h", "mol%", "degC"),))
    yield "wide, other spellings", Case(below=(("", "KG/H", "%", "°C"),))
    converted = Case(below=(("", "t/h", "ppm", "°C"),), factors=(1000.0, 1e-4, 1.0), power=True)
    yield "wide, other units", converted
    yield "wide, all around", replace(converted, above=_TITLE, below=(*_NAMED, *converted.below), ends=_SUMS)
    yield "wide, units in brackets", Case(names=("FI-1.PV [kg/h]", "AI-2.C4H8 (mol%)", "TI-3.PV (°C)"))
    labels = (("Description", "Feed flow", "Butene", "Temperature"), ("Units", "kg/h", "mol%", "degC"))
    yield "wide, labels before names", Case(form=replace(FORMS["ISO local"], columns=("Tag",)), below=labels)
    yield "wide, padded lines above", Case(above=("Report;;;", "made by;the historian;;", ";;;"))
    yield "wide, all around, UTF-16", replace(Case(above=_TITLE, below=_NAMED, ends=_SUMS), encoding="utf-16")
    for when, (zone, start) in CHANGES.items():
        for shape in ("wide", "long", "header"):
            for name, form in _clocks(zone).items():
                yield f"{shape}, {when}, {name}", Case(shape, form, made_truth(24, QUARTER, start))


def _clocks(zone: str) -> dict[str, Form]:
    """Ways to write local time without offset; dates before the 13th need their order stated."""
    stated = replace(NO_RULES, date_order="month first")
    return {
        "ISO": Form(local("%Y-%m-%d %H:%M", zone), zone=zone),
        "day first": Form(
            local("%d/%m/%Y %H:%M", zone), zone=zone, rules=replace(NO_RULES, date_order="day first")
        ),
        "AM and PM": Form(twelve("US", " AM", " PM", zone), zone=zone, rules=stated),
        "day numbers": Form(day_number(_1900, zone=zone), zone=zone),
        "apart": Form(apart("%Y-%m-%d", "%H:%M", zone), _TWO, zone),
    }


CASES = dict((*_by_dialect(), *_by_text(), *_by_detail()))


def parquet_files(folder: Path, shape: str, times: pa.Array, truth: Truth) -> Iterator[Path]:
    """The same truth as Parquet: floats, NaN where bad."""
    if shape == "wide":
        columns = {tag: pa.array(truth.values[:, i]) for i, tag in enumerate(TAGS)}
        tables = {"export": pa.table({"time": times, **columns})}
    elif shape == "long":
        repeated = times.take(pa.array(np.repeat(np.arange(len(times)), 3)))
        tags = pa.array(list(TAGS) * len(times))
        tables = {"export": pa.table({"time": repeated, "tag": tags, "value": truth.values.ravel()})}
    else:
        tables = {tag: pa.table({"time": times, "value": truth.values[:, i]}) for i, tag in enumerate(TAGS)}
    for name, table in tables.items():
        pq.write_table(table, folder / f"{name}.parquet")
        yield folder / f"{name}.parquet"
