"""The demo plant's exports say what was measured, and the truth beside them what was put in."""

from __future__ import annotations

import json
import resource
from datetime import date, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from demo_data import exports, meters, plant, scenario
from demo_data.meters import GOOD, NOT_STORED
from ingest.exports import open_export
from ingest.readings import join
from ingest.unitfile import load

UNIT = load(Path("config/demo.toml"))
TAGS = frozenset(i.tag for i in UNIT.instruments if i.tag)
PUT_IN = scenario.load()
ZONE = ZoneInfo("Europe/Berlin")


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    return exports.make(tmp_path_factory.mktemp("demo"))


@pytest.fixture(scope="module")
def measured():
    truth = plant.simulate(60, PUT_IN.seed, PUT_IN.events, start=PUT_IN.start)
    return meters.measure(truth, UNIT, PUT_IN.seed + 1, calibrations=PUT_IN.calibrations)


@pytest.fixture(scope="module")
def told(made):
    return json.loads(made.truth_json.read_text(encoding="utf-8"))


def _measured_within(measured, first, end, tag):
    """Results that were stored in a span of local days, as a frame."""
    edges = [scenario.to_us(datetime(*day, tzinfo=ZONE)) for day in (first, end)]
    rows = measured.results[tag]
    inside = (rows.time >= edges[0]) & (rows.time < edges[1]) & (rows.mark != NOT_STORED)
    return pd.DataFrame(
        {"value": rows.value[inside], "mark": rows.mark[inside]},
        index=pd.to_datetime(rows.time[inside], unit="us", utc=True),
    )


def test_the_wide_csv_read_by_pandas_gives_the_readings_held_every_minute(made, measured):
    frame = pd.read_csv(made.exports[0], na_values=["Bad Input", "No Data", "Calibration"], index_col="time")
    frame.index = pd.to_datetime(frame.index, utc=True)
    assert len(frame) == 20 * 1440
    grid = frame.index.as_unit("us").asi8
    for tag, rows in measured.results.items():
        shown = meters.held(rows, grid)
        np.testing.assert_array_equal(frame[tag], np.where(shown.mark == GOOD, shown.value, np.nan))


def test_the_wide_csv_says_in_words_why_a_number_is_not_there(made):
    frame = pd.read_csv(made.exports[0], dtype=str, keep_default_na=False)
    words = {word: int((frame == word).sum().sum()) for word in exports.WORDS.values()}
    assert words["Bad Input"] == 30
    # 12 min of 17 tags, and 4 min of ten channels before the first result
    assert words["No Data"] == 12 * 17 + 4 * 10
    assert (frame.loc[frame["AI-220.MAL"] == "Calibration", "AI-220.CAL"] == "1").mean() > 0.9
    assert frame["time"][0] == "2026-03-01T00:00:00+01:00"


def test_the_long_csv_read_by_pandas_gives_the_stored_results(made, measured):
    frame = pd.read_csv(made.exports[1], sep=";", decimal=",", dtype={"value": str})
    local = pd.to_datetime(frame["time"], format="%d.%m.%Y %H:%M:%S")
    frame.index = local.dt.tz_localize("Europe/Berlin").dt.tz_convert("UTC")
    number = frame["value"].str.replace(",", ".").where(frame["quality"] == "Good")
    frame["value"] = pd.to_numeric(number)
    for tag in measured.results:
        stored = _measured_within(measured, (2026, 3, 21), (2026, 4, 10), tag)
        shown = frame[frame["tag"] == tag]
        np.testing.assert_array_equal(shown.index.as_unit("us"), stored.index)
        np.testing.assert_array_equal(shown["value"], stored["value"].where(stored["mark"] == GOOD))


def test_the_hour_that_does_not_exist_on_29_march_is_not_in_the_long_csv(made):
    # EU summer time 2026: 02:00 to 03:00 is left out
    lines = made.exports[1].read_text(encoding="utf-8").splitlines()
    assert not [line for line in lines if line.startswith("29.03.2026 02:")]
    flows = [line[:16] for line in lines if line.startswith("29.03.2026") and ";FI-201.PV;" in line]
    assert len(flows) == 23 * 60
    assert flows[119:121] == ["29.03.2026 01:59", "29.03.2026 03:00"]


def test_the_parquet_read_by_pandas_gives_the_stored_results_and_their_quality(made, measured):
    frame = pd.read_parquet(made.exports[2])
    assert set(frame["quality"]) == {192, 28}
    for tag in measured.results:
        stored = _measured_within(measured, (2026, 4, 10), (2026, 4, 30), tag)
        shown = frame[frame["tag"] == tag]
        np.testing.assert_array_equal(shown["time"].dt.as_unit("us"), stored.index)
        np.testing.assert_array_equal(shown["value"], stored["value"])
        np.testing.assert_array_equal(shown["quality"] == 192, stored["mark"] == GOOD)


def test_a_status_is_stored_when_it_changes(made):
    frame = pd.read_parquet(made.exports[2])
    status = frame.loc[frame["tag"] == "AI-220.CAL", "value"]
    # twenty daily and three Wednesday windows, on and off, and the first value
    assert len(status) == 1 + 2 * (20 + 3)
    assert (status.diff().dropna() != 0).all()


def test_the_same_seed_gives_the_same_bytes(tmp_path):
    one, two = (exports.make(tmp_path / name, days=3) for name in ("one", "two"))
    for first, second in zip(
        (*one.exports, one.truth_json, one.truth_parquet),
        (*two.exports, two.truth_json, two.truth_parquet),
        strict=True,
    ):
        assert first.read_bytes() == second.read_bytes()
    other = exports.make(tmp_path / "other", days=3, seed=5)
    assert other.exports[0].read_bytes() != one.exports[0].read_bytes()


def test_nothing_but_whole_files_is_left_and_the_truth_lies_apart(made):
    folder = made.exports[0].parent
    assert {p.name for p in folder.iterdir()} == {p.name for p in made.exports} | {"truth"}
    assert {p.name for p in (folder / "truth").iterdir()} == {"truth.json", "truth.parquet"}


def test_a_file_that_cannot_be_finished_leaves_neither_a_half_nor_a_draft(tmp_path):
    # the system's own limit on the size of a file stands for a full disk
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (50_000, hard))
    try:
        with pytest.raises(OSError, match="File too large"):
            exports.make(tmp_path, days=1)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert list(tmp_path.iterdir()) == []


@pytest.fixture(scope="module")
def taken_in(made):
    """All three exports as the program's own intake reads them: series by tag, accounts."""
    pieces, accounts = {tag: [] for tag in TAGS}, []
    for number, path in enumerate(made.exports):
        batches = open_export(path, number=number, rules=UNIT.exports, wanted=TAGS, time_zone=None)
        for readings in batches:
            for tag, series in readings.items():
                pieces[tag].append(series)
        accounts.append(batches.account())
    return {tag: join(parts)[0] for tag, parts in pieces.items()}, accounts


def test_the_programs_own_intake_reads_back_every_result_of_all_three_dialects(taken_in, measured):
    series, _ = taken_in
    for tag, stored in meters.as_readings(measured.results).items():
        at = np.searchsorted(series[tag].time, stored.time)
        np.testing.assert_array_equal(series[tag].time[at], stored.time)
        np.testing.assert_array_equal(series[tag].value[at], stored.value)


def test_the_intake_refuses_no_row_and_is_asked_for_every_tag(taken_in):
    for account in taken_in[1]:
        assert account.rejections == ()
        assert account.unasked_tags == ()


def test_events_stand_in_the_truth_with_their_spans(told):
    spans = {e["kind"]: (e["start"], e["end"]) for e in told["events"]}
    assert spans.keys() == scenario.KINDS.keys()
    assert spans["outage"] == ("2026-04-03T05:00:00+00:00", "2026-04-04T01:00:00+00:00")
    assert spans["selectivity loss"] == ("2026-04-08T05:00:00+00:00", told["end"])
    assert len(told["calibrations"]) == 60 + 9


def test_true_figures_of_a_day_are_those_of_its_cells(made, told):
    cells = pq.read_table(made.truth_parquet).to_pandas()
    local = cells["start"].dt.tz_convert("Europe/Berlin")
    day = cells[local.dt.date == date(2026, 3, 29)]
    entry = next(d for d in told["days"] if d["day"] == "2026-03-29")
    assert len(day) == entry["hours"] * 6 == 23 * 6
    fed, left = day["isobutene feed: isobutene"].sum(), day["outlet: isobutene"].sum()
    assert entry["figures"]["conversion"] == pytest.approx(100 * (fed - left) / fed, rel=1e-12)


def test_days_with_a_fault_are_not_healthy_and_the_feed_change_is_no_fault(told):
    ill = {d["day"] for d in told["days"] if not d["healthy"]}
    drift = {f"2026-03-{n}" for n in range(27, 32)} | {"2026-04-01"}
    fallen = {f"2026-04-{n:02}" for n in range(8, 30)}
    assert ill == {"2026-03-11", "2026-04-03", "2026-04-04"} | drift | fallen


def test_healthy_days_lie_inside_the_limits_and_the_fall_far_outside(told):
    # one point on either side: five times the 95 % half-width that eight hours of readings allow
    for watch in UNIT.watches:
        if watch.low is not None and watch.figure in ("yield on feed", "selectivity on converted"):
            healthy = [d["figures"][watch.figure] for d in told["days"] if d["healthy"]]
            fallen = [d["figures"][watch.figure] for d in told["days"] if d["day"] > "2026-04-10"]
            assert min(healthy) > watch.low + 1.0
            assert max(fallen) < watch.low - 1.0


def test_the_plant_runs_where_its_readme_says(told):
    healthy = pd.DataFrame([d["figures"] for d in told["days"] if d["healthy"]])
    assert healthy["conversion"].between(94.7, 96.8).all()
    assert healthy["selectivity on converted"].between(86.0, 87.0).all()
    assert healthy["yield on feed"].between(82.0, 83.3).all()


def test_a_reactor_year_for_measuring_speed_has_a_row_a_minute_and_24_tags(tmp_path):
    table = pq.read_table(exports.bench_year(tmp_path / "year.parquet", days=2))
    assert table.num_rows == 2 * 1440
    assert table.num_columns == 1 + 24
    assert str(table.schema.field("time").type) == "timestamp[us, tz=UTC]"
    assert {i.tag for i in UNIT.instruments if i.tag} < set(table.column_names)
    # 18 min of calibration, then the gas stands until 06:34: 24 min a day; 4 min before the first result
    assert table["AI-220.MAL"].null_count == 2 * 24 + 4
