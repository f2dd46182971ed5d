"""What a unit lets one know: laws, and half-widths by hand on a unit of three flows."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem, problem_of
from ingest.cells import DOWN, RUNNING
from ingest.errors import BalanceError
from monitor.expected import additions, expectations
from monitor.judge import as_table, judge
from monitor.telling import judged
from monitor.typical import arbitrary, as_cells, possible_flows, shown, usual
from tests.balances_made import reconciled
from tests.loops_made import oxide_readings, oxide_text
from tests.plants_made import Seen, unit_text
from tests.test_half_widths import DEMO
from tests.unitfiles_made import loaded

FED, LEFT = 100.0, 10.0


@pytest.fixture
def shift(tmp_path: Path):
    """Butene A in; A and its isomer B out; a meter on the feed and one on the A that is left, 0.5 % each."""
    streams = {"feed": ("in", ["A"]), "product": ("out", ["A", "B"])}
    seen = [
        Seen("molar flow", "feed", FED, "kmol/h"),
        Seen("species flow", "product", LEFT, "kmol/h", "A"),
    ]
    chemistry = 'key_reactant = "A"\nwanted = "B"\nunwanted = []\nkey_element = "C"'
    return loaded(tmp_path, unit_text({"A": "C4H8", "B": "C4H8"}, streams, seen, chemistry))


def test_half_widths_over_a_cell_eight_hours_and_a_day_by_hand(shift):
    # conversion is 1 - left / fed: 90 %; left and fed are each off by 0.5 % for good and by 0.5 % anew in
    # every cell of 10 min, so its variance is 2 (0.1 x 0.5 %)^2 (1 + 1 / cells)
    offered = additions(shift, np.array([FED, LEFT]))
    found = {one.figure: one for one in expectations(shift, np.array([FED, LEFT]), offered)}
    by_hand = [1.959964 * 0.1 * 0.5 * (2 * (1 + 1 / cells)) ** 0.5 for cells in (1, 48, 144)]
    assert found["conversion"].value == pytest.approx(90)
    assert found["conversion"].half_width == pytest.approx(by_hand, rel=1e-5)


def test_a_second_meter_of_the_same_flow_halves_its_variance(shift):
    # as many moles leave as come in, so a meter on the product is a second one for the feed, as good as the
    # first: 2 parts of variance become 1.5, by hand
    read = np.array([FED, LEFT])
    (meter,) = additions(shift, read)
    assert meter.name == "flow meter on product"
    assert meter.quality == "as good as the median flow meter of this unit, 0.5 % random and 0.5 % systematic"
    found = expectations(shift, read, [meter])[0]
    assert found.narrowed_by == "flow meter on product"
    assert found.narrowed / found.half_width[1] == pytest.approx((1.5 / 2) ** 0.5, rel=1e-6)


def test_what_the_balance_fixes_has_no_half_width_and_nothing_narrows_it(shift):
    # the one product takes all the carbon that is converted: the selectivity is 100 %
    read = np.array([FED, LEFT])
    found = {one.figure: one for one in expectations(shift, read, additions(shift, read))}
    assert found["selectivity on converted"].value == pytest.approx(100)
    assert found["selectivity on converted"].half_width == (0, 0, 0)
    assert found["selectivity on converted"].narrowed_by == ""


def test_without_a_usual_reading_of_a_meter_its_figures_have_no_half_width(shift):
    found = {one.figure: one for one in expectations(shift, np.array([np.nan, LEFT]), ())}
    assert np.isnan(found["conversion"].half_width).all()
    (told,) = (
        line
        for line in judged(judge(shift, as_cells(shift, np.array([[np.nan, LEFT]]))))
        if "conversion  " in line
    )
    assert told.endswith("cannot be told at these readings")


def test_a_figure_needs_the_instruments_without_which_it_is_lost(shift):
    found = judge(shift)
    assert found.needs["conversion"] == ("I0", "I1")
    assert found.unchecked == ("I0", "I1")
    assert found.freedom == 0
    assert any(line.endswith("without any one of I0, I1") for line in judged(found))


def test_the_demo_keeps_its_figures_without_any_one_instrument_but_not_its_raw_closures():
    # Raw carbon: the meters and channels of all that holds carbon. Nitrogen has none, and the salt bath's
    # thermometer is outside the balance; the outlet's actual volume flow needs its pressure and temperature.
    found = judge(DEMO)
    assert found.needs["yield on feed"] == ()
    assert {"FI-201", "FI-210", "PI-211", "TI-212", "AI-220 acetone"} <= set(found.needs["carbon closure"])
    assert not {"AI-220 nitrogen", "AI-220 oxygen", "TI-205"} & set(found.needs["carbon closure"])
    assert found.unseen_figures == ()


def test_steam_and_outlet_meter_of_the_demo_are_parallel_whatever_the_readings():
    # by hand: the drier hides the water of the outlet, so both meet in one sum of all flows and nowhere else
    assert judge(DEMO).parallel == (("FI-203", "FI-210"),)


def test_what_the_demo_could_have_besides_is_as_good_as_its_median_channel():
    # by hand from the unit file: every stream has its meter; isobutene of the feed, nitrogen of the air and
    # water of the outlet have no channel; seven channels of ten carry 0.4 % and 0.7 %, all of them 0.002 mol%
    offered = additions(DEMO, arbitrary(DEMO, problem_of(DEMO)))
    assert [one.name for one in offered] == [
        "channel on isobutene in isobutene feed",
        "channel on nitrogen in air",
        "channel on water in outlet",
    ]
    words = "0.4 % + 0.002 mol% random and 0.7 % + 0.002 mol% systematic"
    assert {one.quality for one in offered} == {f"as good as the median channel of this unit, {words}"}
    assert offered[2].instrument.left_out == ()


def test_an_added_channel_is_dry_where_the_others_of_its_stream_are():
    fewer = replace(DEMO, instruments=tuple(one for one in DEMO.instruments if one.name != "AI-220 oxygen"))
    dry = {one.name: one.instrument.left_out for one in additions(fewer, np.ones(len(fewer.instruments)))}
    assert dry["channel on oxygen in outlet"] == ("water",)


@pytest.mark.parametrize("kind", ["demo", "loop"])
def test_an_arbitrary_state_closes_the_balance_with_all_flows_above_zero(kind: str, tmp_path: Path):
    unit = DEMO if kind == "demo" else loaded(tmp_path, oxide_text(oxide_readings()))
    balance = problem_of(unit)
    flow = possible_flows(unit.key, balance)
    np.testing.assert_allclose(balance.conservation @ flow, 0, atol=1e-6)
    assert (flow > 0).all()
    assert flow.sum() == pytest.approx(1000)


def test_a_balance_that_only_negative_flows_could_close_is_refused():
    balance = problem(np.array([[1.0, 1.0]]), np.eye(2))
    with pytest.raises(BalanceError, match=r"made: no flows that are all above zero close the balance"):
        possible_flows("made", balance)


def test_what_instruments_show_is_read_back_as_the_flows():
    # law: readings that agree need no adjustment
    balance = problem_of(DEMO)
    cells = as_cells(DEMO, arbitrary(DEMO, balance)[None])
    states = reconciled(DEMO, balance, cells)
    np.testing.assert_allclose(states.flow_kmol_h[0], possible_flows("demo", balance), rtol=1e-6)
    assert states.objective[0] == pytest.approx(0, abs=1e-9)


def test_usual_readings_are_medians_of_the_time_in_which_the_unit_ran():
    value = np.array([[1.0, np.nan], [3.0, np.nan], [2.0, 5.0], [900.0, 9.0]])
    cells = as_cells(replace(DEMO), value)
    told = replace(cells, operating=np.array([RUNNING, RUNNING, RUNNING, DOWN], dtype=np.int8))
    np.testing.assert_array_equal(usual(told), [2, 5])
    never = replace(cells, value=np.full((4, 2), np.nan))
    assert np.isnan(usual(never)).all()


def test_a_unit_without_channel_or_meter_has_nothing_to_take_as_a_measure(tmp_path: Path):
    # the loop is read by flows of single species alone; usual readings of perfect instruments
    unit = loaded(tmp_path, oxide_text(oxide_readings()))
    found = judge(unit, as_cells(unit, arbitrary(unit, problem_of(unit))[None]))
    assert found.offered == {}
    assert "could be added nothing" in list(judged(found))[-1]
    expected = {one.figure: one for one in found.usual.figures}
    assert np.isfinite(expected["conversion per pass"].half_width).all()


def test_a_judgement_changes_nothing_and_is_laid_out_with_null_for_what_is_not_known(shift):
    record = as_cells(shift, np.array([[FED, LEFT]] * 3))
    kept = record.value.copy()
    table = as_table(judge(shift, record))
    np.testing.assert_array_equal(record.value, kept)
    assert table["usual"]["from"].startswith("1970-01-01T00:00:00")
    closed = next(one for one in table["usual"]["figures"] if one["figure"] == "selectivity on converted")
    assert closed["narrowed"] is None


def test_a_state_that_is_not_seen_shows_nothing():
    balance = problem_of(DEMO)
    value = arbitrary(DEMO, balance)
    flow = possible_flows("demo", balance)
    flow[balance.state.index(("steam", "water"))] = np.nan
    names = [one.name for one in DEMO.instruments]
    read = shown(DEMO, balance, flow, value)
    assert np.isnan(read[names.index("FI-203")])
    assert read[names.index("FI-201")] == pytest.approx(value[names.index("FI-201")])
