"""Conservation rows, null space, what the readings present let one see, and what they can check.

The balance is `A n = 0` for the molar flows n of every species in every stream. With an orthonormal
basis Z of its null space, `n = Z q` closes every balance to rounding whatever q is.
"""

from __future__ import annotations

from collections.abc import Container
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest import instruments
from ingest.chemistry import Atoms, element_matrix
from ingest.errors import BalanceError
from ingest.unit import Unit

Floats = NDArray[np.float64]

RANK_TOLERANCE = 1e-9  # of the largest singular value; rows are scaled to length one before
SEEN_TOLERANCE = 1e-7  # part of a unit flow that may leak into what cannot be seen


@dataclass(frozen=True, slots=True)
class Problem:
    """A balance and the instruments that look at it.

    Parameters
    ----------
    state : tuple of (stream, species)
        Names of the N molar flows.
    conservation : array (r, N)
        Independent balance rows, `in` minus `out`.
    basis : array (N, k)
        Orthonormal basis of the null space of the conservation rows.
    names : tuple of str
        The m instruments.
    numerator, denominator : array (m, N)
        What each instrument sees; a denominator row of zeros means a plain sum.
    """

    state: tuple[tuple[str, str], ...]
    conservation: Floats
    basis: Floats
    names: tuple[str, ...]
    numerator: Floats
    denominator: Floats

    @property
    def linear(self) -> NDArray[np.bool_]:
        """Tell which instruments see a plain sum rather than a ratio, array (m,)."""
        return np.asarray(~np.any(self.denominator, axis=1))


@dataclass(frozen=True, slots=True)
class Sight:
    """What one set of readings lets one see.

    Parameters
    ----------
    rank : int
        Independent things that the readings tell.
    freedom : int
        Degrees of freedom: readings beyond that.
    seen : array (N,) of bool
        Flows that the readings determine.
    blind : array (k, k - rank)
        Directions of q that leave every reading as it is, at a generic state.
    redundant : array (m,) of bool
        Instruments whose reading the others could foretell.
    """

    rank: int
    freedom: int
    seen: NDArray[np.bool_]
    blind: Floats
    redundant: NDArray[np.bool_]


def null_space(matrix: Floats) -> Floats:
    """Give an orthonormal basis, array (N, k), of all n with `matrix @ n = 0`.

    Parameters
    ----------
    matrix : array (r, N)
        Any rows, dependent ones included.
    """
    if matrix.shape[0] == 0:
        return np.eye(matrix.shape[1])
    _, sizes, right = np.linalg.svd(matrix)
    rank = int((sizes > RANK_TOLERANCE * np.fmax(sizes[0], 1e-300)).sum())
    return np.ascontiguousarray(right[rank:].T)


def problem(
    conservation: Floats,
    numerator: Floats,
    denominator: Floats | None = None,
    *,
    state: tuple[tuple[str, str], ...] | None = None,
    names: tuple[str, ...] | None = None,
) -> Problem:
    """Give the problem of a stated conservation matrix and stated instrument rows.

    Parameters
    ----------
    conservation : array (r, N)
        Balance rows; dependent ones are dropped.
    numerator : array (m, N)
        What each instrument sums.
    denominator : array (m, N), optional
        What each instrument divides by; rows of zeros, or none at all, for plain sums.
    state : tuple of (stream, species), optional
        Names of the flows; numbered when absent.
    names : tuple of str, optional
        Names of the instruments; numbered when absent.
    """
    count, flows = numerator.shape
    return Problem(
        state=state or tuple((f"{j + 1}", "") for j in range(flows)),
        conservation=_independent(conservation),
        basis=null_space(conservation),
        names=names or tuple(f"{i + 1}" for i in range(count)),
        numerator=numerator,
        denominator=np.zeros_like(numerator) if denominator is None else denominator,
    )


def problem_of(unit: Unit) -> Problem:
    """Give the problem of a unit: for each node one row per element and per inert species, or per species.

    Parameters
    ----------
    unit : Unit
        The reactor.

    Raises
    ------
    BalanceError
        When nothing is left to find out: every flow would have to be zero.
    """
    state = state_of(unit)
    numerator, denominator = instruments.rows(unit, state)
    names = tuple(one.name for one in instruments.balance_instruments(unit))
    rows = conservation_of(unit, state)
    found = problem(rows, numerator, denominator, state=state, names=names)
    still = np.linalg.norm(found.basis, axis=1) < RANK_TOLERANCE
    held = [f"{stream}: {name}" for (stream, name), zero in zip(state, still, strict=True) if zero]
    if not found.basis.shape[1] or held:
        raise BalanceError(
            f"{unit.key}: the balance forces {', '.join(held) or 'every flow'} to zero",
            remedy="Name the species in a stream of the other direction too, at every node that it passes, "
            "or take it out of `inert`.",
        )
    return found


def state_of(unit: Unit) -> tuple[tuple[str, str], ...]:
    """Give the state axis of a unit: every species of every stream.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return tuple((stream.name, name) for stream in unit.streams for name in stream.species)


def sign_of(unit: Unit, state: tuple[tuple[str, str], ...]) -> Floats:
    """Give +1 for flows into the envelope, -1 for flows out of it and 0 for those inside, array (N,).

    Parameters
    ----------
    unit : Unit
        The reactor.
    state : tuple of (stream, species)
        The state axis.
    """
    sign = {"in": 1.0, "out": -1.0, "inner": 0.0}
    direction = {stream.name: stream.direction for stream in unit.streams}
    return np.array([sign[direction[stream]] for stream, _ in state])


def sign_around(unit: Unit, state: tuple[tuple[str, str], ...], nodes: Container[str | None]) -> Floats:
    """Give +1 for flows into a group of nodes, -1 for flows out of it and 0 for all others, array (N,).

    Parameters
    ----------
    unit : Unit
        With nodes.
    state : tuple of (stream, species)
        The state axis.
    nodes : container of str
        Names of the group's nodes; a flow between two of them is inside.
    """
    sign = {one.name: float(one.target in nodes) - float(one.source in nodes) for one in unit.streams}
    return np.array([sign[stream] for stream, _ in state])


def conservation_of(unit: Unit, state: tuple[tuple[str, str], ...]) -> Floats:
    """Give the conservation rows of a unit, array (r, N), `in` minus `out`, the nodes one below the other.

    Parameters
    ----------
    unit : Unit
        The reactor.
    state : tuple of (stream, species)
        The state axis.
    """
    if not unit.nodes:
        return _kept(unit, state, reacts=True) * sign_of(unit, state)
    parts = [
        _kept(unit, state, reacts=node.reacts) * sign_around(unit, state, (node.name,)) for node in unit.nodes
    ]
    return np.vstack(parts)


def _kept(unit: Unit, state: tuple[tuple[str, str], ...], *, reacts: bool) -> Floats:
    """Give what a node keeps, as weights on flows: elements and inert species, or every species."""
    atoms = reacting_atoms(unit) if reacts else {}
    elements = sorted({element for held in atoms.values() for element, _ in held})
    ties = [one.name for one in unit.species if one.name not in atoms]
    return np.array(
        [
            *element_matrix([atoms.get(name, ()) for _, name in state], elements),
            *([float(name == tie) for _, name in state] for tie in ties),
        ]
    )


def reacting_atoms(unit: Unit) -> dict[str, Atoms]:
    """Give the atoms of each species that takes part in the reactions, {name: ((element, count), ...)}.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return {one.name: one.atoms for one in unit.species if not one.inert}


def sight(problem: Problem, present: NDArray[np.bool_]) -> Sight:
    """Tell what a set of readings lets one see, at a generic state of the balance.

    Ranks of the gradients are the same at almost every state, so a fixed generic one stands for all.

    Parameters
    ----------
    problem : Problem
        The balance and its instruments.
    present : array (m,) of bool
        Which readings are there.
    """
    jacobian = _generic_gradients(problem)[present]
    rank, right = _rank(jacobian, problem.basis.shape[1])
    blind = np.ascontiguousarray(right[rank:].T)
    redundant = np.zeros(len(present), dtype=bool)
    redundant[present] = _leverage(jacobian, right[:rank]) < 1 - SEEN_TOLERANCE
    return Sight(
        rank=rank,
        freedom=int(present.sum()) - rank,
        seen=determined(problem.basis, blind),
        blind=blind,
        redundant=redundant,
    )


def determined(rows: Floats, blind: Floats) -> NDArray[np.bool_]:
    """Tell which linear functions of q do not change along the blind directions, array (p,) of bool.

    Parameters
    ----------
    rows : array (p, k)
        Linear functions of q.
    blind : array (k, b)
        Directions that the readings cannot see.
    """
    size = np.maximum(np.linalg.norm(rows, axis=1), 1e-300)
    return np.asarray(np.linalg.norm(rows @ blind, axis=1) <= SEEN_TOLERANCE * size)


def _independent(rows: Floats) -> Floats:
    """Keep the first rows that span all of them (pivots of a Gram-Schmidt pass)."""
    kept: list[Floats] = []
    found: list[Floats] = []
    for row in rows:
        rest = row - sum((part @ row * part for part in found), np.zeros_like(row))
        if np.linalg.norm(rest) > RANK_TOLERANCE * np.fmax(np.linalg.norm(row), 1e-300):
            found.append(rest / np.linalg.norm(rest))
            kept.append(row)
    return np.array(kept).reshape(len(kept), rows.shape[1])


def _generic_gradients(problem: Problem) -> Floats:
    """Give the instruments' gradients in q at a fixed generic state, rows scaled to length one."""
    flows = problem.basis @ np.random.default_rng(20).uniform(0.5, 1.5, problem.basis.shape[1])
    below = np.where(problem.linear, 1.0, problem.denominator @ flows)
    ratio = (problem.numerator @ flows) / below
    gradient = (problem.numerator - ratio[:, None] * problem.denominator) / below[:, None] @ problem.basis
    return np.asarray(gradient / np.maximum(np.linalg.norm(gradient, axis=1), 1e-300)[:, None])


def _rank(jacobian: Floats, unknowns: int) -> tuple[int, Floats]:
    if not len(jacobian):
        return 0, np.eye(unknowns)
    _, sizes, right = np.linalg.svd(jacobian)
    return int((sizes > RANK_TOLERANCE * sizes[0]).sum()), right


def _leverage(jacobian: Floats, right: Floats) -> Floats:
    """Give how far each reading determines its own prediction: 1 when no other reading helps."""
    left, _ = np.linalg.qr(jacobian @ right.T)
    return np.asarray((left**2).sum(axis=1))
