"""Several signals vote on the operating condition: by hand, against a machine, and on the demo plant."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from functools import reduce
from operator import add
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from demo_data import meters, plant
from ingest.cells import OPERATING, Carried, Cells, carried_after, make_cells, operating_of
from ingest.unit import Analyzer, Operating, Vote
from ingest.votes import majority, voters
from tests.operating_made import UNIT, made, screens, told
from tests.unitfiles_made import DEMO, loaded
from tests.units_made import DAY, HOUR, MIDNIGHT, made_instrument, made_series, made_unit

NAN = np.nan
# Down below 10 and back above 20; the second the same; the third is oxygen: down above 16, running below 12.
VOTES = (Vote("FI-1", 10.0, 20.0), Vote("FI-2", 10.0, 20.0), Vote("AI-3", 16.0, 12.0))
PLANT = Operating("FI-1", 10.0, 20.0, 40.0, timedelta(0), VOTES[1:])


def condition(rows: list[list[float]], rule: Operating = PLANT, carried: Carried | None = None) -> list[str]:
    """The condition of cells an hour apart; a row for each signal."""
    load, *votes = (np.array(row, dtype=float) for row in rows)
    start = MIDNIGHT + np.arange(load.size) * HOUR
    codes = operating_of(load, start, rule, carried or Carried(), votes=votes)
    return [OPERATING[code] for code in codes]


@pytest.mark.parametrize(
    ("signals", "says"),
    [
        ([50, 50, 9], "running"),
        ([50, 0, 9], "running"),  # two of three
        ([0, 0, 9], "down"),
        ([50, 0, 20.9], "down"),
        ([0, 50, NAN], "tie"),
        ([NAN, 0, NAN], "down"),  # the only one that is seen
        ([15, 0, 14], "tie"),  # one of three seen, the others say neither
        ([15, 0, 20.9], "down"),
        ([15, NAN, 20.9], "tie"),
        ([10, 20, 16], "tie"),  # on its limit a signal says neither
        ([NAN, NAN, NAN], "not seen"),
    ],
)
def test_more_than_half_of_what_is_seen_decides(signals: list[float], says: str):
    # Counted by hand.
    down, running, seen = (bool(one[0]) for one in majority(np.array(signals, dtype=float)[:, None], VOTES))
    assert says == ("down" if down else "running" if running else "tie" if seen else "not seen")


def test_one_dead_meter_calls_no_shutdown_whichever_it_is():
    for dead, value in ((0, 0.0), (1, 0.0), (2, 20.9)):
        rows = [[50.0] * 4, [50.0] * 4, [9.0] * 4]
        rows[dead][1:3] = [value, value]
        assert condition(rows) == ["running"] * 4


def test_a_load_meter_that_rests_or_is_silent_hides_no_shutdown():
    others = [[50, 0, 0, 50], [9, 20.9, 20.9, 9]]
    assert condition([[50, 50, 50, 50], *others]) == ["running", "down", "down", "running"]
    assert condition([[50, NAN, NAN, NAN], *others]) == ["running", "down", "down", "running"]


def test_in_a_tie_and_with_nothing_seen_it_stays_what_it_was():
    rows = [[0, 0, NAN, 50, 50], [0, 50, NAN, 0, 50], [20.9, NAN, NAN, NAN, 9]]
    assert condition(rows) == ["down", "down", "not known", "down", "running"]
    assert condition([row[1:4] for row in rows]) == ["not known"] * 3  # nothing has told yet
    assert condition([row[1:2] for row in rows], carried=Carried(down=False)) == ["running"]


def test_only_the_load_tells_a_turn_down_and_an_outvoted_one_does_not():
    # 30 is turned down, 15 too; 0 is a dead meter; not seen tells nothing.
    rows = [[30, 15, 0, NAN, 50], [50] * 5, [9] * 5]
    assert condition(rows) == ["turned down", "turned down", "running", "running", "running"]


def test_a_return_by_votes_starts_the_unit():
    rule = replace(PLANT, starting_for=timedelta(hours=2))
    rows = [[0, NAN, NAN, NAN], [0, 50, 50, 50], [20.9, 9, 9, 9]]
    assert condition(rows, rule) == ["down", "starting", "starting", "running"]


def test_without_votes_the_load_is_its_own_majority():
    alone = replace(PLANT, votes=())
    assert voters(alone) == VOTES[:1]
    load = [50, 15, 9, 15, NAN, 20, 21]
    found = ["running", "turned down", "down", "down", "not known", "down", "turned down"]
    assert condition([load], alone) == found


def machine(rows: list[tuple[float, ...]], rule: Operating) -> list[str]:
    """The same rule told one cell after the other."""
    down, returned, found = None, None, []
    for hour, values in enumerate(rows):
        pairs = [(v, vote) for v, vote in zip(values, voters(rule), strict=True) if not np.isnan(v)]
        says = [
            "down" if (v < one.down if one.down < one.running else v > one.down)
            else "up" if (v > one.running if one.down < one.running else v < one.running)
            else "neither"
            for v, one in pairs
        ]  # fmt: skip
        if says.count("down") * 2 > len(says):
            down = True
        elif says.count("up") * 2 > len(says):
            returned = hour if down else returned
            down = False
        if not says or down is None:
            found.append("not known")
        elif down:
            found.append("down")
        elif returned is not None and timedelta(hours=hour - returned) < rule.starting_for:
            found.append("starting")
        else:
            found.append("turned down" if rule.down_below <= values[0] < 40 else "running")
    return found


FLOW = st.sampled_from([0.0, 10.0, 15.0, 20.0, 30.0, 50.0, NAN])
OXYGEN = st.sampled_from([9.0, 12.0, 14.0, 16.0, 20.9, NAN])


@settings(max_examples=200, deadline=None)
@given(
    rows=st.lists(st.tuples(FLOW, FLOW, OXYGEN), min_size=1, max_size=40),
    hours=st.integers(0, 5),
    cut=st.integers(0, 40),
)
def test_the_condition_equals_a_cell_by_cell_machine_however_the_cells_are_cut(
    rows: list[tuple[float, ...]], hours: int, cut: int
):
    rule = replace(PLANT, starting_for=timedelta(hours=hours))
    start = MIDNIGHT + np.arange(len(rows)) * HOUR
    load, *votes = np.array(rows).T
    found, carried = [], Carried()
    for part in (slice(0, cut), slice(cut, cut + 3), slice(cut + 3, None)):
        codes = operating_of(load[part], start[part], rule, carried, votes=[one[part] for one in votes])
        nothing = np.empty((codes.size, 0))
        carried = carried_after(Cells(start[part], nothing, nothing, nothing, codes), carried)
        found += [OPERATING[code] for code in codes]
    assert found == machine(rows, rule)


def test_cells_take_each_vote_from_its_own_instrument_and_a_stale_one_has_none():
    unit = made_unit(
        made_instrument("AI-3"), made_instrument("FI-2"), made_instrument("FI-1"), operating=PLANT
    )
    minutes = np.arange(0, 361)
    hour = minutes // 60
    # Hour 0 all running; 1 the load dead; 2 oxygen up too: down; 3 back; 4 FI-2 dead too; 5 it is not stored.
    readings = {
        "FI-1.PV": made_series(minutes, np.where(np.isin(hour, (1, 2, 4, 5)), 0.0, 50.0)),
        "AI-3.PV": made_series(minutes, np.where(hour == 2, 20.9, 9.0)),
        "FI-2.PV": made_series(minutes[hour < 5], np.where(hour == 4, 0.0, 50.0)[hour < 5]),
    }
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + DAY // 4)
    words = [OPERATING[code] for code in cells.operating[3::6]]  # the middle of each hour
    # In the last hour one says down and one running.
    assert words == ["running", "running", "down", "running", "down", "down"]


def test_a_unit_file_states_votes_on_either_side(tmp_path: Path):
    rule = loaded(tmp_path, DEMO).operating
    assert rule is not None
    assert [vote.instrument for vote in rule.votes] == ["FI-202", "FI-203", "FI-210", "AI-220 oxygen"]
    assert rule.votes[2:] == (Vote("FI-210", 9000.0, 15500.0), Vote("AI-220 oxygen", 16.0, 12.0))
    inline = DEMO[: DEMO.index("[[operating.vote]]")] + DEMO[DEMO.index("[catalyst]") :]
    assert loaded(tmp_path, inline).operating == replace(rule, votes=())


def test_outages_under_faults_are_found_within_25_min_and_nothing_else_is():
    # Aims of the design, over 360 days here: all within 25 min, no false one; more days in the bench.
    found = reduce(add, (told(made(seed, 60)) for seed in range(11, 17)))
    assert found.shutdowns == 72
    assert (found.found_soon, found.false, found.beside) == (72, 0, 0)


def test_the_load_alone_misses_and_invents_outages_under_the_same_faults():
    # What votes are for; without it the test above could not fail.
    one = made(11, 60)
    assert UNIT.operating is not None
    alone = told(one, replace(UNIT, operating=replace(UNIT.operating, votes=())))
    assert alone.found_soon < alone.shutdowns
    assert alone.false


def test_a_trip_within_a_minute_is_found_within_25_min(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(plant, "RAMP_DOWN_H", 1 / 60)
    monkeypatch.setattr(plant, "RAMP_UP_H", 0.5)
    found = reduce(add, (told(made(seed, 60)) for seed in range(31, 33)))
    assert found.shutdowns == 24
    assert (found.found_soon, found.false, found.beside) == (24, 0, 0)


CERTIFICATE = tuple((f"AI-220 {name}", value) for name, value in meters.CALIBRATION_GAS_PCT.items())
BY_CERTIFICATE = replace(
    UNIT.analyzers[0], status=None, calibrating=(), certificate=CERTIFICATE, tolerance=0.02
)


@pytest.mark.parametrize("analyzer", [UNIT.analyzers[0], BY_CERTIFICATE], ids=["status", "certificate"])
def test_good_readings_are_hardly_refused_and_every_calibration_window_is_found(analyzer: Analyzer):
    # Aims of the design: at most 0.5 % of good minutes refused, at least 99.5 % of windows found.
    counts = screens(made(21, 60, faulty=False), replace(UNIT, analyzers=(analyzer,)))
    assert counts["windows"] >= 65
    assert counts["windows found"] == counts["windows"]
    assert counts["good refused"] <= 0.005 * counts["good"]
