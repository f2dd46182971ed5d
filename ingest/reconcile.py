"""Weighted least squares on the balance, for all cells at once.

Minimise the sum of ((y - h(n) - L e) / u)^2 and of e^2 over flows n = Z q and shared errors e (one standard
deviation each), with n >= 0. That is generalised least squares with the full covariance u^2 + L L' of the
readings. Gauss-Newton from a start that is linear in n; a reading that is missing has no weight.

Sources: Kuehn & Davidson 1961, Crowe, Garcia Campos & Hrymak 1983 (reconciliation by weighted least squares
and projection on the balance), from memory; JCGM 100:2008 for the uncertainties.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

from ingest import systems, tangent
from ingest.balance import Problem, determined, null_space
from ingest.cells import OPERATING, Cells
from ingest.instruments import Measured
from ingest.iteration import Group, Rest, alike, at_rest, groups_of
from ingest.tangent import Point

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

STATUS = ("solved", "did not converge", "cannot be seen", "no readings", "down")
SOLVED, NOT_CONVERGED, UNSEEN, NO_READINGS, DOWN = range(len(STATUS))

ZERO_FLOW = 1e-10  # of the unit's total flow; a flow below minus this is negative
ZERO_GAIN = 1e-5  # of the objective, for a flow as large as the unit's total: rounding, not a push
ZERO_SLOPE = 1e-9  # of the steepest direction; less than that pushes nowhere


@dataclass(frozen=True, slots=True)
class Solution:
    """What the balance makes of the readings of t cells.

    Parameters
    ----------
    flow : array (N, t)
        Molar flows [kmol/h]; NaN where the readings present do not determine them.
    adjustment : array (m, t)
        Prediction minus reading in units of the reading's standard uncertainty; NaN without a reading.
    adjustment_sd : array (m, t)
        Standard deviation that the adjustment should have; 0 where no other reading checks this one.
    objective : array (t,)
        Sum of squared residuals, weighted by the full covariance.
    freedom : array (t,)
        Degrees of freedom of the objective.
    status, iterations : array (t,)
        Index into `STATUS`; steps taken.
    value : array (p, t)
        Asked-for linear functions of the flows; NaN where the readings present do not determine them.
    gain : array (p, m, t)
        Change of each of these per unit of each reading.
    """

    flow: Floats
    adjustment: Floats
    adjustment_sd: Floats
    objective: Floats
    freedom: NDArray[np.int16]
    status: NDArray[np.int8]
    iterations: NDArray[np.int8]
    value: Floats
    gain: Floats


@dataclass(frozen=True, slots=True)
class States:
    """Reconciled states on the cells' grid.

    Parameters
    ----------
    start : array (t,)
        Cell starts [us, UTC].
    flow_kmol_h : array (t, N)
        Molar flows; NaN where they cannot be seen.
    adjustment, adjustment_sd : array (t, m)
        As in `Solution`, by balance instrument.
    objective, freedom, status, iterations : array (t,)
        As in `Solution`.
    """

    start: NDArray[np.int64]
    flow_kmol_h: Floats
    adjustment: Floats
    adjustment_sd: Floats
    objective: Floats
    freedom: NDArray[np.int16]
    status: NDArray[np.int8]
    iterations: NDArray[np.int8]


def reconcile(
    problem: Problem, cells: Cells, readings: Measured, rows: Floats | None = None
) -> tuple[States, Solution]:
    """Reconcile every cell that is not down.

    Parameters
    ----------
    problem : Problem
        The balance of the unit.
    cells : Cells
        The grid and the operating condition.
    readings : Measured
        Base readings of these cells.
    rows : array (p, N), optional
        Linear functions of the flows whose gains are wanted.

    Returns
    -------
    states : States
    solution : Solution
        The same with the gains, quantity first.
    """
    down = cells.operating == OPERATING.index("down")
    running = replace(readings, reading=np.where(down, np.nan, readings.reading))
    solution = solve(problem, running, rows)
    solution.status[down] = DOWN
    states = States(
        start=cells.start,
        flow_kmol_h=solution.flow.T,
        adjustment=solution.adjustment.T,
        adjustment_sd=solution.adjustment_sd.T,
        objective=solution.objective,
        freedom=solution.freedom,
        status=solution.status,
        iterations=solution.iterations,
    )
    return states, solution


def solve(problem: Problem, readings: Measured, rows: Floats | None = None) -> Solution:
    """Find the most likely flows that close the balance, with what they owe to each reading.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    readings : Measured
        Base readings of t cells; NaN where missing.
    rows : array (p, N), optional
        Linear functions of the flows whose gains are wanted.
    """
    wanted = np.zeros((0, len(problem.state))) if rows is None else rows
    groups = groups_of(problem, readings)
    found = _bounded(problem, readings, wanted, groups)
    for places, present, view in groups:
        if not view.rank:
            found.status[places] = UNSEEN if present.any() else NO_READINGS
        found.flow[np.ix_(~view.seen, places)] = np.nan
        found.value[np.ix_(~determined(wanted @ problem.basis, view.blind), places)] = np.nan
    return found


def split_covariance(covariance: Floats) -> tuple[Floats, Floats]:
    """Give (variance (m,), loading (m, m)) with `diag(variance) + loading loading'` equal to the covariance.

    Parameters
    ----------
    covariance : array (m, m)
        Symmetric positive definite.
    """
    own = np.diag(covariance)
    scale = np.sqrt(own)
    sizes, vectors = np.linalg.eigh(covariance / np.outer(scale, scale))
    rest = np.maximum(sizes - sizes[0] / 2, 0.0)
    return own * sizes[0] / 2, scale[:, None] * vectors * np.sqrt(rest)


def _empty(problem: Problem, readings: Measured, rows: Floats) -> Solution:
    count, cells = readings.reading.shape
    return Solution(
        flow=np.full((len(problem.state), cells), np.nan),
        adjustment=np.full((count, cells), np.nan),
        adjustment_sd=np.full((count, cells), np.nan),
        objective=np.full(cells, np.nan),
        freedom=np.zeros(cells, dtype=np.int16),
        status=np.full(cells, NO_READINGS, dtype=np.int8),
        iterations=np.zeros(cells, dtype=np.int8),
        value=np.full((len(rows), cells), np.nan),
        gain=np.zeros((len(rows), count, cells)),
    )


def _write(whole: Solution, place: Places, part: Solution) -> None:
    """Put the solution of some cells into their place."""
    span = slice(int(place[0]), int(place[-1]) + 1)
    # Cells in a row are copied several times faster as a slice.
    where = span if span.stop - span.start == len(place) else place
    for field in fields(Solution):
        getattr(whole, field.name)[..., where] = getattr(part, field.name)


def _bounded(problem: Problem, readings: Measured, rows: Floats, groups: list[Group]) -> Solution:
    """Solve cells; flows that come out negative are held at zero, and let go if the readings push them up.

    That holds for flows which no reading tells too: where none of their free values is possible, the bound
    itself tells something about the others.
    """
    found = _settled(problem, readings, rows, [group for group in groups if group.view.rank])
    held = np.zeros(found.flow.shape, dtype=bool)
    for _ in range(2 * len(problem.state)):
        low = _below_zero(found.flow) & ~held
        lifted = _lifted(problem, readings, found.flow, held) & ~low.any(axis=0)
        changed = np.flatnonzero((low | lifted).any(axis=0))
        if not len(changed):
            return found
        held = (held | low) & ~lifted
        for group, pattern in alike(held[:, changed]):
            narrow = replace(problem, basis=problem.basis @ null_space(problem.basis[pattern]))
            place = changed[group]
            part = readings.take(place)
            _write(found, place, _settled(narrow, part, rows, groups_of(narrow, part)))
    astray = _below_zero(found.flow) | _lifted(problem, readings, found.flow, held)
    _give_up(found, np.flatnonzero(astray.any(axis=0)))
    return found


def _give_up(found: Solution, places: Places) -> None:
    """Mark cells whose search for the flows at zero went round in circles; they yield nothing."""
    found.status[places] = NOT_CONVERGED
    for numbers in (found.flow, found.adjustment, found.adjustment_sd, found.value):
        numbers[:, places] = np.nan
    found.objective[places] = np.nan


def _below_zero(flow: Floats) -> Flags:
    return np.asarray(flow < -ZERO_FLOW * np.abs(flow).sum(axis=0) / 2)


def _lifted(problem: Problem, readings: Measured, flow: Floats, held: Flags) -> Flags:
    """Tell which held flows the readings would lift above zero again (a negative multiplier)."""
    lifted = np.zeros_like(held)
    some = np.flatnonzero(held.any(axis=0))
    if not len(some):
        return lifted
    geometry = tangent.geometry_of(problem)
    point = tangent.point_at(geometry, flow[:, some], readings.take(some))
    shared = _shared_errors(point)
    miss = point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared)
    uphill = -tangent.along(geometry, point, point.weight * miss)
    for group, pattern in alike(held[:, some]):
        multiplier = np.linalg.lstsq(problem.basis[pattern].T, uphill[:, group], rcond=None)[0]
        least = ZERO_SLOPE * np.abs(uphill[:, group]).max(axis=0)
        least = np.maximum(least, ZERO_GAIN / np.abs(flow[:, some[group]]).sum(axis=0))
        worst = multiplier == multiplier.min(axis=0)  # one at a time: letting all go at once may go round
        lifted[np.ix_(pattern, some[group])] = worst & (multiplier < -least)
    return lifted


def _shared_errors(point: Point) -> Floats:
    """Give the most likely shared errors at fixed flows, array (s, t)."""
    weighted = point.loading * point.weight[:, None]
    matrix = np.einsum("mst,mrt->srt", weighted, point.loading) + np.eye(point.loading.shape[1])[:, :, None]
    right = np.einsum("mst,mt->st", weighted, point.reading - point.prediction)
    return systems.solve(systems.factor(matrix)[0], right)


def _settled(problem: Problem, readings: Measured, rows: Floats, groups: list[Group]) -> Solution:
    """Iterate cells on one basis to rest and judge what came out."""
    found = _empty(problem, readings, rows)
    for rest in at_rest(problem, readings, groups):
        _write(found, rest.places, _judged(rest, rows))
    return found


def _judged(rest: Rest, rows: Floats) -> Solution:
    """Give what came out of the cells of one job."""
    good = rest.good
    adjustment, spread = _adjustments(rest)
    objective = (rest.point.weight * rest.miss**2).sum(axis=0) + (rest.shared**2).sum(axis=0)
    return Solution(
        flow=np.where(good, rest.flow, np.nan),
        adjustment=np.where(good, adjustment, np.nan),
        adjustment_sd=np.where(good, spread, np.nan),
        objective=np.where(good, objective, np.nan),
        freedom=rest.freedom,
        status=np.where(good, SOLVED, NOT_CONVERGED).astype(np.int8),
        iterations=rest.iterations,
        value=np.where(good, rows @ rest.flow, np.nan),
        gain=tangent.gains(rest.geometry, rest.point, rest.inverse, rows),
    )


def _adjustments(rest: Rest) -> tuple[Floats, Floats]:
    """Give adjustments and the standard deviation they should have, arrays (m, t)."""
    point = rest.point
    present = point.weight > 0
    own = 1.0 / np.where(present, point.weight, 1.0) + (point.loading**2).sum(axis=1)
    left = np.clip(1.0 - tangent.prediction_variance(rest.geometry, point, rest.inverse) / own, 0.0, 1.0)
    adjustment = (point.prediction - point.reading) / np.sqrt(own)
    spread = np.where(rest.redundant, np.sqrt(left), 0.0)
    return np.where(present, adjustment, np.nan), np.where(present, spread, np.nan)
