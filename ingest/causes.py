"""What could be wrong with the readings: each cause as what it does to every one of them.

A cause is a vector over the instruments at every cell: the change of each reading per unit of the cause. One
instrument off, the span of an analyzer, air drawn into its sample: to the tests they are all alike.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest.balance import Problem
from ingest.instruments import Measured, balance_instruments
from ingest.unit import FLOW_KINDS, Instrument, Unit

Floats = NDArray[np.float64]

# Dry air, US Standard Atmosphere 1976 (from memory); mole fractions by formula.
DRY_AIR = {"N2": 0.78084, "O2": 0.209476, "Ar": 0.00934, "CO2": 0.000314}
# Slow wander of a well kept calibration, k = 1 (common practice, no source); on the high side.
CHANNEL_DRIFT = 0.003
METER_DRIFT = 0.0015


@dataclass(frozen=True, slots=True)
class Causes:
    """Possible causes and what one unit of each does to the readings.

    Parameters
    ----------
    names : tuple of str
        The h causes.
    change : array (m, h, t)
        Change of each reading, in base units, per unit of the cause; 0 where the reading is missing.
    """

    names: tuple[str, ...]
    change: Floats


def own_errors(problem: Problem, readings: Measured) -> Causes:
    """Give one cause per instrument: it alone reads too high, by a fraction of its reading.

    Parameters
    ----------
    problem : Problem
        Names the instruments.
    readings : Measured
        Base readings of t cells.
    """
    count = len(problem.names)
    return Causes(problem.names, np.eye(count)[:, :, None] * np.nan_to_num(readings.reading)[:, None])


def shared_errors(unit: Unit, readings: Measured) -> Causes:
    """Give one cause per declared shared error: all its instruments read too high by one fraction.

    Parameters
    ----------
    unit : Unit
        Declares the shared errors.
    readings : Measured
        Base readings of t cells.
    """
    names = [one.name for one in balance_instruments(unit)]
    member = np.array([[name in shared.instruments for shared in unit.shared] for name in names])
    member = member.reshape(len(names), len(unit.shared))
    return Causes(
        tuple(one.name for one in unit.shared),
        member[:, :, None] * np.nan_to_num(readings.reading)[:, None],
    )


def air_leaks(unit: Unit, readings: Measured) -> Causes:
    """Give one cause per analyzer that sees nitrogen or oxygen: air takes the place of a share of its sample.

    Parameters
    ----------
    unit : Unit
        The reactor; channels are told by the formulas of their species.
    readings : Measured
        Base readings of t cells [mole fraction].
    """
    seen = balance_instruments(unit)
    air = {one.name: DRY_AIR.get(one.formula, 0.0) for one in unit.species}
    sniffing = [
        one.analyzer for one in seen if _samples(one) and any(air[name] > 0.1 for name in one.species)
    ]
    analyzers = [name for name in dict.fromkeys(sniffing) if name]
    change = np.zeros((len(seen), len(analyzers), readings.reading.shape[1]))
    for i, one in enumerate(seen):
        if _samples(one) and one.analyzer in analyzers:
            drawn = sum(air[name] for name in one.species) - readings.reading[i]
            change[i, analyzers.index(one.analyzer)] = np.nan_to_num(drawn)
    return Causes(tuple(f"air into the sample of {name}" for name in analyzers), change)


def _samples(one: Instrument) -> bool:
    return one.analyzer is not None and one.kind == "mole fraction"


def together(*causes: Causes) -> Causes:
    """Give several groups of causes as one.

    Parameters
    ----------
    *causes : Causes
        On the same instruments and cells.
    """
    names = tuple(name for one in causes for name in one.names)
    return Causes(names, np.concatenate([one.change for one in causes], axis=1))


def calibration_drift(unit: Unit, causes: Causes) -> Floats:
    """Give how far each cause may have moved by itself since a healthy period, array (h,), as a fraction.

    Instruments drift, each on its own; leaks and shared errors get no allowance: their members have theirs.

    Parameters
    ----------
    unit : Unit
        The reactor.
    causes : Causes
        Some of its instruments' own errors, and others.
    """
    flows = {one.name for one in balance_instruments(unit) if one.kind in FLOW_KINDS}
    own = {one.name for one in balance_instruments(unit)}
    allowed = [
        METER_DRIFT if name in flows else CHANNEL_DRIFT if name in own else 0.0 for name in causes.names
    ]
    return np.array(allowed)
