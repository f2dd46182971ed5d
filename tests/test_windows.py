"""Judged figures over windows and days: ratios of sums, coverage, half-widths, reasons."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import pytest

from monitor import windows
from monitor.amounts import Amounts
from monitor.figures import evaluate, figures_of
from monitor.tallies import idle_in
from monitor.windows import (
    FIELDS,
    MODES,
    REASONS,
    calendar_days,
    local_midnights,
    span_figures,
    window_at,
    window_figures,
)
from tests.amounts_made import DOWN, NOT_KNOWN, RUNNING, STARTING, TURNED_DOWN, made_amounts, reaction
from tests.units_made import DAY, HOUR, MIDNIGHT

H1, H8, H24, D7 = timedelta(hours=1), timedelta(hours=8), timedelta(hours=24), timedelta(days=7)
CELL = 10 * 60_000_000
UNIT = reaction("C2H6", "C2H4", ["CH4"], windows=(H1, H8, H24))
STEADY_STATE = {  # kmol per cell: conversion 50 %, selectivity 80 %, 16 % to methane, 4 % unseen
    "fed C2H6": 10.0,
    "consumed C2H6": 5.0,
    "made C2H4": 4.0,
    "made CH4": 1.6,
    "made all unwanted": 1.6,
}


def _figures(amounts: Amounts, *names: str, unit=UNIT):
    return tuple(one for one in figures_of(unit, amounts.names) if not names or one.name in names)


def _last(
    amounts: Amounts, figure: str, window: timedelta, mode: str = "as operated", unit=UNIT
) -> pd.Series:
    """The fields of one figure at the end of the record."""
    frame = window_figures(unit, amounts, _figures(amounts, figure, unit=unit))[window]
    return frame.iloc[-1][figure, mode]


def _reason(amounts: Amounts, figure: str, window: timedelta, mode: str = "as operated") -> str:
    return REASONS[int(_last(amounts, figure, window, mode)["reason"])]


def _uncertain(count: int, seed: int = 3, unit=UNIT) -> Amounts:
    """Random amounts with gaps of several kinds, stops, two hold classes and three systematic sources."""
    rng = np.random.default_rng(seed)
    plain = made_amounts(unit, STEADY_STATE, count)
    p = len(plain.names)
    kmol = plain.kmol * rng.uniform(0.8, 1.2, (count, p))
    kmol[rng.random(count) < 0.05] = np.nan
    kmol[rng.random(count) < 0.05, 3:] = np.nan
    root = 0.02 * rng.standard_normal((count, 2, p, p))
    return replace(
        plain,
        kmol=kmol,
        random=root @ root.transpose(0, 1, 3, 2),
        hold=(timedelta(minutes=4), timedelta(minutes=30)),
        systematic=0.01 * rng.standard_normal((count, p, 3)),
        sources=("a", "b", "c"),
        operating=rng.choice([RUNNING] * 8 + [STARTING, DOWN, TURNED_DOWN, NOT_KNOWN], count).astype(np.int8),
    )


def _by_hand(amounts: Amounts, figure, mode: str, end: int, length: int) -> tuple[float, float, float]:
    """Value, half-width and coverage of one window, cell by cell as the definition says."""
    place = range(max(0, end - length), end)
    at = [amounts.names.index(name) for name in figure.needs]
    runs = [
        i
        for i in place
        if (amounts.operating[i] != DOWN if mode == MODES[0] else amounts.operating[i] == RUNNING)
    ]
    used = [i for i in runs if np.isfinite(amounts.kmol[i, at]).all()]
    # A cell of unknown condition may have run: it counts as missing.
    idle = (DOWN,) if mode == MODES[0] else (DOWN, STARTING, TURNED_DOWN)
    needed = length - sum(amounts.operating[i] in idle for i in place)
    hours = np.array([len(used) / 6])
    sums = np.nansum(amounts.kmol[used], axis=0)
    value, gradient = evaluate(figure, sums[None], hours=hours)
    g = np.where(np.isin(np.arange(len(sums)), at), gradient[0], 0.0)
    systematic = (np.sum([g @ amounts.systematic[i] for i in used], axis=0) ** 2).sum()
    random = sum(
        min(hold / timedelta(minutes=10), length) * (g @ amounts.random[i, c] @ g)
        for i in used
        for c, hold in enumerate(amounts.hold)
    )
    return value[0], 1.959963984540054 * np.sqrt(random + systematic), len(used) / needed


def test_sums_by_doubling_are_the_sums_of_the_definition():
    unit = replace(UNIT, windows=(H1, H8), least_coverage=0.5)
    amounts = _uncertain(120)
    figures = _figures(amounts)
    for window, frame in window_figures(unit, amounts, figures).items():
        length = window // timedelta(minutes=10)
        for end in (length, length + 1, 77, 120):
            for figure in figures:
                for mode in MODES:
                    found = frame.iloc[end - 1][figure.name, mode]
                    if found["reason"] == 0:
                        expected = _by_hand(amounts, figure, mode, end, length)
                        assert found[list(FIELDS[:3])].tolist() == pytest.approx(expected, rel=1e-9)


def test_a_spike_spoils_no_window_it_is_not_in():
    # A running total would lose 0.1 kmol for good: 1e15 has a spacing of 0.125.
    clean = _uncertain(2000)
    clean.kmol[700] = list(STEADY_STATE.values())
    spiked = replace(clean, kmol=clean.kmol.copy())
    spiked.kmol[700, 2] = 1e15
    figures = _figures(clean)
    for window, frame in window_figures(UNIT, spiked, figures).items():
        length = window // timedelta(minutes=10)
        outside = np.r_[0:700, 700 + length : 2000]
        expected = window_figures(UNIT, clean, figures)[window]
        pd.testing.assert_frame_equal(frame.iloc[outside], expected.iloc[outside], check_exact=True)
        if expected["yield on feed", "steady", "reason"].iloc[700] == 0:
            assert frame["yield on feed", "steady", "value"].iloc[700] > 1e12


@pytest.mark.parametrize("days", [1, 7, 31])
def test_the_chunk_does_not_show_in_the_figures(days, monkeypatch):
    unit = replace(UNIT, windows=(H1, D7))
    amounts = _uncertain(45 * 144)
    figures = _figures(amounts)
    monkeypatch.setattr(windows, "CHUNK", 1008)
    whole = window_figures(unit, amounts, figures)
    parts = []
    for begin in range(0, len(amounts.start), days * 144):
        rows = slice(max(0, begin - 1007), begin + days * 144)
        cut = replace(
            amounts,
            start=amounts.start[rows],
            kmol=amounts.kmol[rows],
            random=amounts.random[rows],
            systematic=amounts.systematic[rows],
            operating=amounts.operating[rows],
        )
        parts.append(window_figures(unit, cut, figures, since_us=int(amounts.start[begin])))
    for window, frame in whole.items():
        pd.testing.assert_frame_equal(pd.concat([part[window] for part in parts]), frame, check_exact=True)


def test_nothing_given_is_changed():
    amounts = _uncertain(60)
    copies = [amounts.kmol.copy(), amounts.random.copy(), amounts.systematic.copy(), amounts.operating.copy()]
    window_figures(UNIT, amounts, _figures(amounts))
    calendar_days(UNIT, amounts, _figures(amounts))
    for before, after in zip(
        copies, (amounts.kmol, amounts.random, amounts.systematic, amounts.operating), strict=True
    ):
        np.testing.assert_array_equal(before, after)


def test_twenty_days_of_full_load_and_ten_of_low_load_weigh_by_what_was_made():
    # 20 days at full load with selectivity 86, 10 days at 40 % load with 90: the mean of days is 87.33,
    # the ratio of sums (20 x 86 + 4 x 90) / 24 = 86.67; steady (full load) it is 86.
    full = np.repeat([True, False], [20 * 144, 10 * 144])
    load = np.where(full, 1.0, 0.4)
    selectivity = np.where(full, 0.86, 0.90)
    amounts = made_amounts(
        UNIT,
        {"fed C2H6": load, "consumed C2H6": load, "made C2H4": load * selectivity},
        30 * 144,
        operating=np.where(full, RUNNING, TURNED_DOWN),
    )
    table = window_at(UNIT, amounts, _figures(amounts), MIDNIGHT, MIDNIGHT + 30 * DAY)
    assert round(table.loc[("selectivity on converted", "as operated"), "value"], 2) == 86.67
    assert table.loc[("selectivity on converted", "steady"), "value"] == pytest.approx(86.0)
    assert (table["coverage"] == 1.0).all()


@pytest.mark.parametrize(("condition", "expected"), [(DOWN, 86.0), (RUNNING, 85.99)])
def test_an_hour_of_zero_flow_with_noise_does_not_drag_the_day_down(condition, expected):
    # 23 h of 86 % and one hour whose noise says 33.2 %: the mean of hours is 83.8. Counted as down the
    # hour leaves 86; even if it passed for running, at 0.44 % of the flow: (23 x 86 + 0.0044 x 33.2) /
    # 23.0044 = 85.99.
    stopped = np.arange(144) // 6 == 12
    load = np.where(stopped, 0.0044, 1.0)
    made = load * np.where(stopped, 0.332, 0.86)
    amounts = made_amounts(
        UNIT,
        {"fed C2H6": load, "consumed C2H6": load, "made C2H4": made},
        144,
        operating=np.where(stopped, condition, RUNNING),
    )
    found = _last(amounts, "selectivity on converted", H24)
    assert round(found["value"], 2) == expected
    assert found["coverage"] == 1.0


def test_nothing_made_is_missing_with_its_reason():
    amounts = made_amounts(UNIT, STEADY_STATE | {"made CH4": 0.0}, 48)
    assert np.isnan(_last(amounts, "overall selectivity to CH4", H8)["value"])
    assert _reason(amounts, "overall selectivity to CH4", H8) == "too little made to tell"


@pytest.mark.parametrize(("made", "reason"), [(1.9, "too little made to tell"), (2.1, "")])
def test_a_denominator_below_twice_its_own_uncertainty_tells_nothing(made, reason):
    # One systematic source moves the 48-cell sum of methane by 1 kmol: u = 1, made = 1.9 or 2.1.
    amounts = made_amounts(UNIT, STEADY_STATE | {"made CH4": made / 48}, 48)
    amounts.systematic[:, 3, 0] = 1 / 48
    assert _reason(amounts, "overall selectivity to CH4", H8) == reason


def test_a_negative_figure_is_shown_as_it_is():
    amounts = made_amounts(UNIT, STEADY_STATE | {"consumed C2H6": -1.0}, 48)
    found = _last(amounts, "conversion", H8)
    assert (found["value"], found["reason"]) == (pytest.approx(-10.0), 0)


def test_coverage_is_against_running_time_and_below_the_least_the_figure_is_missing():
    # 48 cells, 8 of them down, 10 of the other 40 unseen: coverage 30/40 = 0.75; one more: 29/40.
    operating = np.repeat([DOWN, RUNNING], [8, 40])
    amounts = made_amounts(UNIT, STEADY_STATE, 48, operating=operating)
    amounts.kmol[20:30] = np.nan
    found = _last(amounts, "conversion", H8)
    assert (found["coverage"], found["value"]) == (0.75, pytest.approx(50.0))
    amounts.kmol[30] = np.nan
    assert _last(amounts, "conversion", H8)["coverage"] == 29 / 40
    assert _reason(amounts, "conversion", H8) == "too little coverage"


def test_time_before_the_record_is_not_covered():
    amounts = made_amounts(UNIT, STEADY_STATE, 12)
    frame = window_figures(UNIT, amounts, _figures(amounts, "conversion"))[H1]["conversion", "steady"]
    assert frame["coverage"].tolist() == [1 / 6, 2 / 6, 3 / 6, 4 / 6, 5 / 6, *[1.0] * 7]
    assert np.isnan(frame["value"]).tolist() == [True] * 4 + [False] * 8


def test_a_figure_needs_only_its_own_amounts():
    amounts = made_amounts(UNIT, STEADY_STATE, 48)
    amounts.kmol[:, 3] = np.nan
    assert _last(amounts, "conversion", H8)["value"] == pytest.approx(50.0)
    assert _reason(amounts, "overall selectivity to CH4", H8) == "cannot be seen"


def test_a_window_that_is_down_says_so_in_both_modes_and_start_up_only_in_steady():
    down = made_amounts(UNIT, STEADY_STATE, 48, operating=DOWN)
    assert _reason(down, "conversion", H8) == "not running"
    assert np.isnan(_last(down, "conversion", H8)["coverage"])
    starting = made_amounts(UNIT, STEADY_STATE, 48, operating=STARTING)
    assert _reason(starting, "conversion", H8) == ""
    assert _reason(starting, "conversion", H8, "steady") == "not running"


def test_less_than_a_tenth_of_a_window_is_no_running_time():
    # 8 h hold 48 cells; a tenth is 4.8.
    reasons = [
        _reason(
            made_amounts(UNIT, STEADY_STATE, 48, operating=np.repeat([DOWN, RUNNING], [48 - n, n])),
            "conversion",
            H8,
        )
        for n in (4, 5)
    ]
    assert reasons == ["not running", ""]


def test_a_balance_that_did_not_solve_is_the_reason():
    amounts = made_amounts(UNIT, STEADY_STATE, 48)
    amounts.kmol[10:] = np.nan
    failed = np.arange(48) >= 10
    frame = window_figures(UNIT, amounts, _figures(amounts, "conversion"), unsolved=failed)[H8]
    assert REASONS[frame["conversion", "steady", "reason"].iloc[-1]] == "balance did not solve"
    assert _reason(amounts, "conversion", H8) == "too little coverage"


def test_a_result_held_over_three_cells_counts_once():
    # One source of 0.1 kmol per cell on what was fed, at 10 kmol per cell, conversion 50 %: relative 1 %.
    # 8 h hold 48 cells. New in each cell: 1/sqrt(48) %; held for 30 min: 1/sqrt(16) %; each 2 min: five
    # results in a cell; held for longer than the window: 1 %.
    expected = {10: 48, 30: 16, 2: 240, 6000: 1}
    for minutes, results in expected.items():
        amounts = made_amounts(UNIT, STEADY_STATE, 48)
        amounts.random[:, 0, 0, 0] = 0.1**2
        amounts = replace(amounts, hold=(timedelta(minutes=minutes),))
        found = _last(amounts, "conversion", H8)
        assert found["half_width"] == pytest.approx(1.96 * 50 * 0.01 / np.sqrt(results), rel=1e-4)


def test_a_systematic_error_does_not_average_out():
    # 1 % on what was fed stays 1 % of the conversion over any window.
    amounts = made_amounts(UNIT, STEADY_STATE, 144)
    amounts.systematic[:, 0, 0] = 0.1
    for window in UNIT.windows:
        assert _last(amounts, "conversion", window)["half_width"] == pytest.approx(1.96 * 0.5, rel=1e-4)


def test_an_error_common_to_numerator_and_denominator_cancels():
    amounts = made_amounts(UNIT, STEADY_STATE, 48)
    amounts.systematic[:, :, 0] = 0.03 * amounts.kmol
    amounts.random[:, 0] = amounts.kmol[:, :, None] * amounts.kmol[:, None, :] * 0.03**2
    assert _last(amounts, "conversion", H8)["half_width"] == pytest.approx(0.0, abs=1e-5)
    # A make has nothing to cancel with: 3 % systematic, 3 % / sqrt(48) random.
    make = _last(amounts, "make of C2H4", H8)
    assert make["half_width"] / make["value"] == pytest.approx(1.96 * 0.03 * np.sqrt(1 + 1 / 48), rel=1e-4)


def test_a_make_is_per_covered_running_hour_and_tonnes_stand_beside_it():
    # 4 kmol per 10 min of 28.054 kg/kmol: 0.673 t/h. One hour of eight is down, one unseen.
    operating = np.repeat([DOWN, RUNNING], [6, 42])
    amounts = made_amounts(UNIT, STEADY_STATE, 48, operating=operating)
    amounts.kmol[20:26] = np.nan
    row = window_at(UNIT, amounts, _figures(amounts), MIDNIGHT, MIDNIGHT + 8 * HOUR).loc[
        ("make of C2H4", "as operated")
    ]
    assert row["value"] == pytest.approx(24 * 28.054 / 1000)
    assert row["denominator"] == pytest.approx(6.0)
    assert row["numerator"] == pytest.approx(6 * 24 * 28.054 / 1000)


def test_tonnes_are_there_even_where_the_ratio_is_missing():
    amounts = made_amounts(UNIT, STEADY_STATE, 144)
    amounts.kmol[40:] = np.nan
    row = calendar_days(replace(UNIT, time_zone="UTC"), amounts, _figures(amounts)).iloc[0]
    make = row["make of C2H4", "as operated"]
    assert REASONS[int(make["reason"])] == "too little coverage"
    assert make["numerator"] == pytest.approx(40 * 4 * 28.054 / 1000)


def test_the_length_of_the_cell_does_not_change_the_figures():
    # The same rates in cells of 10 min and of 1 min.
    fine = replace(UNIT, cell=timedelta(minutes=1))
    coarse_found = window_figures(
        UNIT, made_amounts(UNIT, STEADY_STATE, 48), _figures(made_amounts(UNIT, STEADY_STATE, 1))
    )
    rows = {name: amount / 10 for name, amount in STEADY_STATE.items()}
    fine_amounts = made_amounts(fine, rows, 480)
    fine_found = window_figures(fine, fine_amounts, _figures(fine_amounts))
    for window in (H1, H8):
        one, other = coarse_found[window].iloc[-1], fine_found[window].iloc[-1]
        assert one.index.equals(other.index)
        np.testing.assert_allclose(one.to_numpy(float), other.to_numpy(float), rtol=1e-12)


def test_a_window_is_labelled_by_its_end_in_utc():
    amounts = made_amounts(UNIT, STEADY_STATE, 6)
    frame = window_figures(UNIT, amounts, _figures(amounts))[H1]
    assert frame.index.name == "end"
    assert frame.index[-1] == pd.Timestamp("2026-03-02T01:00Z")
    assert frame["conversion", "steady", "reason"].dtype == np.int8


def test_one_span_and_the_rolling_window_over_it_agree():
    amounts = _uncertain(144)
    figures = _figures(amounts)
    rolled = window_figures(UNIT, amounts, figures)[H8].iloc[-1]
    spanned = window_at(UNIT, amounts, figures, MIDNIGHT + 16 * HOUR, MIDNIGHT + 24 * HOUR)
    for (figure, mode), row in spanned.iterrows():
        np.testing.assert_allclose(
            row[list(FIELDS)].to_numpy(float), rolled[figure, mode][list(FIELDS)].to_numpy(float), rtol=1e-9
        )


def test_days_are_those_of_the_units_calendar_of_23_and_25_hours():
    # Germany changes clocks on 29 March and 25 October 2026 (Directive 2000/84/EC).
    for month, day, hours in ((3, 29, 23), (10, 25, 25), (6, 15, 24)):
        first = int(datetime(2026, month, day - 2, tzinfo=UTC).timestamp()) * 1_000_000
        amounts = made_amounts(UNIT, STEADY_STATE, 5 * 144, first_us=first)
        frame = calendar_days(UNIT, amounts, _figures(amounts))
        row = frame.loc[f"2026-{month:02}-{day}"].squeeze()
        assert row["make of C2H4", "as operated", "denominator"] == pytest.approx(hours)
        assert row["make of C2H4", "as operated", "coverage"] == 1.0
        assert frame.index.name == "day"
        assert all((one.hour, one.minute) == (0, 0) for one in frame.index)


def test_every_cell_is_in_one_day():
    amounts = made_amounts(UNIT, STEADY_STATE, 40 * 144 + 17, first_us=MIDNIGHT + 5 * HOUR)
    frame = calendar_days(UNIT, amounts, _figures(amounts))
    fed = frame["conversion", "as operated", "denominator"]
    assert fed.sum() == pytest.approx(10.0 * (40 * 144 + 17))
    assert frame["conversion", "as operated", "coverage"].iloc[0] == pytest.approx(18 / 24)


def test_a_day_whose_midnight_the_clock_skips_begins_when_the_clock_goes_on():
    # Chile moves from 24:00 on 5 September 2026 straight to 01:00 (IANA America/Santiago): 23 h.
    first = int(datetime(2026, 9, 5, 12, tzinfo=UTC).timestamp()) * 1_000_000
    hours = np.diff(local_midnights("America/Santiago", first, first + 2 * DAY)) / HOUR
    assert hours.tolist() == [24, 23, 24]


def test_a_hole_in_the_grid_is_refused():
    amounts = made_amounts(UNIT, STEADY_STATE, 12)
    amounts.start[6:] += CELL
    with pytest.raises(ValueError, match="one grid of the unit's cells"):
        window_figures(UNIT, amounts, _figures(amounts))


def test_no_cells_give_no_rows():
    amounts = made_amounts(UNIT, STEADY_STATE, 0)
    assert len(window_figures(UNIT, amounts, _figures(amounts))[H1]) == 0
    assert len(calendar_days(UNIT, amounts, _figures(amounts))) == 0


def test_spans_without_cells_are_not_covered():
    amounts = made_amounts(UNIT, STEADY_STATE, 6)
    edges = np.array([MIDNIGHT - 2 * HOUR, MIDNIGHT - HOUR, MIDNIGHT, MIDNIGHT + HOUR, MIDNIGHT + 2 * HOUR])
    frame = span_figures(UNIT, amounts, _figures(amounts), edges)["conversion", "steady"]
    assert frame["coverage"].tolist() == [0, 0, 1, 0]
    assert frame["value"].tolist() == pytest.approx([np.nan, np.nan, 50.0, np.nan], nan_ok=True)


def test_ninety_five_of_a_hundred_intervals_hold_the_truth():
    # 2,000 days, each with its own errors: random ones held for 30 min and new every 2 min, and four
    # systematic ones; 95 % of the intervals must hold the truth, +-2 % is four standard deviations.
    days, rng = 2000, np.random.default_rng(20260302)
    count, names = days * 144, list(STEADY_STATE)[:4]
    load = np.tile(np.repeat(rng.uniform(0.75, 1.05, 24), 6), days)
    truth = load[:, None] * [10.0, 9.5, 8.2, 0.9]
    slow = np.array([[0.01, 0.0, 0.0, 0.0], [0.009, 0.004, 0.0, 0.0], [0.0, 0.003, 0.012, 0.008]])
    fast = np.array([[0.02, 0.018, 0.0, 0.0], [0.0, 0.0, 0.02, 0.0], [0.0, 0.0, 0.0, 0.03]])
    calibration = np.array(
        [[0.007, 0.007, 0, 0], [0, 0.001, 0, 0], [0, 0, 0.008, 0.004], [0, 0, 0, 0.02]]
    ) * [10.0, 9.5, 8.2, 0.9]
    slow, fast = 2 * slow, 2 * fast
    held = np.repeat(rng.standard_normal((count // 3, 3)), 3, axis=0) @ slow
    quick = rng.standard_normal((count, 3)) @ fast / np.sqrt(5)
    fixed = np.repeat(rng.standard_normal((days, 4)), 144, axis=0) @ calibration
    covariance = np.stack([slow.T @ slow, fast.T @ fast])
    amounts = Amounts(
        names=tuple(names),
        start=MIDNIGHT + np.arange(count) * CELL,
        kmol=truth + load[:, None] * (held + quick + fixed),
        random=load[:, None, None, None] ** 2 * covariance,
        hold=(timedelta(minutes=30), timedelta(minutes=2)),
        systematic=load[:, None, None] * calibration.T,
        sources=("a", "b", "c", "d"),
        operating=np.zeros(count, dtype=np.int8),
    )
    exact = {
        "conversion": 95.0,
        "selectivity on converted": 100 * 8.2 / 9.5,
        "yield on feed": 82.0,
        "overall selectivity to CH4": 8.2 / 0.9,
    }
    for window, frame in window_figures(UNIT, amounts, _figures(amounts, *exact)).items():
        at_end_of_day = frame.iloc[143::144]
        for name, value in exact.items():
            found = at_end_of_day[name, "steady"]
            inside = (np.abs(found["value"] - value) <= found["half_width"]).mean()
            assert 0.93 <= inside <= 0.97, (name, window, inside)


def test_a_few_running_cells_after_time_of_unknown_condition_do_not_pass_for_a_window():
    # 48 cells of ten minutes, 5 of them known to run: 5 / 48 of the window is covered, not all of it.
    operating = np.array([NOT_KNOWN] * 43 + [RUNNING] * 5, np.int8)
    assert idle_in(operating).sum(axis=1).tolist() == [0, 0]
    assert idle_in(np.array([DOWN, STARTING, TURNED_DOWN, RUNNING], np.int8)).sum(axis=1).tolist() == [1, 3]
