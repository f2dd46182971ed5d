"""What a practitioner tries on the first day, as a user meets it: a unit file and an export in, figures out.

Answers are hand arithmetic on the cases stated beside them (common practice, no source, unless said). Some of
these trials are made elsewhere, where the part that answers them is tested; `ELSEWHERE` names those tests.
"""

from __future__ import annotations

import ast
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ingest.errors import UnitFileError
from ingest.ledger import Store
from ingest.unitfile import load
from monitor.layout import figure_stage, unflat
from monitor.run import run_pass
from monitor.windows import REASONS
from tests.plants_made import START, Seen, unit_text, work_out
from tests.source import ROOT
from tests.test_raw import CHEMISTRY, FED, FORMULAS, LEFT

ELSEWHERE = {
    "one channel of case E reads 1 % high: closures": (
        "test_raw.py::test_one_percent_on_the_unconverted_reactant_hides_in_the_closure_and_shows_in_the_converted_one"
    ),
    "one channel of case E reads 1 % high: suspects": (
        "test_suspects.py::test_a_sick_reading_of_the_key_reactant_makes_its_inlet_and_outlet_one_set_of_suspects"
    ),
    "a component is not on the list: its sum": (
        "test_checks.py::test_a_sum_that_is_constant_to_rounding_cannot_test_a_list_that_lacks_a_component"
    ),
    "1 % of air leaks into the sample": (
        "test_checks.py::test_without_the_nitrogen_tie_a_leak_of_air_moves_conversion_by_one_point_and_not_to_69_percent"
    ),
    "calibration gas, then stuck": (
        "test_checks.py::test_calibration_for_20_minutes_then_3_hours_stuck_move_no_average"
    ),
    "12 min of dead time are not declared": (
        "test_lag.py::test_a_feed_step_under_an_undeclared_dead_time_is_shown_as_it_reads_and_the_lag_is_suggested"
    ),
    "a spare pair disagrees": (
        "test_suspects.py::test_a_spare_pair_of_analyzers_that_disagree_is_tested_and_each_keeps_its_own_uncertainty"
    ),
    "a ratio given inverted": (
        "test_figures.py::test_the_selectivity_with_the_products_exchanged_is_the_reciprocal"
    ),
    "a meter read with a fixed design": (
        "test_differential_pressure.py::test_a_meter_of_18_in_a_gas_of_20_reads_5_4_percent_too_many_moles"
    ),
    "a weight yield read as a molar one": (
        "test_figures.py::test_weight_yield_of_maleic_anhydride_is_not_its_molar_yield"
    ),
}  # fmt: skip


def test_the_trials_that_are_made_elsewhere_are_made_there():
    for place in ELSEWHERE.values():
        file, name = place.split("::")
        tree = ast.parse((ROOT / "tests" / file).read_text(encoding="utf-8"))
        assert name in {node.name for node in tree.body if isinstance(node, ast.FunctionDef)}, place


# --- one pass over exports that move


def passed(folder: Path, text: str, export: str, hours: int) -> pd.DataFrame:
    """Stored figures of one window after one pass: index end, columns (figure, mode, field)."""
    unit_path, export_path = folder / "made.toml", folder / "export.csv"
    unit_path.write_text(text)
    export_path.write_text(export)
    unit = load(unit_path)
    result = run_pass([unit], folder / "store", [export_path], progress=lambda *_: None, settle=timedelta(0))
    assert not result.set_aside
    assert [one.status for one in result.exports] == ["taken"]
    return stored(folder, hours)


def stored(folder: Path, hours: int) -> pd.DataFrame:
    """Figures of a window in the store that `passed` has filled."""
    table = Store(folder / "store").read("made", figure_stage(timedelta(hours=hours)))
    return unflat(table.to_pandas(ignore_metadata=True).set_index("end")).sort_index(axis=1)


FLOOR = ("floor = 1e-9", "floor = 0.01")  # for plants in which a reading is zero
ETHANE = {"ethane": "C2H6", "ethylene": "C2H4", "acetylene": "C2H2", "hydrogen": "H2"}
ETHANE_STREAMS = {"feed": ("in", ["ethane"]), "outlet": ("out", list(ETHANE))}
ETHANE_CHEMISTRY = 'key_reactant = "ethane"\nwanted = "ethylene"\nunwanted = ["acetylene"]'


def ethane_plant(*extra: str, windows: str, zone: str = "UTC", timing: str = "") -> str:
    """Ethane to ethylene and acetylene, hydrogen unread: tag T0 of the feed, T1 to T3 of the outlet."""
    seen = [
        Seen("species flow", stream, 0.0, "kmol/h", name)
        for stream, name in (("feed", "ethane"), *(("outlet", one) for one in list(ETHANE)[:3]))
    ]
    text = unit_text(ETHANE, ETHANE_STREAMS, seen, ETHANE_CHEMISTRY)
    text = text.replace('cell = "10min"\n', f'cell = "10min"\nwindows = {windows}\n')
    text = text.replace('time_zone = "UTC"', f'time_zone = "{zone}"').replace(*FLOOR)
    if timing:
        text = text.replace('max_age = "30min"\nsampling = "held"', timing)
    return "\n".join([text, *extra])


def half_converted(feed: np.ndarray, selectivity: np.ndarray) -> np.ndarray:
    """Flows of T0 to T3; of the half that is converted a share becomes ethylene, the rest acetylene."""
    converted = feed / 2
    return np.column_stack([feed, converted, converted * selectivity, converted * (1 - selectivity)])


def wide(stamps: list[str], values: np.ndarray, *, separator: str = ",", decimal: str = ".") -> str:
    header = separator.join(["time", *(f"T{i}" for i in range(values.shape[1]))])
    rows = [
        separator.join([stamp, *(f"{value:.6f}".replace(".", decimal) for value in row)])
        for stamp, row in zip(stamps, values, strict=True)
    ]
    return "\n".join([header, *rows]) + "\n"


def each_ten_minutes(count: int) -> list[str]:
    """Stamps in the middle of the cells from START on, so that each held result stands for its own cell."""
    stamps = pd.date_range(START + pd.Timedelta(minutes=5), periods=count, freq="10min")
    return [f"{stamp:%Y-%m-%dT%H:%M:%S}Z" for stamp in stamps]


LOAD = """
[operating]
load = "I0"
down_below = 5
running_above = 10
turned_down_below = 60
starting_for = "0h"
"""


def test_twenty_days_at_full_load_and_ten_at_40_percent_weigh_by_what_was_converted(tmp_path):
    # (20 x 100 x 86 + 10 x 40 x 90) / (20 x 100 + 10 x 40) = 86.667; the mean of days would be 87.33
    full = np.arange(31 * 144) < 20 * 144  # a day more than the window, which then lies within the record
    values = half_converted(np.where(full, 100.0, 40.0), np.where(full, 0.86, 0.90))
    text = ethane_plant(LOAD, windows='["1h", "30d"]')
    days = passed(tmp_path, text, wide(each_ten_minutes(31 * 144), values), 30 * 24)
    told = days.loc[START + pd.Timedelta(days=30)]["selectivity on converted"]
    assert told["as operated", "value"] == pytest.approx(86.667, abs=5e-4)
    assert told["as operated", "coverage"] == 1
    assert told["steady", "value"] == pytest.approx(86.0, abs=1e-4)
    assert told["steady", "coverage"] == 1  # of its own running time


def test_an_hour_of_zero_flow_with_noise_is_down_and_moves_neither_ratio_nor_coverage(tmp_path):
    # Noise about 0.4 of 100 kmol/h whose own ratio is 33.2: the mean of hours would be (23 x 86 + 33.2) / 24
    # = 83.8, and the ratio of sums 85.99; but the hour is down.
    idle = (np.arange(144) >= 60) & (np.arange(144) < 66)
    values = half_converted(np.where(idle, 0.4, 100.0), np.where(idle, 0.332, 0.86))
    text = ethane_plant(LOAD, windows='["1h", "24h"]')
    days = passed(tmp_path, text, wide(each_ten_minutes(144), values), 24)
    told = days.loc[START + pd.Timedelta(hours=24)]["selectivity on converted", "as operated"]
    assert told["value"] == pytest.approx(86.0, abs=1e-4)
    assert told["coverage"] == 1
    hour = stored(tmp_path, 1).loc[START + pd.Timedelta(hours=11)]["selectivity on converted", "as operated"]
    assert REASONS[int(hour["reason"])] == "not running"


def test_43_stored_points_of_a_day_give_the_mean_of_the_day_not_of_the_points(tmp_path):
    # Stored on change: 86 all day but for 40 min, down and up in 1 min each, 39 min deep. The day's mean is
    # 84.3 when it is deep by (86 - 84.3) x 1440 / 39 = 62.769; the points' is (26 x 86 + 17 x 23.231) / 43.
    minutes = np.concatenate([np.linspace(0, 600, 13), np.linspace(601, 639, 17), np.linspace(640, 1440, 13)])
    made = np.where((minutes > 600) & (minutes < 640), 86 - 62.769231, 86.0)
    assert len(made) == 43
    assert made.mean() == pytest.approx(61.18, abs=0.01)
    stamps = [f"{START + pd.Timedelta(minutes=float(m)):%Y-%m-%dT%H:%M:%S.%fZ}" for m in minutes]
    # 100 kmol/h of ethane of which nothing is left: ethylene as stored, acetylene the rest
    values = np.column_stack([np.full(43, 100.0), np.zeros(43), made, 100 - made])
    text = ethane_plant(windows='["1h", "24h"]', timing='max_age = "2h"\nsampling = "interpolated"')
    days = passed(tmp_path, text, wide(stamps, values), 24)
    told = days.loc[START + pd.Timedelta(hours=24)]["selectivity on converted", "as operated"]
    assert told["value"] == pytest.approx(84.3, abs=1e-3)
    assert told["coverage"] == 1


def test_the_day_of_25_hours_has_every_interval_once_where_its_stamp_says_it_ends(tmp_path):
    # Europe/Berlin, 25 October 2026, decimal commas, means of ten minutes stamped at their end. The ethylene
    # made is 10 kmol/h, but 22 and 34 in the two hours called 02: (23 x 10 + 22 + 34) / 25 = 11.44. With one
    # of them lost it would be 10.5 or 11.0; shifted by one interval the first would read 20 or 24.
    ends = pd.date_range("2026-10-25 00:00", "2026-10-26 00:00", freq="10min", tz="Europe/Berlin")
    assert len(ends) == 151  # the first closes the day before
    hour = (np.arange(151) - 1) // 6
    made = np.select([hour == 2, hour == 3], [22.0, 34.0], 10.0)
    values = np.column_stack([np.full(151, 100.0), 98.5 - made, made, np.full(151, 1.5)])
    timing = 'max_age = "30min"\nsampling = "mean at end"'
    text = ethane_plant(windows='["1h", "25h"]', zone="Europe/Berlin", timing=timing)
    export = wide([f"{end:%d.%m.%Y %H:%M}" for end in ends], values, separator=";", decimal=",")
    per_kmol_h = (2 * 12.011 + 4 * 1.008) / 1000
    day = passed(tmp_path, text, export, 25).loc[ends[-1].tz_convert("UTC")][
        "make of ethylene", "as operated"
    ]
    assert day["value"] / per_kmol_h == pytest.approx(11.44, rel=1e-5)
    assert day["coverage"] == 1
    hours = stored(tmp_path, 1)["make of ethylene", "as operated", "value"] / per_kmol_h
    for end, expected in (("02:00+02:00", 10), ("02:00+01:00", 22), ("03:00+01:00", 34), ("04:00+01:00", 10)):
        assert hours[pd.Timestamp(f"2026-10-25T{end}")] == pytest.approx(expected, rel=1e-5)


def test_the_first_interval_of_a_record_counts_where_its_stamp_says_it_ends(tmp_path):
    # the first mean, stamped 00:10, stands for 00:00 to 00:10: six means make a whole hour by 01:00
    ends = pd.date_range("2026-03-02 00:10", periods=6, freq="10min", tz="UTC")
    values = np.tile([100.0, 88.5, 10.0, 1.5], (6, 1))
    timing = 'max_age = "30min"\nsampling = "mean at end"'
    text = ethane_plant(windows='["1h"]', zone="UTC", timing=timing)
    export = wide([f"{end:%Y-%m-%dT%H:%M:%SZ}" for end in ends], values)
    hour = passed(tmp_path, text, export, 1).iloc[-1]["make of ethylene", "as operated"]
    assert hour["coverage"] == 1


# --- one steady state


def epoxidation(folder, fed=FED, left=LEFT, **sick):
    """Judged figures of case E, some outlet readings multiplied by a factor."""
    streams = {"cycle gas": ("in", list(fed)), "outlet": ("out", list(left))}
    seen = []
    for stream, flows in (("cycle gas", fed), ("outlet", left)):
        total = sum(flows.values())
        seen.append(Seen("molar flow", stream, total, "kmol/h"))
        for name, flow in flows.items():
            factor = sick.get(name, 1.0) if stream == "outlet" else 1.0
            seen.append(Seen("mole fraction", stream, 100 * flow / total * factor, "mol%", name))
    text = unit_text(FORMULAS, streams, seen, CHEMISTRY).replace(*FLOOR)
    return work_out(folder, text, [one.value for one in seen])[1]


def test_one_percent_on_the_unconverted_reactant_neither_flatters_selectivity_nor_moves_conversion(tmp_path):
    # By the readings alone 2 x 2.408 of 2 x (28 - 25.452) carbon is 94.5 %, and the conversion 9.1 %; the
    # products fix both at 86 and 10 %, within what is said of them.
    told = epoxidation(tmp_path, ethylene=1.01)
    assert round(100 * 2.408 / (28 - 25.452), 1) == 94.5
    for figure, true in (("selectivity on converted", 86.0), ("conversion", 10.0)):
        assert told["value"][figure] == pytest.approx(true, rel=0.01)
        assert abs(told["value"][figure] - true) < told["half_width"][figure]


def test_a_product_that_is_on_no_list_shows_as_carbon_that_is_missing(tmp_path):
    # 100 ethane in, 60 out, 36 ethylene, 1 acetylene and 1 benzene that nobody lists: of 80 carbon converted
    # 74 are found, 92.5 %, while the plain closure says (120 + 74) / 200 = 97.0 %.
    made = {"ethane": 60.0, "ethylene": 36.0, "acetylene": 1.0}
    seen = [
        Seen("species flow", "feed", 100.0, "kmol/h", "ethane"),
        *(Seen("species flow", "outlet", flow, "kmol/h", name) for name, flow in made.items()),
    ]
    text = unit_text(ETHANE, ETHANE_STREAMS, seen, ETHANE_CHEMISTRY)
    told = work_out(tmp_path, text, [one.value for one in seen])[1]["value"]
    assert told["converted closure"] == pytest.approx(92.5, abs=1e-9)
    assert told["carbon closure"] == pytest.approx(97.0, abs=1e-9)


NORMAL_M3 = 8.31446261815324 * 273.15 / 101.325  # of a kmol at 0 degC and 101.325 kPa (CODATA R)


def wet_in_dry_out() -> tuple[str, list[float]]:
    """Case E by the flow of the wet inlet at normal conditions, and an outlet analysed dry without a flow."""
    streams = {"cycle gas": ("in", list(FED)), "outlet": ("out", list(LEFT))}
    dry = sum(LEFT.values()) - LEFT["water"]
    inlet = [Seen("mole fraction", "cycle gas", flow, "mol%", name) for name, flow in FED.items()]
    outlet = [
        Seen("mole fraction", "outlet", 100 * flow / dry, "mol%", name)
        for name, flow in LEFT.items()
        if name != "water"
    ]
    reference = 'reference = "0 degC, 101.325 kPa"\n'
    seen = [Seen("volume flow", "cycle gas", 100 * NORMAL_M3, "m3/h", extra=reference), *inlet, *outlet]
    head, _, rest = unit_text(FORMULAS, streams, seen, CHEMISTRY).partition(f'name = "I{1 + len(inlet)}"')
    text = head + f'name = "I{1 + len(inlet)}"' + rest.replace('basis = "wet"', 'basis = "dry"')
    return text, [one.value for one in seen]


def test_a_dry_outlet_and_a_wet_inlet_give_the_conversion_once_both_are_stated(tmp_path):
    # percent against percent, 25.2 of 97.712 dry to 28 of 100 wet: 7.9 %; by the balance 10.0 %
    text, values = wet_in_dry_out()
    assert round(100 * (1 - 25.2 / 0.97712 / 28), 1) == 7.9
    told = work_out(tmp_path, text, values)[1]["value"]
    assert told["conversion"] == pytest.approx(10.0, abs=1e-6)
    assert told["selectivity on converted"] == pytest.approx(86.0, abs=1e-5)


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ('basis = "dry"\n', r"basis: missing, and 'outlet' holds water; write basis = \"dry\", \"wet\""),
        (
            'reference = "0 degC, 101.325 kPa"\n',
            r"reference: missing for kind 'volume flow'.*write reference = one of \"0 degC",
        ),
    ],
)
def test_without_basis_or_reference_the_unit_file_is_refused_with_what_to_write(line, told, tmp_path):
    path = tmp_path / "made.toml"
    path.write_text(wet_in_dry_out()[0].replace(line, "", 1))
    with pytest.raises(UnitFileError, match=told):
        load(path)


def test_a_selective_hydrogenation_that_loses_its_olefin_is_shown_with_its_negative_selectivity(tmp_path):
    # 1 of 1.2 acetylene converted while ethylene falls from 98 to 97.65 and ethane rises by 1.35: -35 %;
    # hydrogen by the atoms: 2 x 1 + 4 x 0.35 - 6 x 1.35 = -4.7, so 2.35 of 3 are taken up
    formulas = {"acetylene": "C2H2", "ethylene": "C2H4", "ethane": "C2H6", "hydrogen": "H2"}
    fed = {"acetylene": 1.2, "ethylene": 98.0, "hydrogen": 3.0}
    left = {"acetylene": 0.2, "ethylene": 97.65, "ethane": 1.35, "hydrogen": 0.65}
    streams = {"feed": ("in", list(fed)), "outlet": ("out", list(left))}
    seen = [
        Seen("species flow", stream, flow, "kmol/h", name)
        for stream, flows in (("feed", fed), ("outlet", left))
        for name, flow in flows.items()
    ]
    chemistry = 'key_reactant = "acetylene"\nwanted = "ethylene"\nunwanted = ["ethane"]'
    text = unit_text(formulas, streams, seen, chemistry)
    told = work_out(tmp_path, text, [one.value for one in seen])[1]
    assert told["value"]["conversion"] == pytest.approx(100 / 1.2, abs=1e-6)
    ethylene = 2 * 12.011 + 4 * 1.008
    assert told["value"]["make of ethylene"] == pytest.approx(-0.35 * ethylene / 1000, rel=1e-5)
    assert told["value"]["selectivity on converted"] == pytest.approx(-35.0, abs=1e-5)
    assert told["reason"]["selectivity on converted"] == 0


def test_inlet_and_outlet_exchanged_give_a_negative_conversion_and_make_not_zero(tmp_path):
    # (25.2 - 28) / 25.2 = -11.1 %; 2.408 kmol/h of oxide are used up. The selectivity stays and cannot tell.
    told = epoxidation(tmp_path, fed=LEFT, left={**FED, "oxide": 0.0})["value"]
    assert told["conversion"] == pytest.approx(100 * (25.2 - 28) / 25.2, abs=1e-6)
    assert told["make of oxide"] == pytest.approx(-2.408 * (2 * 12.011 + 4 * 1.008 + 15.999) / 1000, rel=1e-6)
    assert told["selectivity on converted"] == pytest.approx(86.0, abs=1e-5)


def test_nothing_made_is_missing_with_its_reason_and_neither_infinite_nor_zero(tmp_path):
    left = {"ethane": 100.0, "ethylene": 0.0, "acetylene": 0.0}
    seen = [
        Seen("species flow", "feed", 100.0, "kmol/h", "ethane"),
        *(Seen("species flow", "outlet", flow, "kmol/h", name) for name, flow in left.items()),
    ]
    text = unit_text(ETHANE, ETHANE_STREAMS, seen, ETHANE_CHEMISTRY).replace(*FLOOR)
    told = work_out(tmp_path, text, [one.value for one in seen])[1]
    assert told["value"]["conversion"] == pytest.approx(0.0, abs=1e-6)
    for figure in (
        "overall selectivity to acetylene",
        "selectivity on converted",
        "specific consumption fed",
    ):
        assert np.isnan(told["value"][figure])
        assert REASONS[int(told["reason"][figure])] == "too little made to tell"


def test_a_closure_is_judged_by_its_own_uncertainty_and_the_converted_one_stands_beside_it(tmp_path):
    # Case E by species flows, each 0.5 % random and 0.5 % systematic: six results in an hour leave u =
    # 0.5 % x sqrt(1 + 1/6) = 0.540 % of each. Carbon without ballast: 50.4 + 1.784 + 4.816 = 57 out, 57 in.
    # Both together: sqrt(50.4^2 + 1.784^2 + 4.816^2 + 56^2 + 1^2) x 0.540 % = 75.52 x 0.540 %. The closure is
    # told to 1.96 x 75.52 / 57 x 0.540 % = 1.40 %, so that 98 to 102 % is always green; of the 5.6 converted
    # that is 1.96 x 75.52 / 5.6 x 0.540 % = 14.3 %.
    streams = {"cycle gas": ("in", list(FED)), "outlet": ("out", list(LEFT))}
    seen = [
        Seen("species flow", stream, flow, "kmol/h", name)
        for stream, flows in (("cycle gas", FED), ("outlet", LEFT))
        for name, flow in flows.items()
    ]
    text = unit_text(FORMULAS, streams, seen, CHEMISTRY)
    told = work_out(tmp_path, text, [one.value for one in seen])[1]
    each = 0.5 * np.sqrt(1 + 1 / 6)
    carbon = np.sqrt(50.4**2 + 1.784**2 + 4.816**2 + 56**2 + 1)
    assert told["value"]["carbon closure"] == pytest.approx(100, abs=1e-8)
    assert told["half_width"]["carbon closure"] == pytest.approx(1.96 * carbon / 57 * each, rel=1e-4)
    assert told["half_width"]["converted closure"] == pytest.approx(1.96 * carbon / 5.6 * each, rel=1e-4)
