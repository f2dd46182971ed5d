"""Readings to judge a unit by: the usual ones of its record, or of any state that the balance allows."""

from __future__ import annotations

from datetime import timedelta

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from ingest.balance import Problem
from ingest.cells import RUNNING, Cells
from ingest.errors import BalanceError
from ingest.instruments import balance_columns, balance_instruments, measured
from ingest.unit import Unit

Floats = NDArray[np.float64]

TOTAL_KMOL_H = 1000.0  # all flows of an arbitrary state; large enough for floors of uncertainties not to rule
SIDES = 8  # corners whose mean is an arbitrary state: enough to lie inside
GAS_KPA, GAS_K = 100.0, 300.0  # at the meters of an arbitrary state


def usual(cells: Cells) -> Floats:
    """Give the median reading of every instrument over the cells in which the unit was running.

    Parameters
    ----------
    cells : Cells
        Some time of the record.

    Returns
    -------
    array (m,)
        In each instrument's own unit; NaN for an instrument without a reading while running.
    """
    value = cells.value[cells.operating == RUNNING]
    told = np.isfinite(value).any(axis=0)
    found = np.full(value.shape[1], np.nan)
    found[told] = np.nanmedian(value[:, told], axis=0)
    return found


def as_cells(unit: Unit, value: Floats) -> Cells:
    """Give cells, one after the other, in which instruments read so and the unit runs.

    Parameters
    ----------
    unit : Unit
        The reactor.
    value : array (t, m)
        Readings of all instruments in their own units; NaN where missing.
    """
    return Cells(
        start=np.arange(len(value), dtype=np.int64) * (unit.cell // timedelta(microseconds=1)),
        value=value,
        share=np.ones(value.shape, dtype=np.float32),
        condition=np.zeros(value.shape, dtype=np.int8),
        operating=np.full(len(value), RUNNING, dtype=np.int8),
    )


def shown(unit: Unit, problem: Problem, flow: Floats, value: Floats) -> Floats:
    """Give what perfect instruments show of some flows, array (m,), each in its own unit.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    flow : array (N,)
        Molar flows [kmol/h]; what depends on a NaN is NaN.
    value : array (m,)
        Readings of all instruments; those outside the balance (pressure, temperature) are kept.
    """
    seen, columns = balance_instruments(unit), balance_columns(unit)
    offset = np.array([one.offset for one in seen])
    read = value.copy()
    read[columns] = (
        1.0 - offset
    )  # one unit above its zero: the base value of it is the factor between the two
    factor = measured(unit, read[None], np.ones((1, len(read)), dtype=np.float32)).reading[:, 0]
    read[columns] = predicted(problem, flow) / factor - offset
    return read


def predicted(problem: Problem, flow: Floats) -> Floats:
    """Give the base values that a balance's instruments should show, array (m,).

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    flow : array (N,)
        Molar flows [kmol/h]; an instrument that sees a NaN is NaN.
    """
    used = (problem.numerator != 0) | (problem.denominator != 0)
    there = ~(used & ~np.isfinite(flow)).any(axis=1)
    known = np.nan_to_num(flow)
    below = np.where(problem.linear, 1.0, problem.denominator @ known)
    whole = there & (below != 0)
    found = np.full(len(below), np.nan)
    found[whole] = (problem.numerator @ known)[whole] / below[whole]
    return found


def arbitrary(unit: Unit, problem: Problem) -> Floats:
    """Give error-free readings, array (m,), of an arbitrary state that closes the balance.

    They tell what depends on which readings are there, never how large anything is.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.

    Raises
    ------
    BalanceError
        As `possible_flows`.
    """
    state_of_gas = {"pressure": GAS_KPA, "temperature": GAS_K}
    value = np.array([state_of_gas.get(one.kind, 0.0) / one.to_base - one.offset for one in unit.instruments])
    return shown(unit, problem, possible_flows(unit.key, problem), value)


def possible_flows(key: str, problem: Problem) -> Floats:
    """Give flows [kmol/h], array (N,), that close the balance, all above zero, without any special relation.

    Parameters
    ----------
    key : str
        Of the unit, for the message.
    problem : Problem
        The balance.

    Raises
    ------
    BalanceError
        No such flows exist.
    """
    count = len(problem.state)
    balance = np.vstack([problem.conservation, np.ones(count)])
    total = np.append(np.zeros(len(problem.conservation)), TOTAL_KMOL_H)
    # The least flow as an unknown of its own, made as large as can be.
    widest = linprog(
        np.append(np.zeros(count), -1.0),
        A_ub=np.hstack([-np.eye(count), np.ones((count, 1))]),
        b_ub=np.zeros(count),
        A_eq=np.hstack([balance, np.zeros((len(balance), 1))]),
        b_eq=total,
    )
    least = -widest.fun if widest.status == 0 else 0.0
    if not least > TOTAL_KMOL_H * 1e-9:
        raise BalanceError(
            f"{key}: no flows that are all above zero close the balance",
            remedy="Look among the species of the streams for an element that only comes in, or only leaves.",
        )
    draw = np.random.default_rng(20)
    corners = [
        linprog(side, A_eq=balance, b_eq=total, bounds=(least / 2, None)).x
        for side in draw.standard_normal((SIDES, count))
    ]
    flows: Floats = np.mean(corners, axis=0)
    return flows


def one_lost(value: Floats) -> Floats:
    """Give readings in which each instrument in turn is missing, array (m, m).

    Parameters
    ----------
    value : array (m,)
        Readings of all instruments.
    """
    rows = np.tile(value, (len(value), 1))
    np.fill_diagonal(rows, np.nan)
    return rows
