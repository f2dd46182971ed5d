"""The note from shift to shift: which shift it is, what earlier shifts left, what stands."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, time, timedelta
from pathlib import Path

import numpy as np
import pytest

from ingest.cells import OPERATING, Cells
from ingest.conditions import CALIBRATING, GOOD, STALE, UNCERTAIN_QUALITY
from ingest.errors import UnitFileError
from ingest.journal import Line
from monitor import shiftnote
from monitor.alerts import ACKNOWLEDGED, NORMAL, SHELVED, UNACKNOWLEDGED, Alert, State
from monitor.shiftnote import ACT, Out, Shift
from tests import page_made
from tests.unitfiles_made import loaded, with_edit

BERLIN = "Europe/Berlin"
THREE = (time(6), time(14), time(22))
UNIT = page_made.unit()
HOUR_US = 3_600_000_000
START = datetime(2026, 4, 14, 4, tzinfo=UTC)


def utc(*parts: int) -> datetime:
    return datetime(*parts, tzinfo=UTC)


def test_a_shift_is_told_by_the_plants_clock():
    # 14 April: Berlin is two hours ahead, so 05:59 UTC is 07:59 there and 20:30 UTC is 22:30.
    assert shiftnote.shift_at(THREE, BERLIN, utc(2026, 4, 14, 5, 59)) == Shift(
        utc(2026, 4, 14, 4), utc(2026, 4, 14, 12)
    )
    assert shiftnote.shift_at(THREE, BERLIN, utc(2026, 4, 14, 20, 30)) == Shift(
        utc(2026, 4, 14, 20), utc(2026, 4, 15, 4)
    )


def test_the_first_instant_of_a_shift_belongs_to_it_and_the_instant_before_does_not():
    edge = utc(2026, 4, 14, 12)
    assert shiftnote.shift_at(THREE, BERLIN, edge).first == edge
    assert shiftnote.shift_at(THREE, BERLIN, edge - timedelta(microseconds=1)).last == edge


def test_the_night_shift_has_seven_hours_where_the_clock_goes_forward_and_nine_where_it_goes_back():
    # Directive 2000/84/EC: last Sundays of March and October, 29 March and 25 October 2026, at 01:00 UTC.
    spring = shiftnote.shift_at(THREE, BERLIN, utc(2026, 3, 29, 1, 30))
    autumn = shiftnote.shift_at(THREE, BERLIN, utc(2026, 10, 25, 1, 30))
    assert (spring.last - spring.first) / timedelta(hours=1) == 7
    assert (autumn.last - autumn.first) / timedelta(hours=1) == 9


def test_shifts_follow_one_another_without_gap_over_a_whole_year():
    at, count = utc(2026, 1, 1), 0
    while at < utc(2027, 1, 1):
        shift = shiftnote.shift_at(THREE, BERLIN, at)
        assert shift.first <= at < shift.last
        at, count = shift.last, count + 1
    assert count == 3 * 365 + 1  # New Year lies within a night shift


def test_one_shift_a_day_lasts_a_day():
    shift = shiftnote.shift_at((time(7),), "UTC", utc(2026, 4, 14, 6))
    assert shift == Shift(utc(2026, 4, 13, 7), utc(2026, 4, 14, 7))


def test_the_unit_file_says_when_shifts_begin_else_they_are_three(tmp_path: Path):
    assert UNIT.shift_starts == THREE
    two = loaded(tmp_path, with_edit("[unit]\n", '[unit]\nshift_starts = ["18:00", "06:00"]\n'))
    assert two.shift_starts == (time(6), time(18))


@pytest.mark.parametrize("wrong", ['["6:00"]', '["24:00"]', '["06:00", "06:00"]', "[]", '"06:00"', "[6]"])
def test_what_is_no_list_of_times_of_day_is_refused(tmp_path: Path, wrong: str):
    with pytest.raises(UnitFileError, match=r"unit\.shift_starts"):
        loaded(tmp_path, with_edit("[unit]\n", f"[unit]\nshift_starts = {wrong}\n"))


def note(number: int, first: datetime, text: str) -> Line:
    shift = shiftnote.shift_at(THREE, BERLIN, first)
    empty = shiftnote.Standing((), (), (), (), ())
    return Line(
        number, first.isoformat(), "A. Moor", ACT, "demo", shift.subject, text, shiftnote.detail(shift, empty)
    )


def test_the_last_note_is_that_of_the_last_shift_that_left_one_not_of_this_one():
    lines = (
        note(1, utc(2026, 4, 12, 5), "older"),
        note(2, utc(2026, 4, 13, 5), "first half"),
        note(3, utc(2026, 4, 13, 9), "second half"),
        Line(4, "", "A. Moor", "note", "demo", "demo-1", "about an alert", {}),
        note(5, utc(2026, 4, 14, 5), "this shift"),
    )
    this = shiftnote.shift_at(THREE, BERLIN, utc(2026, 4, 14, 6))
    assert [one.note for one in shiftnote.last_notes(lines, this)] == ["first half", "second half"]
    assert [one.note for one in shiftnote.notes_of(lines, this)] == ["this shift"]
    assert shiftnote.last_notes(lines[-1:], this) == ()


def cells_with(condition: dict[str, list[int]], count: int = 48) -> Cells:
    """Ten-minute cells, all good but for some instruments."""
    codes = np.full((count, len(UNIT.instruments)), GOOD, np.int8)
    for column, one in enumerate(UNIT.instruments):
        if one.name in condition:
            codes[:, column] = condition[one.name]
    start = np.int64(START.timestamp() * 1e6) + np.arange(count) * HOUR_US // 6
    operating = np.full(count, OPERATING.index("running"), np.int8)
    return Cells(start, np.full(codes.shape, np.nan), np.ones(codes.shape, np.float32), codes, operating)


def test_an_instrument_that_is_out_is_told_since_when_and_one_that_is_back_for_how_long():
    cells = cells_with({"FI-201": [GOOD] * 42 + [STALE] * 6, "FI-202": [STALE] * 4 + [GOOD] * 44})
    before = cells.condition.copy()
    first, second = shiftnote.outages(UNIT, cells)
    # 42 good cells of ten minutes: out since seven hours after the start, for one hour.
    hour = timedelta(hours=1)
    assert first == Out("FI-201", "stale", START + 7 * hour, hour, still=True)
    assert second == Out("FI-202", "stale", START, timedelta(minutes=40), still=False)
    assert (cells.condition == before).all()


def test_ten_minutes_out_and_a_doubtful_reading_are_not_told():
    conditions = {"FI-201": [GOOD] * 20 + [STALE] + [GOOD] * 27, "FI-202": [UNCERTAIN_QUALITY] * 48}
    assert shiftnote.outages(UNIT, cells_with(conditions)) == ()


def test_channels_that_are_calibrated_together_stand_as_their_analyzer():
    channels = [one.name for one in UNIT.instruments if one.analyzer == "AI-220"]
    states = [GOOD] * 40 + [CALIBRATING] * 4 + [GOOD] * 4
    (told,) = shiftnote.outages(UNIT, cells_with(dict.fromkeys(channels, states)))
    assert (told.name, told.words) == ("AI-220", "calibrating")
    some = shiftnote.outages(UNIT, cells_with(dict.fromkeys(channels[:2], states)))
    assert {one.name for one in some} == set(channels[:2])


ALERT = Alert(
    id="demo-1", unit="demo", watch="yield on feed 8 h", figure="yield on feed", window_h=8.0, side="low",
    limit=81.0, priority="high", first_crossed=START, raised=START, cleared=None, suppressed=False,
    past=False,
)  # fmt: skip


def test_what_stands_is_sorted_by_what_the_next_shift_does_with_it():
    told = [
        (ALERT, State(UNACKNOWLEDGED, "", None, "", ()), "Yield is low.", None),
        (replace(ALERT, id="demo-2"), State(ACKNOWLEDGED, "B. Fell", None, "", ()), "It is low.", None),
        (replace(ALERT, id="demo-3"), State(SHELVED, "A. Moor", utc(2026, 4, 14, 12), "", ()), "Low.", None),
        (replace(ALERT, id="demo-4"), State(NORMAL, "", None, "", ()), "Was low.", None),
    ]
    stood = shiftnote.standing(UNIT, told, (), (), (Out("FI-201", "stuck", START, timedelta(0), still=True),))
    assert stood.open == (
        "demo-1, high priority, unacknowledged: Yield is low",
        "demo-2, high priority, acknowledged by B. Fell: It is low",
    )
    assert stood.shelved == ("demo-3 (yield on feed 8 h): shelved by A. Moor until 14 Apr 2026 14:00 CEST",)
    assert stood.out == ("FI-201: stuck since 14 Apr 2026 06:00 CEST",)
    assert (stood.moved, stood.watch) == ((), ())
    shift = shiftnote.shift_at(THREE, BERLIN, START)
    kept = shiftnote.detail(shift, stood)["list"]
    assert [heading for heading, _ in shiftnote.listed(kept)] == [
        "alerts open", "shelved or out of service", "instruments out",
    ]  # fmt: skip
