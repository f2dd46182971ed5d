"""The balance seen from one point: predictions, weights, normal matrices, covariance and gains.

Every instrument is linear-fractional in q (see `instruments`), so its gradient at a prediction h over a
denominator d is `(upper - h lower) / d` with constant rows `upper` and `lower`. The normal matrix of every
cell is therefore one matrix product of three coefficients per reading with constants of the unit.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ingest import systems
from ingest.balance import Problem
from ingest.instruments import Measured

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

SMALLEST_DENOMINATOR = 1e-9  # of the total flow: a sample of nothing has no composition


class Geometry(NamedTuple):
    """Constants of a balance on its basis: what each of m readings sees of k unknowns, and their products."""

    problem: Problem
    upper: Floats  # (m, k)
    lower: Floats  # (m, k)
    ratio: Flags  # (m, 1)
    packed: tuple[Places, Places]  # places of the lower triangle of (k, k)
    products: Floats  # (3 m, k (k + 1) / 2)

    @property
    def unknowns(self) -> int:
        """Give k."""
        return len(self.upper.T)


class Point(NamedTuple):
    """A block of t cells at one value of q: what its m readings are, should be and weigh."""

    prediction: Floats  # (m, t)
    below: Floats  # (m, t), the denominator
    weight: Floats  # (m, t), 0 where a reading is missing
    reading: Floats  # (m, t), 0 where missing
    loading: Floats  # (m, s, t), 0 where missing

    def take(self, which: Flags) -> Point:
        """Give some of the cells only.

        Parameters
        ----------
        which : array (t,) of bool
            Those.
        """
        return Point(*(part[..., which] for part in self))


def geometry_of(problem: Problem) -> Geometry:
    """Give the constants of a problem.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    """
    upper, lower = problem.numerator @ problem.basis, problem.denominator @ problem.basis
    a, b = np.tril_indices(upper.shape[1])
    mixed = upper[:, a] * lower[:, b] + lower[:, a] * upper[:, b]
    products = np.vstack([upper[:, a] * upper[:, b], mixed, lower[:, a] * lower[:, b]])
    return Geometry(problem, upper, lower, ~problem.linear[:, None], (a, b), products)


def point_at(geometry: Geometry, flow: Floats, readings: Measured) -> Point:
    """Predict every reading at the flows and weigh it.

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    flow : array (N, t)
        Molar flows [kmol/h].
    readings : Measured
        Base readings of the same t cells.
    """
    present = np.isfinite(readings.reading)
    still = Point(
        prediction=np.zeros_like(readings.reading),
        below=np.ones_like(readings.reading),
        weight=np.where(present, 1.0 / np.where(present, readings.variance, 1.0), 0.0),
        reading=np.where(present, readings.reading, 0.0),
        loading=np.where(present[:, None], readings.loading, 0.0),
    )
    return moved(geometry, still, flow)


def moved(geometry: Geometry, point: Point, flow: Floats) -> Point:
    """Predict the readings of the same cells at other flows.

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        The cells.
    flow : array (N, t)
        Molar flows [kmol/h].
    """
    least = SMALLEST_DENOMINATOR * (np.abs(flow).sum(axis=0) + 1e-300)
    below = np.where(geometry.ratio, np.fmax(geometry.problem.denominator @ flow, least), 1.0)
    return point._replace(prediction=(geometry.problem.numerator @ flow) / below, below=below)


def along(geometry: Geometry, point: Point, lean: Floats) -> Floats:
    """Sum the readings' gradients with weights, array (k, t).

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the gradients are taken.
    lean : array (m, t)
        Weight of each gradient.
    """
    part = lean / point.below
    return np.asarray(geometry.upper.T @ part - geometry.lower.T @ (part * point.prediction))


def normal(geometry: Geometry, point: Point) -> Floats:
    """Give the normal matrices in (q, shared errors), array (K, K, t); only the lower triangle is filled.

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the gradients are taken.
    """
    heavy = point.weight / point.below**2
    parts = np.vstack([heavy, -heavy * point.prediction, heavy * point.prediction**2])
    k, s = geometry.unknowns, point.loading.shape[1]
    matrix = np.zeros((k + s, k + s, heavy.shape[1]))
    matrix[geometry.packed] = geometry.products.T @ parts
    for i in range(s):
        lean = point.weight * point.loading[:, i]
        matrix[k + i, :k] = along(geometry, point, lean)
        for j in range(i + 1):
            matrix[k + i, k + j] = (lean * point.loading[:, j]).sum(axis=0) + (i == j)
    return matrix


def slope(geometry: Geometry, point: Point, miss: Floats, shared: Floats) -> Floats:
    """Give the way down in (q, shared errors), array (K, t): the right-hand side of the normal equations.

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the gradients are taken.
    miss : array (m, t)
        Residuals: reading minus prediction minus shared errors.
    shared : array (s, t)
        Shared errors, in standard deviations.
    """
    lean = point.weight * miss
    common = np.einsum("mst,mt->st", point.loading, lean) - shared
    return np.vstack([along(geometry, point, lean), common])


def step(geometry: Geometry, point: Point, shared: Floats, rank: int | None) -> Floats:
    """Give the Gauss-Newton step in (q, shared errors), array (K, t).

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the cells stand.
    shared : array (s, t)
        Shared errors there.
    rank : int or None
        How many directions of q the readings see, when not all: the step then keeps to those.
    """
    miss = point.reading - point.prediction - np.einsum("mst,st->mt", point.loading, shared)
    matrix, right = normal(geometry, point), slope(geometry, point, miss, shared)
    if rank is None:
        return _solved(matrix, right)
    space = _space(geometry, point, rank)
    inner = np.einsum("tkr,kt->rt", space, right)
    return np.asarray(np.einsum("tkr,rt->kt", space, _solved(_within(space, matrix), inner)))


def _solved(matrix: Floats, right: Floats) -> Floats:
    """Solve the systems; one that tells nothing gives no step, and its covariance will be found unsound."""
    lower, sound = systems.factor(matrix)
    return np.where(sound, systems.solve(lower, right), 0.0)


def covariance(geometry: Geometry, point: Point, rank: int | None) -> tuple[Floats, Flags]:
    """Give the covariance of (q, shared errors), array (K, K, t), and which cells have a sound one.

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the cells came to rest.
    rank : int or None
        As in `step`; directions that cannot be seen get no variance and must not be read.
    """
    matrix = normal(geometry, point)
    if rank is None:
        lower, sound = systems.factor(matrix)
        return systems.invert(lower), sound
    space = _space(geometry, point, rank)
    lower, sound = systems.factor(_within(space, matrix))
    inverse = space @ systems.invert(lower).transpose(2, 0, 1) @ space.transpose(0, 2, 1)
    return np.ascontiguousarray(inverse.transpose(1, 2, 0)), sound


def _within(space: Floats, matrix: Floats) -> Floats:
    """Give the matrices on the seen directions, array (r, r, t)."""
    lower = matrix.transpose(2, 0, 1)
    whole = lower + np.tril(lower, -1).transpose(0, 2, 1)
    return np.ascontiguousarray((space.transpose(0, 2, 1) @ whole @ space).transpose(1, 2, 0))


def _space(geometry: Geometry, point: Point, rank: int) -> Floats:
    """Give per cell the directions of (q, shared errors) that the readings see, array (t, K, rank + s)."""
    gradient = geometry.upper - point.prediction.T[..., None] * geometry.lower
    size = np.linalg.norm(gradient, axis=2, keepdims=True)
    scaled = np.where((point.weight > 0).T[..., None], gradient / np.fmax(size, 1e-300), 0.0)
    right = np.linalg.svd(scaled)[2][:, :rank].transpose(0, 2, 1)
    k, s = geometry.unknowns, point.loading.shape[1]
    space = np.zeros((len(right), k + s, rank + s))
    space[:, :k, :rank] = right
    space[:, k:, rank:] = np.eye(s)
    return space


def prediction_variance(geometry: Geometry, point: Point, inverse: Floats) -> Floats:
    """Give the variance of each reconciled prediction, array (m, t).

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the cells came to rest.
    inverse : array (K, K, t)
        Covariance of (q, shared errors).
    """
    a, b = geometry.packed
    twice = np.where(a == b, 1.0, 2.0)
    upper, mixed, lower = np.split((geometry.products * twice) @ inverse[a, b], 3)
    return np.asarray((upper - point.prediction * mixed + point.prediction**2 * lower) / point.below**2)


def gradients(geometry: Geometry, point: Point) -> Floats:
    """Give the change of each reading per unit of (q, shared errors), array (t, m, K).

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the gradients are taken.
    """
    seen = geometry.upper - point.prediction.T[..., None] * geometry.lower
    return np.concatenate([seen / point.below.T[..., None], point.loading.transpose(2, 0, 1)], axis=2)


def gains(geometry: Geometry, point: Point, inverse: Floats, rows: Floats) -> Floats:
    """Give the change of each linear function of the flows per unit of each reading, array (p, m, t).

    Parameters
    ----------
    geometry : Geometry
        Constants of the balance.
    point : Point
        Where the cells came to rest.
    inverse : array (K, K, t)
        Covariance of (q, shared errors).
    rows : array (p, N)
        Weights of the functions on the flows.
    """
    k = geometry.unknowns
    spread = np.tensordot(rows @ geometry.problem.basis, inverse[:k], axes=1)
    # In place: the arrays (p, m, t) are by far the largest of a block.
    gain = geometry.upper @ spread[:, :k]
    gain -= point.prediction * (geometry.lower @ spread[:, :k])
    gain *= point.weight / point.below
    for s in range(point.loading.shape[1]):
        gain += point.weight * point.loading[:, s] * spread[:, k + s, None]
    return np.asarray(gain)
