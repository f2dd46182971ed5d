"""Cells brought to the least objective of their balance, flows free to be negative, many cells at once.

Gauss-Newton from a start that is linear in the flows. Without bounds the residuals of the balance are linear
in small errors and have mean zero, which tests of residuals need; `reconcile` puts the bounds on.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ingest import systems, tangent
from ingest.balance import RANK_TOLERANCE, Problem, Sight, null_space, sight
from ingest.instruments import Measured
from ingest.tangent import Geometry, Point

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

MOST_ITERATIONS = 12
SMALLEST_STEP = 1e-9  # of the unit's total flow
BLOCK = 2048  # cells in one go: fewer make the steps of Python count, more leave the processor's cache
INSIDE = 1e-6  # of the unit's total flow; so far above zero a flow is put that no reading feels
MOST_TURNS = 200
RIDGE = 1e-8  # keeps directions that no reading sees near an even guess, at the start only


class Group(NamedTuple):
    """Cells with the same readings there, and what these let one see."""

    places: Places  # which cells
    present: Flags  # (m,)
    view: Sight


def groups_of(problem: Problem, readings: Measured) -> list[Group]:
    """Group cells by which readings are there.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    readings : Measured
        Base readings of t cells.
    """
    return [
        Group(places, present, sight(problem, present))
        for places, present in alike(np.isfinite(readings.reading))
    ]


def alike(flags: Flags) -> list[tuple[Places, Flags]]:
    """Group columns that are alike: [(places, column)].

    Parameters
    ----------
    flags : array (n, t) of bool
        The columns.
    """
    group = np.zeros(flags.shape[1], dtype=np.int64)
    for byte in np.packbits(flags, axis=0):
        _, first, group = np.unique(256 * group + byte, return_index=True, return_inverse=True)
    order = np.argsort(group, kind="stable")
    edges = np.flatnonzero(np.diff(group[order])) + 1
    return [(place, flags[:, first[i]]) for i, place in enumerate(np.split(order, edges)) if len(place)]


class _Job(NamedTuple):
    """Cells that can be iterated together: all that see every direction, or those of one group."""

    places: Places
    geometry: Geometry
    unfelt: Floats  # (N, b), directions of the flows that no reading feels; the geometry is without them
    rank: int | None  # None: all directions of the geometry are seen
    freedom: NDArray[np.int16]  # (t,)
    redundant: Flags  # (m, t)


def _jobs(problem: Problem, groups: Sequence[Group]) -> list[_Job]:
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


def _felt(problem: Problem, group: Group) -> tuple[Problem, Floats, int | None]:
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


def at_rest(problem: Problem, readings: Measured, groups: Sequence[Group]) -> Iterator[Rest]:
    """Iterate cells to the least objective, flows free to be negative, some cells at a time.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    readings : Measured
        Base readings of t cells.
    groups : sequence of Group
        Those of the cells that are wanted, as `groups_of` gives them.
    """
    for job in _jobs(problem, groups):
        yield _rest(readings.take(job.places), job)


def _rest(readings: Measured, job: _Job) -> Rest:
    """Iterate the cells of one job to rest."""
    geometry = job.geometry
    start, q, shared = _begin(geometry, readings, job.rank)
    iterations, still = _iterate(geometry, start, q, shared, job.rank)
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


def _iterate(
    geometry: Geometry, point: Point, q: Floats, shared: Floats, rank: int | None
) -> tuple[NDArray[np.int8], Flags]:
    """Move q and shared errors in place to rest, give (iterations, at rest); calm cells are left alone."""
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
        calm = size < SMALLEST_STEP * np.abs(flow).sum(axis=0) / 2
        still[moving[calm]] = True
        if calm.all():
            break
        if calm.any():
            moving, point = moving[~calm], point.take(~calm)
    return iterations, still


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
