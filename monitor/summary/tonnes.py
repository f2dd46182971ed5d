"""Hours and tonnes that add up: of each day, of each stretch with one catalyst charge, of the whole span.

Tonnes are rounded once, day by day (a day with a change of catalyst in two pieces), and what is longer is the
sum of what is printed: so the printed days add to the printed month to the last digit.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.cells import OPERATING
from ingest.unit import Unit
from monitor.figures import Figure
from monitor.summary.record import Record
from monitor.summary.span import HOUR_US, Span, Stretch
from monitor.windows import span_figures

DECIMALS = 3  # of a tonne: kilograms
SMALL_T, SMALL_DECIMALS = 1.0, 6  # a plant fed less than a tonne in the span is told in grams
NO_DATA = "no data"
MAKE = "make of "
CONDITIONS = (*OPERATING, NO_DATA)

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Made:
    """What went in and out by days and stretches; columns of `days` and `stretches` are named alike.

    `days` has index day; `stretches` index stretch. Both hold hours by condition and tonnes by flow;
    `half_width` and `seen_h` have index stretch and columns flow.
    """

    days: pd.DataFrame
    stretches: pd.DataFrame
    half_width: pd.DataFrame
    seen_h: pd.DataFrame
    flows: tuple[str, ...]
    decimals: int


def rates_of(unit: Unit, figures: Sequence[Figure]) -> tuple[Figure, ...]:
    """Give what is counted in tonnes: key reactant fed and consumed, and every product made.

    Parameters
    ----------
    unit : Unit
        One reactor.
    figures : sequence of Figure
        Its figures; the makes are taken from them.

    Returns
    -------
    tuple of Figure
        Each a rate per running hour [t/h], named as the column of its tonnes.
    """
    key = unit.key_reactant
    mass = next(one.molar_mass_kg_kmol for one in unit.species if one.name == key) / 1000
    makes = [one for one in figures if one.name.startswith(MAKE)]
    if not makes:
        return ()
    fed = [
        replace(
            makes[0],
            name=f"{key} {what}",
            label=f"{key} {what}",
            numerator={f"{what} {key}": 1.0},
            scale=mass,
            definition=f"Tonnes of {key} {what} per running hour with a valid state.",
            higher_is_better=None,
        )
        for what in ("fed", "consumed")
    ]
    made = [replace(one, name=f"{one.name.removeprefix(MAKE)} made") for one in makes]
    return (*fed, *made)


def made_of(
    unit: Unit, span: Span, stretches: Sequence[Stretch], record: Record, rates: Sequence[Figure]
) -> Made:
    """Count hours and tonnes.

    Parameters
    ----------
    unit : Unit
        One reactor.
    span : Span
    stretches : sequence of Stretch
        The last is the whole span.
    record : Record
        What the store holds of the span.
    rates : sequence of Figure
        As `rates_of` gives them.

    Returns
    -------
    Made
    """
    cuts = {stretch.first_us for stretch in stretches}
    edges = np.array(sorted({*span.edges_us.tolist(), *cuts}), dtype=np.int64)
    hours = _hours(unit, record, edges)
    found = span_figures(unit, record.amounts, rates, edges, unsolved=record.unsolved)
    names = [rate.name for rate in rates]
    raw = found[[(name, "as operated", "numerator") for name in names]].to_numpy(float)
    decimals = DECIMALS if raw[:, :1].sum() >= SMALL_T else SMALL_DECIMALS
    tonnes = pd.DataFrame(np.round(raw, decimals), columns=[_column(name) for name in names])
    pieces = pd.concat([hours, tonnes], axis=1)
    day = np.searchsorted(span.edges_us, edges[:-1], side="right") - 1
    days = pieces.groupby(day).sum().set_axis(pd.Index(span.days, name="day"))
    inside = {
        stretch.name: (edges[:-1] >= stretch.first_us) & (edges[:-1] < stretch.last_us)
        for stretch in stretches
    }
    whole = pd.DataFrame({name: pieces[mask].sum() for name, mask in inside.items()}).T
    judged = [_stretch(unit, record, rates, stretch) for stretch in stretches]
    return Made(
        days=_exact(days, decimals),
        stretches=_exact(whole.rename_axis("stretch"), decimals),
        half_width=pd.DataFrame([one[0] for one in judged], index=[stretch.name for stretch in stretches]),
        seen_h=pd.DataFrame([one[1] for one in judged], index=[stretch.name for stretch in stretches]),
        flows=tuple(_column(name) for name in names),
        decimals=decimals,
    )


def _column(name: str) -> str:
    return f"{name} [t]"


def _hours(unit: Unit, record: Record, edges: NDArray[np.int64]) -> pd.DataFrame:
    """Hours of each condition between edges; what no cell covers has no data."""
    cell_h = unit.cell.total_seconds() / 3600
    place = np.searchsorted(edges, record.cells.start, side="right") - 1
    counts = np.zeros((len(edges) - 1, len(OPERATING)))
    np.add.at(counts, (place, record.cells.operating), cell_h)
    calendar = np.diff(edges) / HOUR_US
    frame = pd.DataFrame(counts, columns=[f"{name} [h]" for name in OPERATING])
    frame[f"{NO_DATA} [h]"] = calendar - counts.sum(axis=1)
    frame.insert(0, "calendar [h]", calendar)
    return frame


def _stretch(
    unit: Unit, record: Record, rates: Sequence[Figure], stretch: Stretch
) -> tuple[dict[str, float], dict[str, float]]:
    """Half-width of the tonnes of a stretch, and the hours they were seen in."""
    edges = np.array([stretch.first_us, stretch.last_us], dtype=np.int64)
    row = span_figures(unit, record.amounts, rates, edges, unsolved=record.unsolved).iloc[0]
    half, seen = {}, {}
    for rate in rates:
        told = row[rate.name, "as operated"]
        seen[_column(rate.name)] = float(told["denominator"])
        half[_column(rate.name)] = float(told["half_width"] * told["denominator"])
    return half, seen


def _exact(frame: pd.DataFrame, decimals: int) -> pd.DataFrame:
    """Take away what adding up binary fractions leaves behind the last digit."""
    return frame.round({str(name): decimals if str(name).endswith("[t]") else 6 for name in frame})
