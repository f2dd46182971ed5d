"""What a unit file lets one know: what the readings determine, which of them check one another, how well."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem, sight
from ingest.causes import air_leaks, own_errors, shared_errors, together
from ingest.cells import Cells
from ingest.instruments import measured
from ingest.residuals import cell_residuals, cycles_in_cells, windowed
from ingest.suspects import parallel_sets
from ingest.unit import NO_RATES, Unit
from monitor.amounts import Amounts, amounts_of, at_rest
from monitor.days import plan_of
from monitor.expected import Addition, Expectation, additions, expectations
from monitor.figures import Figure
from monitor.typical import arbitrary, as_cells, one_lost, usual

Floats = NDArray[np.float64]

ALWAYS = 1e4  # standard errors; causes that this cannot tell apart are parallel whatever the readings


@dataclass(frozen=True, slots=True)
class Usual:
    """A unit at the median readings of some running time, from the first to the last cell start [us UTC]."""

    first_us: int
    last_us: int
    figures: tuple[Expectation, ...]


@dataclass(frozen=True, slots=True)
class Judgement:
    """A unit with all its instruments reading.

    `freedom` counts readings beyond what the flows need; an instrument is `checked` when the others could
    foretell its reading, else `unchecked`. `lost_with` names flows that go unseen with one unchecked
    instrument, `needs` for each figure every instrument without which it cannot be seen. A set of `parallel`
    holds causes that the balance cannot tell apart. `usual` is None without a record.
    `not_given` says which figures the unit does not have, and why.
    """

    unit: str
    name: str
    time_zone: str
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
    unseen_figures: tuple[str, ...]
    needs: dict[str, tuple[str, ...]]
    parallel: tuple[tuple[str, ...], ...]
    offered: dict[str, str]
    usual: Usual | None
    watches: tuple[str, ...]


def judge(unit: Unit, record: Cells | None = None) -> Judgement:
    """Judge a unit: balance, what can be seen, what can be checked, and at its usual readings how well.

    Parameters
    ----------
    unit : Unit
        Free of faults.
    record : Cells, optional
        Some time of its record with running cells; tells the usual readings.

    Returns
    -------
    Judgement

    Raises
    ------
    BalanceError, UnitFileError
        As `days.plan_of` and `typical.possible_flows`.
    """
    plan = plan_of(unit)
    problem = plan.problem
    flows = np.array([f"{stream}: {species}" for stream, species in problem.state])
    whole = sight(problem, np.ones(len(problem.names), dtype=bool))
    unchecked = tuple(np.array(problem.names)[~whole.redundant].tolist())
    made = arbitrary(unit, problem)
    read = made if record is None else usual(record)
    offered = () if record is None else additions(unit, read)
    return Judgement(
        unit=unit.key,
        name=unit.name,
        time_zone=unit.time_zone,
        streams=tuple(f"{one.name} ({one.direction}, {len(one.species)} species)" for one in unit.streams),
        flows=len(flows),
        balances=len(problem.conservation),
        readings=len(problem.names),
        freedom=whole.freedom,
        checked=tuple(name for name in problem.names if name not in unchecked),
        unchecked=unchecked,
        unseen=tuple(flows[~whole.seen].tolist()),
        lost_with={name: tuple(flows[_lost(problem, name)].tolist()) for name in unchecked},
        figures=tuple(figure.name for figure in plan.figures),
        not_given=() if unit.hold_up else (f"instantaneous selectivity {NO_RATES[unit.reactor][0]}",),
        **_seen_figures(unit, problem, plan.figures, made),
        parallel=_parallel(unit, problem, read, always=record is None),
        offered={one.name: one.quality for one in offered},
        usual=None if record is None else _usual(unit, record, read, offered),
        watches=tuple(watch.name for watch in unit.watches),
    )


def as_table(found: Judgement) -> dict[str, Any]:
    """Lay a judgement out for other programs: times in ISO 8601, null for what is not known.

    Parameters
    ----------
    found : Judgement
        Of one unit.
    """
    table = asdict(found)
    if found.usual is not None:
        span = np.array([found.usual.first_us, found.usual.last_us]).astype("datetime64[us]")
        figures = [
            {name: _known(value) for name, value in asdict(one).items()} for one in found.usual.figures
        ]
        table["usual"] = {"from": f"{span[0]}Z", "to": f"{span[1]}Z", "figures": figures}
    return table


def _known(value: Any) -> Any:
    """Give None for what is not a number, in tuples too."""
    if isinstance(value, tuple):
        return [_known(one) for one in value]
    return None if isinstance(value, float) and math.isnan(value) else value


def _lost(problem: Problem, name: str) -> NDArray[np.bool_]:
    """Tell which flows go unseen without one instrument."""
    whole = sight(problem, np.ones(len(problem.names), dtype=bool))
    without = sight(problem, np.array([other != name for other in problem.names]))
    return np.asarray(whole.seen & ~without.seen)


def _seen_figures(unit: Unit, problem: Problem, figures: tuple[Figure, ...], value: Floats) -> dict[str, Any]:
    """Tell which figures are not seen at all, and which instruments each of the others cannot do without."""
    rows = np.vstack([value, one_lost(value)])
    amounts = at_rest(unit, amounts_of(unit, problem, as_cells(unit, rows))[1])
    seen = {one.name: _is_seen(one, amounts) for one in figures}
    names = np.array([one.name for one in unit.instruments])
    return {
        "unseen_figures": tuple(name for name, there in seen.items() if not there[0]),
        "needs": {name: tuple(names[~there[1:]].tolist()) for name, there in seen.items() if there[0]},
    }


def _is_seen(figure: Figure, amounts: Amounts) -> NDArray[np.bool_]:
    """Tell in which cells a figure has all its amounts."""
    needed = [amounts.names.index(name) for name in figure.needs]
    return np.asarray(np.isfinite(amounts.kmol[:, needed]).all(axis=1))


def _parallel(unit: Unit, problem: Problem, value: Floats, *, always: bool) -> tuple[tuple[str, ...], ...]:
    """Give the sets of causes that cannot be told apart: whatever the readings, or at these readings."""
    cells = as_cells(unit, value[None])
    readings = measured(unit, cells.value, cells.share)
    causes = together(own_errors(problem, readings), shared_errors(unit, readings))
    if always:
        found = cell_residuals(problem, readings, causes, cycles_in_cells(unit))
        return parallel_sets(windowed(found, np.array([0]), 1), strength=ALWAYS)
    causes = together(causes, air_leaks(unit, readings))
    found = cell_residuals(problem, readings, causes, cycles_in_cells(unit))
    return parallel_sets(windowed(found, np.array([0]), 1))


def _usual(unit: Unit, record: Cells, value: Floats, offered: tuple[Addition, ...]) -> Usual:
    """Tell what to expect of every figure at the usual readings."""
    return Usual(int(record.start[0]), int(record.start[-1]), expectations(unit, value, offered))
