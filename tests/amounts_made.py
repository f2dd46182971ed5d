"""Small reactions and amounts made by hand, for tests of figures and windows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import timedelta
from typing import Any

import numpy as np

from ingest.chemistry import atoms, molar_mass_kg_kmol
from ingest.unit import Species, Stream, Unit
from monitor.amounts import Amounts
from tests.units_made import MIDNIGHT, made_unit

RUNNING, STARTING, DOWN, TURNED_DOWN, NOT_KNOWN = range(5)  # as cells.OPERATING lists them


def reaction(
    key: str, wanted: str, unwanted: Sequence[str], others: Sequence[str] = (), **changes: Any
) -> Unit:
    """A unit whose species are named by their formulas."""
    names = (key, wanted, *unwanted, *others)
    species = tuple(
        Species(name, name, atoms(name), molar_mass_kg_kmol(atoms(name)), inert=False) for name in names
    )
    streams = (Stream("feed", "in", names), Stream("outlet", "out", names))
    named = {"key_reactant": key, "wanted": wanted, "unwanted": tuple(unwanted)}
    return made_unit(
        **{"species": species, "streams": streams, "windows": (timedelta(hours=1),), **named, **changes}
    )


def amounts_between(unit: Unit, fed: Mapping[str, float], left: Mapping[str, float]) -> dict[str, float]:
    """Amounts of what went in and came out, by hand: made = out - in, consumed = in - out."""
    key = unit.key_reactant
    made = {one.name: left.get(one.name, 0.0) - fed.get(one.name, 0.0) for one in unit.species}
    rows = {f"fed {key}": fed[key], f"consumed {key}": -made[key]}
    rows |= {f"made {name}": amount for name, amount in made.items() if name != key}
    return rows | {"made all unwanted": sum(made[name] for name in unit.unwanted)}


def made_amounts(
    unit: Unit, rows: Mapping[str, Any], count: int, *, operating: Any = RUNNING, first_us: int = MIDNIGHT
) -> Amounts:
    """`count` cells of exact amounts; each row a number or one number per cell [kmol per cell]."""
    kmol = np.stack([np.broadcast_to(np.asarray(row, dtype=float), count) for row in rows.values()], axis=1)
    p = len(rows)
    return Amounts(
        names=tuple(rows),
        start=first_us + np.arange(count) * (unit.cell // timedelta(microseconds=1)),
        kmol=kmol.copy(),
        random=np.zeros((count, 1, p, p)),
        hold=(unit.cell,),
        systematic=np.zeros((count, p, 1)),
        sources=("none",),
        operating=np.broadcast_to(np.asarray(operating, dtype=np.int8), count).copy(),
    )
