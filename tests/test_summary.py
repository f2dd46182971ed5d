"""The monthly summary: ratios of sums, hours and tonnes that add up, stretches, exclusions, comparisons."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, timedelta
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ingest import journal
from ingest.balance import problem_of
from ingest.errors import OutletError, StoreError, UnitFileError
from ingest.ledger import Store
from ingest.parts import instant_us
from ingest.unitfile import load
from monitor import desk
from monitor.figures import figures_of
from monitor.run import run_pass
from monitor.summary import exclusions
from monitor.summary.charge import charge_of
from monitor.summary.differences import CHANGED, PERHAPS, SAME, Level, minus, responses, word
from monitor.summary.making import summarise
from monitor.summary.record import filled, inside, read
from monitor.summary.span import HOUR_US, before, month_span, span_of, year_before
from monitor.summary.tonnes import CONDITIONS
from monitor.windows import TWO_SIDED_95, span_figures, window_at
from tests.amounts_made import STARTING, amounts_between, made_amounts, reaction
from tests.summaries_made import HOUR, STAMP, month_cells, month_of, row, summed, take_in

APRIL = month_cells(2026, 4, "UTC")
WHOLE = "whole span"
SELECTIVITY = "selectivity on converted"


def made(folder: Path, feed: object = 100.0, selectivity: object = 0.86, **more: str):
    """The plant over April 2026, each row a number or one per cell."""
    each = [np.broadcast_to(np.asarray(one, float), len(APRIL)) for one in (feed, selectivity)]
    return take_in(folder, APRIL, *each, **more)


# --- time


@pytest.mark.parametrize(
    ("zone", "month", "hours", "days"),
    [
        ("Europe/Berlin", (2026, 3), 743, 31),  # 31 x 24 - 1: clocks go forward
        ("Europe/Berlin", (2026, 10), 745, 31),  # and back
        ("America/New_York", (2026, 11), 721, 30),
        ("UTC", (2024, 2), 696, 29),
        ("Asia/Kolkata", (2026, 4), 720, 30),
    ],
)
def test_a_month_has_the_hours_of_the_plants_own_calendar(zone, month, hours, days):
    span = month_span(zone, *month)
    assert (span.last_us - span.first_us) / HOUR_US == hours
    assert len(span.days) == days
    assert span.key == f"{month[0]}-{month[1]:02d}"


def test_the_month_before_and_the_same_month_of_the_year_before_are_whole_months():
    span = month_span("Europe/Berlin", 2024, 3)
    assert (before(span).key, year_before(span).key) == ("2024-02", "2023-03")
    assert year_before(month_span("UTC", 2024, 2)).last == date(2023, 2, 28)


def test_before_other_spans_lie_as_many_days():
    span = span_of("UTC", date(2026, 4, 10), date(2026, 4, 12))
    assert before(span).days == [date(2026, 4, 7), date(2026, 4, 8), date(2026, 4, 9)]
    assert span.key == "2026-04-10_2026-04-12"


@pytest.mark.parametrize(("month", "hours"), [(3, 743), (10, 745)])
def test_the_hours_of_a_month_with_a_clock_change_add_up(month, hours, tmp_path):
    cells = month_cells(2026, month, "Europe/Berlin")
    assert len(cells) == hours * HOUR
    feed = np.full(len(cells), 100.0)
    feed[200:212] = 0.0  # two hours down
    feed[400:430] = 40.0  # five turned down
    unit = take_in(tmp_path, cells, feed, np.full(len(cells), 0.86), zone="Europe/Berlin")
    found = month_of(tmp_path, unit, 2026, month)
    told = {item: row(found, "hours", item=item)["hours"] for item in ("calendar", *CONDITIONS)}
    assert told["calendar"] == hours
    assert sum(told[name] for name in CONDITIONS) == pytest.approx(hours, abs=1e-9)
    assert (told["down"], told["turned down"], told["no data"]) == (2, 5, 0)
    days = found.tables["days"]
    assert sorted(set(days["calendar [h]"])) == sorted({24.0, 24 + hours - 744.0})
    assert days["calendar [h]"].sum() == hours


# --- ratios


def test_the_figure_of_a_month_is_a_ratio_of_sums(tmp_path):
    # (20 x 100 x 86 + 10 x 40 x 90) / (20 x 100 + 10 x 40) = 86.667; the mean of days would be 87.33
    full = np.arange(len(APRIL)) < 20 * 144
    unit = made(tmp_path, np.where(full, 100.0, 40.0), np.where(full, 0.86, 0.90))
    told = row(month_of(tmp_path, unit, 2026, 4), "figures", figure=SELECTIVITY)
    assert told["as operated"] == pytest.approx(86.667, abs=5e-4)
    assert told["as operated coverage [%]"] == 100
    assert told["steady"] == pytest.approx(86.0, abs=1e-4)  # turned down at 40 %
    assert (told["as operated remark"], told["steady remark"]) == ("", "")
    assert told["as operated days"] == 30
    assert told["steady days"] == 20


def test_an_hour_of_zero_flow_with_noise_is_down_and_moves_no_ratio(tmp_path):
    # noise of 0.4 kmol/h at 33.2 %: by sums with the hour in it (2300 x 86 + 0.4 x 33.2) / 2300.4 = 85.99, by
    # the mean of hours 83.8; the hour is down
    idle = (np.arange(len(APRIL)) >= 10 * 144 + 60) & (np.arange(len(APRIL)) < 10 * 144 + 66)
    unit = made(tmp_path, np.where(idle, 0.4, 100.0), np.where(idle, 0.332, 0.86))
    found = summed(tmp_path, unit, span_of("UTC", date(2026, 4, 11), date(2026, 4, 11)))
    told = row(found, "figures", figure=SELECTIVITY)
    assert told["as operated"] == pytest.approx(86.0, abs=1e-4)
    assert told["as operated coverage [%]"] == 100
    assert row(found, "hours", item="down")["hours"] == 1
    [left_out] = found.tables["exclusions"].to_dict("records")
    assert (left_out["code"], left_out["hours"], left_out["start"]) == ("DN", 1.0, "2026-04-11 10:00 +00:00")


def test_best_and_worst_day_and_spread_are_those_of_the_days(tmp_path):
    share = 0.86 + 0.001 * (np.arange(len(APRIL)) // 144)  # 86.0 on the 1st, 88.9 on the 30th
    told = row(month_of(tmp_path, made(tmp_path, selectivity=share), 2026, 4), "figures", figure=SELECTIVITY)
    assert told["steady best"] == pytest.approx(88.9, abs=1e-3)
    assert told["steady worst"] == pytest.approx(86.0, abs=1e-3)
    assert (told["steady best day"], told["steady worst day"]) == ("2026-04-30", "2026-04-01")
    assert told["steady spread"] == pytest.approx(0.1 * np.arange(30).std(ddof=1), abs=1e-3)


def test_where_less_is_better_the_best_day_is_the_least(tmp_path):
    share = 0.86 + 0.001 * (np.arange(len(APRIL)) // 144)
    found = month_of(tmp_path, made(tmp_path, selectivity=share), 2026, 4)
    assert row(found, "figures", figure="specific consumption fed")["steady best day"] == "2026-04-30"


def test_a_month_with_five_steady_days_is_called_not_representative(tmp_path):
    running = np.arange(len(APRIL)) < 5 * 144
    unit = made(tmp_path, np.where(running, 100.0, 40.0))
    told = row(month_of(tmp_path, unit, 2026, 4), "figures", figure=SELECTIVITY)
    assert told["steady remark"] == "not representative: 5.0 days"
    assert told["as operated remark"] == ""


def test_a_month_seen_in_part_is_missing_with_its_reason_and_its_tonnes_stay(tmp_path):
    half = slice(0, 15 * 144)
    unit = take_in(tmp_path, APRIL[half], np.full(15 * 144, 100.0), np.full(15 * 144, 0.86))
    found = month_of(tmp_path, unit, 2026, 4)
    told = row(found, "figures", figure=SELECTIVITY)
    assert np.isnan(told["as operated"])
    assert told["as operated remark"] == "too little coverage"
    assert row(found, "hours", item="no data")["hours"] == pytest.approx(360, abs=0.5)
    # 50 kmol/h x 0.86 x 28.054 kg/kmol (CIAAW 2021 abridged: C 12.011, H 1.008) over 360 h
    assert row(found, "tonnes", flow="ethylene made")["tonnes"] == pytest.approx(434.3, rel=2e-3)


def test_a_unit_whose_least_coverage_is_low_is_told_that_the_month_does_not_stand_for_itself(tmp_path):
    half = 15 * 144
    unit = take_in(tmp_path, APRIL[:half], np.full(half, 100.0), np.full(half, 0.86))
    path = tmp_path / "made.toml"
    path.write_text(path.read_text().replace("[unit]\n", "[unit]\nleast_coverage = 0.3\n"))

    told = row(month_of(tmp_path, load(path), 2026, 4), "figures", figure=SELECTIVITY)
    assert told["as operated"] == pytest.approx(86.0, abs=1e-3)
    assert told["as operated remark"] == "not representative: coverage 50 %"
    assert unit.least_coverage == 0.75


def test_raw_routes_to_selectivity_stand_beside_the_reconciled_one(tmp_path):
    found = month_of(tmp_path, made(tmp_path), 2026, 4)
    for route in ("products", "difference"):
        told = row(found, "figures", figure=f"selectivity by raw {route}")
        assert told["as operated"] == pytest.approx(86.0, abs=1e-3)  # error-free readings agree on all routes


# --- tonnes


def test_the_printed_tonnes_of_the_days_add_to_those_of_the_month_to_the_last_digit(tmp_path):
    rng = np.random.default_rng(5)
    found = month_of(tmp_path, made(tmp_path, rng.uniform(70, 130, len(APRIL))), 2026, 4)
    days = found.tables["days"]
    flows = [name for name in days if name.endswith("[t]")]
    assert len(flows) == 4
    for name in flows:
        printed = [Decimal(f"{value:.{found.decimals}f}") for value in days[name]]
        month = Decimal(
            f"{row(found, 'tonnes', flow=name.removesuffix(' [t]'))['tonnes']:.{found.decimals}f}"
        )
        assert sum(printed) == month
    hours = [name for name in days if name.endswith("[h]")]
    assert days[hours[1:]].sum().sum() == days["calendar [h]"].sum() == 720


def test_tonnes_are_those_of_the_feed_by_hand(tmp_path):
    # 720 h x 100 kmol/h x 30.070 kg/kmol (CIAAW 2021 abridged) = 2165.04 t fed, half of it consumed
    found = month_of(tmp_path, made(tmp_path), 2026, 4)
    assert row(found, "tonnes", flow="ethane fed")["tonnes"] == pytest.approx(2165.04, abs=0.01)
    assert row(found, "tonnes", flow="ethane consumed")["tonnes"] == pytest.approx(1082.52, abs=0.01)
    told = row(found, "tonnes", flow="ethane fed")
    # systematic errors of 0.5 %: the feed meter's 0.5 kmol/h and sqrt(0.25^2 + 0.215^2 + 0.035^2) = 0.3316 of
    # the outlets check one another by the carbon balance: 1 / sqrt(1 / 0.5^2 + 1 / 0.3316^2) = 0.2764 of 100
    assert told["±"] == pytest.approx(2165.04 * TWO_SIDED_95 * 0.002764, rel=0.05)


def test_tonnes_of_time_not_seen_are_told_apart(tmp_path):
    kept = np.arange(len(APRIL)) % 144 >= 36  # a quarter of each day is not in the export
    feed = np.full(kept.sum(), 100.0)
    unit = take_in(tmp_path, APRIL[kept], feed, np.full(kept.sum(), 0.86))
    told = row(month_of(tmp_path, unit, 2026, 4), "tonnes", flow="ethane fed")
    assert told["seen in [h]"] + told["not seen in [h]"] == pytest.approx(720)
    assert told["at the mean rate"] == pytest.approx(2165.04, abs=0.03)  # days are rounded
    assert told["tonnes"] == pytest.approx(2165.04 * told["seen in [h]"] / 720, abs=0.02)


# --- stretches


CHARGED = "\n[catalyst]\ncharged = 2026-01-10T06:00:00Z\n"
CHANGE = (
    f'{CHARGED}[[event]]\nat = 2026-04-16T14:00:00+02:00\nkind = "catalyst change"\nname = "new charge"\n'
)


def test_a_catalyst_change_in_mid_month_gives_two_rows_and_the_whole(tmp_path):
    new = np.arange(len(APRIL)) >= 15 * 144 + 72
    unit = made(tmp_path, selectivity=np.where(new, 0.90, 0.80), more=CHANGE)
    found = month_of(tmp_path, unit, 2026, 4)
    stretches = ["charge of 10 Jan 2026", "charge of 16 Apr 2026", WHOLE]
    assert found.tables["figures"]["stretch"].unique().tolist() == stretches
    told = [row(found, "figures", figure=SELECTIVITY, stretch=stretch)["steady"] for stretch in stretches]
    assert told == pytest.approx([80.0, 90.0, 80 * 15.5 / 30 + 90 * 14.5 / 30], abs=1e-3)
    # the day of the change belongs to neither: 15 days before it, 14 after it
    days = [
        row(found, "figures", figure=SELECTIVITY, stretch=stretch)["steady days"] for stretch in stretches
    ]
    assert days == [15, 14, 30]
    tonnes = [
        Decimal(f"{row(found, 'tonnes', flow='ethylene made', stretch=stretch)['tonnes']:.3f}")
        for stretch in stretches
    ]
    assert tonnes[0] + tonnes[1] == tonnes[2]
    since = found.tables["comparisons"].set_index(["stretch", "against", "figure"])
    # each stretch is compared with its own charge alone
    assert since.loc[(stretches[1], "the charge so far", SELECTIVITY), "steady there"] == pytest.approx(
        90.0, abs=1e-3
    )
    assert found.tables["catalyst"]["charge"].tolist() == stretches[:2]
    charged = ["2026-01-10 06:00 +00:00", "2026-04-16 12:00 +00:00"]
    assert found.tables["catalyst"]["charged"].tolist() == charged
    assert found.tables["catalyst"]["age [d]"].tolist() == pytest.approx(
        [96.25, 14.5]
    )  # 10 Jan 06:00, 16 Apr 12:00
    assert found.tables["words"]["text"].tolist() == ["new charge"]


# --- exclusions


def test_what_people_leave_out_leaves_the_steady_figures_and_nothing_else(tmp_path):
    test_run = np.arange(len(APRIL)) // 144 == 9
    unit = made(tmp_path, selectivity=np.where(test_run, 0.50, 0.86))
    before_it = month_of(tmp_path, unit, 2026, 4)
    first, last = pd.Timestamp("2026-04-10T00:00Z"), pd.Timestamp("2026-04-11T00:00Z")
    detail = exclusions.detail_of(first, last, "test")
    line = journal.write(
        tmp_path / "store", who="B. Name", act="exclude", unit="made", subject="", note="=1+1", detail=detail
    )
    found = month_of(tmp_path, unit, 2026, 4)
    told, was = (row(one, "figures", figure=SELECTIVITY) for one in (found, before_it))
    assert told["steady"] == pytest.approx(86.0, abs=1e-3)
    assert was["steady"] == pytest.approx((29 * 86 + 50) / 30, abs=1e-3)
    assert told["as operated"] == was["as operated"] == pytest.approx((29 * 86 + 50) / 30, abs=1e-3)
    assert told["steady days"] == 29
    pd.testing.assert_frame_equal(found.tables["tonnes"], before_it.tables["tonnes"])
    assert row(found, "hours", item="left out by people")["hours"] == 24
    [left_out] = found.tables["exclusions"].to_dict("records")
    assert [left_out[name] for name in ("code", "cause", "by", "note", "hours")] == [
        "TE", "test run", "B. Name", "=1+1", 24.0,
    ]  # fmt: skip
    journal.write(tmp_path / "store", who="B. Name", act="include", unit="made", subject=str(line.number))
    assert month_of(tmp_path, unit, 2026, 4).digest == before_it.digest


def test_an_exclusion_that_ends_before_it_begins_is_refused():
    early, late = pd.Timestamp("2026-04-01T00:00Z"), pd.Timestamp("2026-04-02T00:00Z")
    with pytest.raises(OutletError, match="is not before"):
        exclusions.detail_of(late, early, "data")


# --- comparisons


def test_a_month_is_held_against_last_month_budget_and_guarantee(tmp_path):
    months = month_cells(2026, 3, "UTC").append(APRIL)
    new = np.arange(len(months)) >= 31 * 144
    targets = '\n[budget]\n"selectivity on converted" = 85.0\n[guarantee]\nconversion = 55.0\n'
    unit = take_in(tmp_path, months, np.full(len(months), 100.0), np.where(new, 0.86, 0.84), more=targets)
    found = month_of(tmp_path, unit, 2026, 4)
    table = found.tables["comparisons"].set_index(["against", "figure"])
    assert table.loc[("last month", SELECTIVITY), "steady difference"] == pytest.approx(2.0, abs=1e-3)
    budget = table.loc[("budget", SELECTIVITY)]
    assert budget["steady there"] == 85.0
    assert budget["steady difference"] == pytest.approx(1.0, abs=1e-3)
    half = row(found, "figures", figure=SELECTIVITY)["steady ±"]
    assert budget["steady difference ±"] == pytest.approx(half, rel=1e-6)  # what is stated has no error
    assert table.loc[("guarantee", "conversion"), "steady difference"] == pytest.approx(-5.0, abs=1e-3)
    assert "same month last year" not in table.index.get_level_values(0)  # the store does not go back so far
    last = table.loc[("last month", SELECTIVITY)]
    was = row(month_of(tmp_path, unit, 2026, 3), "figures", figure=SELECTIVITY)["steady ±"]
    assert last["steady difference ±"] == pytest.approx(np.hypot(half, was), rel=1e-6)
    assert last["steady ± if nothing was calibrated"] < 0.2 * half
    assert last["steady word"] == (CHANGED if np.hypot(half, was) < 2.0 else PERHAPS)


def test_the_same_month_of_last_year_is_compared_with(tmp_path):
    last_year = month_cells(2025, 4, "UTC")
    both = last_year.append(APRIL)
    new = np.arange(len(both)) >= len(last_year)
    unit = take_in(tmp_path, both, np.full(len(both), 100.0), np.where(new, 0.86, 0.83))
    table = month_of(tmp_path, unit, 2026, 4).tables["comparisons"].set_index(["against", "figure"])
    told = table.loc[("same month last year", SELECTIVITY)]
    assert told["as operated difference"] == pytest.approx(3.0, abs=1e-3)


def test_a_budget_for_a_figure_that_the_readings_do_not_give_is_refused(tmp_path):
    unit = replace(made(tmp_path), budget=(("share of hydrogen", 1.0),))
    with pytest.raises(UnitFileError, match=r"budget\.share of hydrogen: the unit has no such figure"):
        month_of(tmp_path, unit, 2026, 4)


def level(value: float, half_width: float, response: list[float]) -> Level:
    return Level(np.array([[value]]), np.array([[half_width]]), np.array([[response]]))


def test_common_errors_cancel_in_a_difference_and_others_do_not():
    # responses 3 and 4 (k = 1), random 0: half-width 1.96 x 5; against itself nothing is left
    one = level(80.0, TWO_SIDED_95 * 5, [3.0, 4.0])
    found = minus(one, one)
    assert found.value[0, 0] == 0
    assert found.half_width_same[0, 0] == pytest.approx(0, abs=1e-6)
    assert found.half_width[0, 0] == pytest.approx(TWO_SIDED_95 * 50**0.5)
    other = level(81.0, TWO_SIDED_95 * 5, [3.0, -4.0])
    assert minus(one, other).half_width_same[0, 0] == pytest.approx(TWO_SIDED_95 * 8)


def test_random_errors_of_both_spans_stay_in_a_difference():
    # variance 25 of which 16 common: 9 + 9 stay
    one = level(80.0, TWO_SIDED_95 * 5, [4.0])
    assert minus(one, one).half_width_same[0, 0] == pytest.approx(TWO_SIDED_95 * 18**0.5)


@pytest.mark.parametrize(
    ("size", "told"), [(3.0, CHANGED), (-3.0, CHANGED), (1.0, PERHAPS), (0.2, SAME), (np.nan, "")]
)
def test_a_difference_is_called_one_only_beyond_its_half_width(size, told):
    assert word(size, 2.0, 0.5) == told


def test_the_responses_of_a_span_are_the_systematic_part_of_its_half_width():
    # fed 100, consumed 50; both carry the same 1 % error: the ratio has none; made alone 1 % of 40
    unit = reaction("C2H6", "C2H4", ["CH4"])
    amounts = made_amounts(
        unit, amounts_between(unit, {"C2H6": 100.0}, {"C2H6": 50.0, "C2H4": 40.0, "CH4": 20.0}), 12
    )
    at = {name: place for place, name in enumerate(amounts.names)}
    for name in amounts.names:
        amounts.systematic[:, at[name], 0] = 0.01 * amounts.kmol[:, at[name]]
    figures = figures_of(unit, amounts.names)
    first, last = int(amounts.start[0]), int(amounts.start[-1]) + 1
    found = responses(unit, amounts, figures, first, last)
    half = window_at(unit, amounts, figures, first, last)["half_width"]
    names = [one.name for one in figures]
    assert found[names.index("conversion"), 0, 0] == pytest.approx(0, abs=1e-12)
    for f, name in enumerate(names):
        assert TWO_SIDED_95 * abs(found[f, 0, 0]) == pytest.approx(half[name, "as operated"], abs=1e-9)
    assert found[names.index("make of C2H4"), 0, 0] > 0


# --- the charge


def test_since_the_charge_is_the_ratio_of_sums_over_all_of_its_record(tmp_path):
    months = month_cells(2026, 3, "UTC").append(APRIL)
    rng = np.random.default_rng(3)
    unit = take_in(
        tmp_path, months, rng.uniform(70, 130, len(months)), rng.uniform(0.8, 0.9, len(months)), more=CHARGED
    )
    problem, snapshot = problem_of(unit), Store(tmp_path / "store").snapshot()
    span = (unit.catalyst_charged, pd.Timestamp("2026-05-01T00:00Z"))
    nobody = exclusions.on_word((), month_span("UTC", 2026, 4))
    record = read(snapshot, unit, problem, span, nobody)
    figures = figures_of(unit, record.amounts.names)
    found = charge_of(snapshot, unit, problem, figures, span=span, left_out=nobody)
    edges = np.array([record.cells.start[0], record.cells.start[-1] + 1])
    whole = span_figures(unit, record.amounts, figures, edges).iloc[0]
    for f, figure in enumerate(figures):
        told = whole[figure.name, "as operated"]
        if "closure" in figure.name:
            assert np.isnan(found.level.value[f, 0])
        elif figure.name != "share of unseen":
            assert found.level.value[f, 0] == pytest.approx(
                told["value"], rel=1e-6
            )  # states are single precision
            # sampled days, without the random part that two months have averaged out
            assert found.level.half_width[f, 0] == pytest.approx(told["half_width"], rel=0.1)
    assert found.age_days == pytest.approx(110.75)  # 10 January 06:00 to 1 May
    assert found.on_stream_h == pytest.approx(61 * 24)


# --- records


def test_holes_of_a_record_are_filled_with_cells_that_tell_nothing(tmp_path):
    gap = (np.arange(len(APRIL)) < 1000) | (np.arange(len(APRIL)) >= 1100)
    unit = take_in(tmp_path, APRIL[gap], np.full(gap.sum(), 100.0), np.full(gap.sum(), 0.86))
    snapshot = Store(tmp_path / "store").snapshot()
    nobody = exclusions.on_word((), month_span("UTC", 2026, 4))
    record = read(snapshot, unit, problem_of(unit), (APRIL[0], pd.Timestamp("2026-05-01T00:00Z")), nobody)
    kept = record.cells.start != record.cells.start[1050]
    holed = type(record.cells)(*(getattr(record.cells, name)[kept] for name in record.cells.__slots__))
    whole = filled(holed, 600_000_000)
    assert np.array_equal(whole.start, record.cells.start)
    assert np.isnan(whole.value[1050]).all()
    assert filled(record.cells, 600_000_000) is record.cells


def test_an_instant_lies_in_a_span_from_its_start_to_before_its_end():
    spans = pd.DataFrame(
        {"start": [pd.Timestamp("2026-04-01T00:00Z")], "end": [pd.Timestamp("2026-04-02T00:00Z")]}
    )
    edges = np.array([instant_us(one) for one in (spans["start"][0], spans["end"][0])])
    assert inside(edges, spans).tolist() == [True, False]


def test_a_month_that_is_not_there_is_told_with_what_to_do(tmp_path):
    unit = made(tmp_path)
    with pytest.raises(StoreError, match=r"holds no cells of made in July 2026\n.*outlet run"):
        summarise(tmp_path / "store", unit, month_span("UTC", 2026, 7), STAMP)


def test_making_a_summary_changes_nothing_in_the_store(tmp_path):
    unit = made(tmp_path)
    was = Store(tmp_path / "store").content_hash()
    month_of(tmp_path, unit, 2026, 4)
    assert Store(tmp_path / "store").content_hash() == was


def test_starting_is_no_steady_time(tmp_path):
    assert STARTING == 1  # the code that the next line relies on
    down = (np.arange(len(APRIL)) >= 1000) & (np.arange(len(APRIL)) < 1006)
    text_unit = made(tmp_path, np.where(down, 0.0, 100.0))
    path = tmp_path / "made.toml"
    path.write_text(path.read_text().replace('starting_for = "0h"', 'starting_for = "6h"'))

    unit = load(path)
    run_pass([unit], tmp_path / "store", [], progress=lambda *_: None, settle=timedelta(0))
    found = month_of(tmp_path, unit, 2026, 4)
    assert row(found, "hours", item="starting")["hours"] == 6
    assert set(found.tables["exclusions"]["code"]) == {"DN", "ST"}
    assert text_unit.operating != unit.operating


# --- the healthy period

HEALTHY = "\n[healthy]\nfrom = 2026-03-01T00:00:00Z\nto = {}T00:00:00Z\n"


def since_march(folder: Path, april: float, more: str):
    """March at 86 %, April at another selectivity; the load moves between 80 and 120 kmol/h."""
    months = month_cells(2026, 3, "UTC").append(APRIL)
    new = np.arange(len(months)) >= 31 * 144
    load = 100 + 20 * np.sin(np.arange(len(months)) / 50)
    return take_in(folder, months, load, np.where(new, april, 0.86), more=more)


def test_what_was_lost_to_the_healthy_period_is_the_feed_times_what_the_yield_lacked(tmp_path):
    unit = since_march(tmp_path, 0.84, HEALTHY.format("2026-04-01") + CHARGED)
    found = month_of(tmp_path, unit, 2026, 4)
    told = row(found, "expectation", figure="yield on feed")
    assert told["was"] == pytest.approx(42.0, abs=1e-3)  # half of 84 %
    assert told["expected"] == pytest.approx(43.0, abs=0.01)
    assert abs(told["difference"] + 1.0) <= told["±"] + 1e-3
    # 1 % of what was fed becomes no ethylene, 28.054 kg of it per 30.070 kg of ethane (CIAAW 2021 abridged)
    fed = row(found, "tonnes", flow="ethane fed")["tonnes"]
    assert told["lost [t]"] == pytest.approx(0.01 * fed * 28.054 / 30.070, rel=0.02)
    assert told["outside [%]"] == 0
    assert np.isnan(row(found, "expectation", figure="conversion")["lost [t]"])


def test_a_load_that_was_never_seen_while_healthy_is_told(tmp_path):
    months = month_cells(2026, 3, "UTC").append(APRIL)
    new = np.arange(len(months)) >= 31 * 144
    load = np.where(new, 140.0, 100 + 20 * np.sin(np.arange(len(months)) / 50))
    more = HEALTHY.format("2026-04-01") + CHARGED
    unit = take_in(tmp_path, months, load, np.full(len(months), 0.86), more=more)
    assert row(month_of(tmp_path, unit, 2026, 4), "expectation", figure="conversion")["outside [%]"] == 100


def test_a_change_of_catalyst_ends_what_the_healthy_period_lets_one_expect(tmp_path):
    unit = since_march(tmp_path, 0.84, HEALTHY.format("2026-04-01") + CHANGE)
    table = month_of(tmp_path, unit, 2026, 4).tables["expectation"].set_index(["stretch", "figure"])
    before_it, after = (
        table.loc[(one, "yield on feed")] for one in ("charge of 10 Jan 2026", "charge of 16 Apr 2026")
    )
    assert before_it["expected"] == pytest.approx(43.0, abs=0.01)
    assert np.isnan(after["expected"])
    assert after["remark"] == "the catalyst was changed after the healthy period"


def test_a_healthy_period_with_too_little_on_record_is_told_in_words(tmp_path):
    # from 19 February on, of which the record holds the last four days
    healthy = HEALTHY.format("2026-03-05").replace("2026-03-01", "2026-02-19")
    unit = since_march(tmp_path, 0.84, healthy + CHARGED)
    told = row(month_of(tmp_path, unit, 2026, 4), "expectation", figure="yield on feed")
    assert "days of steady running" in told["remark"]
    assert np.isnan(told["expected"])


def test_without_a_healthy_period_nothing_is_expected(tmp_path):
    assert month_of(tmp_path, made(tmp_path), 2026, 4).tables["expectation"].empty


# --- alerts

WATCH = '\n[[watch]]\nfigure = "selectivity on converted"\nwindow = "1h"\nlow = 80.0\npriority = "high"\n'


def test_alerts_are_told_with_what_people_made_of_them(tmp_path):
    day = np.arange(len(APRIL)) // 144
    low = np.isin(day, (9, 19, 25)) & (np.arange(len(APRIL)) % 144 < 60)  # ten hours on three days
    unit = made(tmp_path, selectivity=np.where(low, 0.70, 0.86), more=WATCH)
    known = desk.known(tmp_path / "store", unit.key)
    assert len(known) == 3
    for alert, cause in zip(known[:2], ("false", "reactor"), strict=True):
        journal.write(
            tmp_path / "store", who="C. Name", act="close", unit=unit.key, subject=alert.id, note="seen",
            detail={"cause": cause},
        )  # fmt: skip
    found = month_of(tmp_path, unit, 2026, 4)
    table = found.tables["alerts"]
    assert table["outcome"].tolist() == ["false", "confirmed", "open"]
    assert table["cause"].tolist() == ["false", "reactor", ""]
    assert table["by"].tolist() == ["C. Name", "C. Name", ""]
    assert [one[:10] for one in table["raised"]] == ["2026-04-10", "2026-04-20", "2026-04-26"]
    assert table["hours"].tolist() == pytest.approx([10, 10, 10], abs=1.1)  # windows of 1 h
    counts = dict(zip(*(found.tables["alert counts"][name] for name in ("item", "number")), strict=True))
    assert counts == {"stood in this span": 3, "raised in it": 3, "confirmed": 1, "false": 1, "open": 1}


def test_an_alert_of_another_month_is_not_told(tmp_path):
    low = np.arange(len(APRIL)) < 60
    unit = made(tmp_path, selectivity=np.where(low, 0.70, 0.86), more=WATCH)
    later = summed(tmp_path, unit, span_of("UTC", date(2026, 4, 10), date(2026, 4, 20)))
    assert later.tables["alerts"].empty
