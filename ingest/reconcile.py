"""Weighted least squares on the balance, for all cells at once.

Minimise the sum of ((y - h(n) - L e) / u)^2 and of e^2 over flows n = Z q and shared errors e (one standard
deviation each), with n >= 0. That is generalised least squares with the full covariance u^2 + L L' of the
readings. Gauss-Newton from a start that is linear in n; a reading that is missing has no weight.

Sources: Kuehn & Davidson 1961, Crowe, Garcia Campos & Hrymak 1983 (reconciliation by weighted least squares
and projection on the balance), from memory; JCGM 100:2008 for the uncertainties.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ingest import systems, tangent
from ingest.balance import Problem, determined, null_space, sight
from ingest.cells import OPERATING, Cells
from ingest.instruments import Measured, measured
from ingest.tangent import Geometry, Point
from ingest.unit import Unit

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

STATUS = ("solved", "did not converge", "cannot be seen", "no readings", "down")
SOLVED, NOT_CONVERGED, UNSEEN, NO_READINGS, DOWN = range(len(STATUS))

MOST_ITERATIONS = 12
SMALLEST_STEP = 1e-9  # of the unit's total flow
ZERO_FLOW = 1e-10  # of the unit's total flow; a flow below minus this is negative
ZERO_SLOPE = 1e-9  # of the steepest direction; less than that pushes nowhere
BLOCK = 1024  # cells in one go: the arrays of one step stay inside the processor's cache
RIDGE = 1e-8  # keeps directions that no reading sees near an even guess, at the start only


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
    unit: Unit, problem: Problem, cells: Cells, rows: Floats | None = None
) -> tuple[States, Solution]:
    """Reconcile every cell that is not down.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        Readings on the grid.
    rows : array (p, N), optional
        Linear functions of the flows whose gains are wanted.

    Returns
    -------
    states : States
    solution : Solution
        The same with the gains, quantity first.
    """
    down = cells.operating == OPERATING.index("down")
    readings = measured(unit, cells.value, cells.share)
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
    found = _empty(problem, readings, wanted)
    patterns = [(places, sight(problem, present), present) for places, present in _patterns(readings)]
    seeing = [places for places, view, _ in patterns if view.rank]
    if seeing:
        live = np.sort(np.concatenate(seeing))
        _write(found, live, _bounded(problem, readings.take(live), wanted))
    for places, view, present in patterns:
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
    for field in fields(Solution):
        getattr(whole, field.name)[..., place] = getattr(part, field.name)


def _patterns(readings: Measured) -> list[tuple[Places, Flags]]:
    """Group cells by which readings are there: [(places, present)]."""
    return _alike(np.isfinite(readings.reading))


def _alike(flags: Flags) -> list[tuple[Places, Flags]]:
    """Group columns that are alike: [(places, column)]."""
    packed = np.packbits(flags, axis=0)
    _, first, group = np.unique(packed, axis=1, return_index=True, return_inverse=True)
    order = np.argsort(group.ravel(), kind="stable")
    edges = np.flatnonzero(np.diff(group.ravel()[order])) + 1
    return [(place, flags[:, first[i]]) for i, place in enumerate(np.split(order, edges)) if len(place)]


def _bounded(problem: Problem, readings: Measured, rows: Floats) -> Solution:
    """Solve cells; flows that come out negative are held at zero, and let go if the readings push them up.

    That holds for flows which no reading tells too: where none of their free values is possible, the bound
    itself tells something about the others.
    """
    found = _settled(problem, readings, rows)
    held = np.zeros(found.flow.shape, dtype=bool)
    freed = np.zeros_like(held)
    for _ in range(len(problem.state)):
        low = _below_zero(found.flow) & ~held
        lifted = _lifted(problem, readings, found.flow, held) & ~freed & ~low.any(axis=0)
        changed = np.flatnonzero((low | lifted).any(axis=0))
        if not len(changed):
            break
        held = (held | low) & ~lifted
        freed |= lifted
        for group, pattern in _alike(held[:, changed]):
            narrow = replace(problem, basis=problem.basis @ null_space(problem.basis[pattern]))
            place = changed[group]
            _write(found, place, _settled(narrow, readings.take(place), rows))
    return found


def _below_zero(flow: Floats) -> Flags:
    return np.asarray(flow < -ZERO_FLOW * np.abs(flow).sum(axis=0) / 2)


def _lifted(problem: Problem, readings: Measured, flow: Floats, held: Flags) -> Flags:
    """Tell which held flows the readings would lift above zero again (a negative multiplier)."""
    lifted = np.zeros_like(held)
    if not held.any():
        return lifted
    geometry = tangent.geometry_of(problem)
    point = tangent.point_at(geometry, flow, readings)
    shared = _shared_errors(point)
    miss = point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared)
    uphill = -tangent.along(geometry, point, point.weight * miss)
    for group, pattern in _alike(held):
        if pattern.any():
            multiplier = np.linalg.lstsq(problem.basis[pattern].T, uphill[:, group], rcond=None)[0]
            lifted[np.ix_(pattern, group)] = multiplier < -ZERO_SLOPE * np.abs(uphill[:, group]).max(axis=0)
    return lifted


def _shared_errors(point: Point) -> Floats:
    """Give the most likely shared errors at fixed flows, array (s, t)."""
    weighted = point.loading * point.weight[:, None]
    matrix = np.einsum("mst,mrt->srt", weighted, point.loading) + np.eye(point.loading.shape[1])[:, :, None]
    right = np.einsum("mst,mt->st", weighted, point.reading - point.prediction)
    return systems.solve(systems.factor(matrix)[0], right)


class _Job(NamedTuple):
    """Cells that can be iterated together: all that see every direction, or those of one pattern."""

    places: Places
    rank: int | None  # None: all directions of q are seen
    freedom: NDArray[np.int16]  # (t,)
    redundant: Flags  # (m, t)


def _jobs(problem: Problem, readings: Measured) -> list[_Job]:
    """Split cells into jobs of at most BLOCK cells."""
    views = [(places, sight(problem, present)) for places, present in _patterns(readings)]
    freedom = np.zeros(readings.reading.shape[1], dtype=np.int16)
    redundant = np.zeros(readings.reading.shape, dtype=bool)
    for places, view in views:
        freedom[places] = view.freedom
        redundant[:, places] = view.redundant[:, None]
    full = [places for places, view in views if not view.blind.size]
    whole: list[tuple[Places, int | None]] = [(np.sort(np.concatenate(full)), None)] if full else []
    partly = [(places, view.rank) for places, view in views if view.blind.size]
    return [
        _Job(place, rank, freedom[place], redundant[:, place])
        for places, rank in [*whole, *partly]
        for place in np.split(places, range(BLOCK, len(places), BLOCK))
    ]


def _settled(problem: Problem, readings: Measured, rows: Floats) -> Solution:
    """Iterate cells on one basis to rest and judge what came out."""
    geometry = tangent.geometry_of(problem)
    found = _empty(problem, readings, rows)
    for job in _jobs(problem, readings):
        _write(found, job.places, _at_rest(geometry, readings.take(job.places), rows, job))
    return found


def _at_rest(geometry: Geometry, readings: Measured, rows: Floats, job: _Job) -> Solution:
    """Iterate the cells of one job to rest and judge what came out."""
    q, shared, iterations, still = _iterate(geometry, readings, job.rank)
    flow = geometry.problem.basis @ q
    point = tangent.point_at(geometry, flow, readings)
    inverse, sound = tangent.covariance(geometry, point, job.rank)
    good = still & sound
    adjustment, spread = _adjustments(geometry, point, inverse, job.redundant)
    rest = point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared)
    objective = (point.weight * rest**2).sum(axis=0) + (shared**2).sum(axis=0)
    return Solution(
        flow=np.where(good, flow, np.nan),
        adjustment=np.where(good, adjustment, np.nan),
        adjustment_sd=np.where(good, spread, np.nan),
        objective=np.where(good, objective, np.nan),
        freedom=job.freedom,
        status=np.where(good, SOLVED, NOT_CONVERGED).astype(np.int8),
        iterations=iterations,
        value=np.where(good, rows @ flow, np.nan),
        gain=tangent.gains(geometry, point, inverse, rows),
    )


def _adjustments(
    geometry: Geometry, point: Point, inverse: Floats, redundant: Flags
) -> tuple[Floats, Floats]:
    """Give adjustments and the standard deviation they should have, arrays (m, t)."""
    present = point.weight > 0
    own = 1.0 / np.where(present, point.weight, 1.0) + (point.loading**2).sum(axis=1)
    left = np.clip(1.0 - tangent.prediction_variance(geometry, point, inverse) / own, 0.0, 1.0)
    adjustment = (point.prediction - point.reading) / np.sqrt(own)
    spread = np.where(redundant, np.sqrt(left), 0.0)
    return np.where(present, adjustment, np.nan), np.where(present, spread, np.nan)


def _iterate(
    geometry: Geometry, readings: Measured, rank: int | None
) -> tuple[Floats, Floats, NDArray[np.int8], Flags]:
    """Give (q, shared errors, iterations, at rest); cells that have come to rest are left alone."""
    q, shared = _begin(geometry, readings, rank)
    k, count = q.shape
    iterations = np.zeros(count, dtype=np.int8)
    still = np.zeros(count, dtype=bool)
    moving = np.arange(count)
    for _ in range(MOST_ITERATIONS):
        flow = geometry.problem.basis @ q[:, moving]
        point = tangent.point_at(geometry, flow, readings.take(moving))
        change = tangent.step(geometry, point, shared[:, moving], rank)
        q[:, moving] += change[:k]
        shared[:, moving] += change[k:]
        iterations[moving] += 1
        size = np.abs(geometry.problem.basis @ change[:k]).max(axis=0)
        at_rest = size < SMALLEST_STEP * np.abs(flow).sum(axis=0) / 2
        still[moving[at_rest]] = True
        moving = moving[~at_rest]
        if not len(moving):
            break
    return q, shared, iterations, still


def _begin(geometry: Geometry, readings: Measured, rank: int | None) -> tuple[Floats, Floats]:
    """Start from the readings: `(numerator - y denominator) . n = 0` is linear in n and needs no guess."""
    problem, k = geometry.problem, geometry.unknowns
    reading = np.nan_to_num(readings.reading)
    size = np.abs(problem.numerator).max(axis=1)[:, None]
    scale = np.where(geometry.ratio, 0.0, np.abs(reading) / size).max(axis=0)
    even = problem.basis @ (problem.basis.T @ np.full(len(problem.state), 1.0 / len(problem.state)))
    flow = even[:, None] * np.where(scale > 0, scale, 1.0)
    for _ in range(2):
        point = tangent.point_at(geometry, flow, readings)
        below = np.where(geometry.ratio, np.fmax(point.below, 1e-3 * scale), 1.0)
        implicit = point._replace(prediction=reading, below=below)
        matrix = tangent.normal(geometry, implicit)
        target = np.where(geometry.ratio, 0.0, reading)
        right = tangent.slope(geometry, implicit, target, np.zeros(implicit.loading.shape[1:]))
        if rank is not None:
            diagonal = np.arange(k)
            ridge = RIDGE * matrix[diagonal, diagonal].mean(axis=0)
            matrix[diagonal, diagonal] += ridge
            right[:k] += ridge * (problem.basis.T @ flow)
        x = systems.solve(systems.factor(matrix)[0], right)
        flow = problem.basis @ x[:k]
    return x[:k], x[k:]
