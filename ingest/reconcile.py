"""Weighted least squares on the balance, for all cells at once.

Minimise the sum of ((y - h(n) - L e) / u)^2 and of e^2 over flows n = Z q and shared errors e (one standard
deviation each), with n >= 0. That is generalised least squares with the full covariance u^2 + L L' of the
readings. Gauss-Newton from a start that is linear in n; a reading that is missing has no weight.

Sources: Kuehn & Davidson 1961, Crowe, Garcia Campos & Hrymak 1983 (reconciliation by weighted least squares
and projection on the balance), from memory; JCGM 100:2008 for the uncertainties.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ingest import systems, tangent
from ingest.balance import RANK_TOLERANCE, Problem, Sight, determined, null_space, sight
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
BLOCK = 2048  # cells in one go: fewer make the steps of Python count, more leave the processor's cache
INSIDE = 1e-6  # of the unit's total flow; so far above zero a flow is put that no reading feels
MOST_TURNS = 200
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
    groups = _groups(problem, readings)
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


class _Group(NamedTuple):
    """Cells with the same readings there, and what these let one see."""

    places: Places
    present: Flags  # (m,)
    view: Sight


def _groups(problem: Problem, readings: Measured) -> list[_Group]:
    """Group cells by which readings are there."""
    return [
        _Group(places, present, sight(problem, present))
        for places, present in _alike(np.isfinite(readings.reading))
    ]


def _alike(flags: Flags) -> list[tuple[Places, Flags]]:
    """Group columns that are alike: [(places, column)]."""
    group = np.zeros(flags.shape[1], dtype=np.int64)
    for byte in np.packbits(flags, axis=0):
        _, first, group = np.unique(256 * group + byte, return_index=True, return_inverse=True)
    order = np.argsort(group, kind="stable")
    edges = np.flatnonzero(np.diff(group[order])) + 1
    return [(place, flags[:, first[i]]) for i, place in enumerate(np.split(order, edges)) if len(place)]


def _bounded(problem: Problem, readings: Measured, rows: Floats, groups: list[_Group]) -> Solution:
    """Solve cells; flows that come out negative are held at zero, and let go if the readings push them up.

    That holds for flows which no reading tells too: where none of their free values is possible, the bound
    itself tells something about the others.
    """
    found = _settled(problem, readings, rows, [group for group in groups if group.view.rank])
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
            part = readings.take(place)
            _write(found, place, _settled(narrow, part, rows, _groups(narrow, part)))
    return found


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
    for group, pattern in _alike(held[:, some]):
        multiplier = np.linalg.lstsq(problem.basis[pattern].T, uphill[:, group], rcond=None)[0]
        steepest = np.abs(uphill[:, group]).max(axis=0)
        lifted[np.ix_(pattern, some[group])] = multiplier < -ZERO_SLOPE * steepest
    return lifted


def _shared_errors(point: Point) -> Floats:
    """Give the most likely shared errors at fixed flows, array (s, t)."""
    weighted = point.loading * point.weight[:, None]
    matrix = np.einsum("mst,mrt->srt", weighted, point.loading) + np.eye(point.loading.shape[1])[:, :, None]
    right = np.einsum("mst,mt->st", weighted, point.reading - point.prediction)
    return systems.solve(systems.factor(matrix)[0], right)


class _Job(NamedTuple):
    """Cells that can be iterated together: all that see every direction, or those of one group."""

    places: Places
    geometry: Geometry
    unfelt: Floats  # (N, b), directions of the flows that no reading feels; the geometry is without them
    rank: int | None  # None: all directions of the geometry are seen
    freedom: NDArray[np.int16]  # (t,)
    redundant: Flags  # (m, t)


def _jobs(problem: Problem, groups: list[_Group]) -> list[_Job]:
    """Split cells into jobs of at most BLOCK cells."""
    cells = 1 + max((int(group.places[-1]) for group in groups), default=0)
    freedom = np.zeros(cells, dtype=np.int16)
    redundant = np.zeros((len(problem.names), cells), dtype=bool)
    for places, _, view in groups:
        freedom[places] = view.freedom
        redundant[:, places] = view.redundant[:, None]
    full = [group.places for group in groups if not group.view.blind.size]
    kinds: list[tuple[Places, Problem, Floats, int | None]] = [
        (group.places, *_felt(problem, group)) for group in groups if group.view.blind.size
    ]
    if full:
        kinds.insert(0, (np.sort(np.concatenate(full)), problem, problem.basis[:, :0], None))
    return [
        _Job(place, geometry, unfelt, rank, freedom[place], redundant[:, place])
        for places, part, unfelt, rank in kinds
        for geometry in [tangent.geometry_of(part)]
        for place in np.split(places, range(BLOCK, len(places), BLOCK))
    ]


def _felt(problem: Problem, group: _Group) -> tuple[Problem, Floats, int | None]:
    """Leave out directions that are blind at every state: (what is left, those directions, rank).

    What is left is then seen in all directions and needs no search for the blind ones in every cell.
    """
    unfelt = problem.basis @ group.view.blind
    rows = np.vstack([problem.numerator[group.present], problem.denominator[group.present]])
    size = np.maximum(np.linalg.norm(rows, axis=1), 1e-300)[:, None]
    if not group.view.rank or np.abs(rows @ unfelt / size).max() > RANK_TOLERANCE:
        return problem, problem.basis[:, :0], group.view.rank
    return replace(problem, basis=problem.basis @ null_space(group.view.blind.T)), unfelt, None


class Rest(NamedTuple):
    """Cells of one job where they came to rest: t' of the t cells."""

    geometry: Geometry
    places: Places  # (t',) which cells
    freedom: NDArray[np.int16]  # (t',)
    redundant: Flags  # (m, t')
    flow: Floats  # (N, t'), no flow held at zero
    point: Point
    miss: Floats  # (m, t'), reading minus prediction minus shared errors; 0 - prediction where missing
    shared: Floats  # (s, t')
    inverse: Floats  # (K, K, t'), covariance of (q, shared errors)
    good: Flags  # (t',) came to rest at a sound point
    iterations: NDArray[np.int8]  # (t',)


def at_rest(problem: Problem, readings: Measured) -> Iterator[Rest]:
    """Iterate cells to the least objective, flows free to be negative, some cells at a time.

    Without bounds the residuals of the balance are linear in small errors and have mean zero, which tests
    of residuals need.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    readings : Measured
        Base readings of t cells.
    """
    seeing = [group for group in _groups(problem, readings) if group.view.rank]
    for job in _jobs(problem, seeing):
        yield _rest(readings.take(job.places), job)


def _settled(problem: Problem, readings: Measured, rows: Floats, groups: list[_Group]) -> Solution:
    """Iterate cells on one basis to rest and judge what came out."""
    found = _empty(problem, readings, rows)
    for job in _jobs(problem, groups):
        _write(found, job.places, _judged(_rest(readings.take(job.places), job), rows))
    return found


def _rest(readings: Measured, job: _Job) -> Rest:
    """Iterate the cells of one job to rest."""
    geometry = job.geometry
    start, *begun = _begin(geometry, readings, job.rank)
    q, shared, iterations, still = _iterate(geometry, start, (begun[0], begun[1]), job.rank)
    flow = _completed(geometry.problem.basis @ q, job.unfelt)
    point = tangent.moved(geometry, start, flow)
    inverse, sound = tangent.covariance(geometry, point, job.rank)
    miss = point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared)
    return Rest(
        geometry=geometry,
        places=job.places,
        freedom=job.freedom,
        redundant=job.redundant,
        flow=flow,
        point=point,
        miss=miss,
        shared=shared,
        inverse=inverse,
        good=still & sound,
        iterations=iterations,
    )


def _completed(flow: Floats, unfelt: Floats) -> Floats:
    """Choose what no reading feels so that no flow is negative, where that can be.

    Projections in turn on the flows that are open and on those that are possible end at a point of both.
    """
    spread = unfelt @ unfelt.T
    free = np.diag(spread)[:, None] > 0
    least = INSIDE * np.abs(flow).sum(axis=0) / 2
    for _ in range(MOST_TURNS if unfelt.size else 0):
        lack = np.where(free, np.maximum(least - flow, 0.0), 0.0)
        if not lack.any():
            break
        flow = flow + 1.5 * (spread @ lack)
    return flow


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


def _iterate(
    geometry: Geometry, start: Point, begun: tuple[Floats, Floats], rank: int | None
) -> tuple[Floats, Floats, NDArray[np.int8], Flags]:
    """Give (q, shared errors, iterations, at rest); cells that have come to rest are left alone."""
    point, (q, shared) = start, begun
    k, count = q.shape
    iterations = np.zeros(count, dtype=np.int8)
    still = np.zeros(count, dtype=bool)
    moving = np.arange(count)
    for _ in range(MOST_ITERATIONS):
        flow = geometry.problem.basis @ q[:, moving]
        point = tangent.moved(geometry, point, flow)
        change = tangent.step(geometry, point, shared[:, moving], rank)
        q[:, moving] += change[:k]
        shared[:, moving] += change[k:]
        iterations[moving] += 1
        size = np.abs(geometry.problem.basis @ change[:k]).max(axis=0)
        at_rest = size < SMALLEST_STEP * np.abs(flow).sum(axis=0) / 2
        still[moving[at_rest]] = True
        if at_rest.all():
            break
        if at_rest.any():
            moving, point = moving[~at_rest], point.take(~at_rest)
    return q, shared, iterations, still


def _begin(geometry: Geometry, readings: Measured, rank: int | None) -> tuple[Point, Floats, Floats]:
    """Start from the readings: `(numerator - y denominator) . n = 0` is linear in n and needs no guess.

    Gives (the cells at a guess, q, shared errors).
    """
    problem, k = geometry.problem, geometry.unknowns
    reading = np.nan_to_num(readings.reading)
    size = np.abs(problem.numerator).max(axis=1)[:, None]
    scale = np.where(geometry.ratio, 0.0, np.abs(reading) / size).max(axis=0)
    even = problem.basis @ (problem.basis.T @ np.full(len(problem.state), 1.0 / len(problem.state)))
    flow = even[:, None] * np.where(scale > 0, scale, 1.0)
    point = tangent.point_at(geometry, flow, readings)
    for _ in range(2):
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
        point = tangent.moved(geometry, point, flow)
    return point, x[:k], x[k:]
