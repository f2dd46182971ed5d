"""What the figures of a stretch should have been, by a time that a person called healthy, and what was lost.

The expectation is fitted on the hours of the healthy period and asked at the load, operating point and
catalyst age of every steady hour. Calibrations are taken as they were then: what is left between the two is
the reactor, or an instrument that has moved since.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.errors import OutletError
from ingest.parts import instant_us
from ingest.unit import Unit
from monitor.expectation import Expectation, expected, fit, logarithm_pct, points, variables
from monitor.figures import Figure
from monitor.summary.record import Record
from monitor.summary.span import HOUR_US, Stretch, charges
from monitor.windows import TWO_SIDED_95, span_figures

FIGURES = ("yield on feed", "selectivity on converted", "conversion")
CHANGED = "the catalyst was changed after the healthy period"
NOTHING = "no steady hour with a known operating point"
COLUMNS = (
    "stretch", "figure", "unit", "hours", "was", "expected", "difference", "±", "outside [%]", "lost [t]",
    "remark",
)  # fmt: skip

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Hours:
    """The n hours of a span: sums of f figures [kmol], their scales in them, and the operating point."""

    end_us: NDArray[np.int64]  # (n,)
    value: Floats  # (f, n), NaN where an hour is not steady or not seen
    fed: Floats  # (f, n) denominators [kmol]
    point: Floats  # (n, v)


def hours_of(unit: Unit, record: Record, figures: Sequence[Figure], first_us: int, last_us: int) -> Hours:
    """Sum a span up hour by hour.

    Parameters
    ----------
    unit : Unit
        One reactor.
    record : Record
        Holds the span.
    figures : sequence of Figure
        Ratios.
    first_us, last_us : int
        The span [us UTC].

    Returns
    -------
    Hours
    """
    edges = np.arange(first_us, last_us + 1, HOUR_US, dtype=np.int64)
    frame = span_figures(unit, record.amounts, figures, edges, unsolved=record.unsolved)
    value, fed = (
        np.array([frame[one.name, "steady", field].to_numpy(float) for one in figures])
        for field in ("value", "denominator")
    )
    places = {one.name: place for place, one in enumerate(unit.instruments)}
    hour = pd.Series(np.searchsorted(edges, record.cells.start, side="right") - 1)
    inside = hour.between(0, len(edges) - 2).to_numpy()
    means = pd.DataFrame(record.cells.value[inside]).groupby(hour[inside].to_numpy()).mean()
    means = means.reindex(np.arange(len(edges) - 1))
    readings = {name: means[places[name]].to_numpy(float) for name in variables(unit)}
    return Hours(edges[1:], value, fed, points(unit, readings))


def shortfall(
    unit: Unit, figures: Sequence[Figure], healthy: Hours, here: Hours, stretch: Stretch
) -> pd.DataFrame:
    """Hold a stretch against what the healthy period lets one expect.

    Parameters
    ----------
    unit : Unit
        With a healthy period.
    figures : sequence of Figure
        Those of both hours.
    healthy, here : Hours
        Of the healthy period and of the stretch.
    stretch : Stretch

    Returns
    -------
    DataFrame
        One row per figure: what it was over the steady hours whose operating point is known, what it should
        have been over the same hours, the difference with its half-width, the share of these hours whose
        operating point was never seen while healthy [%], and the wanted product that was not made [t]; NaN
        with a remark where that cannot be told.
    """
    changed = unit.healthy is not None and any(
        unit.healthy.last <= at and instant_us(at) < stretch.last_us for at in charges(unit)
    )
    rows = [
        _refused(stretch, one, CHANGED)
        if changed
        else _row(unit, place, one, healthy=healthy, here=here, stretch=stretch)
        for place, one in enumerate(figures)
    ]
    return pd.DataFrame(rows, columns=list(COLUMNS))


def _row(
    unit: Unit, place: int, figure: Figure, *, healthy: Hours, here: Hours, stretch: Stretch
) -> dict[str, object]:
    """One figure: learnt, asked hour by hour, and summed as figures are."""
    try:
        learnt = _learnt(unit, place, figure, healthy)
    except OutletError as fault:
        return _refused(stretch, figure, fault.what)
    asked = expected(learnt, here.end_us, here.point)
    should = np.exp(asked.value / 100)
    counts = np.isfinite(here.value[place]) & np.isfinite(should)
    if not counts.any():
        return _refused(stretch, figure, NOTHING)
    weight = here.fed[place][counts] / here.fed[place][counts].sum()
    was, wanted = (float(weight @ one[counts]) for one in (here.value[place], should))
    # The errors of the expectation at different hours have one cause, the fit: they do not average out.
    fitted = float(weight @ asked.error[counts])
    noise = learnt.noise.long_run_sd * float(np.sqrt((weight**2).sum()))
    half = TWO_SIDED_95 * float(np.hypot(fitted, noise)) * wanted / 100
    return {
        "stretch": stretch.name,
        "figure": figure.name,
        "unit": figure.unit,
        "hours": float(counts.sum()),
        "was": was,
        "expected": wanted,
        "difference": was - wanted,
        "±": half,
        "outside [%]": 100 * float((asked.outside[counts] >= 0).mean()),
        "lost [t]": _lost(unit, figure, (wanted - was) * here.fed[place][counts].sum()),
        "remark": "",
    }


def _learnt(unit: Unit, place: int, figure: Figure, healthy: Hours) -> Expectation:
    """Fit the expectation of one figure."""
    if unit.healthy is None:
        raise OutletError("no healthy period", remedy="Write a section [healthy].")
    return fit(
        figure.name,
        unit.healthy,
        healthy.end_us,
        healthy.point,
        logarithm_pct(healthy.value[place]),
        names=variables(unit),
        block_us=HOUR_US,
        usable=np.isfinite(healthy.value[place]),
    )


def _lost(unit: Unit, figure: Figure, share_kmol: float) -> float:
    """Wanted product that was not made [t]; only yield tells it by itself."""
    if figure.name != FIGURES[0]:
        return float("nan")
    mass = next(one.molar_mass_kg_kmol for one in unit.species if one.name == unit.wanted)
    return share_kmol / figure.scale * mass / 1000


def _refused(stretch: Stretch, figure: Figure, why: str) -> dict[str, object]:
    return {"stretch": stretch.name, "figure": figure.name, "unit": figure.unit, "hours": 0.0, "remark": why}
