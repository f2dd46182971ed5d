"""What was lost: the change of the yield split into conversion and selectivity, and by where the carbon went.

All of it by the outlet's shares against those that the operating point leads to expect. With conversion X,
selectivity S and the means of before and now, `dY = S dX + X dS` holds exactly.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ingest.unit import Prices, Unit
from monitor.coordinates import Shares, coordinates
from monitor.evidence import Evidence
from monitor.verdict import Loss

Floats = NDArray[np.float64]


def loss_of(unit: Unit, evidence: Evidence, fed_kmol_h: float) -> Loss | None:
    """Give what was lost; None where not all shares of the outlet can be told.

    Parameters
    ----------
    unit : Unit
        The reactor.
    evidence : Evidence
        Of the window.
    fed_kmol_h : float
        Key reactant fed; NaN where it cannot be seen.
    """
    shares = evidence.shares
    if shares is None or not evidence.kept.all():
        return None
    now = coordinates(shares, evidence.reading[None])[0][0]
    expected = now - evidence.value[evidence.freedom :]
    (x0, s0, by0), (x1, s1, by1) = _split(expected), _split(now)
    mean_x, mean_s = (x0 + x1) / 2, (s0 + s1) / 2
    kg_h = -(x1 * s1 - x0 * s0) * fed_kmol_h * _kg_per_kmol(unit)
    value, make_up = _money(unit, kg_h, x1 * s1)
    return Loss(
        yield_points=100 * float(x1 * s1 - x0 * s0),
        by_conversion=100 * float(mean_s * (x1 - x0)),
        by_selectivity=100 * float(mean_x * (s1 - s0)),
        by_product=_by_product(shares, -100 * mean_x * (by1 - by0)),
        kg_h=float(kg_h),
        value_per_day=value,
        make_up_per_day=make_up,
        currency=unit.prices.currency if unit.prices else "",
    )


def _split(value: Floats) -> tuple[float, float, Floats]:
    """Give conversion, selectivity to the wanted product and to each by-product, of coordinates."""
    by = np.exp(value[1:])
    return float(1 - np.exp(value[0])), float(1 - by.sum()), by


def _by_product(shares: Shares, points: Floats) -> tuple[tuple[str, float], ...]:
    """Name the by-products, the greatest change first."""
    order = np.argsort(-np.abs(points), kind="stable")
    return tuple((shares.species[2 + i], float(points[i])) for i in order)


def _kg_per_kmol(unit: Unit) -> float:
    """Give the mass of wanted product that one kmol of key reactant makes at a yield of one."""
    species = {one.name: one for one in unit.species}
    held = [dict(species[name].atoms)[unit.key_element] for name in (unit.key_reactant, unit.wanted)]
    return held[0] / held[1] * species[unit.wanted].molar_mass_kg_kmol


def _money(unit: Unit, kg_h: float, yield_now: float) -> tuple[float, float]:
    """Give what a loss is worth, and the key reactant that makes up for it, per day; NaN without prices."""
    prices: Prices | None = unit.prices
    if prices is None:
        return np.nan, np.nan
    key = next(one.molar_mass_kg_kmol for one in unit.species if one.name == unit.key_reactant)
    key_kg_h = kg_h * key / (_kg_per_kmol(unit) * yield_now) if yield_now > 0 else np.nan
    return 24 * kg_h * prices.wanted_per_kg, 24 * key_kg_h * prices.key_reactant_per_kg
