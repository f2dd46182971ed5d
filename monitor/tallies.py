"""What spans of cells hold of every figure: the sums that windows and calendar spans are added up from.

A cell counts for a figure in a mode when every amount with a weight in it is seen and the unit was in that
mode. Figures for which the same cells count share their sums.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.cells import DOWN, NOT_KNOWN, RUNNING
from monitor.amounts import Amounts
from monitor.sums import CellTerms, Functionals, Total, between, cell_terms

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Group = tuple[Mask, list[tuple[int, int]]]  # the cells that count, and for which (figure, mode)


@dataclass(frozen=True, slots=True)
class Sums:
    """Sums over the cells that count, per span; the random covariance as for one result per cell."""

    count: NDArray[np.int32]  # (b,)
    linear: Mapping[int, Array]  # functional: (1 + s, b) [kmol]
    spread: Mapping[tuple[int, int], Array]  # pair of functionals: (c, b) [kmol2]


@dataclass(frozen=True, slots=True)
class Tally:
    """What b spans that follow one another hold; modes in the order of `windows.MODES`."""

    group: NDArray[np.intp]  # (f, 2): which of `sums` belongs to a figure in a mode
    sums: tuple[Sums, ...]
    idle: NDArray[np.int32]  # (2, b) cells that are known not to be of the mode
    told: NDArray[np.int32]  # (2, b) cells of it with any amount seen
    unsolved: NDArray[np.int32]  # (2, b) cells of it without a converged balance
    hold: tuple[timedelta, ...]  # (c,) time between independent results of each class


def tally(plan: Functionals, amounts: Amounts, unsolved: Mask, bounds: NDArray[np.intp]) -> Tally:
    """Sum the cells between given places.

    Parameters
    ----------
    plan : Functionals
        What the figures are made of.
    amounts : Amounts
        t cells on one grid without holes.
    unsolved : ndarray of bool, shape (t,)
        Cells whose balance did not converge.
    bounds : ndarray of int, shape (b + 1,)
        Ascending places: span i holds the cells from bounds[i] up to but not including bounds[i + 1].

    Returns
    -------
    Tally
        The sums of a span without cells are 0; a cell that does not count adds nothing.
    """
    rows = slice(int(bounds[0]), int(bounds[-1]))
    terms = cell_terms(plan, amounts, rows)
    total = between(bounds - bounds[0])
    operating = amounts.operating[rows]
    modes = np.array([operating != DOWN, operating == RUNNING])
    told = terms.seen.any(axis=1)
    groups = _by_mask(plan, terms.seen, modes)
    group = np.empty((len(plan.top), len(modes)), dtype=np.intp)
    for place, (_, users) in enumerate(groups):
        group[tuple(np.array(users).T)] = place
    idle, told_in, unsolved_in = (
        total(flags.astype(np.int32))[0]
        for flags in (idle_in(operating), modes & told, modes & unsolved[rows])
    )
    return Tally(
        group=group,
        sums=tuple(_sums(plan, terms, mask, users, total) for mask, users in groups),
        idle=idle,
        told=told_in,
        unsolved=unsolved_in,
        hold=amounts.hold,
    )


def idle_in(operating: NDArray[np.int8]) -> Mask:
    """Tell which cells are known not to be of a mode.

    Parameters
    ----------
    operating : ndarray of int8, shape (t,)
        Index into `cells.OPERATING`.

    Returns
    -------
    ndarray of bool, shape (2, t)
        As operated, steady. A cell whose condition is not known may have run: it is missing time, not idle
        time, or a few cells after a hole in the record would pass for a whole window.
    """
    return np.array([operating == DOWN, (operating != RUNNING) & (operating != NOT_KNOWN)])


def _by_mask(plan: Functionals, seen: Mask, modes: Mask) -> list[Group]:
    """Group (figure, mode) by the cells that count for them, so that equal ones are summed once."""
    groups: dict[bytes, Group] = {}
    for f, needs in enumerate(plan.needs):
        whole = seen[:, needs].all(axis=1)
        for m, mode in enumerate(modes):
            counts = whole & mode
            groups.setdefault(counts.tobytes(), (counts, []))[1].append((f, m))
    return list(groups.values())


def _sums(
    plan: Functionals, terms: CellTerms, mask: Mask, users: list[tuple[int, int]], total: Total
) -> Sums:
    """Sum over the cells that count what the figures that use them are made of."""
    figures = [f for f, _ in users]
    top, bottom = plan.top[figures], plan.bottom[figures]
    used = sorted({int(k) for k in (*top, *bottom) if k >= 0})
    ratios = {pair for n, d in zip(top, bottom, strict=True) for pair in ((n, n), (n, d), (d, d))}
    return Sums(
        count=total(mask.astype(np.int32))[0],
        linear={k: total(terms.linear[k] * mask)[0] for k in used},
        spread={
            pair: total(terms.covariance[q] * mask)[0] for q, pair in enumerate(plan.pairs) if pair in ratios
        },
    )
