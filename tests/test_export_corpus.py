"""One truth, the same readings in every dialect; what has two meanings is refused until one is stated."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pytest

from ingest import lines
from ingest.account import Account
from ingest.errors import ExportError
from ingest.measures import Stated
from ingest.readings import Readings
from tests.corpus_made import BERLIN, CASES, TRUTH, UNITS, Case, parquet_files
from tests.exports_made import NO_RULES, TAGS, Truth, micros, opened, read, saved


def test_the_corpus_has_every_kind_of_export():
    assert len(CASES) >= 80


def taken(folder: Path, case: Case) -> tuple[Readings, list[Account]]:
    """All files of a case, read as one pass would read them."""
    readings: Readings = {}
    accounts = []
    for name, raw in case.files():
        found, account = read(
            saved_raw(folder, name, raw), zone=case.form.zone, rules=case.form.rules, units=UNITS
        )
        readings |= found
        accounts.append(account)
    return readings, accounts


def saved_raw(folder: Path, name: str, raw: bytes) -> Path:
    path = folder / name
    path.write_bytes(raw)
    return path


def assert_same(readings: Readings, truth: Truth, case: Case) -> None:
    """Times to the microsecond; values as written, to the two decimals, or to nine digits once converted."""
    assert sorted(readings) == sorted(TAGS)
    for column, tag in enumerate(TAGS):
        series, true = readings[tag], truth.values[:, column]
        np.testing.assert_array_equal(series.time, [micros(time) for time in truth.times])
        if case.factors == (1.0, 1.0, 1.0):
            np.testing.assert_array_equal(series.value, true)
        else:
            np.testing.assert_allclose(series.value, true, rtol=1e-8)
        np.testing.assert_array_equal(series.quality, [case.quality(r, v) for r, v in enumerate(true)])


@pytest.mark.parametrize("name", CASES)
def test_a_well_formed_export_gives_the_readings_of_the_truth_and_an_account_without_rejections(
    tmp_path: Path, name: str
):
    case = CASES[name]
    readings, accounts = taken(tmp_path, case)
    assert_same(readings, case.truth, case)
    assert all(account.adds_up for account in accounts)
    assert [account.rejected + account.unasked + account.empty for account in accounts] == [0] * len(accounts)
    assert sum(account.accepted for account in accounts) == case.truth.values.size
    asides = sum(count for account in accounts for _, count in account.asides)
    above = sum(bool(line.strip(case.separator)) or bool(line) for line in case.above)
    own = len(accounts) if case.shape == "line" else 0
    assert asides == above + own + len(case.below) + sum(map(bool, case.ends))


WALL = [time.astimezone(ZoneInfo(BERLIN)) for time in TRUTH.times]
COLUMNS = {
    "nanoseconds in UTC": pa.array(TRUTH.times, pa.timestamp("ns", "UTC")),
    "milliseconds in UTC": pa.array(TRUTH.times, pa.timestamp("ms", "UTC")),
    "stamps without zone": pa.array([t.replace(tzinfo=None) for t in WALL], pa.timestamp("us")),
    "text with offset": pa.array([t.isoformat() for t in WALL]),
    "local text with AM": pa.array([t.strftime("%m/%d/%Y %I:%M:%S %p") for t in WALL]),
    "seconds since 1970": pa.array([int(t.timestamp()) for t in WALL]),
    "day numbers": pa.array(
        [(t.replace(tzinfo=UTC) - datetime(1899, 12, 30, tzinfo=UTC)) / timedelta(days=1) for t in WALL]
    ),
}


@pytest.mark.parametrize("shape", ["wide", "long", "name"])
@pytest.mark.parametrize("times", COLUMNS)
def test_parquet_gives_the_readings_of_the_truth(tmp_path: Path, shape: str, times: str):
    readings: Readings = {}
    for path in parquet_files(tmp_path, shape, COLUMNS[times], TRUTH):
        found, account = read(path, zone=BERLIN)
        readings |= found
        assert (account.rejected, account.unasked, account.asides) == (0, 0, ())
    assert_same(readings, TRUTH, Case())


# What has two meanings: the export, what the refusal shows, and what comes out once the unit file states one.
ROW = "time;FI-1.PV\n{};{}\n"
ISO = "2026-03-04T10:00Z"
MARCH, APRIL = "2026-03-04T10:00Z", "2026-04-03T10:00Z"
AMBIGUOUS: dict[str, tuple[str, str, dict[str, tuple[dict[str, str], str, float]]]] = {
    "day or month first": (
        ROW.format("03/04/2026 10:00", "1.5"),
        r"x\.csv:2: '03/04/2026 10:00' is 2026-04-03 day first but 2026-03-04 month first",
        {
            "day first": ({"date_order": "day first"}, APRIL, 1.5),
            "month first": ({"date_order": "month first"}, MARCH, 1.5),
        },
    ),
    "three orders of two digits": (
        ROW.format("03.04.05 10:00", "1.5"),
        r"'03\.04\.05 10:00' is 2005-04-03 day first but 2005-03-04 month first but 2003-04-05 year first",
        {
            "day first": ({"date_order": "day first"}, "2005-04-03T10:00Z", 1.5),
            "month first": ({"date_order": "month first"}, "2005-03-04T10:00Z", 1.5),
            "year first": ({"date_order": "year first"}, "2003-04-05T10:00Z", 1.5),
        },
    ),
    "two orders of two digits": (
        ROW.format("13.04.26 10:00", "1.5"),
        r"'13\.04\.26 10:00' is 2026-04-13 day first but 2013-04-26 year first",
        {
            "day first": ({"date_order": "day first"}, "2026-04-13T10:00Z", 1.5),
            "year first": ({"date_order": "year first"}, "2013-04-26T10:00Z", 1.5),
        },
    ),
    "comma": (
        ROW.format(ISO, "1,234"),
        r"x\.csv:2: '1,234' is 1\.234 with a decimal comma but 1234 with marks between thousands",
        {"decimal": ({"decimal": ","}, ISO, 1.234), "thousands": ({"decimal": "."}, ISO, 1234.0)},
    ),
    "point": (
        ROW.format(ISO, "1.234"),
        r"x\.csv:2: '1\.234' is 1\.234 with a decimal point but 1234 with marks between thousands",
        {"decimal": ({"decimal": "."}, ISO, 1.234), "thousands": ({"decimal": ","}, ISO, 1234.0)},
    ),
    "zone": (
        ROW.format("2026-03-04 10:00", "1.5"),
        r"x\.csv:1: times state no offset, and no time zone is stated",
        {
            "UTC": ({"time_zone": "UTC"}, ISO, 1.5),
            "Berlin": ({"time_zone": "Europe/Berlin"}, "2026-03-04T09:00Z", 1.5),  # CET is UTC+1
        },
    ),
    "quality codes": (
        "time;tag;value;quality\n" + f"{ISO};FI-1.PV;1.5;0\n",
        r"'0' are words, OPC UA status codes \(0 is good\) or OPC DA qualities \(0 is bad\)",
        {"OPC UA": ({"quality": "opc ua"}, ISO, 1.5), "OPC DA": ({"quality": "opc da"}, ISO, np.nan)},
    ),
}
SETTLED = [(what, how) for what, (_, _, ways) in AMBIGUOUS.items() for how in ways]


@pytest.mark.parametrize("what", AMBIGUOUS)
def test_what_has_two_meanings_is_refused_with_both(tmp_path: Path, what: str):
    text, says, _ = AMBIGUOUS[what]
    zone = None if what == "zone" else "UTC"
    with pytest.raises(ExportError, match=says) as caught:
        read(saved(tmp_path, text, name="x.csv"), zone=zone)
    assert caught.match(r"\[exports\]")


@pytest.mark.parametrize(("what", "how"), SETTLED)
def test_the_unit_file_settles_what_has_two_meanings(tmp_path: Path, what: str, how: str):
    text, _, ways = AMBIGUOUS[what]
    stated, time, value = ways[how]
    readings, account = read(
        saved(tmp_path, text, name="x.csv"), zone="UTC", rules=replace(NO_RULES, **stated)
    )
    assert account.rejected == 0
    assert readings["FI-1.PV"].time.tolist() == [micros(datetime.fromisoformat(time))]
    np.testing.assert_array_equal(readings["FI-1.PV"].value, [value])


@pytest.mark.parametrize(
    ("number", "origin", "time"),
    [
        # 2026-03-11: 20,523 days after 1970-01-01; of that day the number is 25569, from 1904 24107
        # (1904-01-01 is day 0 there and 1462 here, as spreadsheets document).
        ("46092.25", None, "2026-03-11T06:00Z"),
        ("46092.25", "from 1900", "2026-03-11T06:00Z"),
        ("46092.25", "from 1904", "2030-03-12T06:00Z"),
        ("32874", None, "1990-01-01T00:00Z"),
        ("73050.9999", None, "2099-12-31T23:59:51.360Z"),
    ],
)
def test_day_numbers_count_from_1900_unless_1904_is_stated(
    tmp_path: Path, number: str, origin: str | None, time: str
):
    rules = replace(NO_RULES, day_numbers=origin)
    path = saved(tmp_path, ROW.format(number, "1.5"))
    readings, _ = read(path, zone="UTC", rules=rules)
    assert readings["FI-1.PV"].time.tolist() == [micros(datetime.fromisoformat(time))]
    assert any(
        "day numbers of a spreadsheet" in line
        for line in opened(path, zone="UTC", rules=rules).dialect.describe()
    )


def test_a_time_without_its_half_of_the_day_among_those_that_have_one_is_rejected(tmp_path: Path):
    text = "time,FI-1.PV\n" + "".join(
        f"2026-03-13 {clock},1.5\n"
        for clock in ("12:00 AM", "12:30 PM", "6:00", "0:30 AM", "13:00 PM", "1:00 PM")
    )
    readings, account = read(saved(tmp_path, text), zone="UTC")
    assert [e.text for e in account.evidence] == [
        "2026-03-13 6:00",
        "2026-03-13 0:30 AM",
        "2026-03-13 13:00 PM",
    ]
    hours = (readings["FI-1.PV"].time - micros(datetime(2026, 3, 13, tzinfo=UTC))) / 3.6e9
    assert hours.tolist() == [0.0, 12.5, 13.0]  # midnight is 12 AM, noon 12 PM: common practice, no source


UNNAMED = "time,value\n2026-03-13T06:00Z,1.5\n2026-03-13T06:01Z,2.5\n"


@pytest.mark.parametrize(
    ("name", "text", "says"),
    [
        ("x.csv", UNNAMED, r"x\.csv:1: the values in 'value' state no tag"),
        (
            "FI-1.PV and TI-3.PV.csv",
            UNNAMED,
            r"may belong to 'FI-1\.PV' by the file's name or 'TI-3\.PV' by the file's name",
        ),
        (
            "FI-1.PV.csv",
            "Tag: TI-3.PV\n" + UNNAMED,
            r":2: .* may belong to 'TI-3\.PV' by the lines above the header or 'FI-1\.PV' by the file's name",
        ),
        ("x.csv", "Tag: TI-3.PV\nTag: FI-1.PV\n" + UNNAMED, r":3: .* 'FI-1\.PV' by the lines above"),
    ],
)
def test_values_that_may_be_of_two_tags_or_of_none_are_refused(
    tmp_path: Path, name: str, text: str, says: str
):
    with pytest.raises(ExportError, match=says) as caught:
        read(saved(tmp_path, text, name=name))
    assert caught.match("name the file after the tag alone")


@pytest.mark.parametrize("name", ["FI-1.csv", "fi-1.csv", "FI-1.csv.zst"])
def test_a_file_named_after_a_tag_alone_holds_that_tag(tmp_path: Path, name: str):
    readings, _ = read(saved(tmp_path, UNNAMED, name=name), wanted=("FI-1", "FI-1.PV", "1"))
    assert list(readings) == ["FI-1"]


def test_a_tag_that_no_file_name_can_hold_is_found_with_other_marks(tmp_path: Path):
    readings, _ = read(saved(tmp_path, UNNAMED, name="U2_FI-1_PV march.csv"), wanted=("U2/FI-1:PV",))
    assert list(readings) == ["U2/FI-1:PV"]


def test_a_tag_that_nobody_asked_for_is_counted_as_such_where_it_stands_above_the_header(tmp_path: Path):
    readings, account = read(saved(tmp_path, "Tag: LI-9\n" + UNNAMED))
    assert readings == {}
    assert account.unasked_tags == (("LI-9", 2),)


def united(folder: Path, unit: str, kind: str, stated: str, value: str = "10") -> tuple[float, Account]:
    """One value with its unit in a row of units."""
    path = saved(folder, f"time,A,B\n,{unit},kg/h\n2026-03-13T06:00Z,{value},1\n", name="x.csv")
    readings, account = read(path, wanted=("A", "B"), units={"A": (Stated("A-1", kind, stated),)})
    return float(readings["A"].value[0]), account


@pytest.mark.parametrize(
    ("unit", "kind", "stated", "value"),
    [
        ("t/h", "mass flow", "kg/h", 10_000.0),
        ("kg/h", "mass flow", "t/h", 0.01),
        ("lb/h", "mass flow", "kg/h", 4.5359237),  # international pound, 1959
        ("m3/s", "volume flow", "m3/h", 36_000.0),
        ("ppm", "mole fraction", "mol%", 0.001),
        ("bar", "pressure", "kPa", 1000.0),
        ("barg", "pressure", "kPa gauge", 1000.0),
        ("degF", "temperature", "degC", -110 / 9),  # (10 - 32) * 5/9
        ("K", "temperature", "degC", -263.15),
        ("kmol/h", "species flow", "mol/h", 10_000.0),
        ("kg/s", "differential pressure flow", "kg/h", 36_000.0),
    ],
)
def test_another_unit_of_the_same_dimension_is_converted_and_told(
    tmp_path: Path, unit: str, kind: str, stated: str, value: float
):
    read_value, account = united(tmp_path, unit, kind, stated)
    assert read_value == pytest.approx(value, rel=1e-12)
    assert account.converted == (("A", unit, stated),)
    units = {"A": (Stated("A-1", kind, stated),)}
    batches = opened(tmp_path / "x.csv", wanted=("A", "B"), units=units)
    assert f"A: {unit} converted to {stated}." in batches.dialect.describe()


@pytest.mark.parametrize(
    ("unit", "kind", "stated"),
    [
        ("kPa", "mass flow", "kg/h"),
        ("kmol/h", "mass flow", "kg/h"),
        ("furlong/h", "mass flow", "kg/h"),
        ("bar", "pressure", "barg"),  # absolute and gauge: which is meant nobody knows
        ("wt%", "mole fraction", "mol%"),
        ("kg/h", "species flow", "kmol/h"),
        ("rpm", "signal", "Hz"),
        ("ton/h", "mass flow", "kg/h"),  # 2000 lb, 2240 lb, 1000 kg
    ],
)
def test_a_unit_that_cannot_be_converted_is_refused_with_tag_row_and_both_units(
    tmp_path: Path, unit: str, kind: str, stated: str
):
    says = rf"x\.csv:2 \[A\]: '{unit}' cannot be converted to '{stated}', the unit of A-1 \({kind}\)"
    with pytest.raises(ExportError, match=says) as caught:
        united(tmp_path, unit, kind, stated)
    assert caught.match("State the unit of the export at A-1 in the unit file")


def test_the_unit_of_the_unit_file_settles_a_unit_that_could_not_be_converted(tmp_path: Path):
    value, account = united(tmp_path, "kPa", "pressure", "kPa")
    assert (value, account.converted) == (10.0, ())


def test_a_bare_percent_is_what_the_unit_file_says_it_is(tmp_path: Path):
    value, account = united(tmp_path, "%", "mole fraction", "vol%")
    assert (value, account.converted) == (10.0, ())
    units = {"A": (Stated("A-1", "mole fraction", "vol%"),)}
    said = opened(tmp_path / "x.csv", wanted=("A", "B"), units=units).dialect.describe()
    assert "A: % taken as vol%." in said


def test_two_instruments_of_one_tag_with_different_units_are_refused(tmp_path: Path):
    path = saved(tmp_path, "time,A,B\n,t/h,kg/h\n2026-03-13T06:00Z,10,1\n", name="x.csv")
    units = {"A": (Stated("A-1", "mass flow", "kg/h"), Stated("A-2", "mass flow", "lb/h"))}
    with pytest.raises(ExportError, match=r"x\.csv:2 \[A\]: 't/h' would become 'kg/h' and 'lb/h'"):
        read(path, wanted=("A", "B"), units=units)


def test_a_unit_above_the_header_of_one_tag_is_held_against_the_unit_file(tmp_path: Path):
    text = "Tag: FI-1.PV\nUnits: t/h\n" + UNNAMED
    readings, account = read(saved(tmp_path, text), units=UNITS)
    assert readings["FI-1.PV"].value.tolist() == [1500.0, 2500.0]
    assert account.converted == (("FI-1.PV", "t/h", "kg/h"),)


def test_a_column_of_units_is_held_against_the_unit_file_row_by_row(tmp_path: Path):
    head, at = "time,tag,value,unit\n", "2026-03-13T06:0"
    rows = [
        ("FI-1.PV", "5", "t/h"),
        ("TI-3.PV", "41", "degF"),
        ("FI-1.PV", "6", "kg/h"),
        ("LI-9", "1", "furlong"),
    ]
    text = head + "".join(f"{at}{i}Z,{','.join(row)}\n" for i, row in enumerate(rows))
    readings, account = read(saved(tmp_path, text), units=UNITS)
    assert readings["FI-1.PV"].value.tolist() == [5000.0, 6.0]
    np.testing.assert_allclose(readings["TI-3.PV"].value, [5.0])  # (41 - 32) * 5/9
    assert account.converted == (("FI-1.PV", "t/h", "kg/h"), ("TI-3.PV", "degF", "degC"))
    assert account.unasked_tags == (("LI-9", 1),)
    bad = saved(tmp_path, text + f"{at}9Z,FI-1.PV,5,kPa\n", name="x.csv")
    with pytest.raises(ExportError, match=r"x\.csv:6 \[FI-1\.PV\]: 'kPa' cannot be converted to 'kg/h'"):
        read(bad, units=UNITS)


@pytest.mark.parametrize(
    "text",
    ["time (UTC),A\n{}", "time,A\n[UTC],kg/h\n{}", "Time zone: UTC\ntime,A\n{}"],
    ids=["name", "row of units", "line above"],
)
def test_times_that_say_they_are_utc_are_not_read_in_another_zone(tmp_path: Path, text: str):
    path = saved(tmp_path, text.format("2026-03-13 06:00,1.5\n"))
    with pytest.raises(ExportError, match="does not hold times of the stated zone 'Europe/Berlin'"):
        read(path, wanted=("A",), zone=BERLIN)
    assert read(path, wanted=("A",), zone="UTC")[0]["A"].value.tolist() == [1.5]


@pytest.mark.parametrize("name", ["time (UTC+1)", "time GMT+01:00", "time [utc + 01]"])
def test_times_that_say_how_far_they_are_from_utc_need_that_zone(tmp_path: Path, name: str):
    path = saved(tmp_path, f"{name},A\n2026-03-13 06:00,1.5\n")
    with pytest.raises(ExportError, match="does not hold times of the stated zone 'Europe/Berlin'") as caught:
        read(path, wanted=("A",), zone=BERLIN)
    assert caught.match("Set time_zone under .exports. to 'Etc/GMT-1'")
    time = read(path, wanted=("A",), zone="Etc/GMT-1")[0]["A"].time  # an hour east of UTC, by POSIX's sign
    assert time.tolist() == [micros(datetime(2026, 3, 13, 5, tzinfo=UTC))]


def test_lines_that_hold_no_readings_are_told_with_the_first_of_each_kind(tmp_path: Path):
    case = CASES["wide, all around"]
    ((name, raw),) = case.files()
    batches = opened(saved_raw(tmp_path, name, raw), units=UNITS)
    for _ in batches:
        pass
    told = batches.account().describe()
    at = told.index(
        "Lines that hold no readings: 3 above the header, 1 of descriptions, 1 of units, 4 of sums or ends."
    )
    assert told[at + 1] == "  export.csv:1: 'Report of unit 2' is above the header"
    assert len(told) == at + 1 + 3 + 1 + 1 + 3


def test_a_tag_that_is_called_like_a_sum_keeps_its_readings(tmp_path: Path):
    text = "tag,time,value\nSUM,2026-03-13T06:00Z,1.5\nMax,2026-03-13T06:00Z,2.5\nSUM,,9\n"
    readings, account = read(saved(tmp_path, text), wanted=("SUM", "Max"))
    assert {tag: series.value.tolist() for tag, series in readings.items()} == {"SUM": [1.5], "Max": [2.5]}
    assert (account.rejected, account.asides) == (1, ())


def test_the_head_is_the_same_however_little_is_read_at_a_time(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    case = CASES["wide, all around"]
    ((name, raw),) = case.files()
    monkeypatch.setattr(lines, "BLOCK", 16)
    readings, account = read(saved_raw(tmp_path, name, raw), units=UNITS)
    assert_same(readings, case.truth, case)
    assert sum(count for _, count in account.asides) == 9


def test_tags_that_look_like_dates_are_tags_where_somebody_asked_for_them(tmp_path: Path):
    text = "Report,,\nmoment,10.20.300,12:30\n2026-03-13T06:00Z,1.5,2.5\n"
    readings, _ = read(saved(tmp_path, text), wanted=("10.20.300", "12:30"))
    assert {tag: series.value.tolist() for tag, series in readings.items()} == {
        "10.20.300": [1.5],
        "12:30": [2.5],
    }


def test_times_may_stand_in_a_column_that_is_called_like_another(tmp_path: Path):
    text = "unit,tag,value,quality\n24.10.2026 22:00:00,FI-1.PV,1.5,Good\n"
    readings, _ = read(saved(tmp_path, text), zone="UTC")
    assert readings["FI-1.PV"].time.tolist() == [micros(datetime(2026, 10, 24, 22, tzinfo=UTC))]


def test_a_sum_in_the_middle_of_the_rows_costs_no_reading(tmp_path: Path):
    text = 'time,FI-1.PV\n13.03.2026 06:00,1.5\nAverage,1.5\n14.03.2026 06:00,2.5\n"Total:",4\n'
    readings, account = read(saved(tmp_path, text), zone="UTC")
    assert readings["FI-1.PV"].value.tolist() == [1.5, 2.5]
    assert (account.rejected, account.asides) == (0, (("sums", 2),))
    assert [row for row, _, _ in account.aside_lines] == [3, 5]
