"""Broken exports: an error with place and remedy, or an account in which every reading is found."""

from __future__ import annotations

import gzip
import math
from datetime import UTC, datetime
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest import lines
from ingest.account import (
    COLUMNS,
    INFINITE,
    NUMBER,
    OFFSET,
    QUALITY,
    QUOTES,
    REASONS,
    RETURN,
    TAG,
    TIME,
    YEAR,
)
from ingest.errors import ExportError
from ingest.unit import ExportRules
from tests.exports_made import long_text, made_truth, opened, read, saved, wide_parquet, wide_text, zst

WIDE = wide_text(made_truth())  # 300 rows of 3 tags
LONG = long_text(made_truth())  # 900 rows
ASKED = ("A", "B")


def with_line(text: str, row: int, line: str) -> str:
    """The text with another line in place of one."""
    rows = text.split("\n")
    rows[row - 1] = line
    return "\n".join(rows)


def cell(text: str, row: int, column: int, content: str) -> str:
    """The text with another content of one cell."""
    parts = text.split("\n")[row - 1].split(",")
    parts[column] = content
    return with_line(text, row, ",".join(parts))


# What is broken: the text, the reason, how many readings it costs, the row and tag, and what is shown of it.
SPOILT = {
    "too few columns": (
        with_line(WIDE, 9, "2026-03-11T08:16Z,1"),
        COLUMNS,
        3,
        9,
        None,
        "2026-03-11T08:16Z,1",
    ),
    "too many columns": (with_line(WIDE, 9, "2026-03-11T08:16Z,1,2,3,4"), COLUMNS, 3, 9, None, ",1,2,3,4"),
    "a decimal comma between commas": (
        with_line(WIDE, 9, "2026-03-11T08:16Z,1,5,2,3"),
        COLUMNS,
        3,
        9,
        None,
        ",1,5,2,3",
    ),
    "a line of words at the end": (WIDE + "Shift B,1,2,3\n", TIME, 3, 302, "FI-1.PV", "Shift B"),
    "a second header": (with_line(WIDE, 9, "time,FI-1.PV,AI-2.C4H8,TI-3.PV"), TIME, 3, 9, "FI-1.PV", "time"),
    "a row of units in the middle": (with_line(WIDE, 9, ",kg/h,mol%,degC"), TIME, 3, 9, "FI-1.PV", ""),
    "a line cut short at the end": (WIDE + "2026-03-14T", COLUMNS, 3, 302, None, "2026-03-14T"),
    "a row of another table": (LONG + "total;900\n", COLUMNS, 1, 902, None, "total;900"),
    "a word for time": (cell(LONG, 9, 0, "yesterday"), TIME, 1, 9, "AI-2.C4H8", "yesterday"),
    "the 30th of February": (
        cell(LONG, 9, 0, "2026-02-30T00:00Z"),
        TIME,
        1,
        9,
        "AI-2.C4H8",
        "2026-02-30T00:00Z",
    ),
    "the 13th month": (cell(LONG, 9, 0, "2026-13-01T00:00Z"), TIME, 1, 9, "AI-2.C4H8", "2026-13-01T00:00Z"),
    "hour 25": (cell(LONG, 9, 0, "2026-01-01T25:00Z"), TIME, 1, 9, "AI-2.C4H8", "2026-01-01T25:00Z"),
    "no time": (cell(LONG, 9, 0, ""), TIME, 1, 9, "AI-2.C4H8", ""),
    "a time without offset": (
        cell(LONG, 9, 0, "2026-03-11T06:34"),
        OFFSET,
        1,
        9,
        "AI-2.C4H8",
        "2026-03-11T06:34",
    ),
    "the year 1970": (cell(LONG, 9, 0, "1970-01-01T00:00Z"), YEAR, 1, 9, "AI-2.C4H8", "1970-01-01T00:00Z"),
    "the year 2226": (cell(LONG, 9, 0, "2226-01-01T00:00Z"), YEAR, 1, 9, "AI-2.C4H8", "2226-01-01T00:00Z"),
    "no tag": (cell(LONG, 9, 1, " "), TAG, 1, 9, None, " "),
    "a number with a letter": (cell(LONG, 9, 2, "12.3x"), NUMBER, 1, 9, "AI-2.C4H8", "12.3x"),
    "an unknown word for a value": (cell(LONG, 9, 2, "n.a."), NUMBER, 1, 9, "AI-2.C4H8", "n.a."),
    "a mark between hundreds": (cell(WIDE, 9, 1, '"12,34.5"'), NUMBER, 1, 9, "FI-1.PV", "12,34.5"),
    "a hexadecimal value": (cell(LONG, 9, 2, "0x1F"), NUMBER, 1, 9, "AI-2.C4H8", "0x1F"),
    "a formula": (cell(LONG, 9, 2, "=1+1"), NUMBER, 1, 9, "AI-2.C4H8", "=1+1"),
    "infinity": (cell(LONG, 9, 2, "inf"), INFINITE, 1, 9, "AI-2.C4H8", "inf"),
    "minus infinity": (cell(WIDE, 9, 1, "-Infinity"), INFINITE, 1, 9, "FI-1.PV", "-Infinity"),
    "a number beyond all floats": (cell(WIDE, 9, 1, "1e999"), INFINITE, 1, 9, "FI-1.PV", "1e999"),
    "an unknown quality": (cell(LONG, 9, 3, "splendid"), QUALITY, 1, 9, "AI-2.C4H8", "splendid"),
    "a code among words": (cell(LONG, 9, 3, "7"), QUALITY, 1, 9, "AI-2.C4H8", "7"),
    "a quote that does not close": (cell(LONG, 9, 1, '"AI-2'), QUOTES, 1, 9, None, '"AI-2,'),
    "a quote inside a field": (cell(LONG, 9, 1, 'A"I"-2'), QUOTES, 1, 9, None, 'A"I"-2'),
    "a quote inside and one at the start": (cell(LONG, 9, 1, 'A"I,"2'), QUOTES, 1, 9, None, 'A"I,"2'),
    "a line break inside quotes": (cell(LONG, 9, 1, '"AI\n2"'), QUOTES, 2, 9, None, '"AI'),
    "a carriage return inside a row": (cell(LONG, 9, 1, "AI\r2"), RETURN, 1, 9, None, "AI\r2"),
}


@pytest.mark.parametrize("what", SPOILT)
@pytest.mark.parametrize("name", ["export.csv", "export.csv.gz", "export.csv.zst"])
def test_what_cannot_be_read_is_rejected_with_its_row_and_the_rest_is_kept(
    tmp_path: Path, what: str, name: str
):
    text, reason, cost, row, tag, shown = SPOILT[what]
    _, account = read(saved(tmp_path, text, name=name))  # asserts that the account adds up
    assert account.rejections == ((reason, cost),)
    first = account.evidence[0]
    assert (first.row, first.tag) == (row, tag)
    assert shown in first.text
    assert account.accepted == account.readings - cost
    assert first.describe(name).startswith(f"{name}:{row}{f' [{tag}]' if tag else ''}: ")
    assert REASONS[reason][1], "every reason comes with what to do"


ANY = "time,A,B\n2026-01-01T00:00Z,1.5,2\n"
# What is broken: name and content of the file, what the error says, what it says to do.
REFUSED: dict[str, tuple[str, bytes, str, str]] = {
    "empty": ("x.csv", b"", r"^x\.csv: is empty", "Export it again"),
    "blank": ("x.csv", b"\n \n\n", r"^x\.csv: is empty", "Export it again"),
    "empty gz": ("x.csv.gz", gzip.compress(b""), r"x\.csv\.gz: is empty", "Export it again"),
    "empty Parquet": ("x.parquet", b"", r"x\.parquet: is empty", "Export it again"),
    "header only": ("x.csv", b"time,A,B\n", r"x\.csv:1: holds a header and no rows", "span of time"),
    "header only, blank lines": (
        "x.csv",
        b"\ntime,A,B\n\n\n",
        r"x\.csv:2: holds a header and no rows",
        "span",
    ),
    "one column": (
        "x.csv",
        b"time\n2026-01-01T00:00Z\n",
        r"x\.csv:1: the header 'time' names one column",
        "separated",
    ),
    "prose": (
        "x.csv",
        b"Dear all\nplease find\n",
        r"x\.csv:1: the header 'Dear all' names one",
        "in the first line",
    ),
    "no header": (
        "x.csv",
        b"2026-01-01T00:00Z,1\n2026-01-01T00:01Z,2\n",
        r"x\.csv:1: '2026-01-01T00:00Z' is a time, but this line should name the columns",
        "names of the columns in one line",
    ),
    "seconds that pass": (
        "x.csv",
        b"time,A\n0,1\n30000,1\n40000,1\n50000,1\n",
        r"x\.csv:2: '0' is no known form of time",
        "Export times",
    ),
    "no time column": ("x.csv", b"A,B\n1,2\n3,4\n", r"x\.csv:1: no time column", "Name the column"),
    "two time columns": (
        "x.csv",
        b"time,timestamp,A\n2026-01-01,2026-01-01,1\n",
        "may each be the time",
        "one time",
    ),
    "two columns of one name": (
        "x.csv",
        ANY.replace("B", "A").encode(),
        r"x\.csv:1: more than one column is named 'A'",
        "own name",
    ),
    "a tag column without values": (
        "x.csv",
        b"time,tag,A\n2026-01-01,B,1\n",
        r"x\.csv:1: columns 'tag' are neither a long nor a wide export",
        "name the columns time, tag",
    ),
    "values without tags": (
        "x.csv",
        b"time,value\n2026-01-01,1\n",
        r"x\.csv:1: the values in 'value' state no tag",
        "Name the column of values after its tag",
    ),
    "one quality for many tags": (
        "x.csv",
        b"time,A,B,quality\n2026-01-01,1,2,Good\n",
        r"columns 'quality' are neither a long nor a wide export",
        "name the columns time, tag",
    ),
    "all rows of other width": (
        "x.csv",
        b"time,A,B\n2026-01-01,1,5,2,5\n",
        r"x\.csv:1: the separator cannot be told \(comma: header 3, next row 5",
        "semicolons",
    ),
    "two columns of times of day": (
        "x.csv",
        b"date,begin,end,A\n2026-01-01,10:00,10:01,1\n2026-01-01,10:01,10:02,2\n",
        r"x\.csv:1: 'date', 'begin', 'end' may each be the time",
        "one time column",
    ),
    "no zone": (
        "x.csv",
        b"time,A\n2026-01-01T00:00,1\n",
        r"x\.csv:1: times state no offset, and no time zone",
        "Set time_zone",
    ),
    "a strange zone": (
        "x.csv",
        b"time,A\n2026-01-01T00:00,1\n",
        r"x\.csv:1: there is no time zone 'Mars/Olympus'",
        "Set time_zone",
    ),
    "ambiguous dates": (
        "x.csv",
        b"time,A\n03/04/2026 10:00,1\n",
        r"x\.csv:2: '03/04/2026 10:00' is 2026-04-03 day first but 2026-03-04 month first",
        r"Write date_order = 'day first' or 'month first' under \[exports\]",
    ),
    "ambiguous dates below a stray line": (
        "x.csv",
        b"time,A\nplant B,1\n03/04/2026 10:00,1\n03/05/2026 10:00,1\n",
        r"x\.csv:3: '03/04/2026 10:00' is 2026-04-03 day first but 2026-03-04 month first",
        r"Write date_order = 'day first' or 'month first' under \[exports\]",
    ),
    "contradicting dates": (
        "x.csv",
        b"time,A\n13/04/2026,1\n04/13/2026,1\n",
        r"x\.csv:2: '13/04/2026' can only be day first, but '04/13/2026' in row 3 can only be month first",
        "Export times",
    ),
    "words for times": (
        "x.csv",
        b"time,A\nMonday,1\n",
        r"x\.csv:2: 'Monday' is no known form of time",
        "Export times",
    ),
    "two forms of time": (
        "x.csv",
        b"time,A\n2026-01-01T00:00Z,1\n1767225600,1\n",
        r"x\.csv:2: '2026-01-01T00:00Z' is one of several forms of time",
        "Export times",
    ),
    "two-digit years": (
        "x.csv",
        b"time,A\n13.04.26 10:00,1\n",
        r"x\.csv:2: '13\.04\.26 10:00' is 2026-04-13 day first but 2013-04-26 year first, and no date",
        r"Write date_order = 'day first' or 'year first' under \[exports\]",
    ),
    "comma or thousands": (
        "x.csv",
        b"time;A\n2026-01-01T00:00Z;1,234\n",
        r"x\.csv:2: '1,234' is 1\.234 with a decimal comma but 1234",
        r"If 1\.234 is meant, write decimal = ',' under \[exports\]",
    ),
    "quality 0 only": (
        "x.csv",
        b"time,tag,value,quality\n2026-01-01T00:00Z,A,1,0\n",
        r"OPC UA status codes \(0 is good\) or OPC DA qualities \(0 is bad\)",
        "Set quality",
    ),
    "house codes": (
        "x.csv",
        b"time,tag,value,quality\n2026-01-01T00:00Z,A,1,1\n",
        "nothing tells whether qualities such as '1' are words",
        "Set quality",
    ),
    "two kinds of codes": (
        "x.csv",
        b"time,tag,value,quality\n2026-01-01T00:00Z,A,1,192\n2026-01-01T00:01Z,A,1,0x80050000\n",
        "qualities such as",
        "Set quality",
    ),
    "NUL bytes": ("x.csv", ANY.encode() + b"2026\0\0\0,1,2\n", r"x\.csv:3: holds NUL bytes", "Export as CSV"),
    "a picture": ("x.csv", b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR", r"x\.csv:\d: holds NUL bytes", "Export as CSV"),
    "a spreadsheet": (
        "x.csv",
        b"PK\3\4" + bytes(50),
        r"x\.csv: is a spreadsheet or zip file",
        "Export as CSV",
    ),
    "gz under another name": (
        "x.csv",
        gzip.compress(ANY.encode()),
        r"x\.csv: is a gz file without",
        r"Rename it so that it ends in \.csv\.gz",
    ),
    "text called gz": ("x.csv.gz", ANY.encode(), r"x\.csv\.gz: the gz file is damaged", "again"),
    "gz cut short": (
        "x.csv.gz",
        gzip.compress(WIDE.encode())[:-200],
        r"x\.csv\.gz: the gz file is damaged or cut",
        "again",
    ),
    "gz with a flipped bit": (
        "x.csv.gz",
        gzip.compress(WIDE.encode())[:-6] + bytes(6),
        "the gz file is damaged",
        "again",
    ),
    "zst under another name": (
        "x.csv",
        zst(ANY.encode()),
        r"x\.csv: is a zst file without",
        r"Rename it so that it ends in \.csv\.zst",
    ),
    "empty zst": ("x.csv.zst", zst(b""), r"x\.csv\.zst: is empty", "Export it again"),
    "text called zst": ("x.csv.zst", ANY.encode(), r"x\.csv\.zst: the zst file is damaged", "again"),
    "zst cut short": (
        "x.csv.zst",
        zst(WIDE.encode())[:-200],
        r"x\.csv\.zst: the zst file is damaged or cut",
        "again",
    ),
    "zst with a flipped bit": (
        "x.csv.zst",
        zst(WIDE.encode())[:-6] + bytes(6),
        "the zst file is damaged",
        "again",
    ),
    "Windows text": (
        "x.csv",
        "time,A\u20ac\n2026-01-01T00:00Z,1\n".encode("cp1252"),
        r"x\.csv:1: byte 0x80 is neither UTF-8, UTF-16 nor Latin-1",
        "UTF-8",
    ),
    "UTF-8 that stops being so": (
        "x.csv",
        b"time,\xc3\xa9\n" + b"2026-01-01T00:00Z,1\n" * 60_000 + b"\xe9,1\n",
        r"x\.csv:60002: byte 0xE9 is not UTF-8",
        "UTF-8",
    ),
    "UTF-16 cut in a character": (
        "x.csv",
        ANY.encode("utf-16") + b"\x00\xd8",
        r"x\.csv: does not stay the text that it begins as",
        "Export it again, as UTF-8",
    ),
    "carriage returns alone": (
        "x.csv",
        ANY.replace("\n", "\r").encode(),
        r"x\.csv:1: the lines end in carriage returns",
        "line feeds",
    ),
    "an open quote in the header": (
        "x.csv",
        b'time,"A,B\n2026-01-01T00:00Z,1\n2026-01-01T00:00Z,1\n',
        r"x\.csv:1: ",
        ".",
    ),
    "a line of megabytes": (
        "x.csv",
        ANY.encode() + b"1" * 3_000_000,
        r"x\.csv:3: a line longer than 1024 KiB",
        "line ends",
    ),
    "20,000 columns": (
        "x.csv",
        (",".join(["time", *map(str, range(20_000))]) + "\n" + "2026-01-01T00:00Z" + ",1" * 20_000).encode(),
        r"x\.csv:1: 20001 columns, more than 5000",
        "unit file",
    ),
    "text called Parquet": ("x.parquet", ANY.encode(), r"x\.parquet: the Parquet file is damaged", "again"),
    "Parquet cut short": (
        "x.parquet",
        b"PAR1" + bytes(100),
        r"x\.parquet: the Parquet file is damaged",
        "again",
    ),
}


@pytest.mark.parametrize("what", REFUSED)
def test_a_file_that_cannot_be_read_says_where_why_and_what_to_do(tmp_path: Path, what: str):
    name, content, says, remedy = REFUSED[what]
    path = saved(tmp_path, b"", name="x")
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(ExportError, match=says) as caught:
        read(path, wanted=ASKED, zone="Mars/Olympus" if what == "a strange zone" else None)
    assert caught.match(remedy)
    assert caught.value.what.startswith(name), "the place comes first"
    assert len(str(caught.value).splitlines()) == 2


def test_a_folder_is_not_an_export(tmp_path: Path):
    (tmp_path / "x.csv").mkdir()
    with pytest.raises(ExportError, match=r"x\.csv: is a folder"):
        opened(tmp_path / "x.csv")


def test_a_file_that_is_not_there_is_said_to_be_missing(tmp_path: Path):
    with pytest.raises(ExportError, match=r"x\.csv: there is no such file"):
        opened(tmp_path / "x.csv")


def test_a_file_that_the_system_refuses_is_said_to_be_unreadable(tmp_path: Path):
    # Even root may not read it: Linux names have 255 bytes at most. Permission bits do not stop root.
    with pytest.raises(ExportError, match=r"^x+\.csv: cannot be read \(File name too long\)"):
        opened(tmp_path / f"{'x' * 300}.csv")


@pytest.mark.parametrize("name", ["x.csv", "x.csv.gz", "x.csv.zst"])
def test_a_file_that_expands_beyond_the_ceiling_is_refused(
    tmp_path: Path, name: str, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(lines, "LARGEST_EXPANDED", 1 << 20)
    path = saved(tmp_path, WIDE.split("\n", 1)[0] + "\n" + WIDE.split("\n", 1)[1] * 100, name=name)
    with pytest.raises(ExportError, match=r"expands to more than 1 MiB"):
        read(path)


def test_a_parquet_file_that_expands_beyond_the_ceiling_is_refused_by_its_footer(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(lines, "LARGEST_EXPANDED", 1000)
    wide_parquet(tmp_path / "x.parquet", made_truth())
    with pytest.raises(ExportError, match=r"x\.parquet: expands to more than 0 MiB"):
        opened(tmp_path / "x.parquet")


def _parquet(folder: Path, **columns: pa.Array) -> Path:
    pq.write_table(pa.table(columns), folder / "x.parquet")
    return folder / "x.parquet"


MOMENT = datetime(2026, 1, 1, tzinfo=UTC)


def test_parquet_without_rows_is_refused(tmp_path: Path):
    path = _parquet(tmp_path, time=pa.array([], pa.timestamp("us", "UTC")), A=pa.array([], pa.float64()))
    with pytest.raises(ExportError, match=r"x\.parquet: holds no rows"):
        opened(path)


def test_parquet_cut_in_the_middle_is_refused(tmp_path: Path):
    wide_parquet(tmp_path / "x.parquet", made_truth())
    whole = (tmp_path / "x.parquet").read_bytes()
    (tmp_path / "x.parquet").write_bytes(whole[: len(whole) // 2])
    with pytest.raises(ExportError, match=r"x\.parquet: the Parquet file is damaged"):
        opened(tmp_path / "x.parquet")


def test_parquet_damaged_inside_is_refused(tmp_path: Path):
    wide_parquet(tmp_path / "x.parquet", made_truth())
    raw = bytearray((tmp_path / "x.parquet").read_bytes())
    raw[4:400] = bytes(396)
    (tmp_path / "x.parquet").write_bytes(raw)
    with pytest.raises(ExportError, match=r"x\.parquet: the Parquet file is damaged"):
        read(tmp_path / "x.parquet")


def test_parquet_without_zone_is_refused_unless_one_is_stated(tmp_path: Path):
    path = _parquet(tmp_path, time=pa.array([datetime(2026, 1, 1)]), A=pa.array([1.5]))  # noqa: DTZ001
    with pytest.raises(ExportError, match=r"x\.parquet: times state no offset"):
        opened(path)


def test_parquet_values_that_are_no_numbers_are_refused(tmp_path: Path):
    path = _parquet(tmp_path, time=pa.array([MOMENT]), A=pa.array([{"deep": 1.5}]))
    with pytest.raises(
        ExportError, match=r"x\.parquet \[A\]: neither numbers nor text but struct<deep: double>"
    ):
        opened(path, wanted=ASKED)


def test_parquet_times_that_are_small_numbers_are_refused(tmp_path: Path):
    path = _parquet(tmp_path, time=pa.array([1, 2, 3]), A=pa.array([1.5, 1.5, 1.5]))
    with pytest.raises(ExportError, match=r"in the time column \(int64\) is no seconds"):
        opened(path, wanted=ASKED)


def test_parquet_readings_are_rejected_one_by_one(tmp_path: Path):
    times = pa.array([MOMENT, None, datetime(1980, 1, 1, tzinfo=UTC), MOMENT], pa.timestamp("ms", "UTC"))
    path = _parquet(
        tmp_path, time=times, A=pa.array([math.inf, 1.0, 1.0, 1.0]), B=pa.array(["x", "1", "1", "2.5"])
    )
    _, account = read(path, wanted=ASKED)
    assert account.rejections == ((TIME, 2), (YEAR, 2), (NUMBER, 1), (INFINITE, 1))
    assert (account.rows, account.readings, account.accepted) == (4, 8, 2)
    assert [(e.row, e.tag, e.text) for e in account.evidence[-2:]] == [(1, "B", "x"), (1, "A", "inf")]


def test_hundreds_of_faults_are_all_counted_and_only_the_first_are_kept(tmp_path: Path):
    head, *rows = LONG.splitlines()
    spoilt = [row.rsplit(",", 1)[0] + ",splendid" if i % 2 else row for i, row in enumerate(rows)]
    text = "\n".join([head, *spoilt])
    _, account = read(saved(tmp_path, text))
    assert account.rejections == ((QUALITY, 450),)
    assert [e.row for e in account.evidence] == [3, 5, 7]


def test_a_row_whose_columns_cannot_be_told_apart_is_rejected_even_if_nobody_asked_for_its_tag(
    tmp_path: Path,
):
    _, account = read(saved(tmp_path, LONG + "2026-03-14T00:00Z,other\n"), wanted=("FI-1.PV",))
    assert account.rejections == ((COLUMNS, 1),)
    assert (account.accepted, account.unasked) == (300, 600)


def test_the_unit_file_settles_what_the_codes_leave_open(tmp_path: Path):
    path = saved(tmp_path, "time,tag,value,quality\n2026-01-01T00:00Z,A,1,0\n")
    as_ua, _ = read(path, wanted=ASKED, rules=ExportRules(None, (), "opc ua"))
    as_da, _ = read(path, wanted=ASKED, rules=ExportRules(None, (), "opc da"))
    assert (as_ua["A"].quality.tolist(), as_da["A"].quality.tolist()) == ([2], [0])


def test_a_word_added_to_the_unit_file_is_no_fault_any_more(tmp_path: Path):
    text = cell(LONG, 9, 2, "n.a.")
    _, account = read(saved(tmp_path, text), rules=ExportRules(None, ("N.A.",), None))
    assert (account.rejected, account.bad) == (0, 7)


@pytest.mark.parametrize("zone", ["Europe/Berlin", "Asia/Tokyo"])
def test_a_time_column_that_says_utc_is_not_read_in_another_zone(tmp_path: Path, zone: str):
    path = saved(tmp_path, "time (UTC),A\n2026-01-01 00:00,1\n")
    with pytest.raises(ExportError, match=r"'time \(UTC\)' does not hold times of the stated zone") as caught:
        opened(path, zone=zone)
    assert caught.match("Set time_zone under .exports. to 'UTC'")
    readings, _ = read(path, zone="UTC", wanted=ASKED)
    assert readings["A"].time.tolist() == [1_767_225_600_000_000]  # 2026-01-01: 20,454 days x 86,400 s


@pytest.mark.parametrize("column", [pa.array([True]), pa.array([[1]]), pa.array([MOMENT.date()])])
def test_parquet_times_of_other_types_are_refused(tmp_path: Path, column: pa.Array):
    path = _parquet(tmp_path, time=column, A=pa.array([1.5]))
    with pytest.raises(ExportError, match=r"x\.parquet: what stands in the time column \("):
        opened(path, wanted=ASKED)


def test_parquet_tags_that_are_no_text_are_refused(tmp_path: Path):
    path = _parquet(tmp_path, time=pa.array([MOMENT]), tag=pa.array([[1]]), value=pa.array([1.5]))
    with pytest.raises(ExportError, match=r"x\.parquet \[tag\]: neither numbers nor text but list"):
        opened(path, wanted=ASKED)


def test_a_column_without_name_is_nobodys_tag(tmp_path: Path):
    path = saved(tmp_path, "time,A,\n2026-01-01T00:00Z,1,\n")
    for wanted in (ASKED, None):
        readings, account = read(path, wanted=wanted)
        assert list(readings) == ["A"]
        assert account.unasked_tags == (("", 1),)


PIECES = [
    b'"',
    b"\n",
    b"\r",
    b",",
    b";",
    b"\0",
    b"bad",
    b"inf",
    b"\xff",
    b"2026-10-25 02:30",
    b"",
    b"time",
    b"1e400",
]
MENDED = [WIDE[:3000], LONG[:3000], wide_text(made_truth(60), separator=";", decimal=",")]


@given(
    st.sampled_from(MENDED),
    st.lists(
        st.tuples(st.integers(0, 2900), st.integers(0, 40), st.sampled_from(PIECES)), min_size=1, max_size=8
    ),
    st.sampled_from([1 << 20, 300]),
)
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_whatever_stands_in_a_file_it_is_refused_in_words_or_counted_to_the_last_reading(
    tmp_path: Path, text: str, cuts: list[tuple[int, int, bytes]], block: int
):
    raw = bytearray(text.encode())
    for start, length, piece in cuts:
        raw[start : start + length] = piece
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lines, "BLOCK", block)
        said = "export.csv"
        try:
            read(saved(tmp_path, bytes(raw)), zone="Europe/Berlin")  # asserts that the account adds up
        except ExportError as error:
            said = error.what
    assert said.startswith("export.csv")
