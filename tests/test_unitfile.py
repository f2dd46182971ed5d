"""A good unit file becomes the unit it describes."""

from __future__ import annotations

import dataclasses
import math
import tomllib
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from ingest import draft, entries, keys, unitfile, watchrules
from ingest.instrumentrules import KIND_RULES
from ingest.unit import FRACTION_KINDS, KINDS, Prices, Uncertainty, Unit
from monitor.amounts import amount_names
from monitor.figures import figures_of
from tests.keys_reference import reference
from tests.source import ROOT
from tests.unitfiles_made import DEMO, loaded, with_edit

KEYS = unitfile.keys()
DEMO_UNIT = unitfile.load(ROOT / "config/demo.toml")


def instrument(unit: Unit, name: str):
    return next(one for one in unit.instruments if one.name == name)


def test_the_demo_file_describes_the_demo_reactor():
    unit = DEMO_UNIT
    assert (unit.key, unit.time_zone, unit.reactor) == ("demo", "Europe/Berlin", "packed bed")
    assert unit.cell == timedelta(minutes=10)
    assert (unit.key_reactant, unit.wanted, unit.key_element) == ("isobutene", "methacrolein", "C")
    assert [stream.direction for stream in unit.streams] == ["in", "in", "in", "out"]
    assert [one.name for one in unit.species if one.inert] == ["nitrogen", "isobutane"]
    assert unit.catalyst_charged == datetime(2026, 2, 10, 5, tzinfo=UTC)


def test_what_is_left_out_takes_the_default_that_the_table_states():
    assert DEMO_UNIT.windows == tuple(timedelta(hours=hours) for hours in (1, 8, 24, 168))
    assert DEMO_UNIT.least_coverage == 0.75
    assert instrument(DEMO_UNIT, "FI-201").dead_time == timedelta(0)


def test_percent_becomes_a_fraction_and_a_floor_stays_in_the_unit_of_the_reading():
    # the demo file states 0.4 % and 0.002 mol% for its analyzer
    assert instrument(DEMO_UNIT, "AI-220 oxygen").random == Uncertainty(0.004, 0.002)


def test_a_channel_is_an_instrument_that_overrides_its_analyzer():
    plain, own = instrument(DEMO_UNIT, "AI-220 oxygen"), instrument(DEMO_UNIT, "AI-220 acetone")
    assert plain.analyzer == own.analyzer == "AI-220"
    assert plain.species == ("oxygen",)
    assert plain.systematic == Uncertainty(pytest.approx(0.007), 0.002)
    assert own.systematic == Uncertainty(0.02, 0.002)
    assert (own.cycle, own.dead_time) == (timedelta(minutes=6), timedelta(minutes=4))


def test_a_channel_may_be_a_tag_alone_and_may_count_several_species(tmp_path: Path):
    text = with_edit('isobutene = { tag = "AI-220.IBE", range = [0, 5] }', 'isobutene = "AI-220.IBE"')
    text = with_edit(
        'isobutane = { tag = "AI-220.IBA", range = [0, 1] }',
        'C4 = { tag = "AI-220.C4", species = ["isobutene", "isobutane"] }',
        text,
    )
    unit = loaded(tmp_path, text)
    assert instrument(unit, "AI-220 isobutene").tag == "AI-220.IBE"
    assert instrument(unit, "AI-220 isobutene").low == -math.inf
    assert instrument(unit, "AI-220 C4").species == ("isobutene", "isobutane")


def test_dry_leaves_out_water_wet_nothing_and_as_analysed_what_is_named(tmp_path: Path):
    assert instrument(DEMO_UNIT, "AI-220 oxygen").left_out == ("water",)
    wet = loaded(tmp_path, with_edit('basis = "dry"', 'basis = "wet"'))
    assert instrument(wet, "AI-220 oxygen").left_out == ()
    named = 'basis = "as analysed"\nleft_out = ["water", "methacrylic acid"]'
    text = with_edit('basis = "dry"', named).replace('"methacrylic acid" = { tag = "AI-220.MAA"', "#")
    assert instrument(loaded(tmp_path, text), "AI-220 oxygen").left_out == ("water", "methacrylic acid")


def test_water_is_known_by_its_formula_not_by_its_name(tmp_path: Path):
    unit = loaded(tmp_path, DEMO.replace("water", "eau"))
    assert instrument(unit, "AI-220 oxygen").left_out == ("eau",)


def test_a_volume_fraction_is_the_mole_fraction_of_a_gas(tmp_path: Path):
    text = with_edit(
        'kind = "mole fraction"\nunit = "mol%"\nbasis', 'kind = "volume fraction"\nunit = "vol%"\nbasis'
    )
    channel = instrument(loaded(tmp_path, text), "AI-220 oxygen")
    assert (channel.kind, channel.to_base) == ("mole fraction", 0.01)


def test_a_declared_value_has_no_tag_and_the_cell_as_its_timing():
    declared = instrument(DEMO_UNIT, "oxygen in air")
    assert (declared.tag, declared.value, declared.to_base) == (None, 20.95, 0.01)
    assert declared.cycle == DEMO_UNIT.cell


def test_a_reading_becomes_a_base_value_by_offset_and_factor():
    # 25 degC is 298.15 K; one normal cubic metre holds 1 / 22.41397 kmol (CODATA)
    hot, air = instrument(DEMO_UNIT, "TI-212"), instrument(DEMO_UNIT, "FI-202")
    assert (25 + hot.offset) * hot.to_base == pytest.approx(298.15)
    assert 1 / air.to_base == pytest.approx(22.41396954, rel=1e-9)


def test_a_gauge_pressure_is_read_with_its_atmosphere(tmp_path: Path):
    text = with_edit('unit = "kPa" # absolute', 'unit = "barg"\natmosphere = "1.013 bar"')
    gauge = instrument(loaded(tmp_path, text.replace("range = [80, 400]", "range = [-0.2, 3]")), "PI-211")
    assert (1.0 + gauge.offset) * gauge.to_base == pytest.approx(201.3)


def test_a_species_flow_in_mass_becomes_kilomoles_by_its_own_molar_mass(tmp_path: Path):
    text = with_edit(
        'kind = "mass flow"\nstream = "steam"\nunit = "kg/h"',
        'kind = "species flow"\nstream = "steam"\nspecies = ["water"]\nunit = "kg/h"',
    )
    # 2 x 1.008 + 15.999 (CIAAW 2021, abridged)
    assert 1 / instrument(loaded(tmp_path, text), "FI-203").to_base == pytest.approx(18.015)


def test_a_flow_ratio_divides_one_stream_by_another(tmp_path: Path):
    ratio = '[[instrument]]\nname = "FFI-1"\ntag = "FFI-1"\nkind = "flow ratio"\nstream = "air"\n'
    rest = 'per_stream = "steam"\nunit = "mol/mol"\nrandom = {}\nsystematic = { floor = 0.1 }\n'
    text = with_edit(
        "[[analyzer]]", f'{ratio}{rest}cycle = "1min"\nmax_age = "5min"\nsampling = "held"\n\n[[analyzer]]'
    )
    found = instrument(loaded(tmp_path, text), "FFI-1")
    assert (found.stream, found.per_stream, found.to_base) == ("air", "steam", 1.0)


def test_a_shared_error_of_an_analyzer_holds_all_its_channels_and_no_other_instrument():
    channels = tuple(one.name for one in DEMO_UNIT.instruments if one.analyzer == "AI-220")
    assert DEMO_UNIT.shared[0].instruments == channels
    assert len(channels) == 10
    assert DEMO_UNIT.shared[0].relative == pytest.approx(0.003)


def test_a_status_becomes_a_signal_and_what_is_stated_of_an_analyzer_stays_with_it():
    signal = DEMO_UNIT.instruments[-1]
    assert (signal.name, signal.kind, signal.tag) == ("AI-220 status", "signal", "AI-220.CAL")
    assert (signal.max_age, signal.analyzer) == (timedelta(hours=26), None)
    (analyzer,) = DEMO_UNIT.analyzers
    assert (analyzer.status, analyzer.calibrating) == ("AI-220 status", (1.0,))
    assert (analyzer.settle, analyzer.sum_band) == (timedelta(0), (97.0, 103.0))


def test_certificate_and_air_name_channels_by_their_instruments_nitrogen_first(tmp_path: Path):
    stated = (
        "certificate = { oxygen = 5, nitrogen = 83, tolerance_pct = 2 }\n"
        "air_ingress = { oxygen = [1, 6], nitrogen = [60, 75] }\n"
    )
    (analyzer,) = loaded(tmp_path, with_edit("sum_band = [97, 103]\n", stated)).analyzers
    assert analyzer.certificate == (("AI-220 oxygen", 5.0), ("AI-220 nitrogen", 83.0))
    assert (analyzer.tolerance, analyzer.sum_band) == (0.02, None)
    assert analyzer.air == (("AI-220 nitrogen", 60.0, 75.0), ("AI-220 oxygen", 1.0, 6.0))


def test_a_largest_step_may_stand_at_an_instrument_an_analyzer_or_a_channel(tmp_path: Path):
    text = with_edit("sum_band = [97, 103]", "largest_step = 2.0")
    text = with_edit('tag = "AI-220.O2"', 'tag = "AI-220.O2", largest_step = 1.5', text)
    unit = loaded(tmp_path, with_edit("range = [0, 12000]", "range = [0, 12000]\nlargest_step = 300", text))
    asked = ("FI-201", "FI-202", "AI-220 oxygen", "AI-220 acetone")
    assert [instrument(unit, name).largest_step for name in asked] == [300.0, None, 1.5, 2.0]


def test_a_watch_is_named_by_figure_and_window_unless_it_has_a_name(tmp_path: Path):
    assert DEMO_UNIT.watches[0].name == "yield on feed 8 h"
    unit = loaded(
        tmp_path, with_edit('figure = "yield on feed"', 'name = "yield, shift"\nfigure = "yield on feed"')
    )
    assert unit.watches[0].name == "yield, shift"


def test_a_watch_has_limits_unless_it_tests_for_drift(tmp_path: Path):
    drift = '[[watch]]\nfigure = "conversion"\nwindow = "1h"\ntest = "cusum"\npriority = "low"\n'
    limits, watch = DEMO_UNIT.watches[0], loaded(tmp_path, f"{DEMO}\n{drift}").watches[-1]
    assert (limits.test, limits.count, limits.among) == ("limits", 1, 1)
    assert (watch.name, watch.test, watch.low, watch.high) == ("conversion 1 h cusum", "cusum", None, None)
    assert (watch.shift_pct, watch.false_alarm_interval, watch.side) == (0.5, timedelta(days=60), None)


def test_the_healthy_period_names_its_span_and_the_operating_point():
    healthy = DEMO_UNIT.healthy
    assert healthy is not None
    assert healthy.first == datetime(2026, 3, 1, 23, tzinfo=UTC)
    assert healthy.last == datetime(2026, 3, 26, 23, tzinfo=UTC)
    assert healthy.operating_point == ("TI-205", "FI-202", "FI-203")


def test_events_come_in_the_order_of_time_and_a_calibration_may_name_its_instrument(tmp_path: Path):
    early = '[[event]]\nat = 2026-03-05T08:00:00Z\nkind = "note"\nname = "filter changed"\n'
    events = loaded(tmp_path, f"{DEMO}\n{early}").events
    assert [event.kind for event in events] == ["note", "planned", "calibration"]
    assert [event.instrument for event in events] == [None, None, "AI-220"]
    channel = with_edit('instrument = "AI-220"', 'instrument = "AI-220 oxygen"')
    assert loaded(tmp_path, channel).events[-1].instrument == "AI-220 oxygen"


def test_sections_that_are_optional_may_be_left_out(tmp_path: Path):
    text = DEMO[: DEMO.index("[[shared]]")]
    unit = loaded(tmp_path, text)
    assert (unit.shared, unit.operating, unit.catalyst_charged, unit.watches) == ((), None, None, ())
    assert unit.exports.missing_words == ()


def test_a_unit_that_is_never_turned_down_has_that_limit_where_it_is_down(tmp_path: Path):
    unit = loaded(tmp_path, with_edit("turned_down_below = 4000\n", ""))
    assert unit.operating is not None
    assert unit.operating.turned_down_below == unit.operating.down_below == 1000


def test_windows_come_in_order_of_length(tmp_path: Path):
    unit = loaded(
        tmp_path, with_edit('cell = "10min"', 'cell = "10min"\nwindows = ["24h", "8h", "1h", "2h"]')
    )
    assert unit.windows == tuple(timedelta(hours=hours) for hours in (1, 2, 8, 24))


def test_a_byte_order_mark_and_line_ends_of_windows_change_nothing(tmp_path: Path):
    path = tmp_path / "demo.toml"
    path.write_bytes(b"\xef\xbb\xbf" + DEMO.replace("\n", "\r\n").encode())
    assert unitfile.load(path) == DEMO_UNIT


def test_the_order_of_sections_changes_nothing_but_the_order_of_instruments(tmp_path: Path):
    at = DEMO.index("[[analyzer]]"), DEMO.index("[[shared]]")
    moved = DEMO[: at[0]] + DEMO[at[1] :] + "\n" + DEMO[at[0] : at[1]]
    assert dataclasses.replace(loaded(tmp_path, moved), key="demo") == DEMO_UNIT


def test_the_unit_cannot_be_changed():
    with pytest.raises(dataclasses.FrozenInstanceError, match="cannot assign to field 'cell'"):
        DEMO_UNIT.cell = timedelta(hours=1)  # type: ignore[misc]


def test_the_figures_a_watch_may_name_are_the_figures_there_are():
    read, problems = draft.read(unitfile.parse(ROOT / "config/demo.toml"))
    there = {figure.name for figure in figures_of(DEMO_UNIT, amount_names(DEMO_UNIT))}
    assert not problems
    assert there <= set(watchrules.figure_names(read))
    # hydrogen and oxygen close over water, which this reactor's dry analyzer does not read
    assert set(watchrules.figure_names(read)) - there <= {"hydrogen closure", "oxygen closure"}


def test_every_kind_has_its_row_of_keys():
    assert set(KIND_RULES) == {*KINDS, "volume fraction"}
    assert all(KIND_RULES[kind].needs[:1] == ("stream",) for kind in FRACTION_KINDS)


def test_every_key_has_a_sentence_an_example_and_a_reader():
    assert len({row.name for row in KEYS}) == len(KEYS)
    for row in KEYS:
        assert row.sentence, row.name
        assert row.example, row.name
        assert row.form in {*entries.FORMS, *keys.NESTED}, row.name


@pytest.mark.parametrize("row", KEYS, ids=lambda row: row.name)
def test_the_example_of_a_key_is_read_without_complaint(row: keys.Key):
    entry, problems = entries.read_table(row.section, tomllib.loads(f"{row.key} = {row.example}"), "here")
    assert not [problem for problem in problems if problem.where.startswith(f"here.{row.key}")]
    assert entry.get(row.key) is not None


def test_the_reference_of_keys_is_the_table_of_keys():
    # after a change: python -m tests.keys_reference > config/README.md
    assert (ROOT / "config/README.md").read_text(encoding="utf-8") == reference()


def test_budget_and_guarantee_are_numbers_by_figure():
    assert dict(DEMO_UNIT.budget)["yield on feed"] == 83.0
    assert dict(DEMO_UNIT.guarantee) == {"yield on feed": 80.0, "conversion": 95.0}


def test_prices_are_read_as_they_are_stated_and_may_be_left_out(tmp_path):
    assert DEMO_UNIT.prices == Prices("EUR", 1.6, 0.9)
    stated = '[prices] # invented; they tell what a loss is worth\ncurrency = "EUR"\n'
    without = with_edit(f"{stated}wanted_per_kg = 1.60\nkey_reactant_per_kg = 0.90\n", "")
    assert loaded(tmp_path, without).prices is None
