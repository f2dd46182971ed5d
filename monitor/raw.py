"""Flows as the instruments read them, before any balance adjusts them.

A species is its own reading times the sample it is a fraction of; the sample comes from the reconciled state
and is scaled by the stream's flow as read over its flow as reconciled. What nobody reads keeps its reconciled
share of the stream. The slopes by reading leave out that the sample itself was reconciled (second order).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, reacting_atoms, sign_of
from ingest.chemistry import element_matrix
from ingest.instruments import Measured, balance_instruments
from ingest.unit import FLOW_KINDS, FRACTION_KINDS, Unit

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Rates:
    """Functions of the flows with their slopes by reading: (p, t) [kmol/h] and (p, m, t)."""

    value: Floats
    slope: Floats


def closed_elements(unit: Unit) -> tuple[str, ...]:
    """Give the elements whose raw closure can be told: every reacting carrier in or out is read.

    A carrier is read when an instrument is on it, or when it is the one species of its stream without an
    instrument and the stream's samples still hold it (then it is the remainder).

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    carriers = {name: {element for element, _ in held} for name, held in reacting_atoms(unit).items()}
    elements = sorted(set().union(*carriers.values()))
    crossing = [stream for stream in unit.streams if stream.direction != "inner"]
    flows = [(stream.name, name) for stream in crossing for name in stream.species]
    return tuple(
        element
        for element in elements
        if all(_is_read(unit, stream, name) for stream, name in flows if element in carriers.get(name, ()))
    )


def _is_read(unit: Unit, stream: str, species: str) -> bool:
    there = [one for one in balance_instruments(unit) if one.stream == stream]
    named = {name for one in there for name in one.species}
    whole = next(one.species for one in unit.streams if one.name == stream)
    rest = [name for name in whole if name not in named]
    return species in named or (rest == [species] and not any(species in one.left_out for one in there))


def raw_rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> dict[str, Floats]:
    """Give each raw amount as weights on the flows, {name: (N,)}; inert carriers are left out.

    Parameters
    ----------
    unit : Unit
        The reactor.
    state : tuple of (stream, species)
        The state axis.
    """
    out = -sign_of(unit, state)
    atoms = reacting_atoms(unit)
    rows: dict[str, Floats] = {}
    for element in closed_elements(unit):
        (held,) = element_matrix([atoms.get(name, ()) for _, name in state], [element])
        rows |= {f"raw in {element}": held * (out < 0), f"raw out {element}": held * (out > 0)}
        if element == unit.key_element:
            key = np.array([name == unit.key_reactant for _, name in state])
            rows |= {f"raw made {element}": held * out * ~key, f"raw consumed {element}": -held * out * key}
            wanted = np.array([name == unit.wanted for _, name in state])
            rows |= {f"raw made {element} in {unit.wanted}": held * out * wanted}
    return rows


def raw_rates(unit: Unit, problem: Problem, readings: Measured, flow: Floats) -> Rates:
    """Give the raw amounts' rates; NaN where a reading that belongs to one is missing.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    readings : Measured
        Base readings of t cells.
    flow : array (N, t)
        Reconciled flows [kmol/h].
    """
    rows = np.array(list(raw_rows(unit, problem.state).values())).reshape(-1, len(problem.state))
    raw, slope = _raw_flows(unit, problem, readings, flow)
    used = rows[:, :, None] != 0
    return Rates(
        value=np.where(used, rows[:, :, None] * raw, 0.0).sum(axis=1),
        slope=np.tensordot(rows, slope, axes=1),
    )


def _raw_flows(unit: Unit, problem: Problem, readings: Measured, flow: Floats) -> tuple[Floats, Floats]:
    """Give the flows as read, array (N, t), and their slopes by reading, array (N, m, t); these 0 for NaN."""
    raw = flow.copy()
    slope = np.zeros((*problem.numerator.shape[::-1], flow.shape[1]))
    known, read = np.nan_to_num(flow), np.nan_to_num(readings.reading)
    factors = {one.name: _stream_factor(unit, problem, readings, known, one.name) for one in unit.streams}
    below = np.where(problem.linear[:, None], 1.0, problem.denominator @ known)
    seen = balance_instruments(unit)
    for j, (stream, species) in enumerate(problem.state):
        readers = _readers(unit, stream, species)
        per = np.zeros((0, flow.shape[1]))
        if readers:
            per = _mean_weights(readings, readers) * below[readers] / problem.numerator[readers, j, None]
            raw[j] = (per * read[readers]).sum(axis=0)
        if not any(seen[i].kind == "species flow" for i in readers):
            factor, meters, change = factors[stream]
            slope[j, meters] = np.nan_to_num(raw[j] * change)
            raw[j] *= factor
            per = per * factor
        slope[j, readers] += np.nan_to_num(per)
    return raw, slope


def _readers(unit: Unit, stream: str, species: str) -> list[int]:
    """Give the instruments that count exactly this species of this stream."""
    kinds = (*FRACTION_KINDS, "species flow")
    found = enumerate(balance_instruments(unit))
    return [i for i, one in found if one.kind in kinds and one.stream == stream and one.species == (species,)]


def _mean_weights(readings: Measured, among: list[int]) -> Floats:
    """Give the weights of several readings of one thing, (len, t); all NaN where none is there."""
    present = np.isfinite(readings.reading[among])
    weight = np.where(present, 1.0 / np.where(present, readings.variance[among], 1.0), 0.0)
    total = weight.sum(axis=0)
    return np.where(total > 0, weight / np.where(total > 0, total, 1.0), np.nan)


def _stream_factor(
    unit: Unit, problem: Problem, readings: Measured, flow: Floats, stream: str
) -> tuple[Floats, list[int], Floats]:
    """Give flow as read over flow as reconciled, array (t,), the meters, and its slope by these, (len, t)."""
    found = enumerate(balance_instruments(unit))
    meters = [i for i, one in found if one.stream == stream and one.kind in FLOW_KINDS]
    if not meters:
        return np.ones(flow.shape[1]), meters, np.zeros((0, flow.shape[1]))
    told = problem.numerator[meters] @ flow
    change = _mean_weights(readings, meters) / np.where(told > 0, told, np.nan)
    return (change * np.nan_to_num(readings.reading[meters])).sum(axis=0), meters, change
