"""Lab results: few, valid for a stated time from the sample, however often an export shows them."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem_of
from ingest.cells import Cells, look_back, make_cells, reach
from ingest.conditions import CONDITIONS
from ingest.screen import not_checked
from tests.balances_made import reconciled
from tests.unitfiles_made import DEMO, loaded, with_edit
from tests.units_made import DAY, HOUR, MIDNIGHT, made_channel, made_series, made_unit

US = timedelta(microseconds=1)
LAB = made_channel(
    "LAB-1 isobutane",
    "isobutane",
    analyzer="LAB-1",
    sampling="lab sample",
    cycle=timedelta(hours=24),
    max_age=timedelta(hours=8),
    dead_time=timedelta(0),
)
TAG = str(LAB.tag)
UNIT = made_unit(LAB, operating=None, cell=timedelta(hours=1))


def shown(minutes, values, hours: int = 48) -> tuple[list[float], list[str]]:
    """Value and condition of each hour from midnight."""
    cells = make_cells(UNIT, {TAG: made_series(minutes, values)}, MIDNIGHT, MIDNIGHT + hours * HOUR)
    return cells.value[:, 0].tolist(), [CONDITIONS[code] for code in cells.condition[:, 0]]


def test_a_result_is_valid_for_its_time_from_the_sample_then_stale_then_missing():
    value, condition = shown([120], [1.8], 24)
    assert value[2:10] == [1.8] * 8
    assert condition == ["missing"] * 2 + ["good"] * 8 + ["stale"] * 8 + ["missing"] * 6
    assert np.isnan(value[:2] + value[10:]).all()


def test_a_result_that_an_export_repeats_each_minute_is_no_newer_for_it():
    once = shown([120, 26 * 60], [1.8, 1.9])
    minutes = np.arange(120, 48 * 60)
    repeated = shown(minutes, np.where(minutes < 26 * 60, 1.8, 1.9))
    assert repeated[1] == once[1]
    np.testing.assert_array_equal(repeated[0], once[0])


def test_the_same_value_a_day_later_is_a_new_result():
    assert shown([120, 26 * 60], [1.8, 1.8])[1][26:34] == ["good"] * 8


def test_a_new_sample_takes_over_at_once():
    assert shown([60, 180], [1.8, 1.9], 8)[0][1:] == [1.8, 1.8, 1.9, 1.9, 1.9, 1.9, 1.9]


def test_words_between_two_results_end_nothing():
    minutes = np.arange(120, 600)
    value, condition = shown(minutes, np.where(minutes == 120, 1.8, np.nan), 24)
    assert (value[2:10], condition) == ([1.8] * 8, shown([120], [1.8], 24)[1])


def test_a_result_that_is_stamped_when_it_was_entered_goes_back_to_its_sample():
    late = made_unit(
        made_channel(
            "LAB-1 isobutane", "isobutane", analyzer="LAB-1", sampling="lab sample",
            cycle=timedelta(hours=24), max_age=timedelta(hours=8), dead_time=timedelta(hours=3),
        ),
        operating=None,
        cell=timedelta(hours=1),
    )  # fmt: skip
    cells = make_cells(late, {TAG: made_series([300], [1.8])}, MIDNIGHT, MIDNIGHT + 12 * HOUR)
    assert [CONDITIONS[code] for code in cells.condition[:10, 0]] == ["missing"] * 2 + ["good"] * 8


def test_two_equal_results_are_no_sign_of_a_stuck_lab():
    other = made_channel("LAB-1 n-butane", "n-butane", analyzer="LAB-1", sampling="lab sample")
    assert "stuck" in not_checked(made_unit(LAB, other), LAB)


def test_a_cell_does_not_depend_on_where_the_readings_it_is_made_from_begin():
    minutes = np.arange(0, 6 * 1440)
    changes = np.random.default_rng(4).integers(0, 6 * 1440, 9)
    values = 1.8 + 0.1 * (np.searchsorted(np.sort(changes), minutes, side="right") % 3)
    readings = {TAG: made_series(minutes, np.round(values, 1))}
    whole = make_cells(UNIT, readings, MIDNIGHT, MIDNIGHT + 6 * DAY)
    assert set(whole.condition[:, 0]) == {0, 1, 2}
    for first in range(MIDNIGHT, MIDNIGHT + 5 * DAY, 5 * HOUR):
        last = first + 7 * HOUR
        begin, end = first - look_back(UNIT) // US, last + reach(UNIT) // US
        near = {tag: one.take((one.time >= begin) & (one.time < end)) for tag, one in readings.items()}
        part, at = make_cells(UNIT, near, first, last), (whole.start >= first) & (whole.start < last)
        np.testing.assert_array_equal(part.value, whole.value[at])
        np.testing.assert_array_equal(part.condition, whole.condition[at])


LAB_TEXT = """
[[analyzer]]
name = "LAB-1"
stream = "isobutene feed"
kind = "mole fraction"
unit = "mol%"
random = { floor = 0.02 }
systematic = { floor = 0.02 }
cycle = "24h"
max_age = "12h"
sampling = "lab sample"
channel = { isobutane = "LAB-1.IBA" }
"""


def test_a_lab_result_takes_the_place_of_a_declared_composition_while_it_is_valid(tmp_path: Path):
    # Reconciled isobutane in the feed against a certificate of 1.8 +- 0.05 and a lab result of 2.0 +- 0.028:
    # weighted mean by hand, (1.8 / 0.0025 + 2.0 / 0.0008) / (1 / 0.0025 + 1 / 0.0008) = 1.952 mol%.
    at = DEMO.index("[[analyzer]]")
    unit = loaded(tmp_path, DEMO[:at] + LAB_TEXT + "\n" + DEMO[at:])
    problem = problem_of(unit)
    names = [one.name for one in unit.instruments]
    value = np.full((1, len(names)), np.nan)
    told = {"FI-201": 6000.0, "FI-202": 30_000.0, "FI-203": 9000.0, "isobutane in feed": 1.8}
    told |= {"oxygen in air": 20.95, "LAB-1 isobutane": 2.0}
    for name, reading in told.items():
        value[0, names.index(name)] = reading
    cells = Cells(
        start=np.array([MIDNIGHT]),
        value=value,
        share=np.ones(value.shape, dtype=np.float32),
        condition=np.zeros(value.shape, dtype=np.int8),
        operating=np.zeros(1, dtype=np.int8),
    )
    states = reconciled(unit, problem, cells)
    fed = {
        name: states.flow_kmol_h[0, at] for at, (s, name) in enumerate(problem.state) if s == "isobutene feed"
    }
    assert 100 * fed["isobutane"] / sum(fed.values()) == pytest.approx(1.952, abs=0.003)


def test_a_validity_may_be_shorter_than_the_time_between_samples(tmp_path: Path):
    at = DEMO.index("[[analyzer]]")
    unit = loaded(
        tmp_path, DEMO[:at] + with_edit('max_age = "12h"', 'max_age = "4h"', LAB_TEXT) + "\n" + DEMO[at:]
    )
    (lab,) = (one for one in unit.instruments if one.name == "LAB-1 isobutane")
    assert (lab.sampling, lab.max_age, lab.cycle) == ("lab sample", timedelta(hours=4), timedelta(hours=24))
