"""Are the error bars honest? The 95 % intervals hold the truth in 93 to 97 of 100 simulated records.

Made truth: flows that close every balance; errors drawn as the unit file states them (JCGM 100:2008): one
systematic error per instrument and record, one random error per independent result, one shared span.
"""

from __future__ import annotations

import dataclasses
from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest

from ingest.balance import problem_of
from ingest.cells import RUNNING, Cells
from ingest.instruments import GAS_CONSTANT_KPA_M3_PER_KMOL_K, balance_columns, balance_instruments
from ingest.unit import Unit
from ingest.unitfile import load
from monitor.amounts import amounts_of
from monitor.figures import figures_of
from monitor.windows import window_figures
from tests.balances_made import made_flows, predicted

DEMO = load(Path("config/demo.toml"))
FIGURES = ("conversion", "overall selectivity to all unwanted", "selectivity on converted", "yield on feed")
PRESSURE_KPA, TEMPERATURE_K = 180.0, 553.15
DRAWS = 2000
BATCH = 100  # records in one go


def unit_with(window, cycle) -> Unit:
    """The demo unit with one window and another analyzer cycle; composition carries a 0.3 % span error."""
    instruments = tuple(
        dataclasses.replace(one, cycle=cycle) if one.analyzer else one for one in DEMO.instruments
    )
    return dataclasses.replace(DEMO, windows=(window,), instruments=instruments)


def error_free(unit, flow) -> np.ndarray:
    """What perfect instruments would show, each in its own unit, (t, all instruments)."""
    shown = np.zeros((flow.shape[1], len(unit.instruments)))
    for i, one in enumerate(unit.instruments):
        if one.kind == "pressure":
            shown[:, i] = PRESSURE_KPA / one.to_base - one.offset
        if one.kind == "temperature":
            shown[:, i] = TEMPERATURE_K / one.to_base - one.offset
    exact = predicted(problem_of(unit), flow)
    for column, one, base in zip(balance_columns(unit), balance_instruments(unit), exact, strict=True):
        gas = GAS_CONSTANT_KPA_M3_PER_KMOL_K * TEMPERATURE_K / PRESSURE_KPA
        shown[:, column] = base * (gas if one.kind == "actual volume flow" else 1) / one.to_base - one.offset
    return shown


def with_errors(unit, shown, records, rng) -> np.ndarray:
    """One draw of every error the unit file states, `records` records in a row."""
    length = len(shown) // records
    read = shown.copy()
    for i, one in enumerate(unit.instruments):
        constant = np.repeat(rng.standard_normal(records), length)
        systematic = (one.systematic.relative * np.abs(shown[:, i]) + one.systematic.floor) * constant
        held = max(1, round(one.cycle / unit.cell))
        fresh = rng.standard_normal((records, -(-length // held)))
        fresh = np.repeat(fresh, held, axis=1)[:, :length].ravel() * min(1.0, one.cycle / unit.cell) ** 0.5
        read[:, i] += systematic + (one.random.relative * np.abs(shown[:, i]) + one.random.floor) * fresh
    for shared in unit.shared:
        common = np.repeat(rng.standard_normal(records), length)
        for i, one in enumerate(unit.instruments):
            if one.name in shared.instruments:
                read[:, i] += shared.relative * np.abs(shown[:, i]) * common
    return read


def record(unit, read) -> Cells:
    return Cells(
        start=np.arange(len(read)) * (unit.cell // timedelta(microseconds=1)),
        value=read,
        share=np.ones(read.shape, dtype=np.float32),
        condition=np.zeros(read.shape, dtype=np.int8),
        operating=np.full(len(read), RUNNING, dtype=np.int8),
    )


def true_figures(state, flow, length) -> dict[str, np.ndarray]:
    """Ratios of sums by their definitions, written out anew, one per record."""
    fed, left, made = np.zeros((3, flow.shape[1] // length))
    unwanted = np.zeros_like(fed)
    for (stream, species), row in zip(state, flow, strict=True):
        total = row.reshape(-1, length).sum(axis=1)
        fed += total * (stream == "isobutene feed" and species == "isobutene")
        left += total * (stream == "outlet" and species == "isobutene")
        made += total * (species == "methacrolein")
        unwanted += total * (species in DEMO.unwanted)
    converted = fed - left
    return {
        "conversion": 100 * converted / fed,
        "overall selectivity to all unwanted": made / unwanted,
        "selectivity on converted": 100 * made / converted,
        "yield on feed": 100 * made / fed,
    }


def coverage(unit, conversion=(0.9, 0.98), draws=DRAWS, seed=1) -> dict[str, float]:
    """Share of records whose interval holds the truth, by figure, and the mean half-width over the spread."""
    problem = problem_of(unit)
    length = unit.windows[0] // unit.cell
    rng = np.random.default_rng(seed)
    inside: dict[str, list[bool]] = {name: [] for name in FIGURES}
    for start in range(0, draws, BATCH):
        flow = made_flows(problem.state, BATCH * length, (seed, start), conversion=conversion)
        cells = record(unit, with_errors(unit, error_free(unit, flow), BATCH, rng))
        _, amounts = amounts_of(unit, problem, cells)
        shown = window_figures(unit, amounts, figures_of(unit, amounts.names))[unit.windows[0]]
        ends = shown.iloc[length - 1 :: length]
        for name, truth in true_figures(problem.state, flow, length).items():
            part = ends[name]["as operated"]
            inside[name] += (abs(part["value"] - truth) <= part["half_width"]).tolist()
    assert all(len(found) == draws for found in inside.values())
    return {name: float(np.mean(found)) for name, found in inside.items()}


SIX, HELD = timedelta(minutes=6), timedelta(minutes=30)


@pytest.mark.parametrize(
    ("window", "cycle", "conversion"),
    [
        pytest.param(timedelta(minutes=10), SIX, (0.9, 0.98), id="one cell"),
        pytest.param(timedelta(hours=1), HELD, (0.9, 0.98), id="an hour of results held over three cells"),
        pytest.param(timedelta(minutes=10), SIX, (0.1, 0.12), id="one cell at low conversion"),
        pytest.param(timedelta(minutes=10), SIX, (0.993, 0.995), id="one cell at very high conversion"),
    ],
)
def test_intervals_hold_the_truth_in_93_to_97_of_100_records(window, cycle, conversion):
    found = coverage(unit_with(window, cycle), conversion)
    assert all(0.93 <= share <= 0.97 for share in found.values()), found


@pytest.mark.slow
def test_intervals_over_a_day_of_load_moves_hold_the_truth_in_93_to_97_of_100_records():
    found = coverage(unit_with(timedelta(hours=24), SIX))
    assert all(0.93 <= share <= 0.97 for share in found.values()), found


def test_random_errors_average_out_over_a_day_and_calibration_errors_do_not():
    # root of N for the random part, none for the systematic part (JCGM 100:2008, 4.2 and F.1.2.4)
    problem = problem_of(DEMO)
    flow = np.repeat(made_flows(problem.state, 1, 3), 144, axis=1)
    spread = {}
    for part in ("random", "systematic"):
        other = "systematic" if part == "random" else "random"
        seen = tuple(_hushed(one, other) for one in DEMO.instruments)
        unit = dataclasses.replace(
            DEMO,
            instruments=seen,
            shared=(),
            windows=(timedelta(minutes=10), timedelta(hours=24)),
        )
        _, amounts = amounts_of(unit, problem, record(unit, error_free(DEMO, flow)))
        shown = window_figures(unit, amounts, figures_of(unit, amounts.names))
        cell, day = (
            shown[window]["yield on feed", "as operated", "half_width"].iloc[-1] for window in unit.windows
        )
        spread[part] = cell / day
    assert spread["random"] == pytest.approx(12, rel=0.01)
    assert spread["systematic"] == pytest.approx(1, rel=0.01)


def _hushed(instrument, part):
    """The instrument with one part of its uncertainty made a thousand times smaller."""
    stated = getattr(instrument, part)
    small = dataclasses.replace(stated, relative=stated.relative / 1000, floor=stated.floor / 1000)
    return dataclasses.replace(instrument, **{part: small})
