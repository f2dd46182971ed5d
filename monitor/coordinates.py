"""What the outlet alone says of the reaction: logs of its unconverted share and of each by-product's share.

All of it comes from the channels of one outlet stream, as shares of the key element that they see. The flow,
the span of the analyzer and air in the sample cancel; a real change of the reaction moves nothing else, since
residuals of the balance are zero for every state that closes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest.cells import Cells
from ingest.instruments import balance_instruments
from ingest.unit import FLOW_KINDS, FRACTION_KINDS, Instrument, Unit

Floats = NDArray[np.float64]

UNCONVERTED = "conversion"
_DAY_US = 86_400e6


@dataclass(frozen=True, slots=True)
class Shares:
    """How channels of the outlet tell where the key element went.

    Parameters
    ----------
    species : tuple of str
        Key reactant, wanted product, then the q - 1 by-products that are read.
    weight : array (q + 1, m)
        Moles of the key element per base reading of each balance instrument.
    """

    species: tuple[str, ...]
    weight: Floats

    @property
    def names(self) -> tuple[str, ...]:
        """Give the names of the q coordinates: the conversion, then each by-product."""
        return (UNCONVERTED, *self.species[2:])


def shares_of(unit: Unit) -> Shares | None:
    """Give the shares of a unit; None where no stream out has channels of key reactant and wanted product.

    Of several such streams the one with most channels counts. Channels that count several species, or whose
    sample is another one than that of the key reactant, are left out.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    found = [_of_stream(unit, one.name) for one in unit.streams if one.direction == "out"]
    return max((one for one in found if one is not None), key=lambda one: len(one.species), default=None)


def _of_stream(unit: Unit, stream: str) -> Shares | None:
    seen = balance_instruments(unit)
    key = next((one for one in seen if _is_channel(one, stream, unit.key_reactant)), None)
    if key is None:
        return None
    held = {one.name: dict(one.atoms).get(unit.key_element, 0.0) for one in unit.species if not one.inert}
    mass = {one.name: one.molar_mass_kg_kmol for one in unit.species}
    products = [name for name in held if name not in (unit.key_reactant, unit.wanted)]
    order = [name for name in (unit.key_reactant, unit.wanted, *products) if held.get(name)]
    weight = np.zeros((len(order), len(seen)))
    for row, name in zip(weight, order, strict=True):
        alike = [_is_channel(one, stream, name) and _same_sample(one, key) for one in seen]
        per = held[name] / (mass[name] if key.kind == "mass fraction" else 1.0)
        row[alike] = per / max(1, sum(alike))
    there = np.asarray(weight.any(axis=1))
    if not there[:2].all() or unit.wanted not in order:
        return None
    return Shares(tuple(name for name, told in zip(order, there, strict=True) if told), weight[there])


def _is_channel(one: Instrument, stream: str, species: str) -> bool:
    is_fraction = one.kind in FRACTION_KINDS and one.tag is not None
    return is_fraction and one.stream == stream and one.species == (species,)


def _same_sample(one: Instrument, key: Instrument) -> bool:
    return one.kind == key.kind and set(one.left_out) == set(key.left_out)


def coordinates(shares: Shares, reading: Floats) -> tuple[Floats, Floats]:
    """Give the coordinates of mean readings, array (w, q), and their slopes by reading, (w, q, m).

    Parameters
    ----------
    shares : Shares
        Of the unit.
    reading : array (w, m)
        Mean base readings of w blocks or windows; NaN where missing.

    Returns
    -------
    value : array (w, q)
        NaN where a channel is missing or not above zero.
    slope : array (w, q, m)
        0 for the readings that a coordinate does not depend on.
    """
    used = shares.weight.any(axis=0)
    held = np.where(used, reading, 0.0) @ shares.weight.T
    held = np.where(held > 0, held, np.nan)
    top = np.delete(held, 1, axis=1)
    bottom = np.broadcast_to((held.sum(axis=1) - held[:, 0])[:, None], top.shape).copy()
    bottom[:, 0] += held[:, 0]
    by_top = np.delete(shares.weight, 1, axis=0)
    by_bottom = np.broadcast_to(shares.weight.sum(axis=0), by_top.shape) - shares.weight[0]
    by_bottom[0] += shares.weight[0]
    return np.log(top / bottom), by_top / top[:, :, None] - by_bottom / bottom[:, :, None]


AGE = "catalyst age"


def regressors(unit: Unit) -> tuple[str, ...]:
    """Give what the reaction is run at: load, stated instruments, and age where the file tells the charge.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    load = (unit.operating.load,) if unit.operating else ()
    stated = unit.healthy.operating_point if unit.healthy else ()
    age = () if unit.catalyst_charged is None else (AGE,)
    return (*dict.fromkeys((*load, *stated)), *age)


def operating_point(unit: Unit, cells: Cells) -> Floats:
    """Give what the reaction is run at, array (t, p): logs of flows, age in days, else readings as they are.

    Parameters
    ----------
    unit : Unit
        Names the p regressors.
    cells : Cells
        t cells.

    Returns
    -------
    array (t, p)
        NaN where a reading is missing.
    """
    columns = [_column(unit, cells, name) for name in regressors(unit)]
    return np.array(columns).reshape(len(columns), len(cells.start)).T


def _column(unit: Unit, cells: Cells, name: str) -> Floats:
    if name == AGE and unit.catalyst_charged is not None:
        return np.asarray((cells.start - unit.catalyst_charged.timestamp() * 1e6) / _DAY_US)
    place = [one.name for one in unit.instruments].index(name)
    value = cells.value[:, place]
    if unit.instruments[place].kind in FLOW_KINDS:
        return np.asarray(np.log(np.where(value > 0, value, np.nan)))
    return value


def point_slope(unit: Unit, reading: Floats) -> Floats:
    """Give the change of the operating point per base unit of each balance reading, array (p, m).

    Parameters
    ----------
    unit : Unit
        The reactor.
    reading : array (m,)
        Base readings.
    """
    seen = balance_instruments(unit)
    slope = np.zeros((len(regressors(unit)), len(seen)))
    for row, name in zip(slope, regressors(unit), strict=True):
        for i, one in enumerate(seen):
            if one.name == name:
                per = reading[i] if one.kind in FLOW_KINDS else one.to_base
                row[i] = 1.0 / per if per > 0 else 0.0
    return slope
