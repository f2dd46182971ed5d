"""A figure of one span against that of another: the difference, and how sure it is.

An error of calibration that both spans share cancels in their difference; one that was set anew between them
does not. Nobody knows for sure which it was, so both half-widths are given.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.cells import DOWN, RUNNING
from ingest.unit import Unit
from monitor.amounts import Amounts
from monitor.figures import Figure, quotient
from monitor.sums import cell_terms, functionals
from monitor.windows import CHUNK, MODES, TWO_SIDED_95

Floats = NDArray[np.float64]
SAME = "no difference shown"
CHANGED = "differs"
PERHAPS = "differs if nothing was calibrated between"


@dataclass(frozen=True, slots=True)
class Level:
    """Figures of one span in both modes, (f, 2), in their units.

    `response` (f, 2, s) is the change per standard error of each systematic source; `half_width` holds that
    and the random part. NaN where the figure is missing.
    """

    value: Floats
    half_width: Floats
    response: Floats

    @property
    def random(self) -> Floats:
        """Give the random part of the variance, (f, 2)."""
        whole = (self.half_width / TWO_SIDED_95) ** 2
        found: Floats = np.maximum(whole - (self.response**2).sum(axis=2), 0.0)
        return found


@dataclass(frozen=True, slots=True)
class Difference:
    """One level minus another, (f, 2); half-widths for calibrations set anew, and left as they were."""

    value: Floats
    half_width: Floats
    half_width_same: Floats


def minus(here: Level, there: Level) -> Difference:
    """Subtract the figures of another span.

    Parameters
    ----------
    here, there : Level
        With the same figures and sources.

    Returns
    -------
    Difference
        NaN where either is missing.
    """
    random = here.random + there.random
    same = random + ((here.response - there.response) ** 2).sum(axis=2)
    anew = here.half_width**2 + there.half_width**2
    return Difference(here.value - there.value, np.sqrt(anew), TWO_SIDED_95 * np.sqrt(same))


def stated(values: Floats, sources: int) -> Level:
    """Give numbers that somebody wrote down, which have no error.

    Parameters
    ----------
    values : ndarray, shape (f,)
        NaN where nothing is stated.
    sources : int
        Systematic sources of the levels that they are compared with.

    Returns
    -------
    Level
    """
    both = np.repeat(values[:, None], len(MODES), axis=1)
    nothing = np.where(np.isnan(both), np.nan, 0.0)
    return Level(both, nothing, np.zeros((*both.shape, sources)))


def word(difference: float, half_width: float, half_width_same: float) -> str:
    """Say what a difference shows.

    Parameters
    ----------
    difference, half_width, half_width_same : float
        In one unit; NaN where it is missing.

    Returns
    -------
    str
        Empty where it is missing.
    """
    if not np.isfinite(difference):
        return ""
    size = abs(difference)
    if size > max(half_width, half_width_same):
        return CHANGED
    return PERHAPS if size > half_width_same else SAME


def responses(unit: Unit, amounts: Amounts, figures: Sequence[Figure], first_us: int, last_us: int) -> Floats:
    """Give the change of every figure over a span per standard error of each systematic source.

    Parameters
    ----------
    unit : Unit
        Gives the cell.
    amounts : Amounts
        t cells, holes allowed.
    figures : sequence of Figure
        On the axis `amounts.names`.
    first_us, last_us : int
        The span [us UTC]; a cell belongs to it when its start does.

    Returns
    -------
    ndarray, shape (f, 2, s)
        In the figure's unit, by mode; NaN where no cell counts.
    """
    plan = functionals(figures)
    sums = np.zeros((len(figures), len(MODES), 2, 1 + amounts.systematic.shape[2]))
    begin, end = (int(at) for at in np.searchsorted(amounts.start, [first_us, last_us]))
    for at in range(begin, end, CHUNK):
        rows = slice(at, min(at + CHUNK, end))
        terms = cell_terms(plan, amounts, rows)
        operating = amounts.operating[rows]
        modes = np.stack([operating != DOWN, operating == RUNNING])
        for f, needs in enumerate(plan.needs):
            counts = (modes & terms.seen[:, needs].all(axis=1)).astype(float)
            sums[f, :, 0] += counts @ terms.linear[plan.top[f]].T
            if plan.bottom[f] >= 0:
                sums[f, :, 1] += counts @ terms.linear[plan.bottom[f]].T
            else:
                sums[f, :, 1, 0] += counts.sum(axis=1)
    return _gradients(figures, sums, unit.cell / timedelta(hours=1))


def _gradients(figures: Sequence[Figure], sums: Floats, step_h: float) -> Floats:
    """Turn sums of numerators, denominators and their responses into responses of the figures."""
    found = np.empty((*sums.shape[:2], sums.shape[3] - 1))
    for f, figure in enumerate(figures):
        top, bottom = sums[f, :, 0], sums[f, :, 1]
        below = bottom[:, 0] if figure.denominator is not None else bottom[:, 0] * step_h
        _, by_top, by_bottom = quotient(top[:, 0], below, figure.scale)
        found[f] = by_top[:, None] * top[:, 1:] + by_bottom[:, None] * bottom[:, 1:]
    return found
