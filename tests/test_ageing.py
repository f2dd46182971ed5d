"""Ageing: made falls with known laws, broken at events; the range of dates holds what truly comes."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from ingest.unit import Event
from monitor.ageing import (
    DAY_US,
    HORIZON_D,
    LEAST_D,
    MODELS,
    Days,
    ageing,
    days_of,
    projected,
    reached,
    stretches,
)
from monitor.expectation import at_usual_point, expected, logarithm_pct
from tests.drift_made import HOUR_US, plants, remembered
from tests.test_expectation import HOURS, YIELD, ends, fitted, point_of
from tests.units_made import MIDNIGHT

YEAR = 365


def made(value: np.ndarray, *, noise: float = 0.3, seed: int = 0) -> Days:
    """Days whose means scatter with a memory of two days; 200 t a day."""
    rng = np.random.default_rng(seed)
    count = len(value)
    return Days(
        np.arange(count, dtype=np.int64) + 20_000,
        value + noise * remembered(rng, (count,), hours=2.0),
        200.0 * np.arange(count),
    )


def levelling(count: int) -> np.ndarray:
    """From 85 % down to a floor of 81 %, with a time constant of 150 days; logarithms."""
    return logarithm_pct(81.0 + 4.0 * np.exp(-np.arange(count) / 150.0))


def test_a_steady_fall_is_told_per_month_and_per_tonne():
    # by hand: 0.01 % a day are 0.3 % in 30 days, and at 200 t a day 5e-5 % a tonne
    found = ageing(made(440 - 0.01 * np.arange(YEAR)))
    assert found is not None
    assert found.per_tonne is not None
    assert found.per_month.slope == pytest.approx(-0.3, abs=0.03)
    assert found.per_month.low < -0.3 < found.per_month.high
    assert found.per_tonne.slope == pytest.approx(-5e-5, rel=0.1)


def test_the_interval_of_the_rate_holds_the_truth_though_days_resemble_their_neighbours():
    # a law: 95 % of intervals; four standard errors of 60 are 11 %
    held = 0
    for seed in range(60):
        found = ageing(made(440 - 0.01 * np.arange(120), seed=seed))
        assert found is not None
        held += found.per_month.low <= -0.3 <= found.per_month.high
    assert held / 60 > 0.95 - 0.113


def test_what_was_not_made_ages_by_no_tonne():
    days = made(440 - 0.01 * np.arange(60))
    found = ageing(Days(days.day, days.value, np.zeros(60)))
    assert found is not None
    assert found.per_tonne is None


def test_a_few_days_tell_nothing():
    days = made(440 - 0.01 * np.arange(LEAST_D - 1))
    assert ageing(days) is None
    assert reached(days, 430.0, bad="low") == ()


def test_events_that_change_the_level_break_a_stretch_and_others_do_not():
    kinds = ("calibration", "note", "catalyst change", "planned")
    begun = datetime.fromtimestamp(MIDNIGHT / 1e6, UTC)
    events = tuple(Event(begun + timedelta(hours=2 * n), k, k, None) for n, k in enumerate(kinds, start=1))
    # ends at hours 1 to 9; breaks at 2 and 6: a block that ends at a break lies before it
    end_us = MIDNIGHT + np.arange(1, 10) * HOUR_US
    assert stretches(end_us, events).tolist() == [0, 0, 1, 1, 1, 1, 2, 2, 2]
    assert stretches(end_us, ()).tolist() == [0] * 9


def test_days_are_means_of_their_blocks_and_count_tonnes_from_the_start():
    # by hand: a block that ends at midnight belongs to the day before
    end_us = MIDNIGHT + np.array([12, 24, 36, 60]) * HOUR_US
    days = days_of(end_us, np.array([1.0, 3.0, np.nan, 5.0]), np.array([10.0, 20.0, 30.0, np.nan]))
    assert (days.day - MIDNIGHT // DAY_US).tolist() == [0, 2]
    assert days.value.tolist() == [2.0, 5.0]
    assert days.tonnes.tolist() == [10.0, 60.0]


def test_a_straight_line_alone_would_mislead_where_the_fall_levels_out():
    # The true mean a year later is within 0.1 % of the floor of 81; the line's interval lies wholly below it,
    # that of both models together holds it.
    days = made(levelling(YEAR))
    later = np.array([365.0])
    true = levelling(2 * YEAR + 1)[-1]
    (_, line_high), (low, high) = (projected(days, later, model=model) for model in MODELS)
    assert line_high[0] < true - 1.0
    assert low[0] <= true <= high[0]


def test_the_range_of_dates_says_that_a_limit_below_the_floor_may_never_be_reached():
    line, level = reached(made(levelling(YEAR)), float(logarithm_pct(np.array([79.0]))[0]), bad="low")
    assert line.model == "straight line"
    assert line.latest is not None
    assert line.latest < 400
    assert level.latest is None


def test_a_limit_ahead_of_a_steady_fall_is_reached_when_the_line_crosses_it():
    # by hand: 0.01 % a day, 1 % to go: 100 days after the last
    days = made(440 - 0.01 * np.arange(YEAR))
    line, level = reached(days, 440 - 0.01 * (YEAR - 1) - 1.0, bad="low")
    assert line.earliest is not None
    assert line.latest is not None
    assert line.earliest < 100 < line.latest
    assert level.earliest is not None
    assert level.earliest <= 100
    assert level.latest is None or level.latest >= 100


def test_turning_the_figure_turns_the_side_and_a_limit_already_reached_takes_no_days():
    days = made(440 - 0.01 * np.arange(YEAR))
    turned = Days(days.day, -days.value, days.tonnes)
    assert reached(turned, -435.0, bad="high") == reached(days, 435.0, bad="low")
    assert reached(days, 445.0, bad="low")[0].latest == 0
    assert reached(days, 300.0, bad="low")[0].earliest is None  # not in five years
    assert HORIZON_D > 5 * YEAR


@pytest.mark.parametrize("law", [lambda n: 440 - 0.01 * np.arange(n), levelling], ids=["line", "levelling"])
def test_the_range_of_both_models_holds_a_day_half_a_year_ahead_as_often_as_it_says(law):
    # a law: at least 95 % less four standard errors of 30 draws
    held = 0
    for seed in range(30):
        rng = np.random.default_rng(1000 + seed)
        days = made(law(YEAR), seed=seed)
        bounds = [projected(days, np.array([180.0]), model=model) for model in MODELS]
        value = law(YEAR + 180)[-1] + 0.3 * rng.standard_normal()
        held += min(low[0] for low, _ in bounds) <= value <= max(high[0] for _, high in bounds)
    assert held / 30 > 0.95 - 0.16


def test_a_plant_that_moves_about_is_seen_at_its_usual_point():
    # what load and bath do is taken off, ageing is left: expectation and corrected figure differ by age alone
    made_ = plants(1, HOURS + 240, 21)
    one, point = fitted(made_), point_of(made_, 0)
    value = logarithm_pct(made_.told[YIELD][0])
    usual = at_usual_point(one, point, value)
    assert usual.std() < 0.8 * value.std()
    told = expected(one, ends(len(value)), point).value
    age = one.weight[1] * (ends(len(value)) - (one.first_us + one.last_us) / 2) / (30 * DAY_US)
    # at the mean point the products stand at minus one each, by their definition
    assert np.ptp(usual - (value - told + age)) < 1e-9
