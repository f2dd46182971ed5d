"""What is formed inside a well-mixed reactor: what it made and what its contents gained.

Its contents have the composition of its outlet, so that the rate of formation is
(out - in + d contents/dt) per volume; the volume drops out of a ratio. A sum over cells runs from the middle
of the cell before the first to the middle of the last: between two middles half of what each cell made, and
the difference of the contents.
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import sign_around, sign_of
from ingest.unit import HoldUp, Unit
from monitor.raw import Rates

Floats = NDArray[np.float64]


def formed_of(unit: Unit) -> tuple[str, ...]:
    """Give what instantaneous selectivity needs the formation of: wanted, each unwanted, all unwanted.

    Parameters
    ----------
    unit : Unit
        The reactor; nothing without a stated hold-up.
    """
    return (unit.wanted, *unit.unwanted, "all unwanted") if unit.hold_up else ()


def outlet_rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> Floats:
    """Give as weights on the flows what leaves the reactor: each of `formed_of`, then all species together.

    Parameters
    ----------
    unit : Unit
        With a stated hold-up.
    state : tuple of (stream, species)
        The state axis, length N.

    Returns
    -------
    array (f + 1, N)
    """
    reactors = [node.name for node in unit.nodes if node.reacts]
    leaves = (sign_around(unit, state, reactors) if unit.nodes else sign_of(unit, state)) < 0
    groups = [(name,) for name in formed_of(unit)[:-1]] + [unit.unwanted]
    rows = [[float(name in group) for _, name in state] for group in groups]
    return np.array([*rows, [1.0] * len(state)]) * leaves


def contents(hold_up: HoldUp, value: Floats, gain: Floats) -> Rates:
    """Give how much of each species the reactor holds, with the slope by reading.

    Parameters
    ----------
    hold_up : HoldUp
        Of the reactor.
    value : array (f + 1, t)
        What leaves it, all species last [kmol/h].
    gain : array (f + 1, m, t)
        Change of that per unit of each reading.

    Returns
    -------
    Rates
        (f, t) [kmol] and (f, m, t); NaN where nothing leaves.
    """
    total = np.where(value[-1] > 0, value[-1], np.nan)
    share = value[:-1] / total
    slope = (gain[:-1] - share[:, None] * gain[-1]) / total
    return Rates(hold_up.total_kmol * share, hold_up.total_kmol * slope)


def between_middles(made: Floats, inside: Floats) -> Floats:
    """Give what is formed from the middle of the cell before to the middle of each cell.

    Parameters
    ----------
    made : array (t, f, ...)
        Out minus in of each cell [kmol].
    inside : array (t, f, ...)
        Contents in its middle [kmol].

    Returns
    -------
    array (t, f, ...)
        NaN for the first cell, which has none before it.
    """
    found = np.full_like(made, np.nan)
    found[1:] = (made[1:] + made[:-1]) / 2 + inside[1:] - inside[:-1]
    return found


def difference_share(unit: Unit, hold: Sequence[timedelta]) -> Floats:
    """Give how much of the random variance of the contents a cell carries, array (c,).

    Over a window the contents differ once, between its ends, whatever the number of cells. As variances of
    cells add, each carries its share of that of the shortest window; longer windows are told too wide.

    Parameters
    ----------
    unit : Unit
        Gives cell and windows.
    hold : sequence of timedelta
        Hold classes, length c.
    """
    shortest = max(1.0, min(unit.windows) / unit.cell)
    held = np.array([one / unit.cell for one in hold])
    return np.asarray(2.0 / shortest / np.clip(held, 1.0, shortest))
