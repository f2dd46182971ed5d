"""How each kind of instrument sees the state, and what its uncertainty becomes in base units."""

from __future__ import annotations

import dataclasses
from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest

from ingest import instruments
from ingest.balance import state_of
from ingest.instruments import balance_columns, measured
from ingest.unit import BALANCE_KINDS, Uncertainty
from ingest.unitfile import load
from tests.balances_made import made_flows

UNIT = load(Path("config/demo.toml"))
STATE = state_of(UNIT)
FLOW = made_flows(STATE, 1, 1)[:, 0]
NONE = Uncertainty(0.0, 0.0)


def flow_of(stream, *species):
    return sum(
        n
        for (s, name), n in zip(STATE, FLOW, strict=True)
        if s == stream and (not species or name in species)
    )


def seen(**changes):
    """What one instrument of the outlet, made from the oxygen channel, shows at the flows."""
    base = next(one for one in UNIT.instruments if one.name == "AI-220 oxygen")
    one = dataclasses.replace(base, name="probe", **changes)
    upper, lower = instruments.rows(dataclasses.replace(UNIT, instruments=(one,)), STATE)
    below = lower[0] @ FLOW
    return upper[0] @ FLOW / (below if lower[0].any() else 1.0)


MASS = {one.name: one.molar_mass_kg_kmol for one in UNIT.species}
WATER = ("water",)
# Each expected value is the definition of the kind, written out by hand over the outlet's flows.
KINDS = {
    "molar flow": ({"species": ()}, lambda: flow_of("outlet")),
    "volume flow": ({"species": ()}, lambda: flow_of("outlet")),
    "actual volume flow": ({"species": ()}, lambda: flow_of("outlet")),
    "mass flow": (
        {"species": ()},
        lambda: sum(MASS[s] * flow_of("outlet", s) for t, s in STATE if t == "outlet"),
    ),
    "differential pressure flow": (
        # the mean of what mass and moles make of the design molar mass of 25
        {"species": (), "design_molar_mass_kg_kmol": 25.0},
        lambda: sum((MASS[s] / 25.0 + 1) / 2 * flow_of("outlet", s) for t, s in STATE if t == "outlet"),
    ),
    "species flow": ({}, lambda: flow_of("outlet", "oxygen")),
    "mole fraction": (
        {},
        lambda: flow_of("outlet", "oxygen") / (flow_of("outlet") - flow_of("outlet", "water")),
    ),
    "mass fraction": (
        {"left_out": ()},
        lambda: (
            MASS["oxygen"]
            * flow_of("outlet", "oxygen")
            / sum(MASS[s] * flow_of("outlet", s) for t, s in STATE if t == "outlet")
        ),
    ),
    "flow ratio": (
        {"species": (), "stream": "air", "per_stream": "isobutene feed"},
        lambda: flow_of("air") / flow_of("isobutene feed"),
    ),
}


def test_every_kind_of_the_balance_has_its_row_and_its_check():
    assert set(KINDS) == set(instruments.KINDS) == set(BALANCE_KINDS)


@pytest.mark.parametrize("kind", KINDS)
def test_a_kind_shows_what_its_definition_says(kind):
    changes, expected = KINDS[kind]
    assert seen(kind=kind, **changes) == pytest.approx(expected(), rel=1e-12)


def test_a_wet_fraction_counts_the_water_in_its_sample():
    assert seen(kind="mole fraction", left_out=()) == pytest.approx(
        flow_of("outlet", "oxygen") / flow_of("outlet")
    )


def one_cell(**own):
    """Readings of all instruments in one cell: those named, NaN for the others."""
    value = np.full((1, len(UNIT.instruments)), np.nan)
    for i, one in enumerate(UNIT.instruments):
        value[0, i] = own.get(one.name, np.nan)
    return measured(UNIT, value, np.ones(value.shape, dtype=np.float32))


def place(name):
    return list(balance_columns(UNIT)).index([one.name for one in UNIT.instruments].index(name))


def test_a_volume_flow_at_stated_conditions_is_a_molar_flow():
    # 22.413 969 545 m3/kmol at 0 degC and 101.325 kPa (CODATA 2018)
    found = one_cell(**{"FI-202": 22413.969545})
    assert found.reading[place("FI-202"), 0] == pytest.approx(1000, rel=1e-9)


def test_an_actual_volume_flow_takes_pressure_and_temperature_in():
    # ideal gas by hand: 10,000 m3/h x 180 kPa / (8.314 462 618 x 553.15 K)
    found = one_cell(**{"FI-210": 10_000.0, "PI-211": 180.0, "TI-212": 280.0})
    assert found.reading[place("FI-210"), 0] == pytest.approx(
        1e4 * 180 / (8.31446261815324 * 553.15), rel=1e-12
    )


def test_an_actual_volume_flow_without_its_pressure_takes_no_part():
    found = one_cell(**{"FI-210": 10_000.0, "TI-212": 280.0})
    assert np.isnan(found.reading[place("FI-210"), 0])


def test_errors_of_pressure_and_temperature_widen_the_flow_in_quadrature():
    # quotient rule, JCGM 100:2008, 5.1.6: relative uncertainties add in quadrature
    found = one_cell(**{"FI-210": 10_000.0, "PI-211": 180.0, "TI-212": 280.0})
    i = place("FI-210")
    meter, pressure, temperature = (
        next(one for one in UNIT.instruments if one.name == name) for name in ("FI-210", "PI-211", "TI-212")
    )
    own = meter.systematic.relative + meter.systematic.floor / 10_000
    expected = np.sqrt(
        own**2 + (pressure.systematic.floor / 180) ** 2 + (temperature.systematic.floor / 553.15) ** 2
    )
    assert found.systematic[i, 0] / found.reading[i, 0] == pytest.approx(expected, rel=1e-9)


def test_a_reading_with_no_uncertainty_left_at_that_value_takes_no_part():
    # a relative uncertainty alone says nothing at zero
    bare = tuple(
        dataclasses.replace(one, random=Uncertainty(0.01, 0.0), systematic=NONE)
        if one.name == "FI-203"
        else one
        for one in UNIT.instruments
    )
    unit = dataclasses.replace(UNIT, instruments=bare)
    value = np.zeros((1, len(bare)))
    found = measured(unit, value, np.ones(value.shape, dtype=np.float32))
    assert np.isnan(found.reading[place("FI-203"), 0])


def test_several_results_in_a_cell_average_out_and_one_held_over_cells_does_not():
    # variance of a mean of n independent results (JCGM 100:2008, 4.2.3)
    found = one_cell(**{"FI-201": 5000.0})
    cycles = {one.name: one.cycle for one in UNIT.instruments}
    assert cycles["FI-201"] == timedelta(minutes=1)
    assert found.averaged[place("FI-201"), 0] == pytest.approx(0.1)
    slow = tuple(dataclasses.replace(one, cycle=timedelta(minutes=30)) for one in UNIT.instruments)
    unit = dataclasses.replace(UNIT, instruments=slow)
    value = np.ones((1, len(slow)))
    assert measured(unit, value, np.ones(value.shape, dtype=np.float32)).averaged.tolist() == [[1.0]] * len(
        balance_columns(unit)
    )


def test_a_cell_seen_only_in_part_is_less_certain():
    value = np.full((1, len(UNIT.instruments)), 5000.0)
    whole, part = (
        measured(UNIT, value, np.full(value.shape, share, dtype=np.float32)).random[place("FI-201"), 0]
        for share in (1.0, 0.64)
    )
    assert part / whole == pytest.approx(1 / 0.8, rel=1e-6)
