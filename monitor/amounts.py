"""The few sums per cell that every figure is made of, with what each instrument's error does to them.

Rates become amounts here and nowhere else. Two kinds stand side by side: amounts of the reconciled state,
and raw amounts straight from the readings (what is not read comes from the reconciled state and is scaled
with the stream's own flow reading), so that closures can witness against the reconciled picture.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, sign_of
from ingest.cells import Cells
from ingest.instruments import Measured, balance_instruments, measured
from ingest.reconcile import SOLVED, Solution, States, reconcile
from ingest.unit import FLOW_KINDS, FRACTION_KINDS, Instrument, Unit

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
        Balance instruments, then shared errors.
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


@dataclass(frozen=True, slots=True)
class _Rates:
    """Linear functions of flows with their dependence on readings: (p, t) [kmol/h] and (p, m, t)."""

    value: Floats
    slope: Floats


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
    return (*_reconciled_rows(unit, ()), *_raw_rows(unit, ()))


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
    steady = _reconciled_rows(unit, problem.state)
    rows = np.array(list(steady.values()))
    states, solution = reconcile(unit, problem, cells, rows)
    readings = measured(unit, cells.value, cells.share)
    solved = solution.status == SOLVED
    value = np.where(solution.told & solved, rows @ np.nan_to_num(solution.flow), np.nan)
    rates = _joined(_Rates(value, solution.gain), _raw(unit, problem, readings, solution))
    random, hold = _random(unit, readings, rates)
    return states, Amounts(
        names=amount_names(unit),
        start=cells.start,
        kmol=amount_kmol(rates.value.T, unit.cell),
        random=random,
        hold=hold,
        systematic=_systematic(unit, readings, rates),
        sources=(*problem.names, *(one.name for one in unit.shared)),
        operating=cells.operating,
    )


def _joined(first: _Rates, second: _Rates) -> _Rates:
    return _Rates(np.vstack([first.value, second.value]), np.concatenate([first.slope, second.slope]))


def _random(unit: Unit, readings: Measured, rates: _Rates) -> tuple[Floats, tuple[timedelta, ...]]:
    """Give the random covariance by hold class, array (t, c, p, p), and the classes."""
    seen = balance_instruments(unit)
    hold = tuple(sorted({one.cycle for one in seen if one.random.relative or one.random.floor}))
    count, _, cells = rates.slope.shape
    random = np.zeros((cells, len(hold), count, count))
    for c, cycle in enumerate(hold):
        members = [i for i, one in enumerate(seen) if one.cycle == cycle]
        part = amount_kmol(rates.slope[:, members] * np.nan_to_num(readings.random[members]), unit.cell)
        ready = np.ascontiguousarray(part.transpose(2, 0, 1))
        random[:, c] = ready @ ready.transpose(0, 2, 1)
    return random, hold


def _systematic(unit: Unit, readings: Measured, rates: _Rates) -> Floats:
    """Give the change of each amount per standard systematic error, array (t, p, m + shared)."""
    own = rates.slope * np.nan_to_num(readings.systematic)
    shared = np.einsum("pmt,mst->pst", rates.slope, np.nan_to_num(readings.loading), optimize=True)
    return amount_kmol(np.concatenate([own, shared], axis=1).transpose(2, 0, 1), unit.cell)


def _reconciled_rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> dict[str, Floats]:
    """Give each amount of the reconciled state as weights on the flows, {name: (N,)}."""
    out = -sign_of(unit, state) if state else np.zeros(0)
    flows = {one.name: np.array([name == one.name for _, name in state], dtype=float) for one in unit.species}
    key = flows[unit.key_reactant]
    rows = {f"fed {unit.key_reactant}": key * (out < 0), f"consumed {unit.key_reactant}": -key * out}
    made = [one.name for one in unit.species if not one.inert and one.name != unit.key_reactant]
    rows |= {f"made {name}": flows[name] * out for name in made}
    return rows | {"made all unwanted": sum((flows[name] * out for name in unit.unwanted), np.zeros(len(state)))}


def _raw_rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> dict[str, Floats]:
    """Give each raw amount as weights on the raw flows, {name: (N,)}; only elements that are read throughout."""
    out = -sign_of(unit, state) if state else np.zeros(0)
    rows: dict[str, Floats] = {}
    for element in closed_elements(unit):
        held = _atoms(unit, state, element)
        rows |= {f"raw in {element}": held * (out < 0), f"raw out {element}": held * (out > 0)}
        if element == unit.key_element:
            key = np.array([name == unit.key_reactant for _, name in state], dtype=bool)
            rows |= {f"raw made {element}": held * out * ~key, f"raw consumed {element}": -held * out * key}
    return rows


def _atoms(unit: Unit, state: tuple[tuple[str, str], ...], element: str) -> Floats:
    held = {one.name: 0.0 if one.inert else dict(one.atoms).get(element, 0.0) for one in unit.species}
    return np.array([held[name] for _, name in state])


def closed_elements(unit: Unit) -> tuple[str, ...]:
    """Give the elements whose raw closure can be told: every reacting carrier in every stream is read.

    A carrier is read when an instrument is on it, or when it is the one species of its stream without an
    instrument and the stream's samples still hold it (then it is the remainder).

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    atoms = {one.name: dict(one.atoms) for one in unit.species if not one.inert}
    elements = sorted({element for held in atoms.values() for element in held})
    return tuple(
        element
        for element in elements
        if all(
            _is_read(unit, stream.name, name)
            for stream in unit.streams
            for name in stream.species
            if element in atoms.get(name, {})
        )
    )


def _is_read(unit: Unit, stream: str, species: str) -> bool:
    there = [one for one in balance_instruments(unit) if one.stream == stream]
    named = {name for one in there for name in one.species}
    if species in named:
        return True
    whole = next(one.species for one in unit.streams if one.name == stream)
    rest = [name for name in whole if name not in named]
    return rest == [species] and not any(species in one.left_out for one in there)


def _raw(unit: Unit, problem: Problem, readings: Measured, solution: Solution) -> _Rates:
    """Give the raw amounts' rates and slopes; NaN where a reading that belongs to them is missing."""
    rows = np.array(list(_raw_rows(unit, problem.state).values())).reshape(-1, len(problem.state))
    raw, slope = _raw_flows(unit, problem, readings, solution)
    with np.errstate(invalid="ignore"):
        value = np.where(rows[:, :, None] != 0, rows[:, :, None] * raw, 0.0).sum(axis=1)
    return _Rates(value, np.einsum("pn,nmt->pmt", rows, np.nan_to_num(slope), optimize=True))


def _raw_flows(
    unit: Unit, problem: Problem, readings: Measured, solution: Solution
) -> tuple[Floats, Floats]:
    """Give the flows as read, array (N, t), and their slopes by reading, array (N, m, t)."""
    flow = solution.flow
    raw = flow.copy()
    slope = np.zeros((*problem.numerator.shape[::-1], flow.shape[1]))
    below = problem.denominator @ np.nan_to_num(flow)
    for stream in unit.streams:
        places = [j for j, (name, _) in enumerate(problem.state) if name == stream.name]
        factor, weight = _stream_factor(unit, problem, readings, flow, stream.name)
        for j in places:
            on_it = _readers(unit, stream.name, problem.state[j][1])
            share = _mean_weights(readings, on_it)
            if on_it:
                per = np.array([_per_reading(problem, i, j, below, unit) for i in on_it])
                raw[j] = (share * per * readings.reading[on_it]).sum(axis=0)
                slope[j, on_it] = share * per
            if not any(balance_instruments(unit)[i].kind == "species flow" for i in on_it):
                raw[j] *= factor
                slope[j] *= factor
                slope[j] += raw[j] * weight
    return raw, slope


def _readers(unit: Unit, stream: str, species: str) -> list[int]:
    """Give the instruments that count exactly this species of this stream."""
    return [
        i
        for i, one in enumerate(balance_instruments(unit))
        if one.stream == stream and one.species == (species,) and _counts(one)
    ]


def _counts(instrument: Instrument) -> bool:
    return instrument.kind in (*FRACTION_KINDS, "species flow")


def _per_reading(problem: Problem, i: int, j: int, below: Floats, unit: Unit) -> Floats:
    """Give the flow of species j per unit of reading i, array (t,)."""
    ratio = balance_instruments(unit)[i].kind in FRACTION_KINDS
    return below[i] / problem.numerator[i, j] if ratio else np.full(below.shape[1], 1 / problem.numerator[i, j])


def _mean_weights(readings: Measured, on_it: list[int]) -> Floats:
    """Give the weights of several readings of one thing, (len, t); all NaN where none is there."""
    weight = np.where(np.isfinite(readings.reading[on_it]), 1.0 / readings.variance[on_it], 0.0)
    total = weight.sum(axis=0)
    return np.where(total > 0, weight / np.where(total > 0, total, 1.0), np.nan)


def _stream_factor(
    unit: Unit, problem: Problem, readings: Measured, flow: Floats, stream: str
) -> tuple[Floats, Floats]:
    """Give flow as read over flow as reconciled, array (t,), and its relative slope by reading, (m, t)."""
    meters = [
        i for i, one in enumerate(balance_instruments(unit)) if one.stream == stream and one.kind in FLOW_KINDS
    ]
    weight = np.zeros((len(problem.names), flow.shape[1]))
    if not meters:
        return np.ones(flow.shape[1]), weight
    share = _mean_weights(readings, meters)
    reading, told = readings.reading[meters], problem.numerator[meters] @ np.nan_to_num(flow)
    ratio = np.where(share > 0, share * reading / np.where(told > 0, told, np.nan), 0.0 * share)
    factor = ratio.sum(axis=0)
    weight[meters] = np.where(share > 0, ratio / reading, 0.0) / factor
    return factor, weight
