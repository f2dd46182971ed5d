"""Meters that read a differential pressure with a fixed design, from unit file to reconciled flows."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem_of
from ingest.cells import make_cells
from ingest.instruments import measured
from ingest.unit import Unit
from tests.balances_made import reconciled
from tests.unitfiles_made import AMMONIA, loaded, with_edit
from tests.units_made import MIDNIGHT, MINUTE, made_series

R = 8.31446261815324  # kPa m3/(kmol K), CODATA 2018, exact

# N2 + 3 H2 = 2 NH3, in a stream whose molar mass moves with its composition.
UNIT_FILE = (
    AMMONIA
    + """
[[stream]]
name = "feed"
direction = "in"
species = ["nitrogen", "hydrogen", "methane"]

[[stream]]
name = "outlet"
direction = "out"
species = ["nitrogen", "hydrogen", "ammonia", "methane"]

[[instrument]]
name = "FI-1"
tag = "FI-1"
kind = "differential pressure flow"
stream = "feed"
unit = "kg/h"
design_molar_mass = 18.0
random = { relative_pct = 0.3 }
systematic = { relative_pct = 0.5 }
cycle = "1min"
max_age = "5min"
sampling = "held"
"""
)
ANALYZER = """
[[analyzer]]
name = "AI-{n}"
stream = "{stream}"
kind = "mole fraction"
unit = "mol%"
random = {{ relative_pct = 0.2 }}
systematic = {{ relative_pct = 0.3, floor = 0.01 }}
cycle = "6min"
max_age = "20min"
sampling = "held"
channel = {{ nitrogen = "N2-{n}", hydrogen = "H2-{n}", methane = "CH4-{n}"{more} }}
"""
TEXT = (
    UNIT_FILE
    + ANALYZER.format(n=1, stream="feed", more="")
    + ANALYZER.format(n=2, stream="outlet", more=', ammonia = "NH3-2"')
)
COMPENSATED = 'design_molar_mass = 18.0\ndesign = "100 degC, 300 kPa"\npressure = "PI"\ntemperature = "TI"'
GAS = """
[[instrument]]
name = "PI"
tag = "PI"
kind = "pressure"
unit = "kPa"
random = { floor = 0.3 }
systematic = { floor = 0.5 }
cycle = "1min"
max_age = "5min"
sampling = "held"

[[instrument]]
name = "TI"
tag = "TI"
kind = "temperature"
unit = "degC"
random = { floor = 0.2 }
systematic = { floor = 0.4 }
cycle = "1min"
max_age = "5min"
sampling = "held"
"""


def base_reading(unit: Unit, **own: float) -> tuple[float, float, float]:
    """Base reading, random and systematic standard uncertainty of FI-1 in one cell."""
    value = np.array([[own.get(one.name, np.nan) for one in unit.instruments]])
    found = measured(unit, value, np.ones(value.shape, dtype=np.float32))
    return found.reading[0, 0], found.random[0, 0], found.systematic[0, 0]


def shown_kg_h(molar: float, molar_mass: float, *, design: float = 18.0) -> float:
    """What a mass meter shows that takes the design density for the true one; the root of both (ISO 5167-1,
    the flow goes with the root of differential pressure times density, from memory)."""
    return molar * molar_mass * math.sqrt(design / molar_mass)


def test_a_meter_of_18_in_a_gas_of_20_reads_5_4_percent_too_many_moles():
    # Gotcha 19: sqrt(20 / 18) = 1.0541 by hand.
    assert shown_kg_h(1000, 20.0) / 18.0 == pytest.approx(1054.1, abs=0.05)


def test_in_a_gas_of_the_design_molar_mass_the_reading_is_the_molar_flow(tmp_path: Path):
    unit = loaded(tmp_path, TEXT)
    assert base_reading(unit, **{"FI-1": 18_000.0})[0] == pytest.approx(1000.0, rel=1e-12)


@pytest.mark.parametrize(
    ("molar_mass", "off"), [(18.0, 1e-12), (20.0, 0.0014), (16.0, 0.0018), (21.6, 0.0042)]
)
def test_what_it_predicts_is_what_it_shows_but_for_the_square_of_the_distance_to_the_design(
    tmp_path: Path, molar_mass: float, off: float
):
    # (ln 20/18)^2 / 8 = 0.0014, (ln 16/18)^2 / 8 = 0.0017, (ln 1.2)^2 / 8 = 0.0042 by hand
    unit = loaded(tmp_path, TEXT)
    problem = problem_of(unit)
    mass = {one.name: one.molar_mass_kg_kmol for one in unit.species}
    heavy, light = mass["nitrogen"], mass["hydrogen"]
    share = (molar_mass - light) / (heavy - light)
    flow = {("feed", "nitrogen"): 1000 * share, ("feed", "hydrogen"): 1000 * (1 - share)}
    n = np.array([flow.get(place, 0.0) for place in problem.state])
    predicted = problem.numerator[0] @ n
    true = base_reading(unit, **{"FI-1": shown_kg_h(1000, molar_mass)})[0]
    assert predicted / true - 1 == pytest.approx((math.log(molar_mass / 18) ** 2) / 8, abs=2e-5)
    assert abs(predicted / true - 1) <= off


@pytest.mark.parametrize(
    ("unit_key", "shown"),
    [
        ('unit = "kg/h"', 18_000.0),
        ('unit = "t/h"', 18.0),
        ('unit = "kg/min"', 300.0),
        ('unit = "kmol/h"', 1000.0),
        # 22.413 969 545 m3/kmol at 0 degC and 101.325 kPa (CODATA 2018)
        ('unit = "m3/h"\nreference = "0 degC, 101.325 kPa"', 22_413.969545),
        # 300 kPa / (8.314 462 618 x 373.15 K) = 0.096 694 kmol/m3 by hand
        ('unit = "m3/h"\nreference = "flowing"', 1000 / (300 / (R * 373.15))),
    ],
)
def test_mass_moles_and_volumes_are_read_with_the_design(tmp_path: Path, unit_key: str, shown: float):
    text = with_edit("design_molar_mass = 18.0", COMPENSATED, TEXT + GAS)
    unit = loaded(tmp_path, with_edit('unit = "kg/h"', unit_key, text))
    found = base_reading(unit, **{"FI-1": shown, "PI": 300.0, "TI": 100.0})
    assert found[0] == pytest.approx(1000.0, rel=1e-9)


def test_pressure_and_temperature_count_by_their_roots(tmp_path: Path):
    unit = loaded(tmp_path, with_edit("design_molar_mass = 18.0", COMPENSATED, TEXT + GAS))
    at_design = base_reading(unit, **{"FI-1": 18_000.0, "PI": 300.0, "TI": 100.0})[0]
    # sqrt(330 / 300) and sqrt(373.15 / 393.15) by hand
    assert base_reading(unit, **{"FI-1": 18_000.0, "PI": 330.0, "TI": 100.0})[0] / at_design == pytest.approx(
        math.sqrt(1.1), rel=1e-12
    )
    assert base_reading(unit, **{"FI-1": 18_000.0, "PI": 300.0, "TI": 120.0})[0] / at_design == pytest.approx(
        math.sqrt(373.15 / 393.15), rel=1e-12
    )
    assert np.isnan(base_reading(unit, **{"FI-1": 18_000.0, "TI": 100.0})[0])


def test_errors_of_pressure_and_temperature_count_by_half(tmp_path: Path):
    # Power rule of JCGM 100:2008, 5.1.6: the relative uncertainty of a root is half that of its argument.
    unit = loaded(tmp_path, with_edit("design_molar_mass = 18.0", COMPENSATED, TEXT + GAS))
    reading, random, systematic = base_reading(unit, **{"FI-1": 18_000.0, "PI": 300.0, "TI": 100.0})
    assert random / reading == pytest.approx(math.hypot(0.003, 0.3 / 300 / 2, 0.2 / 373.15 / 2), rel=1e-9)
    assert systematic / reading == pytest.approx(math.hypot(0.005, 0.5 / 300 / 2, 0.4 / 373.15 / 2), rel=1e-9)


FED = {"nitrogen": 667.0, "hydrogen": 283.0, "methane": 50.0}  # kmol/h, molar mass 20.06 kg/kmol
CONVERTED = 60.0  # kmol/h of nitrogen


def readings_of(unit: Unit):
    """An hour of what perfect instruments show; analyses differ in a digit that does not matter."""
    made = {"nitrogen": -CONVERTED, "hydrogen": -3 * CONVERTED, "ammonia": 2 * CONVERTED}
    left = {name: FED.get(name, 0.0) + made.get(name, 0.0) for name in (*FED, "ammonia")}
    mass = {one.name: one.molar_mass_kg_kmol for one in unit.species}
    whole = sum(FED.values())
    molar_mass = sum(mass[name] * flow for name, flow in FED.items()) / whole
    minutes = np.arange(60)
    readings = {"FI-1": made_series(minutes, [shown_kg_h(whole, molar_mass)])}
    for number, flows in ((1, FED), (2, left)):
        for one in (one for one in unit.instruments if one.analyzer == f"AI-{number}"):
            share = 100 * flows[one.species[0]] / sum(flows.values())
            readings[str(one.tag)] = made_series(minutes, share * (1 + 1e-9 * minutes))
    return readings, whole, molar_mass


@pytest.mark.parametrize(
    ("kind", "error"),
    [
        # what a plain mass meter gets wrong: sqrt(18 / 20.06) - 1 by hand
        ("mass flow", -0.0527),
        # (ln 20.06/18)^2 / 8 = 0.0015 by hand; the prediction is larger, so the flow found is smaller
        ("differential pressure flow", -0.0015),
    ],
)
def test_the_reconciled_molar_mass_sets_right_what_the_design_gets_wrong(
    tmp_path: Path, kind: str, error: float
):
    text = TEXT.replace("differential pressure flow", kind)
    unit = loaded(tmp_path, text if kind != "mass flow" else text.replace("design_molar_mass = 18.0\n", ""))
    readings, whole, molar_mass = readings_of(unit)
    assert molar_mass == pytest.approx(20.06, abs=0.01)
    problem = problem_of(unit)
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 30 * MINUTE)
    states = reconciled(unit, problem, cells)
    fed = [at for at, (stream, _) in enumerate(problem.state) if stream == "feed"]
    assert states.flow_kmol_h[1, fed].sum() / whole - 1 == pytest.approx(error, abs=2e-4)


def test_a_fixed_design_shows_in_the_residuals_of_a_plain_meter_beside_another(tmp_path: Path):
    # A second meter, of moles, is right. Variance of a mean over 10 min: 0.3^2 / 10 + 0.5^2 = 0.259 %^2.
    # 5.27^2 / (0.259 (1 + 0.947^2)) = 56.5, likewise for 0.15 %: 0.04. Compositions take part with 1 in 100.
    second = with_edit(
        'name = "FI-1"\ntag = "FI-1"\nkind = "differential pressure flow"',
        'name = "FI-2"\ntag = "FI-2"\nkind = "molar flow"',
        UNIT_FILE[UNIT_FILE.index("[[instrument]]") :],
    )
    second = second.replace('"kg/h"', '"kmol/h"').replace("design_molar_mass = 18.0\n", "")
    found = {}
    for kind in ("mass flow", "differential pressure flow"):
        text = TEXT.replace("differential pressure flow", kind) + second
        unit = loaded(
            tmp_path, text if kind != "mass flow" else text.replace("design_molar_mass = 18.0\n", "")
        )
        readings, whole, _ = readings_of(unit)
        readings["FI-2"] = made_series(np.arange(60), [whole])
        cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 30 * MINUTE)
        states = reconciled(unit, problem_of(unit), cells)
        found[kind] = states.objective[1]
    assert found["mass flow"] == pytest.approx(56.5, rel=0.03)
    assert found["differential pressure flow"] < 0.1
