"""What a window says against the healthy time, as one vector: residuals and coordinates of the reaction.

Residuals are pulls of the balance, which only instruments, air and unseen products can move. Coordinates
are logs of shares (`monitor.coordinates`) less what the operating point foretells; the reaction moves them,
and so do the channels they are read from. Errors of a channel move both, which the joint covariance knows.

The covariance of healthy windows is the average of what was found in the healthy time and what the stated
random errors give, as if the latter had been found in as many windows as the vector has parts (shrinkage,
Ledoit & Wolf 2004, from memory). To it comes the drift that every calibration is allowed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.causes import calibration_drift
from ingest.cells import RUNNING, Cells
from ingest.instruments import Measured, balance_instruments
from ingest.residuals import Residuals, change, windowed
from ingest.unit import Unit
from monitor.coordinates import AGE, Shares, coordinates, point_slope, regressors
from monitor.days import rows
from monitor.fit import causes_of, counted, left_over
from monitor.healthy import BLOCK, LEAST_WINDOWS, Baseline, blocks, cells_in, masked, mean_of
from monitor.ridge import Ridge

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

SMALLEST = 1e-4  # size of a cause, as a fraction, below which a chord is the tangent
LOWEST, HIGHEST = -4.0, 0.8  # sizes that responses are bent to: of what is shown nothing may be left over
BEYOND = 0.1  # of its healthy range; so far outside an operating point is told


@dataclass(frozen=True, slots=True)
class Evidence:
    """One window against the healthy time: d numbers, f of them residuals and q of them coordinates.

    Parameters
    ----------
    value : array (d,)
        What moved.
    covariance : array (d, d)
        How far it moves while all is well.
    causes : tuple of str
        The h causes: instruments, shared errors, air.
    response : array (d, h)
        Change per unit of each cause.
    axes : array (m, f)
        Directions that the pulls take.
    coordinates : tuple of str
        The q names.
    reading : array (m,)
        Mean base readings of the window; NaN where missing.
    by_reading : array (d, m)
        Change per base unit of each reading.
    cause : array (m, h)
        Mean change of each base reading per unit of each cause.
    shares : Shares or None
        How readings tell the coordinates.
    kept : array (all coordinates,)
        Which coordinates can be told.
    outside : tuple of (str, float)
        What the unit is run at beyond its healthy range, and by which share of that range.
    """

    value: Floats
    covariance: Floats
    causes: tuple[str, ...]
    response: Floats
    axes: Floats
    coordinates: tuple[str, ...]
    reading: Floats
    by_reading: Floats
    cause: Floats
    shares: Shares | None
    kept: Flags
    outside: tuple[tuple[str, float], ...]

    @property
    def freedom(self) -> int:
        """Give f."""
        return int(self.axes.shape[1])


def evidence_of(unit: Unit, problem: Problem, baseline: Baseline, cells: Cells) -> Evidence | None:
    """Hold one window against the healthy time; None where too little of it can be told.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    baseline : Baseline
        Made for the readings that are there.
    cells : Cells
        The window, on one grid without holes.
    """
    cells = masked(unit, cells, baseline.there)
    window = windowed(left_over(unit, problem, cells), np.array([0]), len(cells.start))
    if window.coverage[0] < unit.least_coverage:
        return None
    readings = counted(unit, cells)
    allowance = calibration_drift(unit, causes_of(unit, problem, readings.take(np.zeros(0, dtype=np.intp))))
    moved = change(window, baseline.whole, 0.0 * allowance)
    axes = _axes(moved)
    reading = mean_of(readings.reading.T, len(cells.start))[0]
    causes = causes_of(unit, problem, readings)
    cause = np.nan_to_num(mean_of(causes.change.reshape(-1, len(cells.start)).T, len(cells.start))[0])
    cause = cause.reshape(len(reading), -1)
    part = _reaction(unit, baseline, cells)
    by_reading = np.vstack([_pull_slope(moved, axes, readings), part.slope])
    response = np.vstack([axes.T @ moved.response[0], part.slope @ cause])
    own = by_reading * np.nan_to_num(reading)
    random = own * _random(unit, readings)
    drift = response * allowance
    settled = axes.T @ (moved.covariance[0] - window.random[0]) @ axes
    return Evidence(
        value=np.concatenate([axes.T @ moved.pull[0], part.value]),
        covariance=_healthy(baseline, axes, random, part.kept)
        + drift @ drift.T
        + _diagonal_blocks(settled, np.diag(part.doubt)),
        causes=causes.names,
        response=response,
        axes=axes,
        coordinates=part.names,
        reading=reading,
        by_reading=by_reading,
        cause=cause,
        shares=baseline.shares,
        kept=part.kept,
        outside=part.outside,
    )


def by_block(
    unit: Unit, problem: Problem, baseline: Baseline, evidence: Evidence, cells: Cells
) -> tuple[NDArray[np.int64], Floats]:
    """Give the starts [us UTC] of blocks that follow one another, array (b,), and their evidence, (b, d).

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    baseline : Baseline
        The healthy time.
    evidence : Evidence
        Of the window whose directions are asked for.
    cells : Cells
        On one grid without holes.
    """
    cells = masked(unit, cells, baseline.there)
    size = cells_in(unit, BLOCK)
    first = np.arange(len(cells.start) % size, len(cells.start) - size + 1, size)
    found = windowed(left_over(unit, problem, cells), first, size)
    point, value = blocks(unit, baseline.shares, rows(cells, slice(len(cells.start) % size, None)))
    miss = value - baseline.law.at(point[:, : len(baseline.law.centre)])
    pull = (found.pull - baseline.whole.pull) @ evidence.axes
    return cells.start[first], np.concatenate([pull, miss[:, evidence.kept]], axis=1)


def bent(evidence: Evidence, size: Floats) -> Floats:
    """Give the response, array (d, h), along chords that are as long as the causes are large.

    Logs of shares are far from linear where a channel is off by tens of percent; residuals are linear.

    Parameters
    ----------
    evidence : Evidence
        Of one window.
    size : array (h,)
        Likely size of each cause; NaN, and what would leave nothing of a reading, is not bent to.
    """
    found = evidence.response.copy()
    if evidence.shares is None or not evidence.coordinates:
        return found
    size = np.clip(np.nan_to_num(size), LOWEST, HIGHEST)
    size = np.where(np.abs(size) < SMALLEST, SMALLEST, size)
    now, slope = coordinates(evidence.shares, evidence.reading[None])
    before, _ = coordinates(evidence.shares, evidence.reading - size[:, None] * evidence.cause.T)
    chord = (now - before).T / size
    more = np.where(np.isfinite(chord), chord - slope[0] @ evidence.cause, 0.0)
    found[evidence.freedom :] += more[evidence.kept]
    return found


def _axes(moved: Residuals) -> Floats:
    """Give the directions that the pulls of a window can take, array (m, f)."""
    _, axes = np.linalg.eigh(moved.slope[0])
    return np.asarray(axes[:, axes.shape[1] - int(moved.freedom[0]) :])


def _pull_slope(moved: Residuals, axes: Floats, readings: Measured) -> Floats:
    """Give the change of the residuals per base unit of each reading, array (f, m)."""
    spread = np.sqrt(_finite_mean(readings.variance))
    return np.asarray(axes.T @ moved.slope[0] / np.where(spread > 0, spread, np.inf))


def _finite_mean(value: Floats) -> Floats:
    """Give the means of rows over what is there, array (m,); 0 where nothing is."""
    there = np.isfinite(value)
    return np.asarray(np.where(there, value, 0.0).sum(axis=1) / np.maximum(there.sum(axis=1), 1))


def _random(unit: Unit, readings: Measured) -> Floats:
    """Give the random error of each reading's mean over a window, array (m,), as a fraction of it."""
    there = np.isfinite(readings.reading).sum(axis=1)
    held = np.array([one.cycle / unit.cell for one in balance_instruments(unit)])
    results = np.maximum(1.0, there / np.maximum(held, 1e-9))
    mean = np.abs(_finite_mean(readings.reading))
    return np.asarray(_finite_mean(readings.random) / np.where(mean > 0, mean, np.inf) / np.sqrt(results))


@dataclass(frozen=True, slots=True)
class _Reaction:
    """The coordinates of a window less what the operating point foretells, those that can be told."""

    names: tuple[str, ...]
    kept: Flags  # (all coordinates,)
    value: Floats  # (q,)
    slope: Floats  # (q, m)
    doubt: Floats  # (q,) variance of what is foretold
    outside: tuple[tuple[str, float], ...]


def _reaction(unit: Unit, baseline: Baseline, cells: Cells) -> _Reaction:
    count = len(baseline.there)
    law, shares = baseline.law, baseline.shares
    if shares is None:
        return _Reaction((), np.zeros(0, bool), np.zeros(0), np.zeros((0, count)), np.zeros(0), ())
    point, value = blocks(unit, shares, cells)
    point = point[:, : len(law.centre)]
    miss = value - law.at(point)
    running = np.where(cells.operating == RUNNING, counted(unit, cells).reading, np.nan)
    reading = mean_of(running.T, len(cells.start))
    slope = coordinates(shares, reading)[1][0]
    kept = np.isfinite(slope).all(axis=1) & (np.isfinite(baseline.miss).sum(axis=0) >= LEAST_WINDOWS)
    told = np.isfinite(miss[:, kept]).all(axis=1)
    kept &= 2 * told.sum() >= max(int(told.size), 1)
    mean_point = point[told].mean(axis=0) if told.any() else law.centre
    slope = slope - law.slope / law.scale @ point_slope(unit, reading[0])[: len(law.centre)]
    return _Reaction(
        names=tuple(name for name, told in zip(shares.names, kept, strict=True) if told),
        kept=kept,
        value=miss[told].mean(axis=0)[kept] if kept.any() else np.zeros(0),
        slope=slope[kept],
        doubt=law.doubt(mean_point[None])[0][kept],
        outside=_outside(law, mean_point, regressors(unit)),
    )


def _outside(law: Ridge, point: Floats, names: tuple[str, ...]) -> tuple[tuple[str, float], ...]:
    """Tell which parts of the operating point lie outside their healthy range, and by how much of it."""
    width = np.maximum(law.most - law.least, 1e-12)
    beyond = np.maximum(law.least - point, point - law.most) / width
    return tuple(
        (name, float(far))
        for name, far in zip(names, beyond, strict=False)
        if far > (1.0 if name == AGE else BEYOND)
    )


def _healthy(baseline: Baseline, axes: Floats, random: Floats, kept: Flags) -> Floats:
    """Give the covariance of healthy windows, array (d, d): found and stated, averaged by their weight."""
    found = np.concatenate([baseline.pull @ axes, baseline.miss[:, kept]], axis=1)
    found = found[np.isfinite(found).all(axis=1)]
    count, parts = found.shape
    spread = found.T @ found / max(count, 1)
    stated = random @ random.T
    own = np.maximum(np.diag(spread) - np.diag(stated), 0.0)
    own[: axes.shape[1]] = 0.0
    return np.asarray((count * spread + parts * (stated + np.diag(own))) / (count + parts))


def _diagonal_blocks(first: Floats, second: Floats) -> Floats:
    whole = np.zeros((len(first) + len(second),) * 2)
    whole[: len(first), : len(first)] = first
    whole[len(first) :, len(first) :] = second
    return whole
