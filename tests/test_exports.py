"""Every well-formed dialect gives the readings that were put in; rows, times and accounts hold."""

from __future__ import annotations

import hashlib
import json
from dataclasses import fields
from datetime import UTC, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from ingest import lines, parquets
from ingest.account import GAP, REASONS, TWICE
from ingest.exports import describe
from ingest.parts import sha256_of
from ingest.readings import BAD, GOOD, QUALITIES, UNCERTAIN, UNKNOWN, Readings, Series
from ingest.unit import ExportRules
from tests.exports_made import (
    NO_RULES,
    TAGS,
    Truth,
    assert_true,
    iso_z,
    long_parquet,
    long_text,
    made_truth,
    micros,
    read,
    saved,
    wide_parquet,
    wide_text,
)

BERLIN = ZoneInfo("Europe/Berlin")
OPC = json.loads((Path(__file__).parent / "published" / "opc_quality.json").read_text(encoding="utf-8"))


def in_berlin(form: str):
    return lambda time: time.astimezone(BERLIN).strftime(form)


TIMES = {
    "ISO with Z": iso_z,
    "ISO with offset": lambda t: t.astimezone(BERLIN).isoformat(),
    "ISO with offset without colon": in_berlin("%Y-%m-%d %H:%M:%S%z"),
    "ISO without offset": in_berlin("%Y-%m-%dT%H:%M:%S"),
    "to the minute": in_berlin("%Y-%m-%d %H:%M"),
    "with fraction": in_berlin("%Y-%m-%d %H:%M:%S.%f"),
    "with seven digits of fraction": in_berlin("%Y-%m-%d %H:%M:%S.%f0"),
    "with slashes, year first": in_berlin("%Y/%m/%d %H:%M:%S"),
    "day first with dots": in_berlin("%d.%m.%Y %H:%M:%S"),
    "day first with slashes": in_berlin("%d/%m/%Y %H:%M"),
    "month first": in_berlin("%m/%d/%Y %H:%M:%S"),
    "seconds since 1970": lambda t: str(micros(t) // 1_000_000),
    "milliseconds since 1970": lambda t: str(micros(t) // 1_000),
}


@pytest.mark.parametrize("form", TIMES)
@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_every_form_of_time_gives_the_same_readings(tmp_path: Path, text, form: str):
    truth = made_truth()
    path = saved(tmp_path, text(truth, write=TIMES[form]))
    readings, account = read(path, zone="Europe/Berlin")
    assert_true(readings, truth, quality=GOOD if text is long_text else UNKNOWN)
    assert account.readings == 900
    assert (account.rejected, account.unasked, account.bad) == (0, 0, 6)


@pytest.mark.parametrize("separator", [",", ";", "\t", "|"])
@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_every_separator_gives_the_same_readings(tmp_path: Path, text, separator: str):
    truth = made_truth()
    readings, _ = read(saved(tmp_path, text(truth, separator=separator)))
    assert_true(readings, truth, quality=GOOD if text is long_text else UNKNOWN)


@pytest.mark.parametrize("separator", [";", "\t", "|"])
@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_a_decimal_comma_gives_the_same_readings(tmp_path: Path, text, separator: str):
    truth = made_truth()
    readings, _ = read(saved(tmp_path, text(truth, separator=separator, decimal=",")))
    assert_true(readings, truth, quality=GOOD if text is long_text else UNKNOWN)


def test_quoted_decimal_commas_between_commas_give_the_same_readings(tmp_path: Path):
    truth = made_truth()
    text = wide_text(truth, separator=";", decimal=",").replace(",", "\0").replace(";", '","')
    text = "\n".join(f'"{line}"' for line in text.replace("\0", ",").splitlines())
    readings, _ = read(saved(tmp_path, text))
    assert_true(readings, truth)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "latin-1"])
def test_every_encoding_gives_the_same_readings(tmp_path: Path, encoding: str):
    truth = made_truth()
    text = wide_text(truth).replace("TI-3.PV", "Über-3", 1)
    readings, _ = read(saved(tmp_path, text, encoding=encoding), wanted=("FI-1.PV", "AI-2.C4H8", "Über-3"))
    readings["TI-3.PV"] = readings.pop("Über-3")
    assert_true(readings, truth)


@pytest.mark.parametrize("ending", ["\r\n", "\n\n", "\r\n \r\n"], ids=["CRLF", "blank lines", "both"])
def test_line_ends_and_blank_lines_change_nothing_but_row_numbers(tmp_path: Path, ending: str):
    truth = made_truth()
    readings, account = read(saved(tmp_path, wide_text(truth).replace("\n", ending)))
    assert_true(readings, truth)
    assert account.rows == 300
    lines_per_row = ending.count("\n")
    np.testing.assert_array_equal(readings["FI-1.PV"].row, 1 + lines_per_row * np.arange(1, 301))


def test_a_file_without_a_last_line_end_is_whole(tmp_path: Path):
    truth = made_truth()
    readings, _ = read(saved(tmp_path, wide_text(truth).rstrip("\n")))
    assert_true(readings, truth)


def test_gz_gives_the_same_readings(tmp_path: Path):
    truth = made_truth()
    readings, _ = read(saved(tmp_path, long_text(truth), name="export.csv.gz"))
    assert_true(readings, truth, quality=GOOD)


def test_unicode_minus_and_plus_signs_are_signs(tmp_path: Path):
    text = "time,A,B\n2026-01-01T00:00Z,\u22121.5,+2\n2026-01-01T00:01Z,-1.5,2.0\n"
    readings, _ = read(saved(tmp_path, text), wanted=("A", "B"))
    assert readings["A"].value.tolist() == [-1.5, -1.5]
    assert readings["B"].value.tolist() == [2.0, 2.0]


@pytest.mark.parametrize("missing", ["bad", "Bad", "No Data", "-", "#N/A", "ERR", " err ", "Bad Input"])
def test_a_word_for_no_value_is_bad_quality_and_never_zero(tmp_path: Path, missing: str):
    truth = made_truth()
    rules = ExportRules(None, ("bad input",), None)
    readings, account = read(saved(tmp_path, wide_text(truth, missing=missing)), rules=rules)
    assert_true(readings, truth)
    assert (account.accepted, account.bad, account.rejected) == (900, 6, 0)


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
@pytest.mark.parametrize("zone", ["UTC", "Europe/Berlin", None])
def test_wide_parquet_of_any_clock_gives_the_same_readings(tmp_path: Path, unit: str, zone: str | None):
    truth = made_truth()
    wide_parquet(tmp_path / "export.parquet", truth, unit=unit, zone=zone)
    readings, account = read(tmp_path / "export.parquet", zone="UTC")
    assert_true(readings, truth)
    assert readings["TI-3.PV"].row.tolist() == list(range(1, 301))
    assert (account.rows, account.readings) == (300, 900)


def _hundredths(values: np.ndarray) -> pa.Array:
    return pa.array([None if np.isnan(v) else f"{v:.2f}" for v in values])


@pytest.mark.parametrize(
    "values",
    [
        lambda v: pa.array(v, from_pandas=True),
        pa.array,  # NaN itself
        _hundredths,
        lambda v: _hundredths(v).dictionary_encode(),
        lambda v: _hundredths(v).cast(pa.large_string()),
        lambda v: _hundredths(v).cast(pa.decimal128(12, 2)),
    ],
    ids=["float", "NaN", "text", "dictionary", "large text", "decimal"],
)
def test_long_parquet_gives_the_same_readings_whatever_the_type_of_the_values(tmp_path: Path, values):
    truth = made_truth()
    qualities = pa.array(["Good"] * 900)
    long_parquet(tmp_path / "export.parquet", truth, values, qualities)
    readings, _ = read(tmp_path / "export.parquet")
    assert_true(readings, truth, quality=GOOD)


def test_long_parquet_with_whole_numbers_and_codes(tmp_path: Path):
    truth = made_truth()
    rounded = Truth(truth.times, np.nan_to_num(truth.values).round())
    codes = pa.array([192] * 900, pa.uint16())
    long_parquet(tmp_path / "x.parquet", rounded, lambda v: pa.array(v.astype(np.int32)), codes)
    readings, _ = read(tmp_path / "x.parquet")
    assert_true(readings, rounded, quality=GOOD)


@pytest.mark.parametrize("written", ["-9999", "-9999.0", "-9999.000"])
def test_a_number_that_stands_for_no_value_is_bad_however_it_is_written(tmp_path: Path, written: str):
    rules = ExportRules(None, ("-9999",), None)
    for text in (f"time,A\n2026-01-01T00:00Z,{written}\n", f"time,A\n2026-01-01T00:00Z,{written}\nx,1\n"):
        readings, _ = read(saved(tmp_path, text), rules=rules, wanted=("A",))
        assert readings["A"].quality.tolist() == [BAD]
    times = pa.array([datetime(2026, 1, 1, tzinfo=UTC)])
    pq.write_table(pa.table({"time": times, "A": pa.array([float(written)])}), tmp_path / "x.parquet")
    readings, _ = read(tmp_path / "x.parquet", rules=rules, wanted=("A",))
    assert readings["A"].quality.tolist() == [BAD]


@pytest.mark.parametrize(
    "times",
    [
        lambda t: pa.array([iso_z(x) for x in t]),
        lambda t: pa.array([iso_z(x) for x in t]).dictionary_encode(),
        lambda t: pa.array([iso_z(x) for x in t]).cast(pa.string_view()),
        lambda t: pa.array(t, pa.timestamp("ms", "UTC")).dictionary_encode(),
        lambda t: pa.array([micros(x) // 1000 for x in t], pa.int64()),
        lambda t: pa.array([micros(x) / 1e6 for x in t], pa.float64()),
    ],
    ids=["text", "dictionary", "view", "dictionary of stamps", "whole milliseconds", "seconds"],
)
def test_parquet_gives_the_same_readings_whatever_the_type_of_the_times(tmp_path: Path, times):
    truth = made_truth()
    columns = {tag: pa.array(truth.values[:, i]) for i, tag in enumerate(TAGS)}
    pq.write_table(pa.table({"time": times(truth.times), **columns}), tmp_path / "x.parquet")
    assert_true(read(tmp_path / "x.parquet")[0], truth)


def _changed(text: str, row: int, column: int, cell: str) -> str:
    rows = [line.split(",") for line in text.splitlines()]
    rows[row - 1][column] = cell
    return "\n".join(map(",".join, rows)) + "\n"


def _same(a: Readings, b: Readings) -> None:
    assert a.keys() == b.keys()
    for tag in a:
        for part in fields(Series):
            np.testing.assert_array_equal(getattr(a[tag], part.name), getattr(b[tag], part.name))


@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_a_bad_number_costs_that_reading_and_no_other(tmp_path: Path, text):
    clean = text(made_truth())
    column = 1 if text is wide_text else 2
    before, _ = read(saved(tmp_path, clean, name="clean.csv"))
    after, account = read(
        saved(tmp_path, _changed(clean, 5, column, "12,3x".replace(",", ".")), name="bad.csv")
    )
    tag = account.evidence[0].tag
    lost = before[tag].row == 5
    before[tag] = before[tag].take(~lost)
    _same(before, after)
    assert account.evidence[0].describe("bad.csv") == f"bad.csv:5 [{tag}]: '12.3x' is not a number"


@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_readings_and_account_do_not_depend_on_the_block(
    tmp_path: Path, text, monkeypatch: pytest.MonkeyPatch
):
    messy = _changed(_changed(text(made_truth()), 5, 1, "12.3x"), 9, 0, "yesterday") + "2026-01-01T00:00Z\n\n"
    path = saved(tmp_path, messy)
    whole, account = read(path)
    for size in (100, 999, 4096):
        monkeypatch.setattr(lines, "BLOCK", size)
        parts, same = read(path)
        _same(whole, parts)
        assert same == account


def test_parquet_readings_do_not_depend_on_the_block(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    wide_parquet(tmp_path / "x.parquet", made_truth())
    whole, account = read(tmp_path / "x.parquet")
    monkeypatch.setattr(parquets, "_ROWS", 7)
    parts, same = read(tmp_path / "x.parquet")
    _same(whole, parts)
    assert same == account


@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
def test_tags_nobody_asked_for_are_counted_and_change_nothing(tmp_path: Path, text):
    path = saved(tmp_path, text(made_truth()))
    every, _ = read(path)
    some, account = read(path, wanted=("FI-1.PV",))
    _same({"FI-1.PV": every["FI-1.PV"]}, some)
    assert account.unasked_tags == (("AI-2.C4H8", 300), ("TI-3.PV", 300))
    assert (account.readings, account.accepted, account.unasked) == (900, 300, 600)


def test_one_row_twice_is_a_duplicate_and_another_value_at_the_same_time_wins(tmp_path: Path):
    text = "time,A\n2026-01-01T00:00Z,1\n2026-01-01T00:01Z,2\n2026-01-01T00:00Z,1\n2026-01-01T00:01Z,3\n"
    readings, account = read(saved(tmp_path, text), wanted=("A",))
    assert readings["A"].value.tolist() == [1.0, 3.0]
    assert readings["A"].row.tolist() == [4, 5]
    assert (account.readings, account.accepted, account.superseded, account.duplicates) == (4, 2, 1, 1)


def _written(code: str) -> list[str]:
    """Hexadecimal, decimal, and as a signed 32-bit number."""
    plain = int(code, 16)
    return [code, str(plain), str(plain - 2**32 if plain >= 2**31 else plain)]


# Expected severities: OPC UA Part 4 / Part 8 and StatusCode.csv; the name of a code begins with its severity.
@pytest.mark.parametrize(("name", "code"), OPC["opc_ua"]["codes"].items())
@pytest.mark.parametrize("form", [0, 1, 2], ids=["hexadecimal", "decimal", "signed"])
def test_an_opc_ua_status_is_judged_by_its_top_two_bits(tmp_path: Path, name: str, code: str, form: int):
    severity = next(word for word in ("good", "uncertain", "bad") if name.casefold().startswith(word))
    rows = [f"2026-01-01T00:00Z,A,1.5,{_written(code)[form]}", "2026-01-01T00:01Z,A,1.5,0x80000000"]
    text = "\n".join(["time,tag,value,quality", *rows])
    readings, _ = read(saved(tmp_path, text), wanted=("A",))
    assert QUALITIES[readings["A"].quality[0]] == severity
    assert np.isnan(readings["A"].value[0]) == (severity == "bad")


# Expected words: OPC Data Access quality byte QQSSSSLL, OPC UA Part 8 v1.05 A.3.2.3 (code 32 from memory).
@pytest.mark.parametrize("code", OPC["opc_da"]["full_codes"])
@pytest.mark.parametrize("limit", OPC["opc_da"]["limit_bits"])
@pytest.mark.parametrize("vendor", [0, 0x1200])
def test_an_opc_da_quality_is_judged_by_its_mask(tmp_path: Path, code: str, limit: str, vendor: int):
    known = OPC["opc_da"]
    masked = int(code) & int(known["quality_mask"], 16)
    expected = {known["good"]: GOOD, known["uncertain"]: UNCERTAIN, known["bad"]: BAD}[masked]
    written = int(code) + int(limit) + vendor
    text = f"time,tag,value,quality\n2026-01-01T00:00Z,A,1.5,{written}\n2026-01-01T00:01Z,A,1.5,192\n"
    readings, _ = read(saved(tmp_path, text), wanted=("A",))
    assert readings["A"].quality.tolist() == [expected, GOOD]


def test_an_uncertain_reading_keeps_its_value_and_an_empty_quality_is_unknown(tmp_path: Path):
    text = "time,tag,value,quality\n2026-01-01T00:00Z,A,1.5,Uncertain\n2026-01-01T00:01Z,A,1.5,\n"
    readings, account = read(saved(tmp_path, text), wanted=("A",))
    assert readings["A"].quality.tolist() == [UNCERTAIN, UNKNOWN]
    assert readings["A"].value.tolist() == [1.5, 1.5]
    assert (account.bad, account.unknown) == (0, 1)


def test_a_bad_reading_needs_no_number(tmp_path: Path):
    text = "time,tag,value,quality\n2026-01-01T00:00Z,A,I/O timeout,Bad\n2026-01-01T00:01Z,A,1.5,Good\n"
    readings, account = read(saved(tmp_path, text), wanted=("A",))
    assert readings["A"].quality.tolist() == [BAD, GOOD]
    assert account.rejected == 0


# Europe/Berlin 2026: 29 March 02:00 -> 03:00, 25 October 03:00 -> 02:00, both at 01:00 UTC (IANA database).
def _autumn(step: timedelta) -> Truth:
    return made_truth(count=240, step=step, start=datetime(2026, 10, 24, 23, tzinfo=UTC))


@pytest.mark.parametrize("minutes", [1, 7, 30, 60])
@pytest.mark.parametrize("text", [wide_text, long_text], ids=["wide", "long"])
@pytest.mark.parametrize("block", [1 << 20, 500])
def test_the_hour_that_comes_twice_is_told_by_the_order_of_rows(
    tmp_path: Path, text, minutes: int, block: int, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(lines, "BLOCK", block)
    truth = _autumn(timedelta(minutes=minutes))
    path = saved(tmp_path, text(truth, write=in_berlin("%Y-%m-%d %H:%M")))
    readings, account = read(path, zone="Europe/Berlin")
    assert_true(readings, truth, quality=GOOD if text is long_text else UNKNOWN)
    assert account.rejected == 0


def test_the_hour_that_comes_twice_is_told_in_a_file_with_the_newest_row_first(tmp_path: Path):
    truth = _autumn(timedelta(minutes=10))
    head, *rows = wide_text(truth, write=in_berlin("%Y-%m-%d %H:%M")).splitlines()
    readings, account = read(saved(tmp_path, "\n".join([head, *rows[::-1]])), zone="Europe/Berlin")
    assert_true(readings, truth)
    assert account.rejected == 0


def test_the_hour_that_comes_twice_is_told_in_a_file_sorted_by_tag(tmp_path: Path):
    truth = _autumn(timedelta(minutes=10))
    head, *rows = long_text(truth, write=in_berlin("%Y-%m-%d %H:%M")).splitlines()
    ordered = sorted(rows, key=lambda row: row.split(",")[1])
    readings, account = read(saved(tmp_path, "\n".join([head, *ordered])), zone="Europe/Berlin")
    assert_true(readings, truth, quality=GOOD)
    assert account.rejected == 0


def test_the_hour_that_comes_twice_is_told_in_parquet_without_zone(tmp_path: Path):
    truth = _autumn(timedelta(minutes=10))
    local = Truth([t.astimezone(BERLIN).replace(tzinfo=None) for t in truth.times], truth.values)
    wide_parquet(tmp_path / "x.parquet", local, zone=None)
    readings, account = read(tmp_path / "x.parquet", zone="Europe/Berlin")
    assert_true(readings, truth)
    assert account.rejected == 0


def test_one_pass_through_the_doubled_hour_cannot_be_placed_and_is_refused_with_its_rows(tmp_path: Path):
    text = "time,A\n2026-10-25 01:30,1\n2026-10-25 02:10,2\n2026-10-25 02:40,3\n2026-10-25 03:10,4\n"
    readings, account = read(saved(tmp_path, text), zone="Europe/Berlin", wanted=("A",))
    assert readings["A"].value.tolist() == [1.0, 4.0]
    assert account.rejections == ((TWICE, 2),)
    assert [e.row for e in account.evidence] == [3, 4]
    assert account.evidence[0].describe("x.csv") == f"x.csv:3 [A]: '2026-10-25 02:10:00' {REASONS[TWICE][0]}"


def test_an_hour_that_the_clock_skipped_is_refused_with_its_row(tmp_path: Path):
    text = "time,A\n2026-03-29 01:59,1\n2026-03-29 02:00,2\n2026-03-29 02:59,3\n2026-03-29 03:00,4\n"
    readings, account = read(saved(tmp_path, text), zone="Europe/Berlin", wanted=("A",))
    before = micros(datetime(2026, 3, 29, 0, 59, tzinfo=UTC))
    assert readings["A"].time.tolist() == [before, before + 60_000_000]
    assert account.rejections == ((GAP, 2),)
    assert [e.row for e in account.evidence] == [3, 4]


def test_the_zone_of_the_unit_file_stands_above_the_one_handed_over(tmp_path: Path):
    path = saved(tmp_path, "time,A\n2026-01-01 12:00,1\n")
    rules = ExportRules("Asia/Tokyo", (), None)
    readings, _ = read(path, rules=rules, zone="Europe/Berlin", wanted=("A",))
    assert readings["A"].time[0] == micros(datetime(2026, 1, 1, 3, tzinfo=UTC))  # Tokyo is 9 h ahead all year


@pytest.mark.parametrize("form", ["%Y-%m-%d", "%d-%m-%Y", "%d.%m.%Y"])
def test_dates_without_a_time_of_day_are_the_zones_midnights(tmp_path: Path, form: str):
    # Europe/Berlin is an hour ahead of UTC in winter (IANA database)
    truth = made_truth(20, timedelta(days=1), datetime(2026, 1, 4, 23, tzinfo=UTC))
    path = saved(tmp_path, wide_text(truth, write=in_berlin(form)))
    assert_true(read(path, zone="Europe/Berlin")[0], truth)


def test_shifting_the_clock_shifts_every_reading(tmp_path: Path):
    truth = made_truth()
    later = Truth([t + timedelta(days=40) for t in truth.times], truth.values)
    before, _ = read(saved(tmp_path, wide_text(truth), name="a.csv"))
    after, _ = read(saved(tmp_path, wide_text(later), name="b.csv"))
    for tag in TAGS:
        assert set((after[tag].time - before[tag].time).tolist()) == {40 * 86_400_000_000}


def test_reading_leaves_the_export_as_it_was_and_gives_the_same_again(tmp_path: Path):
    path = saved(tmp_path, wide_text(made_truth()))
    before = path.read_bytes()
    first, account = read(path)
    second, again = read(path)
    _same(first, second)
    assert account == again
    assert path.read_bytes() == before


def test_the_fingerprint_is_the_sha256_of_the_file(tmp_path: Path):
    path = saved(tmp_path, b"abc")
    # SHA-256 of 'abc': FIPS 180-4, example B.1
    assert sha256_of(path) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert sha256_of(path) == hashlib.sha256(path.read_bytes()).hexdigest()


def test_a_description_shows_the_dialect_three_rows_and_the_account(tmp_path: Path):
    told = describe(saved(tmp_path, wide_text(made_truth())), rules=NO_RULES, wanted=None, time_zone=None)
    assert told.export == "export.csv"
    assert "Times are calendar times, year first, with their offset from UTC." in told.dialect
    assert [row.row for row in told.sample] == [2, 3, 4]
    assert told.sample[0].time_us == micros(datetime(2026, 3, 11, 6, tzinfo=UTC))
    assert [tag for tag, _, _ in told.sample[0].readings] == list(TAGS)
    assert told.sample[1].readings[0][2] == "unknown"
    assert told.account.readings == 900


def test_parquet_under_any_name_is_parquet_and_its_nested_columns_are_left_alone(tmp_path: Path):
    times = pa.array([datetime(2026, 1, 1, tzinfo=UTC)], pa.timestamp("us", "UTC"))
    nested = pa.array([{"a": 1}])
    pq.write_table(pa.table({"time": times, "A": pa.array([1.5]), "B": nested}), tmp_path / "export.data")
    readings, account = read(tmp_path / "export.data", wanted=("A",))
    assert readings["A"].value.tolist() == [1.5]
    assert account.unasked_tags == (("B", 1),)
