"""What a figure should be at an operating point: laws of the fit on made plants, and its refusals."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from ingest.errors import OutletError
from ingest.unit import Healthy
from monitor import expectation
from monitor.expectation import Expectation, expected, fit, logarithm_pct, points, variables
from tests.drift_made import HOUR_US, POINT, Plants, hourly_unit, plants
from tests.units_made import MIDNIGHT

BEGUN = datetime.fromtimestamp(MIDNIGHT / 1e6, UTC)
UNIT = replace(hourly_unit(), healthy=Healthy(BEGUN, BEGUN + timedelta(days=40), POINT[1:]))
YIELD = "yield on feed"
HOURS = 40 * 24


def ends(count: int) -> np.ndarray:
    return MIDNIGHT + (np.arange(count) + 1) * HOUR_US


def point_of(made: Plants, place: int) -> np.ndarray:
    return points(UNIT, {name: made.point[place, :, at] for at, name in enumerate(POINT)})


def fitted(made: Plants, place: int = 0, *, value=None, usable=True) -> Expectation:
    told = logarithm_pct(made.told[YIELD][place]) if value is None else value
    return fit(
        YIELD,
        UNIT.healthy,
        ends(len(told)),
        point_of(made, place),
        told,
        names=variables(UNIT),
        block_us=HOUR_US,
        usable=np.broadcast_to(usable, len(told)),
    )


@pytest.fixture(scope="module")
def made() -> Plants:
    return plants(8, HOURS + 240, 21)


def test_the_operating_point_is_load_flows_per_load_and_all_else_as_it_is():
    readings = {"FI-201": np.array([5000.0, 0.0]), "TI-205": np.array([350.0, 350.0])}
    readings |= {"FI-202": np.array([20000.0, 20000.0]), "FI-203": np.array([9000.0, np.nan])}
    assert variables(UNIT) == POINT
    found = points(UNIT, readings)
    assert found[0] == pytest.approx([np.log(5000), 350.0, np.log(4.0), np.log(1.8)])
    assert np.isnan(found[1, [0, 2, 3]]).all()


def test_the_expectation_takes_away_most_of_what_load_and_temperature_do(made: Plants):
    # The true figure moves by several tenths of a percent; what is left is what nobody measures.
    one = fitted(made)
    left = logarithm_pct(made.told[YIELD][0]) - expected(one, ends(HOURS + 240), point_of(made, 0)).value
    assert one.noise.sd < 0.65 * logarithm_pct(made.told[YIELD][0])[:HOURS].std()
    assert abs(left[:HOURS].mean()) < 0.02


def test_the_stated_error_of_the_expectation_is_about_as_large_as_it_is_on_days_to_come(made: Plants):
    # a law: means over the ten days after the healthy period, eight plants, in stated standard errors
    scaled = []
    for place in range(8):
        one = fitted(made, place)
        later = slice(HOURS, None)
        told = expected(one, ends(HOURS + 240)[later], point_of(made, place)[later])
        left = logarithm_pct(made.told[YIELD][place])[later] - told.value
        scaled.append(left.mean() / np.hypot(told.error.mean(), one.noise.long_run_sd / np.sqrt(240)))
    assert 0.4 < np.sqrt(np.mean(np.square(scaled))) < 1.8


def test_a_few_wild_hours_hardly_move_the_expectation(made: Plants):
    value = logarithm_pct(made.told[YIELD][0])
    wild = value.copy()
    wild[100:120] -= 30.0
    before, after = fitted(made, value=value), fitted(made, value=wild)
    points_ = point_of(made, 0)
    moved = (
        expected(after, ends(len(value)), points_).value - expected(before, ends(len(value)), points_).value
    )
    assert np.abs(moved[:HOURS]).mean() < 0.05  # a plain mean would move by 30 * 20 / 960 = 0.6
    assert wild[100] == value[100] - 30.0  # what was given is not changed


def test_nothing_after_the_healthy_period_changes_the_expectation(made: Plants):
    value = logarithm_pct(made.told[YIELD][0])
    later = value.copy()
    later[HOURS:] = 0.0
    assert np.array_equal(fitted(made, value=value).weight, fitted(made, value=later).weight)


def test_where_the_unit_never_ran_while_healthy_it_is_told_what_lies_how_far_outside(made: Plants):
    one, point = fitted(made), point_of(made, 0)[:3].copy()
    point[1, 1] = one.high[1] + 7.0  # the salt bath seven kelvin hotter than ever
    point[2, 0] = one.low[0] - 0.2  # a load lower by a factor of exp(-0.2)
    told = expected(one, ends(3), point)
    assert told.outside.tolist() == [-1, 1, 0]
    assert told.beyond == pytest.approx([0.0, 7.0, -0.2])
    assert np.isfinite(told.value).all()
    assert told.error[1] > 3 * told.error[0]  # it widens
    point[0, 0] = np.nan
    assert np.isnan(expected(one, ends(3), point).value[0])


def test_where_nothing_can_be_said_a_reason_stands_in_its_place(made: Plants):
    one, point = fitted(made), point_of(made, 0)[:3].copy()
    point[1, 1] = one.high[1] + 7.0
    point[2, 0] = np.nan
    told = expectation.band(one, ends(3), point)
    assert told["expected"].isna().tolist() == [False, True, True]
    assert told["reason"].tolist() == [
        "",
        "TI-205 lies outside of what was seen while healthy",
        "the operating point is not known",
    ]
    assert told["beyond"].tolist()[1] == pytest.approx(7.0)
    assert 80 < told["low"].iloc[0] < told["expected"].iloc[0] < told["high"].iloc[0] < 85


def test_the_band_holds_as_many_hours_to_come_as_it_says(made: Plants):
    # A law: 95 % of blocks; the noise is slow and the operating point moves, so that 240 hours of eight
    # plants count as some hundreds of independent ones.
    held = []
    for place in range(8):
        later = slice(HOURS, None)
        told = expectation.band(fitted(made, place), ends(HOURS + 240)[later], point_of(made, place)[later])
        value = made.told[YIELD][place, later]
        seen = told["expected"].notna().to_numpy()
        held.append(((value >= told["low"]) & (value <= told["high"]))[seen].mean())
    assert 0.9 < np.mean(held) < 0.99


def test_the_expectation_is_less_sure_the_longer_ago_the_healthy_period_is(made: Plants):
    one = fitted(made)
    point = np.repeat(point_of(made, 0)[:1], 3, axis=0)
    months = one.last_us + np.array([0, 30, 180]) * expectation.DAY_US
    error = expected(one, months, point).error
    assert error[0] < error[1] < error[2]


def test_too_short_a_healthy_period_is_refused_in_words(made: Plants):
    usable = np.arange(HOURS + 240) < 9 * 24
    with pytest.raises(OutletError, match=r"9\.0 days of steady running with 'yield on feed'.*needs 10"):
        fitted(made, usable=usable)


def test_a_figure_that_is_not_above_zero_takes_no_part(made: Plants):
    assert np.isnan(logarithm_pct(np.array([0.0, -1.0, np.nan]))).all()
    assert logarithm_pct(np.array([1.0, 1.01])) == pytest.approx([0.0, 0.995], abs=1e-3)
    value = logarithm_pct(made.told[YIELD][0])
    value[:24] = np.nan
    assert fitted(made, value=value).blocks == HOURS - 24


def test_an_expectation_is_the_same_once_it_has_been_kept_as_text(made: Plants):
    one = fitted(made)
    again = expectation.from_document(json.loads(json.dumps(expectation.document(one))))
    ones, others = (expected(each, ends(5), point_of(made, 0)[:5]) for each in (one, again))
    assert np.array_equal(ones.value, others.value)
    assert np.array_equal(ones.error, others.error)
    assert (again.noise, again.names, again.days) == (one.noise, one.names, pytest.approx(40.0))


def test_a_unit_without_load_and_operating_point_is_expected_by_age_alone():
    bare = replace(UNIT, operating=None, healthy=replace(UNIT.healthy, operating_point=()))
    assert variables(bare) == ()
    rng = np.random.default_rng(0)
    value = 440.0 - 0.2 * (np.arange(HOURS) / 720 - 40 / 60) + 0.1 * rng.standard_normal(HOURS)
    point = points(bare, {"FI-201": np.ones(HOURS)})
    args = {"names": (), "block_us": HOUR_US, "usable": np.ones(HOURS, dtype=bool)}
    one = fit(YIELD, UNIT.healthy, ends(HOURS), point, value, **args)
    # by hand: level 440 in the middle, -0.2 % per 30 days; 960 hours of 0.1 % tell it to a hundredth
    assert one.weight == pytest.approx([440.0, -0.2], abs=0.03)
