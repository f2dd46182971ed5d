"""Weighted least squares on the balance, for all cells at once.

Minimise the sum of ((y - h(n) - L e) / u)^2 and of e^2 over flows n = Z q and shared errors e (one standard
deviation each), with n >= 0. That is generalised least squares with the full covariance u^2 + L L' of the
readings. h is linear-fractional, so the normal matrix of every cell is one matrix product of a few
coefficients per reading with constants of the unit. Gauss-Newton; a reading that is missing has no weight.

Sources: JCGM 100:2008 (uncertainties); Kuehn & Davidson 1961 and Crowe et al. 1983 (reconciliation by
weighted least squares and projection), from memory.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ingest import systems
from ingest.balance import Problem, Sight, determined, null_space, sight
from ingest.cells import OPERATING, Cells
from ingest.instruments import Measured, measured
from ingest.unit import Unit

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

STATUS = ("solved", "did not converge", "cannot be seen", "no readings", "down")
SOLVED, NOT_CONVERGED, UNSEEN, NO_READINGS, DOWN = range(len(STATUS))

MOST_ITERATIONS = 12
SMALLEST_STEP = 1e-9  # of the unit's total flow
ZERO_FLOW = 1e-10  # of the unit's total flow; a flow below minus this is negative
BLOCK = 1024  # cells in one go; keeps the arrays of one step inside the processor's cache
RIDGE = 1e-8  # holds blind directions near the even guess at the start only


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
    gain : array (p, m, t)
        Change of each asked-for linear function of the flows per unit of each reading.
    told : array (p, t) of bool
        Whether the readings present determine that function.
    """

    flow: Floats
    adjustment: Floats
    adjustment_sd: Floats
    objective: Floats
    freedom: NDArray[np.int16]
    status: NDArray[np.int8]
    iterations: NDArray[np.int8]
    gain: Floats
    told: Flags


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


def reconcile(unit: Unit, problem: Problem, cells: Cells, rows: Floats | None = None) -> tuple[States, Solution]:
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
        The same with the gains, structure of arrays.
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
    for place, present in _patterns(np.isfinite(readings.reading)):
        view = sight(problem, present)
        found.told[:, place] = determined(wanted @ problem.basis, view.blind)[:, None]
        if view.rank == 0:
            found.status[place] = UNSEEN if present.any() else NO_READINGS
            continue
        for start in range(0, len(place), BLOCK):
            _fill(problem, readings, wanted, view, place[start : start + BLOCK], found)
        found.flow[np.ix_(~view.seen, place)] = np.nan
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
    blank = np.full((count, cells), np.nan)
    return Solution(
        flow=np.full((len(problem.state), cells), np.nan),
        adjustment=blank,
        adjustment_sd=blank.copy(),
        objective=np.full(cells, np.nan),
        freedom=np.zeros(cells, dtype=np.int16),
        status=np.full(cells, NO_READINGS, dtype=np.int8),
        iterations=np.zeros(cells, dtype=np.int8),
        gain=np.zeros((len(rows), count, cells)),
        told=np.zeros((len(rows), cells), dtype=bool),
    )


def _patterns(present: Flags) -> list[tuple[Places, Flags]]:
    """Group cells by which readings are there: [(places, present)], in order of first appearance."""
    packed = np.packbits(present, axis=0)
    _, first, group = np.unique(packed, axis=1, return_index=True, return_inverse=True)
    order = np.argsort(group.ravel(), kind="stable")
    edges = np.flatnonzero(np.diff(group.ravel()[order])) + 1
    return [(place, present[:, first[i]]) for i, place in enumerate(np.split(order, edges)) if len(place)]


class _Geometry(NamedTuple):
    """Constants of one balance on one basis: what each reading sees of q, and their packed products."""

    problem: Problem
    upper: Floats  # (m, k)
    lower: Floats  # (m, k)
    ratio: Flags  # (m,)
    packed: tuple[Places, Places]  # lower triangle of (k, k)
    products: Floats  # (3 m, k (k + 1) / 2)


class _Point(NamedTuple):
    """One cell block at one value of q: predictions and weights of its readings, each (m, t)."""

    prediction: Floats
    below: Floats
    weight: Floats
    reading: Floats  # 0 where missing; its weight is 0
    loading: Floats  # (m, s, t)


def _geometry(problem: Problem) -> _Geometry:
    upper, lower = problem.numerator @ problem.basis, problem.denominator @ problem.basis
    a, b = np.tril_indices(upper.shape[1])
    products = np.vstack(
        [
            upper[:, a] * upper[:, b],
            upper[:, a] * lower[:, b] + lower[:, a] * upper[:, b],
            lower[:, a] * lower[:, b],
        ]
    )
    return _Geometry(problem, upper, lower, ~problem.linear, (a, b), products)


def _fill(
    problem: Problem, readings: Measured, rows: Floats, view: Sight, place: Places, found: Solution
) -> None:
    """Solve one block of cells that share a pattern and write it into `found`, negative flows held at zero."""
    _settle(problem, readings, rows, view, place, found)
    held = np.zeros((len(problem.state), len(place)), dtype=bool)
    released = np.zeros_like(held)
    for _ in range(len(problem.state)):
        low = _below_zero(found.flow[:, place], view.seen) & ~held
        slack = _pushed_down(problem, readings, place, found, held) & ~released & ~low.any(axis=0)
        changed = (low | slack).any(axis=0)
        if not changed.any():
            return
        held = (held | low) & ~slack
        released |= slack
        for group, pattern in _patterns(held[:, changed]):
            cells = place[np.flatnonzero(changed)[group]]
            narrowed = _hold(problem, pattern)
            _settle(narrowed, readings, rows, _sight_held(narrowed, readings, cells, view), cells, found)


def _below_zero(flow: Floats, seen: Flags) -> Flags:
    total = np.abs(flow).sum(axis=0) / 2
    return (flow < -ZERO_FLOW * total) & seen[:, None]


def _hold(problem: Problem, held: Flags) -> Problem:
    """Give the problem with some flows held at zero: the basis loses those directions."""
    return replace(problem, basis=problem.basis @ null_space(problem.basis[held]))


def _sight_held(narrowed: Problem, readings: Measured, cells: Places, view: Sight) -> Sight:
    """Judge rank and freedom with flows held; what counts as seen stays as it was without them."""
    inner = sight(narrowed, np.isfinite(readings.reading[:, cells[0]]))
    return replace(inner, seen=view.seen)


def _pushed_down(
    problem: Problem, readings: Measured, place: Places, found: Solution, held: Flags
) -> Flags:
    """Tell which held flows the readings would lift above zero again (negative multipliers)."""
    out = np.zeros_like(held)
    if not held.any():
        return out
    geometry = _geometry(problem)
    point = _look(geometry, found.flow[:, place], readings, place)
    shared = _shared_errors(point)
    miss = point.weight * (point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared))
    slope = -(geometry.upper.T @ (miss / point.below) - geometry.lower.T @ (miss * point.prediction / point.below))
    for group, pattern in _patterns(held):
        if pattern.any():
            multiplier = np.linalg.lstsq(problem.basis[pattern].T, slope[:, group], rcond=None)[0]
            out[np.ix_(pattern, group)] = multiplier < 0
    return out


def _shared_errors(point: _Point) -> Floats:
    """Give the most likely shared errors at fixed flows, array (s, t)."""
    count = point.loading.shape[1]
    if not count:
        return np.zeros((0, point.reading.shape[1]))
    weighted = point.loading * point.weight[:, None]
    matrix = np.einsum("mst,mrt->tsr", weighted, point.loading) + np.eye(count)
    right = np.einsum("mst,mt->ts", weighted, point.reading - point.prediction)
    return np.ascontiguousarray(np.linalg.solve(matrix, right[..., None])[..., 0].T)


def _settle(
    problem: Problem, readings: Measured, rows: Floats, view: Sight, place: Places, found: Solution
) -> None:
    """Iterate one block on one basis to rest and write flows, residuals and gains into `found`."""
    geometry = _geometry(problem)
    rank = view.rank if view.rank < problem.basis.shape[1] else None
    q, shared, iterations, still = _iterate(geometry, readings, place, rank)
    flow = problem.basis @ q
    point = _look(geometry, flow, readings, place)
    inverse, sound = _covariance(geometry, point, rank)
    good = still & sound
    found.flow[:, place] = np.where(good, flow, np.nan)
    found.iterations[place] = iterations
    found.status[place] = np.where(good, SOLVED, NOT_CONVERGED)
    found.freedom[place] = view.freedom
    _judge(geometry, point, shared, inverse, place, view, found)
    found.gain[:, :, place] = _gains(geometry, point, inverse, rows)


def _iterate(
    geometry: _Geometry, readings: Measured, place: Places, rank: int | None
) -> tuple[Floats, Floats, NDArray[np.int8], Flags]:
    """Give (q, shared errors, iterations, at rest) of one block."""
    q, shared = _begin(geometry, readings, place, rank)
    iterations = np.zeros(len(place), dtype=np.int8)
    moving = np.arange(len(place))
    for _ in range(MOST_ITERATIONS):
        flow = geometry.problem.basis @ q[:, moving]
        point = _look(geometry, flow, readings, place[moving])
        step = _step(geometry, point, shared[:, moving], rank)
        k = len(q)
        q[:, moving] += step[:k]
        shared[:, moving] += step[k:]
        iterations[moving] += 1
        size = np.abs(geometry.problem.basis @ step[:k]).max(axis=0)
        moving = moving[~(size < SMALLEST_STEP * np.abs(flow).sum(axis=0) / 2)]
        if not len(moving):
            break
    still = np.ones(len(place), dtype=bool)
    still[moving] = False
    return q, shared, iterations, still & np.isfinite(q).all(axis=0)


def _begin(
    geometry: _Geometry, readings: Measured, place: Places, rank: int | None
) -> tuple[Floats, Floats]:
    """Start from the readings: `(numerator - y denominator) . n = 0` is linear in n and needs no guess."""
    reading = np.nan_to_num(readings.reading[:, place])
    size = np.abs(geometry.problem.numerator).max(axis=1)[:, None]
    scale = np.where(geometry.ratio[:, None], 0.0, np.abs(reading) / size).max(axis=0)
    even = np.full(len(geometry.problem.state), 1.0 / len(geometry.problem.state))
    guess = geometry.problem.basis @ (geometry.problem.basis.T @ even)
    flow = guess[:, None] * scale
    for _ in range(2):
        point = _look(geometry, flow, readings, place)
        below = np.where(geometry.ratio[:, None], np.maximum(point.below, 1e-3 * scale), 1.0)
        implicit = point._replace(prediction=reading, below=np.where(below > 0, below, 1.0))
        target = np.where(geometry.ratio[:, None], 0.0, reading)
        matrix = _normal(geometry, implicit)
        right = _right(geometry, implicit, target, np.zeros(implicit.loading.shape[1:]))
        k = geometry.upper.shape[1]
        if rank is not None:
            ridge = RIDGE * matrix[np.arange(k), np.arange(k)].mean(axis=0)
            matrix[np.arange(k), np.arange(k)] += ridge
            right[:k] += ridge * (geometry.problem.basis.T @ flow)
        x = systems.solve(systems.factor(matrix)[0], right)
        flow = geometry.problem.basis @ x[:k]
    return x[:k], x[k:]


def _look(geometry: _Geometry, flow: Floats, readings: Measured, place: Places) -> _Point:
    """Predict every reading of a block and weigh it."""
    reading = readings.reading[:, place]
    present = np.isfinite(reading)
    total = np.abs(flow).sum(axis=0) + 1e-300
    below = np.where(geometry.ratio[:, None], geometry.problem.denominator @ flow, 1.0)
    below = np.where(geometry.ratio[:, None] & ~(below > 1e-9 * total), 1e-9 * total, below)
    variance = readings.variance[:, place]
    return _Point(
        prediction=(geometry.problem.numerator @ flow) / below,
        below=below,
        weight=np.where(present, 1.0 / np.where(present, variance, 1.0), 0.0),
        reading=np.where(present, reading, 0.0),
        loading=np.where(present[:, None], readings.loading[:, :, place], 0.0),
    )


def _normal(geometry: _Geometry, point: _Point) -> Floats:
    """Give the normal matrices in (q, shared errors), array (K, K, t); only the lower triangle is filled."""
    heavy = point.weight / point.below**2
    parts = np.vstack([heavy, -heavy * point.prediction, heavy * point.prediction**2])
    k, s = geometry.upper.shape[1], point.loading.shape[1]
    matrix = np.zeros((k + s, k + s, heavy.shape[1]))
    matrix[geometry.packed] = geometry.products.T @ parts
    for i in range(s):
        lean = point.weight * point.loading[:, i] / point.below
        matrix[k + i, :k] = geometry.upper.T @ lean - geometry.lower.T @ (lean * point.prediction)
        for j in range(i + 1):
            both = np.einsum("mt,mt,mt->t", point.weight, point.loading[:, i], point.loading[:, j])
            matrix[k + i, k + j] = both + (i == j)
    return matrix


def _right(geometry: _Geometry, point: _Point, miss: Floats, shared: Floats) -> Floats:
    """Give the right-hand sides, array (K, t), for residuals `miss` after shared errors are taken off."""
    lean = point.weight * miss / point.below
    along = geometry.upper.T @ lean - geometry.lower.T @ (lean * point.prediction)
    common = np.einsum("mst,mt->st", point.loading, point.weight * miss) - shared
    return np.vstack([along, common])


def _step(geometry: _Geometry, point: _Point, shared: Floats, rank: int | None) -> Floats:
    matrix = _normal(geometry, point)
    taken = np.einsum("mst,st->mt", point.loading, shared)
    right = _right(geometry, point, point.reading - point.prediction - taken, shared)
    if rank is None:
        return systems.solve(systems.factor(matrix)[0], right)
    space = _space(geometry, point, rank)
    small = space.transpose(0, 2, 1) @ _full(matrix) @ space
    inner = np.linalg.solve(small, space.transpose(0, 2, 1) @ right.T[..., None])
    return np.ascontiguousarray((space @ inner)[..., 0].T)


def _covariance(geometry: _Geometry, point: _Point, rank: int | None) -> tuple[Floats, Flags]:
    """Give the covariance of (q, shared errors), array (K, K, t), and which cells have a sound one."""
    matrix = _normal(geometry, point)
    if rank is None:
        lower, sound = systems.factor(matrix)
        return systems.invert(lower), sound
    space = _space(geometry, point, rank)
    small = space.transpose(0, 2, 1) @ _full(matrix) @ space
    inverse = space @ np.linalg.inv(small) @ space.transpose(0, 2, 1)
    return np.ascontiguousarray(inverse.transpose(1, 2, 0)), np.isfinite(inverse).all(axis=(1, 2))


def _full(matrix: Floats) -> Floats:
    """Fill the upper triangle and put cells first, array (t, K, K)."""
    lower = matrix.transpose(2, 0, 1)
    return lower + np.tril(lower, -1).transpose(0, 2, 1)


def _space(geometry: _Geometry, point: _Point, rank: int) -> Floats:
    """Give per cell the directions of (q, shared errors) that the readings see, array (t, K, rank + s)."""
    present = (point.weight > 0).T[..., None]
    gradient = geometry.upper - point.prediction.T[..., None] * geometry.lower
    size = np.linalg.norm(gradient, axis=2, keepdims=True)
    scaled = np.where(present, gradient / np.maximum(size, 1e-300), 0.0)
    right = np.linalg.svd(scaled)[2][:, :rank].transpose(0, 2, 1)
    k, s = geometry.upper.shape[1], point.loading.shape[1]
    space = np.zeros((len(right), k + s, rank + s))
    space[:, :k, :rank] = right
    space[:, k:, rank:] = np.eye(s)
    return space


def _judge(
    geometry: _Geometry,
    point: _Point,
    shared: Floats,
    inverse: Floats,
    place: Places,
    view: Sight,
    found: Solution,
) -> None:
    """Write adjustments, the spread they should have, and the objective into `found`."""
    good = found.status[place] == SOLVED
    present = (point.weight > 0) & good
    miss = point.reading - point.prediction
    own = 1.0 / np.where(present, point.weight, 1.0) + (point.loading**2).sum(axis=1)
    left = np.clip(1.0 - _prediction_variance(geometry, point, inverse) / own, 0.0, 1.0)
    found.adjustment[:, place] = np.where(present, -miss / np.sqrt(own), np.nan)
    spread = np.where(view.redundant[:, None], np.sqrt(left), 0.0)
    found.adjustment_sd[:, place] = np.where(present, spread, np.nan)
    rest = miss - np.einsum("mst,st->mt", point.loading, shared)
    objective = (point.weight * rest**2).sum(axis=0) + (shared**2).sum(axis=0)
    found.objective[place] = np.where(good, objective, np.nan)


def _prediction_variance(geometry: _Geometry, point: _Point, inverse: Floats) -> Floats:
    a, b = geometry.packed
    doubled = inverse[a, b] * np.where(a == b, 1.0, 2.0)[:, None]
    upper, mixed, lower = np.split(geometry.products @ doubled, 3)
    return np.asarray((upper - point.prediction * mixed + point.prediction**2 * lower) / point.below**2)


def _gains(geometry: _Geometry, point: _Point, inverse: Floats, rows: Floats) -> Floats:
    """Give the change of each linear function of the flows per unit of each reading, array (p, m, t)."""
    k = geometry.upper.shape[1]
    along = np.einsum("pk,klt->plt", rows @ geometry.problem.basis, inverse[:k], optimize=True)
    seen = geometry.upper @ along[:, :k] - point.prediction * (geometry.lower @ along[:, :k])
    common = np.einsum("mst,pst->pmt", point.loading, along[:, k:], optimize=True)
    return np.asarray(point.weight * (seen / point.below + common))
