"""Made-up exports by the thousand: each is refused in two lines, or read in one way and accounted for.

300 of text that holds together more or less, 200 of loose pieces and 100 of damaged Parquet in each run of
the tests; OUTLET_FUZZ=20000 makes it so many of each.
"""

from __future__ import annotations

import base64
import io
import os
import re
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest import lines
from ingest.account import Account
from ingest.errors import ExportError
from tests.exports_made import micros, opened

ZONE = "Europe/Berlin"
WANTED = ("A", "B", "tag-1")
FIRST_US, LAST_US = (micros(datetime(year, 1, 1, tzinfo=UTC)) for year in (1990, 2100))
SMALL_BLOCK = 64  # bytes


def examples(usual: int) -> Callable[..., Any]:
    """Settings of a test that runs so many examples, or as many as OUTLET_FUZZ says."""
    return settings(
        max_examples=int(os.environ.get("OUTLET_FUZZ", usual)),
        deadline=None,
        suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
    )


@dataclass(frozen=True)
class Became:
    """What one export became: the readings of each tag as bytes, in the order read, and the account."""

    readings: dict[str, tuple[bytes, ...]]
    account: Account


def became(path: Path) -> Became | str:
    """Read an export as a pass does; the error where it is refused."""
    pieces: dict[str, list[Any]] = {}
    try:
        batches = opened(path, zone=ZONE, wanted=WANTED)
        for readings in batches:
            for tag, series in readings.items():
                pieces.setdefault(tag, []).append(series)
    except ExportError as fault:
        return str(fault)
    account = batches.account()
    assert account.adds_up
    assert account.accepted == sum(len(series) for parts in pieces.values() for series in parts)
    return Became({tag: _joined(parts) for tag, parts in pieces.items() if any(map(len, parts))}, account)


def _joined(parts: list[Any]) -> tuple[bytes, ...]:
    """The columns of one tag; its times and values are such as can be."""
    columns = [
        np.concatenate([getattr(s, name) for s in parts]) for name in ("time", "value", "quality", "row")
    ]
    time, value, quality, row = columns
    assert FIRST_US <= time.min() <= time.max() < LAST_US
    assert not np.isinf(value).any()
    assert set(quality[np.isnan(value)].tolist()) <= {0}, "no value, bad quality"
    assert row.min() >= 1
    order = np.lexsort(
        (quality, value, time, row)
    )  # hours that come twice are told last, wherever blocks end
    return tuple(column[order].tobytes() for column in columns)


def must_hold(path: Path) -> None:
    """Reading twice, and reading in tiny blocks, gives the same as reading once."""
    whole = became(path)
    assert became(path) == whole
    if isinstance(whole, str):
        assert whole.startswith(path.name)
        assert len(whole.splitlines()) == 2
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lines, "BLOCK", SMALL_BLOCK)
        assert _counted(became(path)) == _counted(whole)


def _counted(one: Became | str) -> Became | str:
    """Without the evidence: which three of many rejected cells are shown depends on the order of looking."""
    return one if isinstance(one, str) else replace(one, account=replace(one.account, evidence=()))


STAMPS: dict[str, Callable[[datetime], str]] = {
    "iso": lambda t: t.strftime("%Y-%m-%dT%H:%M:%SZ"),
    "iso with blanks": lambda t: t.strftime(" %Y-%m-%d %H:%M:%S+00:00 "),
    "local": lambda t: t.strftime("%Y-%m-%d %H:%M"),
    "milliseconds": lambda t: t.strftime("%Y-%m-%dT%H:%M:%S.123Z"),
    "day first": lambda t: t.strftime("%d.%m.%Y %H:%M:%S"),
    "month first": lambda t: t.strftime("%m/%d/%Y %H:%M"),
    "twelve hours": lambda t: t.strftime("%d/%m/%Y %I:%M:%S %p"),
    "epoch": lambda t: str(int(t.timestamp())),
    "day number": lambda t: f"{(t - datetime(1899, 12, 30, tzinfo=UTC)) / timedelta(days=1):.6f}",
}
NUMBERS: dict[str, Callable[[int], str]] = {
    "whole": str,
    "point": lambda i: f"{i / 8:.3f}",
    "comma": lambda i: f"{i / 8:.3f}".replace(".", ","),
    "exponent": lambda i: f"{i / 8:.3e}",
    "thousands": lambda i: f"{i * 1000 + 0.5:,.1f}",
}
JUNK = (
    *(
        "",
        " ",
        "bad",
        "No Data",
        "-",
        "#N/A",
        "NaN",
        "inf",
        "-Infinity",
        "1e400",
        "-1e-400",
        "1e308",
        "0x1F",
        "1_000",
    ),
    *(
        "12.3x",
        "=1+1",
        "1,5",
        "1.5",
        "1.234,5",
        "1 234",
        "\u22125",
        "\u0661\u0662",
        "'",
        '"',
        '""',
        '"a"',
        'a"b',
        "\r",
    ),
    *(
        "\t",
        ";",
        ",",
        "|",
        "\x0b",
        "\x85",
        "\u2028",
        "\u00a0",
        "time",
        "tag-1",
        "unit",
        "kg/h",
        "Average",
        "Minimum",
    ),
    *(
        "2026-10-25 02:30",
        "2026-03-29 02:30",
        "1900-01-01T00:00Z",
        "9999-12-31",
        "0000-00-00",
        "12:00",
        "24:00",
        "1e9",
    ),
    *(
        "9" * 30,
        "0" * 300,
        "Good",
        "Bad",
        "192",
        "0",
        "0x80000000",
        "2147483648",
        "tr\u00e9s",
        "\ufeff",
        "\U0001f600",
    ),
)
ENCODINGS = ("utf-8", "utf-8", "utf-8", "utf-8-sig", "utf-16", "utf-16-le", "latin-1")
START = datetime(2026, 10, 24, 22, tzinfo=UTC)  # the clocks go back in the night that follows


@st.composite
def texts(draw: st.DrawFn) -> bytes:
    """An export in one dialect, some of whose cells and lines are not what they should be."""
    stamp, number = (
        STAMPS[draw(st.sampled_from(sorted(STAMPS)))],
        NUMBERS[draw(st.sampled_from(sorted(NUMBERS)))],
    )
    separator, end = draw(st.sampled_from(",;\t|")), draw(st.sampled_from(("\n", "\n", "\r\n")))
    is_long, count = draw(st.booleans()), draw(st.integers(0, 12))
    step = timedelta(minutes=draw(st.sampled_from((1, 10, 60, -30))))
    table = [["time", "tag", "value", "quality"] if is_long else ["time", "A", "B", "C"]]
    for i in range(count):
        time = stamp(START + i * step)
        table.append(
            [time, WANTED[i % 3], number(i), "Good"] if is_long else [time, *map(number, (i, i + 1, 7))]
        )
    for _ in range(draw(st.integers(0, 4))):
        row = table[draw(st.integers(0, count))]
        row[draw(st.integers(0, len(row) - 1))] = draw(st.sampled_from(JUNK))
    rows = [separator.join(row) for row in table]
    for _ in range(draw(st.integers(0, 2))):
        line = draw(
            st.sampled_from(("", " ", "Report of plant 7", "time,A", separator * 3, '"', "a;b,c", rows[-1]))
        )
        rows.insert(draw(st.integers(0, len(rows))), line)
    text = end.join(rows) + draw(st.sampled_from((end, end, "")))
    return text.encode(draw(st.sampled_from(ENCODINGS)), "replace")


PIECES = (
    *(
        b"time",
        b"tag",
        b"value",
        b"quality",
        b"A",
        b"B",
        b"2026-01-01",
        b"T00:00Z",
        b" 10:00",
        b"1.5",
        b"2",
        b"-",
    ),
    *(
        b",",
        b",",
        b",",
        b";",
        b"\t",
        b"|",
        b"\n",
        b"\n",
        b"\n",
        b"\r",
        b"\r\n",
        b'"',
        b" ",
        b"\0",
        b"\xff\xfe",
    ),
    *(
        b"\xef\xbb\xbf",
        b"\xe9",
        b"\x80",
        b"1767225600",
        b"Good",
        b"bad",
        b"inf",
        b"PAR1",
        b"\x1f\x8b",
        b"PK\3\4",
    ),
)
LOOSE = st.lists(st.sampled_from(PIECES), max_size=60).map(b"".join)
BELOW_A_HEADER = LOOSE.map(lambda raw: b"time,A,B\n2026-01-01T00:00Z,1.5,2\n" + raw)


@given(texts())
@examples(300)
def test_text_that_holds_together_more_or_less_is_refused_or_read_in_one_way_to_the_last_reading(
    tmp_path: Path, raw: bytes
):
    (tmp_path / "x.csv").write_bytes(raw)
    must_hold(tmp_path / "x.csv")


@given(st.one_of(BELOW_A_HEADER, LOOSE, st.binary(max_size=200)))
@examples(200)
def test_loose_pieces_of_text_are_refused_or_read_in_one_way_to_the_last_reading(tmp_path: Path, raw: bytes):
    (tmp_path / "x.csv").write_bytes(raw)
    must_hold(tmp_path / "x.csv")


def _parquet(**how: Any) -> bytes:
    times = pa.array([START + timedelta(minutes=i) for i in range(40)], pa.timestamp("us", "UTC"))
    words = pa.array(["1.5", "bad", None, "2"] * 10)
    sink = io.BytesIO()
    pq.write_table(pa.table({"time": times, "A": pa.array(np.arange(40.0)), "B": words}), sink, **how)
    return sink.getvalue()


SOUND = (_parquet(), _parquet(compression="zstd", use_dictionary=False), _parquet(data_page_version="2.0"))
CHANGES = st.lists(st.tuples(st.integers(0, 3000), st.integers(0, 255)), min_size=1, max_size=4)


@given(st.sampled_from(SOUND), CHANGES, st.integers(0, 60))
@examples(100)
def test_damaged_parquet_is_refused_or_read_in_one_way_to_the_last_reading(
    tmp_path: Path, sound: bytes, changes: list[tuple[int, int]], cut: int
):
    raw = bytearray(sound[: len(sound) - (cut if cut > 50 else 0)])
    for at, byte in changes:
        raw[at % len(raw)] = byte
    (tmp_path / "x.parquet").write_bytes(raw)
    whole = became(tmp_path / "x.parquet")
    assert became(tmp_path / "x.parquet") == whole


def test_the_sound_files_that_are_damaged_here_are_read_whole(tmp_path: Path):
    for raw in SOUND:
        (tmp_path / "x.parquet").write_bytes(raw)
        whole = became(tmp_path / "x.parquet")
        assert isinstance(whole, Became)
        # 40 numbers; of 40 words 20 are numbers, 10 are no value and 10 are nothing
        assert (whole.account.accepted, whole.account.empty, whole.account.rejected) == (70, 10, 0)


def test_half_of_the_texts_made_up_here_are_read_and_some_readings_are_rejected(tmp_path: Path):
    # else the tests above would hold because everything is refused
    seen: list[Became | str] = []

    @given(texts())
    @settings(max_examples=100, deadline=None, database=None, derandomize=True)
    def look(raw: bytes) -> None:
        (tmp_path / "x.csv").write_bytes(raw)
        seen.append(became(tmp_path / "x.csv"))

    look()
    read = [one for one in seen if isinstance(one, Became)]
    assert len(read) > len(seen) / 3
    assert any(one.account.rejected for one in read)
    assert any(one.account.accepted for one in read)


# Found by the twenty thousand.


def test_a_time_zone_that_is_no_text_is_damage(tmp_path: Path):
    kept = re.search(rb"/////[A-Za-z0-9+/=]+", SOUND[0])
    assert kept is not None
    told = base64.b64decode(kept[0])
    assert b"UTC" in told
    broken = SOUND[0].replace(kept[0], base64.b64encode(told.replace(b"UTC", b"\xfd\xfeC")))
    (tmp_path / "x.parquet").write_bytes(broken)
    with pytest.raises(ExportError, match="the Parquet file is damaged or cut short"):
        opened(tmp_path / "x.parquet", zone=ZONE, wanted=WANTED)


@pytest.mark.parametrize("odd", ["1.79e9", "0x6ADCF3E0"])
def test_seconds_in_exponents_or_base_16_are_no_times_whatever_stands_beside_them(tmp_path: Path, odd: str):
    # 1.79e9 has lost the last seven digits of the seconds that it once was.
    for other in ("1792879260", "1792879260.5"):
        path = tmp_path / "x.csv"
        path.write_text(f"time,A\n1792879200,1\n{other},2\n{odd},3\n", encoding="utf-8")
        batches = opened(path, zone=ZONE, wanted=WANTED)
        assert sum(len(series.time) for readings in batches for series in readings.values()) == 2
        assert [(one.row, one.text) for one in batches.account().evidence] == [(4, odd)]
