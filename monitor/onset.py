"""Since when has it been so, and was an instrument calibrated just then?

The likeliest hypothesis is followed back hour by hour: its onset is where what it explains begins to add up
(the change point of greatest likelihood for a step of the size found; Page 1954, from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.cells import Cells
from ingest.conditions import CALIBRATING
from ingest.unit import Unit
from monitor.evidence import Evidence, by_block
from monitor.healthy import BLOCK, Baseline
from monitor.hypotheses import INSTRUMENT, Belief, Hypothesis

Floats = NDArray[np.float64]

# Chance that a fault of an instrument begins with a calibration of it (common practice, no source).
BY_CALIBRATION = 0.3
_US = timedelta(microseconds=1)


def onset_us(
    unit: Unit, problem: Problem, baseline: Baseline, evidence: Evidence, cells: Cells, *, direction: Floats
) -> int | None:
    """Give the start of the block from which the evidence moves in a direction [us UTC], if there is one.

    Parameters
    ----------
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    baseline : Baseline
        The healthy time.
    evidence : Evidence
        Of the window.
    cells : Cells
        The window and some time before it, on one grid without holes.
    direction : array (d,)
        Of the likeliest hypothesis.
    """
    lean = np.linalg.solve(evidence.covariance, direction)
    size = lean @ evidence.value
    start, value = by_block(unit, problem, baseline, evidence, cells)
    score = np.nan_to_num(value @ lean - size / 2, nan=0.0) * np.sign(size)
    if not len(score):
        return None
    total = np.cumsum(score[::-1])[::-1]
    return int(start[int(np.argmax(total))]) if total.max() > 0 else None


def calibrated_at(unit: Unit, cells: Cells) -> dict[str, list[int]]:
    """Give the times at which instruments came back from a calibration, by analyzer or instrument [us UTC].

    Parameters
    ----------
    unit : Unit
        Its events count too.
    cells : Cells
        The time to look at.
    """
    step = unit.cell // _US
    found: dict[str, list[int]] = {}
    for place, one in enumerate(unit.instruments):
        off = cells.condition[:, place] == CALIBRATING
        ends = cells.start[np.flatnonzero(off[:-1] & ~off[1:])] + step
        if one.analyzer and len(ends):
            found[one.analyzer] = sorted({*found.get(one.analyzer, []), *ends.tolist()})
    first, last = int(cells.start[0]), int(cells.start[-1]) + step
    for event in unit.events:
        at = round(event.at.timestamp() * 1e6)
        if event.kind == "calibration" and event.instrument and first <= at < last:
            found.setdefault(event.instrument, []).append(at)
    return found


def near(unit: Unit, times: Sequence[int], since_us: int) -> bool:
    """Tell whether an onset lies within a block and a cycle of one of the times.

    Parameters
    ----------
    unit : Unit
        The reactor.
    times : sequence of int
        Ends of calibrations [us UTC].
    since_us : int
        Start of the block in which it began [us UTC].
    """
    reach = (
        BLOCK // _US + max([one.cycle for one in unit.instruments if one.analyzer], default=unit.cell) // _US
    )
    return any(abs(since_us - at) <= reach for at in times)


def odds(unit: Unit, belief: Belief, hypotheses: Sequence[Hypothesis], name: str, share: float) -> Floats:
    """Give what a calibration at the onset says for each hypothesis, as a factor on its odds, array (n,).

    Parameters
    ----------
    unit : Unit
        The reactor.
    belief : Belief
        Before that is known.
    hypotheses : sequence of Hypothesis
        The n.
    name : str
        What was calibrated: an analyzer or an instrument.
    share : float
        Share of all time that lies as near to a calibration of it.
    """
    analyzer = {one.name: one.analyzer for one in unit.instruments}
    members = {own for own, its in analyzer.items() if name in (own, its)}
    members |= {one.name for one in unit.shared if members.issuperset(one.instruments)}
    factor = BY_CALIBRATION / max(share, 0.01)
    told = [one.kind == INSTRUMENT and one.name in members for one in hypotheses]
    return np.where(told, max(factor, 1.0), 1.0) * np.ones_like(belief.chance)
