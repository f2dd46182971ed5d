"""How instruments served: shares, runs, calibrations and votes, small enough to count by hand."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import pytest

from ingest.cells import DOWN, RUNNING, Cells
from ingest.conditions import CALIBRATING, CONDITIONS, LARGE_STEP, MISSING, STALE, STUCK
from ingest.votes import voters
from monitor import firstchecks, strips
from monitor.alerts import Alert
from monitor.attendance import (
    KIND_OF,
    KINDS,
    SHAPES,
    attendance,
    calibrations,
    condition_runs,
    outvoted,
)
from monitor.axes import LIGHT
from monitor.firstchecks import Evidence, concerns
from tests import page_made

UNIT = page_made.unit()
NAMES = [one.name for one in UNIT.instruments]
CHANNELS = [place for place, one in enumerate(UNIT.instruments) if one.analyzer == "AI-220"]
CELL_US = int(UNIT.cell / timedelta(microseconds=1))
FIRST_US = 1_777_000_200_000_000  # on the grid of ten minutes
A, B = NAMES.index("FI-201"), NAMES.index("FI-202")


def made(count: int = 10) -> Cells:
    """Cells in which all is good and the unit runs."""
    shape = (count, len(NAMES))
    return Cells(
        start=FIRST_US + CELL_US * np.arange(count),
        value=np.full(shape, 50.0),
        share=np.ones(shape, np.float32),
        condition=np.zeros(shape, np.int8),
        operating=np.full(count, RUNNING, np.int8),
    )


def at(cell: int) -> pd.Timestamp:
    return pd.Timestamp(FIRST_US + cell * CELL_US, unit="us", tz="UTC")


def end_of(cells: Cells) -> datetime:
    return datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=int(cells.start[-1]) + CELL_US)


def evidence(cells: Cells, **more: object) -> Evidence:
    nothing = pd.DataFrame({"mean": [], "expected": [], "word": []})
    told = {
        "attendance": attendance(UNIT, cells), "outvoted": pd.Series(dtype=float), "adjusted": nothing,
        "alerts": (), "late": {}, "parallel": (), "end": end_of(cells),
    }  # fmt: skip
    return Evidence(**(told | more))


def test_every_condition_comes_to_a_kind_that_is_told_by_word_shape_and_height():
    assert set(KIND_OF) == set(CONDITIONS)
    assert set(KIND_OF.values()) == set(KINDS) == set(SHAPES) == set(strips.HEIGHTS) == set(strips.WORDS)
    assert len(set(SHAPES.values())) == len(KINDS)
    # Heights tell kinds apart without colour; of the two that are alike one is an empty box.
    assert len(set(strips.HEIGHTS.values())) == len(KINDS) - 1


def test_availability_is_the_share_of_the_time_that_is_not_down():
    cells = made(10)
    cells.operating[8:] = DOWN
    cells.condition[[1, 2, 9], A] = MISSING, STALE, STUCK
    cells.condition[3:5, B] = LARGE_STEP
    before = cells.condition.copy()
    table = attendance(UNIT, cells)
    # By hand: 2 of 8 cells are out for the first; 2 of 8 are doubted, and take part, for the second.
    assert table.loc["FI-201", ["available", "good"]].tolist() == [6 / 8, 6 / 8]
    assert table.loc["FI-202", ["available", "good", "doubted"]].tolist() == [1.0, 6 / 8, 2 / 8]
    assert table.loc["FI-201", "trouble"] == "missing"
    assert table.loc["FI-202", "trouble"] == ""
    np.testing.assert_array_equal(cells.condition, before)


def test_a_unit_that_was_down_throughout_has_no_availability():
    cells = made(4)
    cells.operating[:] = DOWN
    assert attendance(UNIT, cells)["available"].isna().all()


def test_since_is_the_start_of_the_cells_at_the_end_that_take_no_part():
    cells = made(6)
    cells.condition[[1, 4, 5], A] = STUCK
    cells.condition[:, B] = MISSING
    table = attendance(UNIT, cells)
    assert table.loc["FI-201", "since"] == at(4)
    assert table.loc["FI-202", "since"] == at(0)
    assert pd.isna(table.loc["FI-203", "since"])
    assert table.loc["FI-201", "now"] == "stuck"


def test_an_instrument_without_a_tag_does_not_serve():
    assert "isobutane in feed" not in attendance(UNIT, made(3)).index  # a declared value


def test_runs_join_cells_of_one_condition_and_fill_the_span():
    cells = made(6)
    cells.condition[2:4, A] = CALIBRATING
    found = condition_runs(UNIT, cells, most=100)
    mine = found[found["instrument"] == "FI-201"]
    assert mine["condition"].tolist() == ["good", "calibrating", "good"]
    assert mine["start"].tolist() == [at(0), at(2), at(4)]
    assert mine["end"].tolist() == [at(2), at(4), at(6)]
    # A law: the runs of each instrument add up to the span.
    length = (found["end"] - found["start"]).groupby(found["instrument"]).sum()
    assert set(length) == {6 * pd.Timedelta(UNIT.cell)}


def test_a_hole_in_the_record_is_time_of_no_condition():
    whole = made(6)
    kept = [0, 1, 4, 5]
    cells = Cells(*(getattr(whole, name)[kept] for name in Cells.__slots__))
    found = condition_runs(UNIT, cells, most=100)
    mine = found[found["instrument"] == "FI-201"]
    assert list(zip(mine["start"], mine["end"], strict=True)) == [(at(0), at(2)), (at(4), at(6))]


def test_where_several_cells_are_one_step_the_worst_of_them_is_shown():
    cells = made(7)
    cells.condition[1, A] = CALIBRATING
    cells.condition[2, A] = STUCK
    found = condition_runs(UNIT, cells, most=3)  # three cells are one step
    mine = found[found["instrument"] == "FI-201"]
    assert mine["condition"].tolist() == ["stuck", "good"]
    assert mine["end"].tolist() == [at(3), at(7)]


def test_calibrations_of_an_analyzer_are_counted_once_for_all_its_channels():
    cells = made(12)
    for place in CHANNELS:
        cells.condition[2:4, place] = CALIBRATING
    cells.condition[7, CHANNELS[0]] = CALIBRATING
    (row,) = calibrations(UNIT, cells).to_dict("records")
    assert (row["windows"], row["hours"]) == (2, 0.5)  # by hand: three cells of ten minutes
    assert (row["start"], row["end"]) == (at(7), at(8))
    assert pd.isna(calibrations(UNIT, made(3))["start"].iloc[0])


def test_a_signal_that_contradicts_the_others_is_outvoted():
    cells = made(8)
    votes = voters(UNIT.operating)
    for vote in votes:
        side = np.sign(vote.running - vote.down)
        cells.value[:, NAMES.index(vote.instrument)] = vote.running + side
    last = votes[-1]
    place, side = NAMES.index(last.instrument), np.sign(last.running - last.down)
    cells.value[:2, place] = last.down - side
    cells.value[2:4, place] = np.nan
    share = outvoted(UNIT, cells)
    # By hand: against the others in 2 of the 6 cells in which it was seen.
    assert share[last.instrument] == pytest.approx(2 / 6)
    assert (share.drop(last.instrument) == 0).all()


def test_the_strips_have_a_sentence_that_names_what_was_out():
    cells = made(5)
    cells.condition[2, A] = STUCK
    found = condition_runs(UNIT, cells, most=100)
    nothing = pd.DataFrame({"start": [], "end": [], "word": [], "text": []})
    chart = strips.strips(found, nothing, span=(at(0), at(5)), zone=UNIT.time_zone, ink=LIGHT)
    assert "missing, stale or refused at times: FI-201." in chart.alt


def test_nothing_is_said_where_nothing_speaks_against_any():
    assert concerns(UNIT, evidence(made(6))) == ()


def test_channels_of_one_analyzer_with_one_reason_stand_as_one_and_say_since_when():
    cells = made(12)
    for place in CHANNELS:
        cells.condition[6:, place] = STUCK
    (one, *rest) = concerns(UNIT, evidence(cells))
    assert one.kind == "refused"
    assert one.name.startswith("AI-220, ")
    assert "stuck at the end of the span, out since" in one.reason
    assert "(1 h)" in one.reason  # by hand: six cells of ten minutes
    assert {other.kind for other in rest} == {"often out"}


def test_a_short_silence_and_a_short_calibration_are_no_concern():
    cells = made(100)
    cells.condition[98:, A] = MISSING  # 20 min
    cells.condition[91:, B] = CALIBRATING  # 90 min of 1000
    found = concerns(UNIT, evidence(cells))
    assert [(one.name, one.kind) for one in found] == [("FI-202", "often out")]


def test_what_a_verdict_names_comes_first_then_what_is_silent_then_what_does_not_fit():
    cells = made(10)
    cells.condition[5:, A] = MISSING
    adjusted = pd.DataFrame(
        {"mean": [2.4, 0.1], "expected": [1.0, 1.0], "word": ["stands out", "as expected"]},
        index=["FI-203", "FI-202"],
    )
    raised = end_of(cells) - timedelta(hours=1)
    alert = Alert(
        id="demo-1", unit="demo", watch="w", figure="conversion", window_h=8.0, side="low", limit=1.0,
        priority="high", first_crossed=raised, raised=raised, cleared=None, suppressed=False, past=False,
        cause="instrument", suspects=("TI-212", "not an instrument"),
    )  # fmt: skip
    found = concerns(
        UNIT,
        evidence(
            cells, adjusted=adjusted, alerts=(alert,), parallel=(("FI-203", "FI-210"),),
            late={"AI-220": "declared 4 min, the data say 12 min at last"},
            outvoted=pd.Series({"FI-202": 0.5, "FI-210": 0.001}),
        ),
    )  # fmt: skip
    assert [(one.name, one.kind) for one in found] == [
        ("TI-212", "suspected"),
        ("FI-201", "absent"),
        ("FI-203", "stands out"),
        ("AI-220", "late"),
        ("FI-202", "outvoted"),
        ("FI-201", "often out"),
    ]
    assert "cannot tell it apart from FI-210" in found[2].reason
    assert "named by the verdict of demo-1" in found[0].reason
    assert all(one.remedy for one in found)


def test_every_kind_of_concern_has_a_word_and_a_remedy():
    assert list(firstchecks.KINDS) == list(firstchecks.WORDS)
