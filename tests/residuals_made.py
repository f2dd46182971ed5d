"""Residuals for tests: of plain matrices, and of the demo unit with every error its unit file states."""

from __future__ import annotations

import dataclasses

import numpy as np

from ingest.balance import problem, problem_of
from ingest.causes import Causes, air_leaks, calibration_drift, own_errors, shared_errors, together
from ingest.instruments import Measured, measured
from ingest.residuals import CellResiduals, Residuals, cell_residuals, cycles_in_cells, windowed
from tests.balances_made import made_flows, made_readings
from tests.test_half_widths import DEMO, error_free, with_errors

PROBLEM = problem_of(DEMO)


def absolute(names, count) -> Causes:
    """Each instrument alone reads too high by one unit."""
    return Causes(tuple(names), np.repeat(np.eye(len(names))[:, :, None], count, axis=2))


def of_cells(balance, readings, causes=None) -> Residuals:
    """Residuals of every cell, by default for errors of one unit in one reading."""
    count = readings.reading.shape[1]
    causes = causes or absolute(balance.names, count)
    cells = cell_residuals(balance, readings, causes, readings.averaged[:, 0])
    return windowed(cells, np.arange(count), 1)


def of_case(case, reading=None, variance=None, loading=None) -> Residuals:
    """Residuals of a published case in which every flow may have a meter."""
    rows = np.array(case["A"] if "A" in case else case["A_after_elimination"])
    names = tuple(case["names"]) if "names" in case else None
    balance = problem(rows, np.eye(rows.shape[1]), names=names)
    spread = case["variance"] if variance is None else variance
    return of_cells(balance, made_readings(case["measured"] if reading is None else reading, spread, loading))


def demo_readings(value, unit=DEMO) -> Measured:
    return measured(unit, value, np.ones(value.shape, dtype=np.float32))


def demo_causes(readings, unit=DEMO) -> Causes:
    return together(own_errors(PROBLEM, readings), shared_errors(unit, readings), air_leaks(unit, readings))


def demo_cells(value, unit=DEMO) -> CellResiduals:
    """Residuals by cell for all causes of the demo unit, (t, all instruments) readings in own units."""
    readings = demo_readings(value, unit)
    return cell_residuals(PROBLEM, readings, demo_causes(readings, unit), cycles_in_cells(unit))


def healthy(count, seed, unit=DEMO, records=None) -> np.ndarray:
    """Readings of cells whose load and chemistry jump about, calibration errors new in each record."""
    flow = made_flows(PROBLEM.state, count, seed)
    shown = error_free(unit, flow)
    return with_errors(unit, shown, records or count, np.random.default_rng((*np.atleast_1d(seed), 1)))


def biased(value, name, size, unit=DEMO) -> np.ndarray:
    """Readings of one instrument made too high by a fraction."""
    made = value.copy()
    made[:, [one.name for one in unit.instruments].index(name)] *= 1 + size
    return made


def drifted(value, seed, unit=DEMO) -> np.ndarray:
    """Each calibration moved, anew in every cell of (w, cells, instruments), by as much as is allowed for."""
    causes = own_errors(PROBLEM, demo_readings(value[:1, 0], unit))
    allowed = dict(zip(causes.names, calibration_drift(unit, causes), strict=True))
    each = np.array([allowed.get(one.name, 0.0) for one in unit.instruments])
    return value * (1 + each * np.random.default_rng(seed).standard_normal((len(value), 1, len(each))))


def with_cycle(cycle):
    """The demo unit with another analyzer cycle."""
    seen = tuple(dataclasses.replace(one, cycle=cycle) if one.analyzer else one for one in DEMO.instruments)
    return dataclasses.replace(DEMO, instruments=seen)
