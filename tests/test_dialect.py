"""The dialect is decided by what has one meaning only, and told in sentences."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.csv as pcsv
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest import lines
from ingest.batches import Batches
from ingest.dialect import Dialect
from ingest.encodings import decide_encoding
from ingest.errors import ExportError
from ingest.headings import decide_separator
from ingest.qualities import decide_quality, quality_of_opc_da, quality_of_opc_ua, quality_of_word
from ingest.timestamps import Clock, localised, resolved
from ingest.unit import ExportRules
from ingest.values import MISSING_WORDS, NUMBERS, Numbers, decide_numbers
from tests.exports_made import (
    NO_RULES,
    TAGS,
    long_text,
    made_truth,
    micros,
    opened,
    saved,
    wide_parquet,
    wide_text,
)


def shown(*blocks: list[str]):
    """A column of text that is handed out block by block."""
    ends = np.cumsum([len(block) for block in blocks])
    parts = [
        (np.arange(e - len(b), e) + 2, [pa.array(b, pa.string())]) for b, e in zip(blocks, ends, strict=True)
    ]
    return lambda _: iter(parts)


@pytest.mark.parametrize(
    ("raw", "codec"),
    [
        ("time,Ä".encode(), "utf-8"),
        ("time,Ä".encode("utf-8-sig"), "utf-8-sig"),
        ("time,Ä".encode("utf-16"), "utf-16"),
        ("time,Ä".encode("utf-16-le"), "utf-16-le"),
        ("time,Ä".encode("utf-16-be"), "utf-16-be"),
        ("time,Ä\n".encode("latin-1"), "latin-1"),
    ],
)
def test_an_encoding_is_told_by_its_bytes(raw: bytes, codec: str):
    assert decide_encoding("x.csv", raw)[0] == codec


def test_a_character_cut_by_the_end_of_the_first_block_does_not_change_the_encoding():
    assert decide_encoding("x.csv", "time,Ä".encode()[:-1])[0] == "utf-8"


@pytest.mark.parametrize(
    ("rows", "separator"),
    [
        (["time,A", "2026-01-01,1"], ","),
        (["time;A;B", "2026-01-01;1,5;2,5"], ";"),
        (["time;A;B", "2026-01-01;1,5;2,5", "broken"], ";"),
        (["time\tA, B", "2026-01-01\t1,5"], "\t"),  # by commas the time has no column of its own
        (["time|A", "2026-01-01|1"], "|"),
        (['time,"A;B"', '2026-01-01,"1;5"'], ","),
    ],
)
def test_the_separator_gives_the_rows_as_many_columns_as_the_header(rows: list[str], separator: str):
    assert decide_separator("x.csv", rows, 1) == separator


def test_a_separator_that_cannot_be_told_is_refused_with_both_readings():
    says = (
        r"x\.csv:1: the separator cannot be told \(comma: header 2, next row 2 columns, semicolon: header 2"
    )
    with pytest.raises(ExportError, match=says):
        decide_separator("x.csv", ["a;b,c", "1;2,3", "1;2,3"], 1)


def decimal(*blocks: list[str]) -> str:
    return decide_numbers("x.csv", [1], shown(*blocks), NO_RULES).decimal


def test_the_decimal_mark_is_told_by_the_first_number_with_one_meaning():
    assert decimal(["1", "2.5"]) == "."
    assert decimal(["1", "2,5"]) == ","
    assert decimal(["1,234", "0,5"]) == ","
    assert decimal(["1,234", "0,234"]) == ","  # no number has a group that begins with a lonely zero
    assert decimal(["1,234"], ["bad"], ["2,5"]) == ","  # the next block tells
    assert decimal(["1", "2"], ["3"]) == "."  # whole numbers: either mark reads them alike


@pytest.mark.parametrize("text", ["1,234", "-12,345", "\u2212123,456"])
def test_a_comma_that_may_part_thousands_is_refused_with_both_readings(text: str):
    with pytest.raises(ExportError, match=r"with a decimal comma but .* with marks between thousands"):
        decimal([text], ["7"])


def stated(mark: str, *blocks: list[str]) -> Numbers:
    return decide_numbers("x.csv", [1], shown(*blocks), ExportRules(None, (), None, decimal=mark))


def test_a_stated_decimal_mark_settles_what_no_number_tells():
    comma = stated(",", ["1,234"], ["7"])
    assert comma.read(pa.array(["1,234", "7"])).value.tolist() == [1.234, 7.0]
    assert stated(",", ["1", "2"]).decimal == ","
    assert stated(".", ["1", "2"]).decimal == "."
    assert stated(",", ["7"], ["2,5"]).decimal == ","
    assert stated(".", ["1.234"]).decimal == "."
    assert stated(".", ["1,234"]).read(pa.array(["1,234"])).value.tolist() == [1234.0]
    assert stated(",", ["1.234"]).read(pa.array(["1.234"])).value.tolist() == [1234.0]


@pytest.mark.parametrize(
    ("mark", "blocks", "says"),
    [
        (",", (["7", "2.5"],), r"x\.csv:3: '2\.5' has a decimal point, but decimal = ',' is stated"),
        (",", (["1.234"], ["1,234.5"]), r"x\.csv:3: '1,234\.5' has a decimal point"),
        (".", (["7", "2,5"],), r"x\.csv:3: '2,5' has a decimal comma, but decimal = '\.' is stated"),
        (".", (["1,234"], ["1.234.567"]), r"x\.csv:3: '1\.234\.567' has a decimal comma"),
    ],
)
def test_an_export_that_contradicts_the_stated_decimal_mark_is_refused_with_a_row(
    mark: str, blocks: tuple[list[str], ...], says: str
):
    with pytest.raises(ExportError, match=says) as caught:
        stated(mark, *blocks)
    assert caught.match("Mend or remove decimal under \\[exports\\] in the unit file")


def test_numbers_that_are_no_text_have_no_mark_to_contradict(tmp_path: Path):
    wide_parquet(tmp_path / "x.parquet", made_truth())
    rules = ExportRules(None, (), None, decimal=",")
    (readings,) = opened(tmp_path / "x.parquet", rules=rules)
    np.testing.assert_array_equal(readings["FI-1.PV"].value, made_truth().values[:, 0])


def dated(folder: Path, *dates: str, order: str | None) -> Batches:
    text = "\n".join(["time,A", *(f"{date} 10:00,1" for date in dates), ""])
    rules = ExportRules("UTC", (), None, date_order=order)
    return opened(saved(folder, text), rules=rules, wanted=("A",))


@pytest.mark.parametrize(("order", "day"), [("day first", "2026-04-03"), ("month first", "2026-03-04")])
def test_a_stated_order_settles_dates_that_could_be_either(tmp_path: Path, order: str, day: str):
    (readings,) = dated(tmp_path, "03/04/2026", order=order)
    assert readings["A"].time[0] == micros(datetime.fromisoformat(f"{day}T10:00Z"))


@pytest.mark.parametrize(("date", "order"), [("13/04/2026", "day first"), ("04/13/2026", "month first")])
def test_dates_that_tell_their_order_need_none_stated_and_agree_with_the_right_one(
    tmp_path: Path, date: str, order: str
):
    for told in (None, order):
        (readings,) = dated(tmp_path, "04/04/2026", date, order=told)
        assert readings["A"].time[1] == micros(datetime(2026, 4, 13, 10, tzinfo=UTC))


@pytest.mark.parametrize(
    ("dates", "order", "says"),
    [
        (("03/04/2026", "04/13/2026"), "day first", r":3: '04/13/2026 10:00' can only be month first"),
        (("03/04/2026", "13/04/2026"), "month first", r":3: '13/04/2026 10:00' can only be day first"),
        (("13/04/2026", "04/13/2026"), "day first", r":3: '04/13/2026 10:00' can only be month first"),
    ],
)
def test_dates_that_contradict_the_stated_order_are_refused_with_a_row(
    tmp_path: Path, dates: tuple[str, ...], order: str, says: str
):
    with pytest.raises(ExportError, match=f"{says}, but date_order = '{order}' is stated") as caught:
        dated(tmp_path, *dates, order=order)
    assert caught.match("Mend or remove date_order under \\[exports\\] in the unit file")


def test_a_date_far_down_the_file_still_contradicts_the_stated_order(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(lines, "BLOCK", 20)
    with pytest.raises(ExportError, match=r":9: '04/13/2026 10:00' can only be month first"):
        dated(tmp_path, *["03/04/2026"] * 7, "04/13/2026", order="day first")


def test_a_date_that_is_none_tells_no_order(tmp_path: Path):
    batches = dated(tmp_path, "03/04/2026", "31/31/2026", order="day first")
    assert batches.dialect.clock.form == "day first"


def test_a_stated_order_leaves_dates_with_the_year_first_alone(tmp_path: Path):
    (readings,) = dated(tmp_path, "2026-03-04", order="month first")
    assert readings["A"].time[0] == micros(datetime(2026, 3, 4, 10, tzinfo=UTC))


def quality(*blocks: list[str], rules: ExportRules = NO_RULES) -> str | None:
    return decide_quality("x.csv", 3, shown(*blocks), rules)


def test_the_quality_form_is_told_by_what_only_one_form_can_mean():
    assert quality(["Good", "Bad"]) == "words"
    assert quality(["", ""]) == "words"  # nothing is stated: unknown, which words can say
    assert quality(["0", "0"], ["0x80000000"]) == "opc ua"
    assert quality(["0", "-2147483648"]) == "opc ua"
    assert quality(["0", "0"], ["192"]) == "opc da"
    assert quality(["0", "4", "64"]) == "opc da"
    assert decide_quality("x.csv", None, shown(), NO_RULES) is None


def test_the_quality_form_of_the_unit_file_stands_above_what_is_found():
    assert quality(["Good"], rules=ExportRules(None, (), "opc da")) == "opc da"


@pytest.mark.parametrize("block", [["0"], ["1", "2"], ["Good", "192"], ["192", "0x80050000"], ["fine"]])
def test_qualities_of_two_meanings_or_none_are_refused(block: list[str]):
    with pytest.raises(ExportError, match=r"are words, OPC UA status codes \(0 is good\)") as caught:
        quality(block)
    assert caught.match("Set quality under \\[exports\\]")


def test_words_and_codes_that_say_nothing_are_no_quality():
    assert quality_of_word("splendid") is None
    assert quality_of_opc_ua("0xC0000000") is None  # 11 is reserved, OPC UA Part 4
    assert quality_of_opc_ua("4294967296") is None
    assert quality_of_opc_da("128") is None  # QQ = 10 is not in use, OPC UA Part 8 A.3.2.3
    assert quality_of_opc_da("65536") is None


@pytest.mark.parametrize("order", ["day first", "month first"])
def test_the_order_of_a_date_is_told_by_a_day_after_the_twelfth_wherever_it_stands(
    tmp_path: Path, order: str, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(lines, "BLOCK", 300)
    form = "%d/%m/%Y %H:%M" if order == "day first" else "%m/%d/%Y %H:%M"
    start = datetime(2026, 5, 1, tzinfo=UTC)
    truth = made_truth(count=400, step=timedelta(hours=1), start=start)
    path = saved(tmp_path, wide_text(truth, write=lambda t: t.strftime(form)))
    assert opened(path, zone="UTC").dialect.clock.form == order


def test_the_time_column_is_found_by_what_it_holds_where_no_name_tells(tmp_path: Path):
    text = "A,moment\n1.5,2026-01-01T00:00Z\n"
    batches = opened(saved(tmp_path, text), wanted=("A",))
    assert [r["A"].value.tolist() for r in batches] == [[1.5]]


def test_two_columns_that_hold_times_are_refused(tmp_path: Path):
    text = "A,stored,measured\n1.5,2026-01-01T00:00Z,2026-01-01T00:00Z\n"
    with pytest.raises(ExportError, match="'stored', 'measured' may each be the time"):
        opened(saved(tmp_path, text), wanted=("A",))


def test_a_tag_that_somebody_asked_for_is_a_tag_whatever_its_name(tmp_path: Path):
    text = "time,A,status\n2026-01-01T00:00Z,1,2\n"
    (readings,) = opened(saved(tmp_path, text), wanted=("A", "status"))
    assert readings["status"].value.tolist() == [2.0]


SENTENCES = {
    "wide": (
        "Text in UTF-8, separated by semicolon; line 1 names the columns.",
        "Wide: times in 'time', a column for each of 3 tags.",
        "Times are calendar times, year first, without offset: read as clock time of Europe/Berlin.",
        "Decimal mark: comma; a point, blank or apostrophe before three digits parts thousands.",
        "Blank cells: nothing was stored then, no reading.",
        "Words that mean bad quality, whatever their capitals:"
        " '#n/a', '-', 'bad', 'err', 'nan', 'no data', 'offline'.",
        "No quality column: every number counts as usable.",
    ),
    "long": (
        "Text in UTF-8, separated by comma; line 1 names the columns.",
        "Long: times in 'time', tags in 'tag', values in 'value'.",
        "Times are calendar times, year first, with their offset from UTC.",
        "Decimal mark: point; a comma, blank or apostrophe before three digits parts thousands.",
        "Blank cells: bad quality.",
        "Words that mean bad quality, whatever their capitals: '#n/a', '-', 'bad', 'err', 'nan', 'no data'.",
        "Quality in 'quality', as OPC DA qualities (192 is good).",
    ),
    "Parquet": (
        "Parquet.",
        "Wide: times in 'time', a column for each of 3 tags.",
        "Times are time stamps, with their offset from UTC.",
        "Decimal mark: point; a comma, blank or apostrophe before three digits parts thousands.",
        "Blank cells: nothing was stored then, no reading.",
        "Words that mean bad quality, whatever their capitals: '#n/a', '-', 'bad', 'err', 'nan', 'no data'.",
        "No quality column: every number counts as usable.",
    ),
}


def _decided(folder: Path, layout: str) -> Dialect:
    truth = made_truth()
    if layout == "wide":
        text = wide_text(truth, write=lambda t: t.strftime("%Y-%m-%d %H:%M"), separator=";", decimal=",")
        rules = ExportRules("Europe/Berlin", ("Offline",), None)
        return opened(saved(folder, text), rules=rules).dialect
    if layout == "long":
        return opened(saved(folder, long_text(truth, qualities=("192", "0")))).dialect
    wide_parquet(folder / "x.parquet", truth)
    return opened(folder / "x.parquet").dialect


@pytest.mark.parametrize("layout", SENTENCES)
def test_every_decision_is_told(tmp_path: Path, layout: str):
    assert _decided(tmp_path, layout).describe() == SENTENCES[layout]


def test_columns_of_a_long_export_that_are_not_read_are_told(tmp_path: Path):
    text = "time,tag,value,source,comment\n2026-01-01T00:00Z,A,1,kg/h,\n"
    assert (
        "Columns not read: source, comment." in opened(saved(tmp_path, text), wanted=TAGS).dialect.describe()
    )


# If the quick and the thorough way differed, a fault elsewhere in a block would change numbers.
@given(st.floats(allow_nan=False, allow_infinity=False), st.sampled_from(["r", ".3f", "e", "+.1f", "g"]))
def test_a_number_is_the_same_whether_its_block_is_clean_or_not(value: float, form: str):
    text = repr(value) if form == "r" else format(value, form)
    table = pcsv.read_csv(pa.BufferReader(f"{text},x\n".encode()), pcsv.ReadOptions(column_names=["a", "b"]))
    quick = float(table["a"][0].as_py())
    thorough = Numbers(".", frozenset(MISSING_WORDS)).read(pa.array([text])).value[0]
    assert quick == thorough == float(text)


@given(st.text(alphabet="0123456789+-.,eE infa", max_size=8))
def test_what_is_taken_for_a_number_is_one_to_python_too(text: str):
    for mark in NUMBERS:
        read = Numbers(mark, frozenset()).read(pa.array([text]))
        assert read.blank[0] == (not text.strip())
        other = "." if mark == "," else ","
        if read.reason[0] == 0 and not read.blank[0]:
            assert read.value[0] == float(text.replace(other, "").replace(mark, "."))
            assert other not in text or re.match(rf"\s*[+-]?[1-9]\d{{0,2}}[{other}]\d{{3}}(\D|$)", text)


@given(st.datetimes(datetime(1990, 1, 2), datetime(2099, 12, 30)), st.integers(-14 * 60, 14 * 60))  # noqa: DTZ001
def test_a_time_with_offset_is_the_instant_that_python_reads(naive: datetime, minutes: int):
    sign, (hours, rest) = "-" if minutes < 0 else "+", divmod(abs(minutes), 60)
    text = f"{naive.isoformat(sep=' ')}{sign}{hours:02}:{rest:02}"
    stamps = Clock("year first", offset=True, zone=None, fraction=6).read(pa.array([text]))
    assert stamps.reason[0] == 0
    assert stamps.time[0] == micros(datetime.fromisoformat(text))


@pytest.mark.parametrize(
    "zone", ["Europe/Berlin", "America/New_York", "Australia/Lord_Howe", "Asia/Tokyo", "UTC"]
)
def test_wall_clock_times_of_every_hour_for_years_are_what_the_zone_database_says(zone: str):
    info = ZoneInfo(zone)
    start = datetime(2019, 1, 1)  # noqa: DTZ001
    walls = [start + timedelta(minutes=15) * i for i in range(0, 4 * 24 * 365 * 8, 5)]
    utc, gap, twice = localised(np.array([micros(w.replace(tzinfo=UTC)) for w in walls]), zone)
    early = [w.replace(tzinfo=info).astimezone(UTC) for w in walls]
    late = [w.replace(tzinfo=info, fold=1).astimezone(UTC) for w in walls]
    back = [e.astimezone(info).replace(tzinfo=None) for e in early]
    np.testing.assert_array_equal(gap, [b != w for b, w in zip(back, walls, strict=True)])
    np.testing.assert_array_equal(twice, [a != b and not g for a, b, g in zip(early, late, gap, strict=True)])
    plain = ~gap & ~twice
    np.testing.assert_array_equal(utc[plain], np.array([micros(e) for e in early])[plain])


def test_the_doubled_hour_is_told_only_where_time_steps_back_once():
    at = micros(datetime(2026, 10, 25, 2, tzinfo=UTC))
    minute = 60_000_000
    twice = np.array([at, at + 30 * minute, at, at + 30 * minute])
    time, told = resolved(twice, "Europe/Berlin", ascending=True)
    assert told.all()
    # 02:00 CEST is 00:00 UTC, 02:00 CET is 01:00 UTC: IANA database, four half hours in a row
    assert time.tolist() == [at - 120 * minute + 30 * minute * i for i in range(4)]
    assert not resolved(twice[:2], "Europe/Berlin", ascending=True)[1].any()
    assert not resolved(np.tile(twice, 2), "Europe/Berlin", ascending=True)[1].any()


def test_a_repeated_row_does_not_hide_the_step_back():
    at = micros(datetime(2026, 10, 25, 2, tzinfo=UTC))
    time, told = resolved(np.array([at + 1, at + 1, at, at + 1]), "Europe/Berlin", ascending=True)
    assert told.all()
    assert np.diff(time).tolist() == [0, 3_600_000_000 - 1, 1]
