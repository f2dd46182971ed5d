"""A blank cell of a wide export is no reading; a word, a NaN and a blank of a long export are bad ones."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ingest import lines
from ingest.account import TIME
from ingest.cells import Cells, make_cells
from ingest.readings import BAD, UNKNOWN, Readings
from tests.exports_made import micros, read, saved
from tests.units_made import made_channel, made_instrument, made_unit

START = datetime(2026, 3, 2, 6, tzinfo=UTC)
ASKED = ("A", "B")


def wide(*rows: str) -> str:
    """Rows at whole minutes."""
    times = (START + timedelta(minutes=i) for i in range(len(rows)))
    return "\n".join(
        ["time,A,B", *(f"{t:%Y-%m-%dT%H:%MZ},{row}" for t, row in zip(times, rows, strict=True))]
    )


@pytest.mark.parametrize("blank", ["", "  ", '""'], ids=["nothing", "spaces", "quotes"])
@pytest.mark.parametrize("word", ["1.5", "Bad"], ids=["numbers only", "a word in the block"])
def test_a_blank_cell_of_a_wide_csv_is_no_reading(tmp_path: Path, blank: str, word: str):
    text = wide("1,2", f"{blank},{word}", f"3,{blank}", f"{blank},{blank}")
    readings, account = read(saved(tmp_path, text), wanted=ASKED)
    assert readings["A"].value.tolist() == [1.0, 3.0]
    assert readings["A"].row.tolist() == [2, 4]
    assert len(readings["B"]) == 2
    assert (account.readings, account.accepted, account.empty) == (8, 4, 4)
    assert account.bad == (word == "Bad")
    assert "4 cells left blank" in account.describe()[0]


def test_a_word_for_no_value_stays_a_bad_reading_beside_blank_cells(tmp_path: Path):
    readings, account = read(saved(tmp_path, wide("1,No Data", ",bad", "-,2")), wanted=ASKED)
    assert readings["A"].quality.tolist() == [UNKNOWN, BAD]
    assert readings["B"].quality.tolist() == [BAD, BAD, UNKNOWN]
    assert (account.accepted, account.bad, account.empty) == (5, 3, 1)


def test_a_blank_value_of_a_long_csv_is_a_bad_reading(tmp_path: Path):
    text = "time,tag,value\n2026-03-02T06:00Z,A,1\n2026-03-02T06:01Z,A,\n"
    readings, account = read(saved(tmp_path, text), wanted=ASKED)
    assert readings["A"].quality.tolist() == [UNKNOWN, BAD]
    assert (account.accepted, account.bad, account.empty) == (2, 1, 0)


def test_a_null_value_of_a_long_parquet_is_a_bad_reading(tmp_path: Path):
    times = pa.array([START, START + timedelta(minutes=1)])
    table = pa.table({"time": times, "tag": ["A", "A"], "value": pa.array([1.0, None])})
    pq.write_table(table, tmp_path / "x.parquet")
    readings, account = read(tmp_path / "x.parquet", wanted=ASKED)
    assert readings["A"].quality.tolist() == [UNKNOWN, BAD]
    assert (account.accepted, account.bad, account.empty) == (2, 1, 0)


@pytest.mark.parametrize(
    "column",
    [
        pa.array([1.0, None, np.nan]),
        pa.array(["1", None, "bad"]),
        pa.array(["1", "", "bad"]),
        pa.array(["1", None, "bad"]).dictionary_encode(),
    ],
    ids=["numbers", "text", "empty text", "dictionary"],
)
def test_a_null_of_a_wide_parquet_is_no_reading_and_a_nan_or_word_is_a_bad_one(
    tmp_path: Path, column: pa.Array
):
    times = pa.array([START + timedelta(minutes=i) for i in range(3)])
    nothing = pa.nulls(3)  # a tag without any reading has no type of its own
    pq.write_table(pa.table({"time": times, "A": column, "B": nothing}), tmp_path / "x.parquet")
    readings, account = read(tmp_path / "x.parquet", wanted=ASKED)
    assert list(readings) == ["A"]
    assert readings["A"].quality.tolist() == [UNKNOWN, BAD]
    assert readings["A"].row.tolist() == [1, 3]
    assert (account.readings, account.accepted, account.bad, account.empty) == (6, 2, 1, 4)


def test_a_blank_cell_beside_a_time_that_is_none_is_blank_and_costs_nothing(tmp_path: Path):
    text = wide("1,2") + "\nyesterday,1,\n"
    _, account = read(saved(tmp_path, text), wanted=ASKED)
    assert account.rejections == ((TIME, 1),)
    assert (account.accepted, account.empty) == (2, 1)


def test_a_blank_cell_of_a_tag_nobody_asked_for_is_counted_as_such(tmp_path: Path):
    _, account = read(saved(tmp_path, wide("1,", ",2")), wanted=("A",))
    assert (account.accepted, account.unasked, account.empty) == (1, 2, 1)


def test_blank_cells_in_the_hour_that_comes_twice_hide_no_step_back(tmp_path: Path):
    # Europe/Berlin 2026-10-25: 02:00 to 03:00 comes twice (IANA database); 02:10 CEST is 00:10 UTC
    # A alone is stored once in each pass and once later: only the rows of the file tell the passes apart
    rows = ("01:59,0,0", "02:10,1,", "02:40,,2", "02:20,,", "02:30,3,", "02:50,,4", "03:10,5,6")
    text = "\n".join(["time,A,B", *(f"2026-10-25 {row}" for row in rows)])
    readings, account = read(saved(tmp_path, text), zone="Europe/Berlin", wanted=ASKED)
    at = micros(datetime(2026, 10, 25, 0, 10, tzinfo=UTC))
    minute = 60_000_000
    assert account.rejected == 0
    assert (readings["A"].time - at).tolist() == [-11 * minute, 0, 80 * minute, 120 * minute]
    assert (readings["B"].time - at).tolist() == [-11 * minute, 30 * minute, 100 * minute, 120 * minute]
    assert account.empty == 6


def test_the_account_is_one_sentence_that_leaves_out_what_is_not_there(tmp_path: Path):
    text = "time,A,B,C,D,E,F\n2026-03-02T06:00Z,1,,3,4,5,6\n2026-03-02T06:01Z,Bad,,3,4,5,6\n"
    _, account = read(saved(tmp_path, text), wanted=ASKED)
    assert account.describe() == (
        "2 rows, 12 readings: 2 accepted (as read: 1 of bad quality, 1 without a stated quality),"
        " 2 cells left blank, 8 of tags that no unit file names (C, D, E and 1 more), 0 rejected.",
    )
    _, account = read(saved(tmp_path, "time,A\n2026-03-02T06:00Z,x\n"), wanted=ASKED)
    counts, fault, evidence = account.describe()
    assert counts == "1 row, 1 reading: 0 accepted, 1 rejected."
    assert fault.startswith(
        "1 rejected: the row or cell is not a number. If it stands for no value, add it to"
    )
    assert evidence == "  export.csv:2 [A]: 'x' is not a number"


CELLS = st.sampled_from(["1.5", "-2", "", " ", '""', "Bad", "no data", "x"])


@given(st.lists(st.tuples(CELLS, CELLS), min_size=1, max_size=30), st.sampled_from([1 << 20, 60, 200]))
@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
def test_each_cell_has_its_own_place_whatever_stands_beside_it(
    tmp_path: Path, rows: list[tuple[str, str]], block: int
):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lines, "BLOCK", block)
        readings, account = read(saved(tmp_path, wide(*map(",".join, rows))), wanted=ASKED)
    cells = [cell.strip(' "') for row in rows for cell in row]
    assert account.empty == cells.count("")
    assert account.bad == cells.count("Bad") + cells.count("no data")
    assert account.rejected == cells.count("x")
    assert sum(map(len, readings.values())) == len([c for c in cells if c not in ("", "x")])


# A flow each minute, an analyzer each six minutes and 37 s later, some of whose results are bad.
UNIT = made_unit(
    made_instrument("FI-1"),
    made_channel("AI-2 n-butane", "n-butane", tag="AI-2.PV"),
    made_instrument("FI-3", sampling="mean at end", cycle=timedelta(minutes=3)),
    operating=None,
)
TAGS = tuple(instrument.tag for instrument in UNIT.instruments if instrument.tag)
HOURS = 8


def stored() -> dict[str, list[tuple[datetime, str]]]:
    """What was stored: text by tag and time."""
    rng = np.random.default_rng(20260302)
    flows = [(START + timedelta(minutes=i), f"{rng.normal(100, 5):.2f}") for i in range(60 * HOURS)]
    means = [(at + timedelta(seconds=20), f"{rng.normal(80, 5):.2f}") for at, _ in flows[::3]]
    results = [(at + timedelta(seconds=37), f"{rng.normal(30, 1):.3f}") for at, _ in flows[::6]]
    results[20:24] = [(at, "Bad") for at, _ in results[20:24]]
    return {"FI-1.PV": flows, "AI-2.PV": results, "FI-3.PV": means}


def as_long(folder: Path) -> Path:
    rows = [(at, tag, text) for tag, results in stored().items() for at, text in results]
    told = [f"{at:%Y-%m-%dT%H:%M:%SZ},{tag},{text}" for at, tag, text in sorted(rows)]
    return saved(folder, "\n".join(["time,tag,value", *told]), name="long.csv")


def joined() -> tuple[list[datetime], list[list[str | None]]]:
    """All times at which anything was stored, and a column for each tag; None where nothing was."""
    known = [dict(stored()[tag]) for tag in TAGS]
    times = sorted({at for results in known for at in results})
    return times, [[results.get(at) for at in times] for results in known]


def as_wide(folder: Path) -> Path:
    times, columns = joined()
    rows = zip(times, *columns, strict=True)
    told = [",".join([f"{at:%Y-%m-%dT%H:%M:%SZ}", *(text or "" for text in texts)]) for at, *texts in rows]
    return saved(folder, "\n".join([",".join(["time", *TAGS]), *told]), name="wide.csv")


def as_wide_parquet(folder: Path) -> Path:
    times, columns = joined()
    numbers = [[float("nan") if t == "Bad" else t and float(t) for t in texts] for texts in columns]
    table = pa.table({"time": pa.array(times), **dict(zip(TAGS, map(pa.array, numbers), strict=True))})
    pq.write_table(table, folder / "wide.parquet")
    return folder / "wide.parquet"


def cells_of(path: Path) -> tuple[Cells, Readings]:
    readings, account = read(path, wanted=TAGS)
    assert account.bad == 4
    return make_cells(UNIT, readings, micros(START), micros(START + timedelta(hours=HOURS))), readings


@pytest.mark.parametrize("write", [as_wide, as_wide_parquet], ids=["CSV", "Parquet"])
def test_the_same_truth_on_joined_times_gives_the_cells_of_the_long_export(tmp_path: Path, write):
    (expected, known), (cells, readings) = cells_of(as_long(tmp_path)), cells_of(write(tmp_path))
    for tag in TAGS:
        np.testing.assert_array_equal(readings[tag].time, known[tag].time)
        np.testing.assert_array_equal(readings[tag].value, known[tag].value)
    np.testing.assert_array_equal(cells.value, expected.value)
    np.testing.assert_array_equal(cells.share, expected.share)
    np.testing.assert_array_equal(cells.condition, expected.condition)
    # Four bad results of 6 min each cost 24 min of the analyzer; what is held counts the rest of the time.
    assert np.mean(cells.condition[1:-1] == 0, axis=0).min() > 0.9
