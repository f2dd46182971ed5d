"""Does the balance fit? Windows of the residuals tested by themselves and against a healthy period."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.causes import Causes, air_leaks, calibration_drift, own_errors, shared_errors, together
from ingest.cells import RUNNING, TURNED_DOWN, Cells
from ingest.instruments import Measured, measured
from ingest.residuals import CellResiduals, Residuals, cell_residuals, change, cycles_in_cells, windowed
from ingest.suspects import global_test
from ingest.unit import Unit

Floats = NDArray[np.float64]

LENGTHS = (timedelta(hours=1), timedelta(hours=8), timedelta(hours=24))
LEVEL = 0.01  # share of healthy windows that fail by chance
IN_A_ROW = 2  # windows that have to fail one after the other before anything is named
ALONE, CHANGE, BASELINE = "alone", "change", "baseline"
BASELINE_LENGTH = LENGTHS[1]
_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Trial:
    """Windows of one length, tested one way.

    Parameters
    ----------
    kind : str
        `ALONE`, `CHANGE`, or `BASELINE` for windows of the healthy period alone.
    length : timedelta
        Of a window.
    start : array (w,)
        Window starts [us UTC], ascending, without overlap.
    p_value : array (w,)
        Chance of so poor a fit when nothing is wrong; NaN where a window could not be tested.
    residuals : Residuals
        Of the windows.
    """

    kind: str
    length: timedelta
    start: NDArray[np.int64]
    p_value: Floats
    residuals: Residuals

    @property
    def failed(self) -> NDArray[np.bool_]:
        """Tell which windows do not fit, array (w,)."""
        return np.asarray(self.p_value < LEVEL)


@dataclass(frozen=True, slots=True)
class Series:
    """Windows that failed one after the other: those of one length, and the worst of them.

    Parameters
    ----------
    test : Trial
        Whose windows they are.
    first, last, worst : int
        Places of windows.
    """

    test: Trial
    first: int
    last: int
    worst: int

    @property
    def since_us(self) -> int:
        """Give the start of the first window [us UTC]."""
        return int(self.test.start[self.first])

    @property
    def until_us(self) -> int:
        """Give the end of the last window [us UTC]."""
        return int(self.test.start[self.last]) + self.test.length // _US


@dataclass(frozen=True, slots=True)
class Failure:
    """Series of all lengths that failed at one time.

    It begins with the window that failed first, that is whose end came first, and ends with the window that
    began last; so the shortest windows that see it tell when. `is_lasting` when no window of that length has
    fitted since. `worst` holds the window that fits worst.
    """

    since_us: int
    until_us: int
    is_lasting: bool
    worst: Series


def counted(unit: Unit, cells: Cells) -> Measured:
    """Give the readings of cells that count: running or turned down.

    Parameters
    ----------
    unit : Unit
        The reactor.
    cells : Cells
        Its cells.
    """
    readings = measured(unit, cells.value, cells.share)
    counts = np.isin(cells.operating, (RUNNING, TURNED_DOWN))
    return replace(readings, reading=np.where(counts, readings.reading, np.nan))


def causes_of(unit: Unit, problem: Problem, readings: Measured) -> Causes:
    """Give everything that may be wrong: each instrument, each shared error, air in each sample.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    readings : Measured
        Base readings of its cells.
    """
    return together(own_errors(problem, readings), shared_errors(unit, readings), air_leaks(unit, readings))


def left_over(unit: Unit, problem: Problem, cells: Cells) -> CellResiduals:
    """Give what the balance leaves unexplained, cell by cell.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        On one grid without holes.
    """
    readings = counted(unit, cells)
    return cell_residuals(problem, readings, causes_of(unit, problem, readings), cycles_in_cells(unit))


def fits(unit: Unit, problem: Problem, cells: Cells, healthy: Cells | None) -> tuple[Trial, ...]:
    """Test windows of every length, alone and, where a healthy period is given, as a change from it.

    Windows follow one another without overlap and end with the last cell. The healthy period is tested too,
    since a fault in it would show as a change the other way.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        The time to test, on one grid without holes.
    healthy : Cells or None
        The healthy period.
    """
    found = left_over(unit, problem, cells)
    tests = [_tested(unit, cells, found, length) for length in LENGTHS]
    if healthy is not None:
        base = left_over(unit, problem, healthy)
        baseline = windowed(base, np.array([0]), len(healthy.start))
        allowance = calibration_drift(unit, Causes(base.names, np.zeros((0, 0, 0))))
        tests += [_against(one, baseline, allowance) for one in tests]
        tests.append(replace(_tested(unit, healthy, base, BASELINE_LENGTH), kind=BASELINE))
    return tuple(tests)


def _tested(unit: Unit, cells: Cells, found: CellResiduals, length: timedelta) -> Trial:
    size = max(1, round(length / unit.cell))
    first = np.arange(len(cells.start) % size, len(cells.start) - size + 1, size)
    windows = windowed(found, first, size) if len(first) else _none_of(found)
    p_value = np.where(windows.coverage >= unit.least_coverage, global_test(windows).p_value, np.nan)
    return Trial(ALONE, length, cells.start[first], p_value, windows)


def _none_of(found: CellResiduals) -> Residuals:
    """Give no window at all: the time is shorter than one."""
    return windowed(found, np.array([0]), len(found.pull)).take(slice(0, 0))


def _against(alone: Trial, baseline: Residuals, allowance: Floats) -> Trial:
    moved = change(alone.residuals, baseline, allowance)
    p_value = np.where(np.isfinite(alone.p_value), global_test(moved).p_value, np.nan)
    return Trial(CHANGE, alone.length, alone.start, p_value, moved)


def series_of(test: Trial) -> list[Series]:
    """Give every series of at least `IN_A_ROW` windows that failed; a window without a test does not end one.

    Parameters
    ----------
    test : Trial
        Windows of one length.
    """
    told = np.flatnonzero(np.isfinite(test.p_value))
    failed = test.failed[told]
    edges = np.flatnonzero(np.diff(np.concatenate([[False], failed, [False]]).astype(int)))
    found = []
    for begin, end in edges.reshape(-1, 2):
        if end - begin >= IN_A_ROW:
            own = told[begin:end]
            worst = own[np.argmin(test.p_value[own])]
            found.append(Series(test, int(own[0]), int(own[-1]), int(worst)))
    return found


def failures(tests: Iterable[Trial]) -> list[Failure]:
    """Give the failures to explain, in order of time; series of one kind that overlap are one failure.

    A failure alone is left out where one of changes tells of the same time.

    Parameters
    ----------
    tests : iterable of Trial
        As `fits` gives them.
    """
    of_kind: dict[str, list[Series]] = {CHANGE: [], ALONE: [], BASELINE: []}
    for test in tests:
        of_kind[test.kind] += series_of(test)
    moved, alone = ([_failure(one) for one in _overlapping(of_kind[kind])] for kind in (CHANGE, ALONE))
    untold = [
        one
        for one in alone
        if not any(one.since_us < other.until_us and other.since_us < one.until_us for other in moved)
    ]
    return sorted([*moved, *untold], key=lambda one: one.since_us)


def _overlapping(found: Sequence[Series]) -> list[list[Series]]:
    """Group series that overlap, directly or by way of others."""
    groups: list[list[Series]] = []
    end = 0
    for one in sorted(found, key=lambda one: one.since_us):
        if groups and one.since_us < end:
            groups[-1].append(one)
        else:
            groups.append([one])
        end = max(end, one.until_us)
    return groups


def _failure(group: Sequence[Series]) -> Failure:
    """Sum up series that overlap."""
    earliest = min(group, key=lambda one: one.since_us + one.test.length // _US)
    latest = max(group, key=lambda one: one.until_us - one.test.length // _US)
    return Failure(
        since_us=earliest.since_us,
        until_us=latest.until_us,
        is_lasting=not np.isfinite(latest.test.p_value[latest.last + 1 :]).any(),
        worst=min(group, key=lambda one: float(one.test.p_value[one.worst])),
    )
