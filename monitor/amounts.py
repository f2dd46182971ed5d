"""The few sums per cell that every figure is made of, with what each instrument's error does to them.

Rates become amounts here and nowhere else. Two kinds stand side by side: amounts of the reconciled state,
and raw amounts straight from the readings, so that closures can witness against the reconciled picture.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, sign_around, sign_of, state_of
from ingest.cells import Cells
from ingest.instruments import Measured, balance_instruments, measured
from ingest.reconcile import States, reconcile
from ingest.unit import Unit
from monitor.formation import between_middles, contents, difference_share, formed_of, outlet_rows
from monitor.raw import Rates, raw_rates, raw_rows

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Amounts:
    """Amounts per cell and their errors.

    Parameters
    ----------
    names : tuple of str
        The p amounts, `amount_names`.
    start : array (t,)
        Cell starts [us, UTC].
    kmol : array (t, p)
        Amounts in one cell; NaN where the readings do not tell.
    random : array (t, c, p, p)
        Covariance [kmol2] by hold class, as if each cell had one independent result.
    hold : tuple of timedelta, length c
        Time between independent results of each class.
    systematic : array (t, p, s)
        Change [kmol] per one standard systematic error of each source.
    sources : tuple of str, length s
        Balance instruments, then shared errors, then the hold-up where one is stated.
    operating : array (t,)
        As in `Cells`.
    """

    names: tuple[str, ...]
    start: NDArray[np.int64]
    kmol: Floats
    random: Floats
    hold: tuple[timedelta, ...]
    systematic: Floats
    sources: tuple[str, ...]
    operating: NDArray[np.int8]


def amount_kmol(rate_kmol_h: Floats, step: timedelta) -> Floats:
    """Give the amount [kmol] that a rate [kmol/h] makes in one step.

    Parameters
    ----------
    rate_kmol_h : array
        Any shape.
    step : timedelta
        Length of the step.
    """
    return rate_kmol_h * (step / timedelta(hours=1))


def amount_names(unit: Unit) -> tuple[str, ...]:
    """Give the names of the amounts of a unit, in order.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    state = state_of(unit)
    targets = formed_of(unit)
    inside, formed = ([f"{what} {name}" for name in targets] for what in ("inside", "formed"))
    return (*reconciled_rows(unit, state), *raw_rows(unit, state), *inside, *formed)


def amounts_of(unit: Unit, problem: Problem, cells: Cells) -> tuple[States, Amounts]:
    """Reconcile the cells and sum up what figures need.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    cells : Cells
        Readings on the grid.
    """
    rows = np.array(list(reconciled_rows(unit, problem.state).values()))
    asked = np.vstack([rows, outlet_rows(unit, problem.state)]) if unit.hold_up else rows
    readings = measured(unit, cells.value, cells.share)
    states, solution = reconcile(problem, cells, readings, asked)
    parts = [
        Rates(solution.value[: len(rows)], solution.gain[: len(rows)]),
        raw_rates(unit, problem, readings, solution.flow),
    ]
    if unit.hold_up:
        found = contents(unit.hold_up, solution.value[len(rows) :], solution.gain[len(rows) :])
        step = amount_kmol(np.ones(1), unit.cell)  # contents are no rate; undoes what is done to rates below
        parts.append(Rates(found.value / step, found.slope / step))
    rates = Rates(np.vstack([one.value for one in parts]), np.concatenate([one.slope for one in parts]))
    random, hold = _random(unit, readings, rates)
    kept = Amounts(
        names=amount_names(unit)[: len(rates.value)],
        start=cells.start,
        kmol=amount_kmol(rates.value.T, unit.cell),
        random=random,
        hold=hold,
        systematic=_systematic(unit, readings, rates),
        sources=(*problem.names, *(one.name for one in unit.shared)),
        operating=cells.operating,
    )
    return states, with_formed(unit, _with_hold_up_error(unit, kept))


def with_formed(unit: Unit, amounts: Amounts) -> Amounts:
    """Work out what is formed from one cell to the next, over all cells that are there.

    Parameters
    ----------
    unit : Unit
        The reactor; without a stated hold-up nothing is done.
    amounts : Amounts
        With or without what was formed, which is worked out anew: cells of several pieces have been joined.

    Returns
    -------
    Amounts
        NaN for what is formed up to the first cell, and where a cell or the one before is not seen.
    """
    if not unit.hold_up:
        return amounts
    names = [name for name in amounts.names if not name.startswith("formed ")]
    p, targets = len(names), formed_of(unit)
    made, inside = ([names.index(f"{what} {one}") for one in targets] for what in ("made", "inside"))
    values = [one[:, :p] for one in (amounts.kmol, amounts.systematic)]
    both = [np.concatenate([one, between_middles(one[:, made], one[:, inside])], axis=1) for one in values]
    grown = np.zeros((*amounts.random.shape[:2], p + len(targets), p + len(targets)))
    grown[:, :, :p, :p] = amounts.random[:, :, :p, :p]
    share = difference_share(unit, amounts.hold)[:, None, None]
    grown[:, :, p:, p:] = grown[:, :, made][..., made] + share * grown[:, :, inside][..., inside]
    all_names = (*names, *(f"formed {one}" for one in targets))
    return replace(amounts, names=all_names, kmol=both[0], systematic=both[1], random=grown)


def at_rest(unit: Unit, amounts: Amounts) -> Amounts:
    """Give the amounts of cells that stand each for itself: what is formed is what is made.

    Parameters
    ----------
    unit : Unit
        The reactor; without a stated hold-up nothing is done.
    amounts : Amounts
        Of cells that do not follow one another.
    """
    if not unit.hold_up:
        return amounts
    places = [
        [amounts.names.index(f"{what} {one}") for one in formed_of(unit)] for what in ("made", "inside")
    ]
    kmol, systematic = amounts.kmol.copy(), amounts.systematic.copy()
    for values in (kmol, systematic):
        made, inside = (values[:, place] for place in places)
        values[:, -len(places[0]) :] = np.where(np.isfinite(inside), made, np.nan)
    return replace(amounts, kmol=kmol, systematic=systematic)


def _with_hold_up_error(unit: Unit, amounts: Amounts) -> Amounts:
    """Add the error of the stated hold-up as one more systematic source: it scales all contents."""
    if not unit.hold_up:
        return amounts
    inside = np.array([name.startswith("inside ") for name in amounts.names])
    change = np.where(inside, unit.hold_up.relative * amounts.kmol, 0.0)[:, :, None]
    wider = np.concatenate([amounts.systematic, change], axis=2)
    return replace(amounts, systematic=wider, sources=(*amounts.sources, "hold-up"))


def _random(unit: Unit, readings: Measured, rates: Rates) -> tuple[Floats, tuple[timedelta, ...]]:
    """Give the random covariance by hold class, array (t, c, p, p), and the classes."""
    seen = balance_instruments(unit)
    hold = tuple(sorted({one.cycle for one in seen if one.random.relative or one.random.floor}))
    count, _, cells = rates.slope.shape
    random = np.empty((len(hold), count, count, cells))  # cells last: one operation for all of them
    for c, cycle in enumerate(hold):
        members = [i for i, one in enumerate(seen) if one.cycle == cycle]
        part = rates.slope[:, members] * amount_kmol(np.nan_to_num(readings.random[members]), unit.cell)
        for i in range(count):
            np.einsum("mt,jmt->jt", part[i], part[: i + 1], out=random[c, i, : i + 1])
            random[c, :i, i] = random[c, i, :i]
    return random.transpose(3, 0, 1, 2), hold


def _systematic(unit: Unit, readings: Measured, rates: Rates) -> Floats:
    """Give the change of each amount per standard systematic error, array (t, p, m + shared)."""
    own = rates.slope * amount_kmol(np.nan_to_num(readings.systematic), unit.cell)
    loading = amount_kmol(np.nan_to_num(readings.loading), unit.cell)
    shared = np.einsum("pmt,mst->pst", rates.slope, loading, optimize=True)
    return np.concatenate([own, shared], axis=1).transpose(2, 0, 1)


def reconciled_rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> dict[str, Floats]:
    """Give each amount of the reconciled state as weights on the flows, {name: (N,)}.

    Parameters
    ----------
    unit : Unit
        The reactor.
    state : tuple of (stream, species)
        The state axis.
    """
    out = -sign_of(unit, state)
    flows = {one.name: np.array([float(name == one.name) for _, name in state]) for one in unit.species}
    key = flows[unit.key_reactant]
    rows = {f"fed {unit.key_reactant}": key * (out < 0), f"consumed {unit.key_reactant}": -key * out}
    made = [one.name for one in unit.species if not one.inert and one.name != unit.key_reactant]
    rows |= {f"made {name}": flows[name] * out for name in made}
    unwanted = sum((flows[name] for name in unit.unwanted), np.zeros(len(state)))
    return rows | {"made all unwanted": unwanted * out} | _loop_rows(unit, state, key)


def _loop_rows(unit: Unit, state: tuple[tuple[str, str], ...], key: Floats) -> dict[str, Floats]:
    """Give what the figures of a unit with nodes need besides.

    What is consumed and made around the reactor is what is consumed and made around the whole unit, since
    the other nodes keep every species; only what is fed differs.
    """
    rows: dict[str, Floats] = {}
    if unit.nodes:
        reactor = [node.name for node in unit.nodes if node.reacts]
        rows[f"fed {unit.key_reactant} per pass"] = key * (sign_around(unit, state, reactor) > 0)
    for name, role in (("fresh feed", "fresh feed"), ("recycled", "recycle")):
        streams = [stream.name for stream in unit.streams if stream.role == role]
        if streams:
            rows[name] = np.array([float(stream in streams) for stream, _ in state])
    return rows
