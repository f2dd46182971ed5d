"""Closures from raw readings: what one sick reading does to them, and their slopes by reading.

The case is the epoxidation of ethylene with methane ballast, conversion 0.10, selectivity 0.86; the answers
are hand arithmetic on its flows (common practice, no source).
"""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem_of
from ingest.instruments import Measured
from ingest.reconcile import solve
from ingest.unitfile import load
from monitor.raw import closed_elements, raw_rates, raw_rows
from tests.balances_made import made_flows, predicted
from tests.plants_made import Seen, unit_text, work_out

FED = {
    "ethylene": 28.0,
    "oxygen": 8.0,
    "co2": 1.0,
    "water": 0.3,
    "nitrogen": 0.4,
    "argon": 0.5,
    "methane": 61.8,
}
LEFT = {
    "ethylene": 25.2,
    "oxygen": 5.62,
    "co2": 1.784,
    "oxide": 2.408,
    "water": 1.084,
    "nitrogen": 0.4,
    "argon": 0.5,
    "methane": 61.8,
}
FORMULAS = {
    "ethylene": "C2H4",
    "oxygen": "O2",
    "co2": "CO2",
    "oxide": "C2H4O",
    "water": "H2O",
    "nitrogen": "N2",
    "argon": "Ar",
    "methane": "CH4",
}
CHEMISTRY = (
    'key_reactant = "ethylene"\nwanted = "oxide"\nunwanted = ["co2"]\n'
    'inert = ["nitrogen", "argon", "methane"]\nkey_element = "C"'
)


def figures(folder, **sick):
    """Figures with some outlet readings multiplied by a factor."""
    streams = {"cycle gas": ("in", list(FED)), "outlet": ("out", list(LEFT))}
    seen = []
    for stream, flows in (("cycle gas", FED), ("outlet", LEFT)):
        total = sum(flows.values())
        seen.append(Seen("molar flow", stream, total, "kmol/h"))
        for name, flow in flows.items():
            factor = sick.get(name, 1.0) if stream == "outlet" else 1.0
            seen.append(Seen("mole fraction", stream, 100 * flow / total * factor, "mol%", name))
    text = unit_text(FORMULAS, streams, seen, CHEMISTRY)
    return work_out(folder, text, [one.value for one in seen])[1]["value"]


def test_healthy_readings_close_and_give_the_case_back(tmp_path):
    told = figures(tmp_path)
    assert told["conversion"] == pytest.approx(10, abs=1e-8)
    assert told["selectivity on converted"] == pytest.approx(86, abs=1e-8)
    assert told["carbon closure"] == pytest.approx(100, abs=1e-8)
    assert told["converted closure"] == pytest.approx(100, abs=1e-7)


def test_one_percent_on_the_unconverted_reactant_hides_in_the_closure_and_shows_in_the_converted_one(
    tmp_path,
):
    # out/in carbon without the methane ballast: (2 x 25.452 + 1.784 + 2 x 2.408) / (2 x 28 + 1) = 1.00884;
    # carbon made over carbon converted: (2 x 2.408 + 0.784) / (2 x (28 - 25.452)) = 1.0989
    told = figures(tmp_path, ethylene=1.01)
    assert told["carbon closure"] == pytest.approx(100.884, abs=1e-3)
    assert told["converted closure"] == pytest.approx(109.9, abs=0.05)


def test_the_reconciled_selectivity_keeps_to_the_products_when_the_reactant_reading_is_sick(tmp_path):
    # wanted over unwanted is fixed by the product channels: 2.408 / 0.784
    told = figures(tmp_path, ethylene=1.01)
    assert told["overall selectivity to co2"] == pytest.approx(2.408 / 0.784, rel=0.01)


UNIT = load(Path("config/demo.toml"))
PROBLEM = problem_of(UNIT)


def readings(flow) -> Measured:
    exact = predicted(PROBLEM, flow)
    ones = np.ones_like(exact)
    return Measured(exact, 0.005 * exact, 0.005 * exact, np.zeros((len(exact), 0, exact.shape[1])), ones)


def test_only_elements_whose_every_carrier_is_read_have_a_raw_closure():
    # water leaves unread behind the drier and holds H and O
    assert closed_elements(UNIT) == ("C",)
    carbon = {"raw in C", "raw out C", "raw made C", "raw consumed C", "raw made C in methacrolein"}
    assert set(raw_rows(UNIT, PROBLEM.state)) == carbon


def test_raw_amounts_of_error_free_readings_are_the_true_ones():
    flow = made_flows(PROBLEM.state, 30, 1)
    found = raw_rates(UNIT, PROBLEM, readings(flow), solve(PROBLEM, readings(flow)).flow)
    true = np.array(list(raw_rows(UNIT, PROBLEM.state).values())) @ flow
    np.testing.assert_allclose(found.value, true, rtol=1e-9)


def test_a_reading_that_belongs_to_a_raw_amount_and_is_missing_leaves_it_missing():
    flow = made_flows(PROBLEM.state, 3, 2)
    whole = readings(flow)
    gone = whole.reading.copy()
    gone[PROBLEM.names.index("AI-220 carbon dioxide"), 1] = np.nan
    lame = dataclasses.replace(whole, reading=gone)
    found = raw_rates(UNIT, PROBLEM, lame, solve(PROBLEM, lame).flow)
    names = list(raw_rows(UNIT, PROBLEM.state))
    assert np.isnan(found.value[names.index("raw out C")]).tolist() == [False, True, False]
    assert np.isfinite(found.value[names.index("raw in C")]).all()


def test_the_slopes_are_those_of_the_raw_amounts_with_the_sample_held():
    # central differences with the reconciled flows kept, as the docstring says
    flow = made_flows(PROBLEM.state, 1, 3)
    whole = readings(flow)
    slope = raw_rates(UNIT, PROBLEM, whole, flow).slope[:, :, 0]
    for i in range(len(PROBLEM.names)):
        step = 1e-6 * whole.reading[i, 0]
        up, down = whole.reading.copy(), whole.reading.copy()
        up[i] += step
        down[i] -= step
        ends = [
            raw_rates(UNIT, PROBLEM, dataclasses.replace(whole, reading=one), flow).value[:, 0]
            for one in (up, down)
        ]
        np.testing.assert_allclose(slope[:, i], (ends[0] - ends[1]) / (2 * step), rtol=1e-5, atol=1e-5)
