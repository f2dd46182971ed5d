"""What a unit file lets one know: what the readings determine, and which of them check one another."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ingest.balance import sight
from ingest.unit import NO_RATES, Unit
from monitor.months import plan_of


@dataclass(frozen=True, slots=True)
class Judgement:
    """A unit with all its instruments reading.

    `freedom` counts readings beyond what the flows need; an instrument is `checked` when the others could
    foretell its reading, else `unchecked`. `lost_with` names flows that go unseen with one instrument.
    `not_given` says which figures the unit does not have, and why.
    """

    unit: str
    name: str
    streams: tuple[str, ...]
    flows: int
    balances: int
    readings: int
    freedom: int
    checked: tuple[str, ...]
    unchecked: tuple[str, ...]
    unseen: tuple[str, ...]
    lost_with: dict[str, tuple[str, ...]]
    figures: tuple[str, ...]
    not_given: tuple[str, ...]
    watches: tuple[str, ...]


def judge(unit: Unit) -> Judgement:
    """Judge a unit: balance, what can be seen, what can be checked.

    Parameters
    ----------
    unit : Unit
        Free of faults.

    Returns
    -------
    Judgement

    Raises
    ------
    BalanceError, UnitFileError
        As `months.plan_of`.
    """
    plan = plan_of(unit)
    problem = plan.problem
    flows = [f"{stream}: {species}" for stream, species in problem.state]
    everything = np.ones(len(problem.names), dtype=bool)
    whole = sight(problem, everything)
    unchecked = tuple(
        name for name, checked in zip(problem.names, whole.redundant, strict=True) if not checked
    )
    lost_with = {}
    for name in unchecked:
        without = sight(problem, np.array([other != name for other in problem.names]))
        lost_with[name] = tuple(np.array(flows)[whole.seen & ~without.seen].tolist())
    return Judgement(
        unit=unit.key,
        name=unit.name,
        streams=tuple(f"{one.name} ({one.direction}, {len(one.species)} species)" for one in unit.streams),
        flows=len(flows),
        balances=len(problem.conservation),
        readings=len(problem.names),
        freedom=whole.freedom,
        checked=tuple(name for name in problem.names if name not in unchecked),
        unchecked=unchecked,
        unseen=tuple(np.array(flows)[~whole.seen].tolist()),
        lost_with=lost_with,
        figures=tuple(figure.name for figure in plan.figures),
        not_given=() if unit.hold_up else (f"instantaneous selectivity {NO_RATES[unit.reactor][0]}",),
        watches=tuple(watch.name for watch in unit.watches),
    )
