"""Records of two plants as tests of the residuals see them: measured, made into cells, with a cause put in.

A record is 12 h that serve as its healthy period and the 8 h after them. It has instruments of its own: every
error that the unit file states is drawn anew, those of the certificates of declared values included.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import timedelta

import numpy as np

from ingest.balance import Problem, problem_of
from ingest.causes import Causes, air_leaks, calibration_drift, own_errors, shared_errors, together
from ingest.cells import make_cells
from ingest.instruments import balance_columns, balance_instruments, measured
from ingest.readings import join
from ingest.residuals import CellResiduals, Residuals, cell_residuals, change, cycles_in_cells, windowed
from ingest.suspects import biases, global_test, sidak, visible_sizes
from ingest.unit import Unit
from tests.balances_made import predicted
from tests.records_made import DAYS, Made, demo_plant
from tests.units_made import MIDNIGHT, MINUTE

CELL, HOUR, SHIFT = 1, 6, 48  # lengths of windows in cells
BASELINE, EDGE = 72, 3  # cells; the edge keeps neighbouring records out
SLOT = EDGE + BASELINE + SHIFT + EDGE
LEVEL = 0.05
AIR_PCT = {"nitrogen": 78.084, "oxygen": 20.9476, "carbon dioxide": 0.0314}  # US Standard Atmosphere 1976
LEAK = "air into the sample of "

Floats = np.ndarray


@dataclass(frozen=True)
class Records:
    """Cells of several records, (records, cells, all instruments), each instrument in its own unit."""

    unit: Unit
    problem: Problem
    before: Floats  # the healthy period
    after: Floats  # the 8 h after it


def records(made: Made, count: int, seed: int) -> Records:
    """Records that begin at any minute of a plant's truth."""
    minutes = SLOT * (made.unit.cell // timedelta(minutes=1))
    rng = np.random.default_rng(seed)
    begins = rng.integers(0, len(made.flow) - minutes, count).tolist()
    time = MIDNIGHT + np.arange(count * minutes).reshape(count, minutes) * MINUTE
    parts = [
        made.measure(time[k], slice(begin, begin + minutes), 10_000 * seed + k)
        for k, begin in enumerate(begins)
    ]
    readings = {tag: join([part[tag] for part in parts])[0] for tag in parts[0]}
    cells = make_cells(made.unit, readings, MIDNIGHT, MIDNIGHT + count * minutes * MINUTE)
    value = _certified(made, cells.value.reshape(count, SLOT, -1), rng)[:, EDGE:-EDGE]
    assert np.isfinite(value[:, :, balance_columns(made.unit)]).all()
    return Records(made.unit, problem_of(made.unit), value[:, :BASELINE], value[:, BASELINE:])


def _certified(made: Made, value: Floats, rng: np.random.Generator) -> Floats:
    """What certificates state of contents that stay as they are: another one for each record."""
    told = value.copy()
    exact = predicted(problem_of(made.unit), made.flow[:1].T)[:, 0]
    seen = zip(balance_columns(made.unit), balance_instruments(made.unit), exact, strict=True)
    for column, one, true in seen:
        if one.tag is None:
            told[:, :, column] = true / one.to_base + one.systematic.floor * rng.standard_normal(
                (len(told), 1)
            )
    return told


def demo_plants(plants: int, each: int, seed: int) -> list[Records]:
    """Records of several demo plants, each with its own load moves and disturbances."""
    return [records(demo_plant(DAYS, seed + k), each, seed + k) for k in range(plants)]


def pieces(made: Made, count: int, each: int, seed: int) -> list[Records]:
    """Records of one plant, in groups that are small enough for the memory of a processor."""
    return [records(made, each, seed + k) for k in range(count // each)]


# --- residuals


def cell_by_cell(made: Records, value: Floats) -> CellResiduals:
    """Residuals of cells (records, cells, instruments), one record after the other, for all causes."""
    flat = value.reshape(-1, value.shape[-1])
    readings = measured(made.unit, flat, np.ones(flat.shape, dtype=np.float32))
    causes = together(
        own_errors(made.problem, readings), shared_errors(made.unit, readings), air_leaks(made.unit, readings)
    )
    return cell_residuals(made.problem, readings, causes, cycles_in_cells(made.unit))


def windows(made: Records, value: Floats, length: int) -> Residuals:
    """Windows of one length, one after the other, of cells (records, a whole number of windows, ...)."""
    cells = cell_by_cell(made, value)
    return windowed(cells, np.arange(0, len(cells.pull), length), length)


def baselines(made: Records) -> Residuals:
    """The healthy period of each record as one window."""
    return windows(made, made.before, BASELINE)


def changed(made: Records, baseline: Residuals, now: Residuals) -> Residuals:
    """Windows, as many of each record, as changes from the healthy period of their record."""
    each = len(now.pull) // len(baseline.pull)
    allowance = calibration_drift(made.unit, Causes(now.names, np.zeros((0, 0, 0))))
    return change(now, baseline.take(np.repeat(np.arange(len(baseline.pull)), each)), allowance)


# --- what happens to instruments


def drifted(made: Records, value: Floats, length: int, seed: int) -> Floats:
    """Each calibration moved, anew in every window of one length, by as much as is allowed for."""
    columns = list(balance_columns(made.unit))
    allowed = calibration_drift(made.unit, Causes(made.problem.names, np.zeros((0, 0, 0))))
    count, cells, width = value.shape
    moved = value.reshape(count, cells // length, length, width).copy()
    draws = np.random.default_rng(seed).standard_normal((count, cells // length, 1, len(columns)))
    moved[..., columns] *= 1 + allowed * draws
    return moved.reshape(value.shape)


def sick(made: Records, value: Floats, cause: str, size: Floats) -> Floats:
    """A cause in every cell of each record: readings too high by a fraction (r,), or that share of air."""
    moved = value.copy()
    shared = {one.name: one.instruments for one in made.unit.shared}
    for column, one in zip(balance_columns(made.unit), balance_instruments(made.unit), strict=True):
        own = moved[:, :, column]
        if one.name == cause or one.name in shared.get(cause, ()):
            own *= 1 + size[:, None]
        elif cause == f"{LEAK}{one.analyzer}":
            own += size[:, None] * (sum(AIR_PCT.get(name, 0.0) for name in one.species) - own)
    return moved


# --- how often it is seen


@dataclass(frozen=True)
class Seen:
    """How often the tests show each of h causes, put in at f multiples of its visible size."""

    names: tuple[str, ...]
    size: Floats  # (h,) mean visible size
    single: Floats  # (h, f) share of windows in which the measurement test of the cause shows it
    whole: Floats  # (h, f) share of windows in which the global test fails
    told: Floats  # (h, f) mean of the estimate over the size put in


def seen(groups: Sequence[Records], kind: str, length: int, factors: Sequence[float]) -> Seen:
    """Put every cause into the window that follows the healthy period, in turn; kind is alone or change."""
    found = [_seen(number, one, kind, length, factors) for number, one in enumerate(groups)]
    names = biases(windows(groups[0], groups[0].after[:, :length], length)).names
    size, single, whole, told = (np.mean(part, axis=0) for part in zip(*found, strict=True))
    return Seen(names, size, single, whole, told)


def _seen(number: int, made: Records, kind: str, length: int, factors: Sequence[float]) -> list[Floats]:
    """Of one group of records: size (h,), single, whole, told (h, f), means over its windows."""
    value, judge = after(number, made, kind, length)
    well = biases(judge(value))
    bound = sidak(LEVEL, len(well.names))
    visible = visible_sizes(well.standard_error, len(well.names))
    single, whole, told = np.empty((3, len(well.names), len(factors)))
    for h, name in enumerate(well.names):
        for f, factor in enumerate(factors):
            size = factor * visible[:, h]
            ill = judge(sick(made, value, name, size))
            found = biases(ill)
            single[h, f] = (np.abs(found.statistic[:, h]) > bound).mean()
            whole[h, f] = (global_test(ill).p_value < LEVEL).mean()
            # the estimate is a fraction of the reading as shown, which a bias of `size` makes too high
            shown = size if name.startswith(LEAK) else size / (1 + size)
            told[h, f] = (found.size[:, h] / shown).mean()
    return [visible.mean(axis=0), single, whole, told]


def after(number: int, made: Records, kind: str, length: int) -> tuple[Floats, Callable[[Floats], Residuals]]:
    """The first window after the healthy period of each record, and what judges such windows.

    As changes they are given with each calibration drifted by what is allowed for.
    """
    value = made.after[:, :length]
    if kind == "alone":
        return value, lambda shown: windows(made, shown, length)
    baseline = baselines(made)
    return (
        drifted(made, value, length, 64_000 + number),
        lambda shown: changed(made, baseline, windows(made, shown, length)),
    )
