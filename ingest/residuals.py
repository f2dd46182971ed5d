"""What the readings leave unexplained, cell by cell, over windows, and as a change from a healthy period.

The pull of a reading is half the change of the objective per standard uncertainty of that reading. Pulls are
zero for every state that closes the balance, whatever the load; otherwise `pull = S e` with the errors e of
the readings in their standard uncertainties and S = U (V^-1 - V^-1 J (J' V^-1 J)^-1 J' V^-1) U, where V is
the covariance of the readings, J their gradients and U their standard uncertainties. One cell's pulls
have the covariance S. Over a window random parts average out, one calibration error stays as it is.

Sources: Mah & Tamhane 1982 (residuals and their covariance), JCGM 100:2008 4.2 and 5.2 (random and correlated
parts), from memory; the rule for held results is the project's own.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

from ingest import tangent
from ingest.balance import Problem
from ingest.causes import Causes
from ingest.instruments import Measured, balance_instruments
from ingest.iteration import Rest, at_rest, groups_of
from ingest.unit import Unit

Floats = NDArray[np.float64]

NO_TRACE = 1e-6  # of a cause's size; a smaller part left in the residuals is rounding


@dataclass(frozen=True, slots=True)
class CellResiduals:
    """Pulls of t cells, with what random errors, calibration errors and causes do to them.

    Parameters
    ----------
    pull : array (t, m)
        0 where a reading is missing, and in cells that did not solve.
    slope : array (t, m, m)
        S: change of each pull per standard uncertainty in each reading.
    random : array (t, m)
        Random error of one independent result, in standard uncertainties of the reading.
    systematic : array (t, m, m + s)
        Change of each pull per standard systematic error of each instrument, then of each shared error.
    response : array (t, m, h)
        Change of each pull per unit of each cause; 0 for a cause that leaves no trace.
    freedom : array (t,)
        Degrees of freedom; 0 in cells that did not solve.
    cycle : array (m,)
        Time between independent results, in cells.
    names : tuple of str
        The h causes.
    """

    pull: Floats
    slope: Floats
    random: Floats
    systematic: Floats
    response: Floats
    freedom: NDArray[np.int16]
    cycle: Floats
    names: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Residuals:
    """Mean pulls of w windows and their covariance, `random + systematic systematic'`.

    Parameters
    ----------
    pull : array (w, m)
        NaN in windows without a cell that has residuals.
    random : array (w, m, m)
        Covariance from what is independent of all other windows.
    systematic : array (w, m, m + s)
        Change of the pulls per standard systematic error of each source.
    slope : array (w, m, m)
        Mean of S: tells the directions that residuals can take.
    response : array (w, m, h)
        Change of the pulls per unit of each cause.
    freedom : array (w,)
        How many independent residuals there are.
    coverage : array (w,)
        Share of cells with residuals.
    names : tuple of str
        The h causes.
    """

    pull: Floats
    random: Floats
    systematic: Floats
    slope: Floats
    response: Floats
    freedom: NDArray[np.int16]
    coverage: Floats
    names: tuple[str, ...]

    @property
    def covariance(self) -> Floats:
        """Give the covariance of the pulls, array (w, m, m)."""
        return self.random + self.systematic @ self.systematic.transpose(0, 2, 1)

    def take(self, place: NDArray[np.intp] | slice) -> Residuals:
        """Give some of the windows.

        Parameters
        ----------
        place : array (w',) or slice
            Which windows.
        """
        kept = {one.name: getattr(self, one.name)[place] for one in fields(self) if one.name != "names"}
        return replace(self, **kept)


def cycles_in_cells(unit: Unit) -> Floats:
    """Give the time between independent results of each balance instrument, array (m,), in cells.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return np.array([one.cycle / unit.cell for one in balance_instruments(unit)])


def cell_residuals(problem: Problem, readings: Measured, causes: Causes, cycle: Floats) -> CellResiduals:
    """Reconcile every cell with flows free to be negative and give what is left unexplained.

    Holds about 9 kB per cell with 16 instruments and as many causes: take a month or so at a time.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    readings : Measured
        Base readings of t cells; NaN where missing, and in cells that must not count.
    causes : Causes
        Possible causes on the same cells.
    cycle : array (m,)
        Time between independent results of each instrument, in cells; what is below 1 must be what
        `readings.averaged` is.
    """
    count, cells = readings.reading.shape
    shared = readings.loading.shape[1]
    found = CellResiduals(
        pull=np.zeros((cells, count)),
        slope=np.zeros((cells, count, count)),
        random=np.zeros((cells, count)),
        systematic=np.zeros((cells, count, count + shared)),
        response=np.zeros((cells, count, len(causes.names))),
        freedom=np.zeros(cells, dtype=np.int16),
        cycle=cycle,
        names=causes.names,
    )
    groups = [one for one in groups_of(problem, readings) if one.view.rank and one.view.freedom]
    for rest in at_rest(problem, readings, groups):
        _fill(found, rest, readings, causes)
    return found


def _fill(found: CellResiduals, rest: Rest, readings: Measured, causes: Causes) -> None:
    """Put the residuals of the sound cells of one job into their place."""
    inside = rest.good
    kept = rest.places[inside]
    root = np.sqrt(rest.point.weight).T[inside]
    lean = root[:, :, None] * tangent.gradients(rest.geometry, rest.point)[inside]
    inverse = np.ascontiguousarray(rest.inverse.transpose(2, 0, 1)[inside])
    diagonal = np.arange(root.shape[1])
    slope = -lean @ inverse @ lean.transpose(0, 2, 1)
    slope[:, diagonal, diagonal] += root > 0
    loading = root[:, :, None] * rest.point.loading.transpose(2, 0, 1)[inside]
    own = root * np.nan_to_num(readings.systematic[:, kept]).T
    change = root[:, :, None] * causes.change[:, :, kept].transpose(2, 0, 1)
    found.pull[kept] = root * rest.miss.T[inside]
    found.slope[kept] = slope
    found.random[kept] = root * np.nan_to_num(readings.random[:, kept]).T
    found.systematic[kept] = np.concatenate([slope * own[:, None, :], slope @ loading], axis=2)
    found.response[kept] = _traces(slope @ change, change)
    found.freedom[kept] = rest.freedom[inside]


def _traces(response: Floats, change: Floats) -> Floats:
    """Give the responses with those set to zero that are only rounding."""
    left = np.linalg.norm(response, axis=1, keepdims=True)
    return np.where(left > NO_TRACE * np.linalg.norm(change, axis=1, keepdims=True), response, 0.0)


def windowed(cells: CellResiduals, first: NDArray[np.intp], length: int) -> Residuals:
    """Give the mean pulls of windows of one length; a length of one gives the cells themselves.

    Parameters
    ----------
    cells : CellResiduals
        On one grid without holes.
    first : array (w,)
        First cell of each window.
    length : int
        Cells in a window; at most as many as follow every `first`.
    """
    count = _sums((cells.freedom > 0).astype(float), first, length)
    share = 1.0 / np.maximum(count, 1.0)
    held = np.minimum(cells.cycle, length)
    spread = cells.slope * (cells.random * np.sqrt(held))[:, None, :]
    random = _sums(spread @ spread.transpose(0, 2, 1), first, length) * share[:, None, None] ** 2
    freedom = np.lib.stride_tricks.sliding_window_view(cells.freedom, length)[first].max(axis=1)
    return Residuals(
        pull=np.where(count[:, None] > 0, _sums(cells.pull, first, length) * share[:, None], np.nan),
        random=random,
        systematic=_sums(cells.systematic, first, length) * share[:, None, None],
        slope=_sums(cells.slope, first, length) * share[:, None, None],
        response=_sums(cells.response, first, length) * share[:, None, None],
        freedom=freedom,
        coverage=count / length,
        names=cells.names,
    )


def _sums(value: Floats, first: NDArray[np.intp], length: int) -> Floats:
    """Give the sums over windows of the first axis."""
    total = np.zeros((len(value) + 1, *value.shape[1:]))
    np.cumsum(value, axis=0, out=total[1:])
    return np.asarray(total[first + length] - total[first])


def change(now: Residuals, baseline: Residuals, allowance: Floats) -> Residuals:
    """Give how far residuals have moved from a healthy period; constant calibration errors cancel.

    What cancels only in part, because the unit now runs differently, stays in the covariance. For a reading
    that is missing now, take it out of the baseline too: otherwise little cancels.

    Parameters
    ----------
    now : Residuals
        The w windows.
    baseline : Residuals
        One window: the healthy period. Without a residual in it nothing can be tested.
    allowance : array (h,)
        Standard deviation by which each cause may have moved on its own since then, in units of the cause
        (calibration drift of an instrument as a fraction of its reading); 0 for none.
    """
    drift = now.response * allowance
    return replace(
        now,
        pull=now.pull - baseline.pull,
        random=now.random + baseline.random + drift @ drift.transpose(0, 2, 1),
        systematic=now.systematic - baseline.systematic,
        freedom=np.where(baseline.freedom > 0, now.freedom, np.int16(0)),
        coverage=np.minimum(now.coverage, baseline.coverage),
    )
