"""A span against last month, the same month of last year, its catalyst charge, budget and guarantee."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from ingest.errors import Problem as Fault
from ingest.errors import UnitFileError
from ingest.unit import Unit
from monitor.figures import Figure
from monitor.summary.differences import Level, minus, responses, stated, word
from monitor.summary.record import Record
from monitor.summary.span import Stretch
from monitor.windows import MODES, span_figures

BUDGET, GUARANTEE = "budget", "guarantee"


def level_of(unit: Unit, record: Record, figures: Sequence[Figure], stretch: Stretch) -> Level:
    """Give the figures of a stretch of a record as a level that others can be compared with.

    Parameters
    ----------
    unit : Unit
        One reactor.
    record : Record
    figures : sequence of Figure
    stretch : Stretch
        Its instants.

    Returns
    -------
    Level
        NaN where a figure is missing.
    """
    edges = np.array([stretch.first_us, stretch.last_us], dtype=np.int64)
    row = span_figures(unit, record.amounts, figures, edges, unsolved=record.unsolved).iloc[0]
    value, half = (
        np.array([[row[one.name, mode, field] for mode in MODES] for one in figures], dtype=float)
        for field in ("value", "half_width")
    )
    return Level(value, half, responses(unit, record.amounts, figures, stretch.first_us, stretch.last_us))


def targets_of(unit: Unit, figures: Sequence[Figure], sources: int) -> dict[str, Level]:
    """Give budget and guarantee of the unit file as levels.

    Parameters
    ----------
    unit : Unit
        One reactor.
    figures : sequence of Figure
    sources : int
        Systematic sources of the levels that they are compared with.

    Returns
    -------
    dict of str to Level
        Only what the unit file states.

    Raises
    ------
    UnitFileError
        One names a figure that the readings of this unit do not give.
    """
    names = [one.name for one in figures]
    found, lost = {}, []
    for section in (BUDGET, GUARANTEE):
        told: Mapping[str, float] = dict(getattr(unit, section))
        lost += [
            Fault(f"{section}.{name}", "the unit has no such figure", f"write one of {names}")
            for name in told
            if name not in names
        ]
        if told:
            found[section] = stated(np.array([told.get(name, np.nan) for name in names]), sources)
    if lost:
        raise UnitFileError(unit.key, lost)
    return found


def table(
    figures: Sequence[Figure], here: Mapping[str, Level], against: Mapping[str, Mapping[str, Level]]
) -> pd.DataFrame:
    """List every figure of every stretch against all that it is compared with.

    Parameters
    ----------
    figures : sequence of Figure
    here : mapping of str to Level
        By stretch.
    against : mapping of str to mapping of str to Level
        By stretch, then by what it is compared with.

    Returns
    -------
    DataFrame
        One row per stretch, reference and figure that both have; per mode the value there and its half-width,
        the difference with its half-width for calibrations set anew and left as they were, and a word.
    """
    pieces = [
        _against(figures, stretch, name, level, there)
        for stretch, level in here.items()
        for name, there in against[stretch].items()
    ]
    return pd.concat(pieces, ignore_index=True) if pieces else _against(figures[:0], "", "", None, None)


def _against(
    figures: Sequence[Figure], stretch: str, name: str, here: Level | None, there: Level | None
) -> pd.DataFrame:
    """Compare one stretch with one reference; figures that neither mode has are left out."""
    columns: dict[str, object] = {
        "stretch": [stretch] * len(figures),
        "against": [name] * len(figures),
        "figure": [one.name for one in figures],
        "unit": [one.unit for one in figures],
    }
    apart = None if here is None or there is None else minus(here, there)
    nothing = np.zeros((0, len(MODES)))
    for m, mode in enumerate(MODES):
        fields = (nothing,) * 5 if apart is None or there is None else (
            there.value, there.half_width, apart.value, apart.half_width, apart.half_width_same
        )  # fmt: skip
        names = ("there", "there ±", "difference", "difference ±", "± if nothing was calibrated")
        columns |= {f"{mode} {one}": field[:, m] for one, field in zip(names, fields, strict=True)}
        words = [word(*row) for row in zip(*(field[:, m] for field in fields[2:]), strict=True)]
        columns[f"{mode} word"] = words
    frame = pd.DataFrame(columns)
    known = frame[[f"{mode} difference" for mode in MODES]].notna().any(axis=1)
    return frame[known]
