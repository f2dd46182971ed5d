"""A ratio of flows and an actual volume flow, from the unit file through readings to reconciled flows."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem_of
from ingest.cells import make_cells
from tests.balances_made import reconciled
from tests.unitfiles_made import AMMONIA, loaded, with_edit
from tests.units_made import MIDNIGHT, MINUTE, made_series

R = 8.31446261815324  # kPa m3/(kmol K), CODATA 2018, exact
# N2 + 3 H2 = 2 NH3. By hand: 60 kmol/h of nitrogen react, so 180 of hydrogen do and 120 of ammonia leave.
FED = {"nitrogen": 600.0, "methane": 6.0, "hydrogen": 1500.0}
LEFT = {"nitrogen": 540.0, "hydrogen": 1320.0, "ammonia": 120.0, "methane": 6.0}

TEXT = (
    AMMONIA
    + """
[[stream]]
name = "nitrogen feed"
direction = "in"
species = ["nitrogen", "methane"]

[[stream]]
name = "hydrogen feed"
direction = "in"
species = ["hydrogen"]

[[stream]]
name = "outlet"
direction = "out"
species = ["nitrogen", "hydrogen", "ammonia", "methane"]

[[instrument]]
name = "FFI-1"
tag = "FFI-1"
kind = "flow ratio"
stream = "hydrogen feed"
per_stream = "nitrogen feed"
unit = "mol/mol"
random = { relative_pct = 0.2 }
systematic = { relative_pct = 0.3 }
range = [0, 5]
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[instrument]]
name = "FI-2"
tag = "FI-2"
kind = "actual volume flow"
stream = "outlet"
unit = "m3/min"
pressure = "PI-2"
temperature = "TI-2"
random = { relative_pct = 0.3 }
systematic = { relative_pct = 0.5 }
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[instrument]]
name = "PI-2"
tag = "PI-2"
kind = "pressure"
unit = "barg"
atmosphere = "101.325 kPa"
random = { floor = 0.01 }
systematic = { floor = 0.02 }
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[instrument]]
name = "TI-2"
tag = "TI-2"
kind = "temperature"
unit = "degC"
random = { floor = 0.2 }
systematic = { floor = 0.4 }
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[instrument]]
name = "methane in nitrogen"
kind = "mole fraction"
value = 0.990099 # 6 of 606
stream = "nitrogen feed"
species = ["methane"]
unit = "mol%"
random = {}
systematic = { floor = 0.01 }

[[analyzer]]
name = "AI-2"
stream = "outlet"
kind = "mole fraction"
unit = "mol%"
random = { relative_pct = 0.2 }
systematic = { relative_pct = 0.3, floor = 0.005 }
cycle = "6min"
max_age = "20min"
sampling = "held"
channel = { nitrogen = "AI-2.N2", ammonia = "AI-2.NH3" }
"""
)


def readings(**others):
    """An hour of what perfect instruments show of the flows at 25 barg and 80 degC."""
    minutes = np.arange(60)
    whole = sum(LEFT.values())
    volume_m3_h = whole * R * (80 + 273.15) / (25 * 100 + 101.325)
    shown = {
        "FFI-1": FED["hydrogen"] / (FED["nitrogen"] + FED["methane"]),
        "FI-2": volume_m3_h / 60,
        "PI-2": 25.0,
        "TI-2": 80.0,
        "AI-2.N2": 100 * LEFT["nitrogen"] / whole * (1 + 1e-9 * minutes),
        "AI-2.NH3": 100 * LEFT["ammonia"] / whole,
    }
    return {tag: made_series(minutes, np.broadcast_to(value, 60)) for tag, value in (shown | others).items()}


def found(folder: Path, text: str, given) -> dict[tuple[str, str], float]:
    unit = loaded(folder, text)
    problem = problem_of(unit)
    states = reconciled(
        unit, problem, make_cells(unit, given, MIDNIGHT + 20 * MINUTE, MIDNIGHT + 30 * MINUTE)
    )
    return dict(zip(problem.state, states.flow_kmol_h[0], strict=True))


def test_a_ratio_and_an_actual_volume_give_every_flow_back(tmp_path: Path):
    flows = found(tmp_path, TEXT, readings())
    true = {("outlet", name): flow for name, flow in LEFT.items()}
    true |= {("nitrogen feed", name): FED[name] for name in ("nitrogen", "methane")}
    true["hydrogen feed", "hydrogen"] = FED["hydrogen"]
    assert flows == pytest.approx(true, rel=1e-5)


def test_without_the_ratio_the_hydrogen_that_is_fed_comes_from_the_outlet_alone(tmp_path: Path):
    # 2.5 in place of 1500 / 606 = 2.475 moves the answer, but not all the way: the outlet knows too.
    at = TEXT.index("[[instrument]]")
    without = TEXT[:at] + TEXT[TEXT.index("[[instrument]]", at + 1) :]
    ratios = []
    for text in (without, TEXT):
        flows = found(tmp_path, text, readings(**{"FFI-1": 2.5}))
        fed = flows["nitrogen feed", "nitrogen"] + flows["nitrogen feed", "methane"]
        ratios.append(flows["hydrogen feed", "hydrogen"] / fed)
    assert ratios[0] == pytest.approx(1500 / 606, rel=1e-5)
    assert ratios[0] + 0.001 < ratios[1] < 2.5


def test_pressure_as_gauge_and_volume_per_minute_come_to_kmol_per_hour(tmp_path: Path):
    # Twice the absolute pressure is twice the gas in the same volume; 25 barg is 2601.325 kPa absolute.
    twice = (2 * 2601.325 - 101.325) / 100
    flows = found(tmp_path, TEXT, readings(**{"PI-2": twice}))
    assert flows["outlet", "ammonia"] == pytest.approx(240, rel=1e-5)
    assert flows["nitrogen feed", "nitrogen"] == pytest.approx(1200, rel=1e-5)


def test_a_volume_without_its_temperature_takes_no_part_and_nothing_is_seen_of_its_size(tmp_path: Path):
    lost = readings()
    del lost["TI-2"]
    assert np.isnan(list(found(tmp_path, TEXT, lost).values())).all()


def test_a_ratio_in_percent_is_the_same_ratio(tmp_path: Path):
    text = with_edit('unit = "mol/mol"', 'unit = "mol%"', TEXT).replace("range = [0, 5]", "range = [0, 500]")
    flows = found(tmp_path, text, readings(**{"FFI-1": 100 * 1500 / 606}))
    assert flows["hydrogen feed", "hydrogen"] == pytest.approx(1500, rel=1e-5)
