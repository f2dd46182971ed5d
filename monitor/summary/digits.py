"""How many digits of each number are shown: what its half-width supports, alike in all forms of a summary."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence

import numpy as np
import pandas as pd

from monitor.summary.table import Summary, names
from monitor.windows import MODES
from monitor.wording import decimals_for

MOST = 6
PLAIN = 2  # decimals of what has neither half-width nor unit
BY_UNIT = {"[%]": 1, "[h]": 2, "[d]": 1, "[t/h]": 3}
SIGNIFICANT = 5

Decimals = dict[str, list[int]]


def decimals(summary: Summary, name: str) -> Decimals:
    """Give the decimals of every number of a table, by column.

    Parameters
    ----------
    summary : Summary
    name : str
        Of the table.

    Returns
    -------
    dict of str to list of int
        One entry per row; columns of text are not there.
    """
    frame = summary.tables[name]
    numeric = [column for column in names(frame) if frame[column].dtype.kind == "f"]
    rule = RULES.get(name, _by_unit)
    return {column: rule(summary, frame, column) for column in numeric}


def _by_unit(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Decimals by the unit in the heading."""
    if column.endswith("[t]"):
        return [summary.decimals] * len(frame)
    places = next((places for unit, places in BY_UNIT.items() if column.endswith(unit)), PLAIN)
    return [places] * len(frame)


def _by_half_width(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Decimals by the half-width of the same mode in the same row."""
    if column.endswith((" days", "[%]")):
        return [0 if column.endswith(" days") else 1] * len(frame)
    if "±" in column:
        return [_places(one) for one in frame[column]]
    mode = next(one for one in MODES if column.startswith(one))
    own = f"{mode} difference ±" if f"{mode} difference ±" in frame else f"{mode} ±"
    return [_places(one) for one in frame[own]]


def _by_column(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Decimals by the usual half-width of a figure over the days."""
    if column.startswith("coverage"):
        return [1] * len(frame)
    name, mode, _ = column.split(" | ")
    widths = frame[f"{name} | {mode} | ±"].dropna()
    return [_places(widths.median() if len(widths) else math.nan)] * len(frame)


def _of_tonnes(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Tonnes as they add up; their half-width with two digits, the hours by the hundredth."""
    if column == "±":
        return [min(_places(one), summary.decimals) for one in frame[column]]
    return [PLAIN if column.endswith("[h]") else summary.decimals] * len(frame)


def _of_expectation(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Figures by the half-width of their difference; tonnes lost by what that makes of them."""
    if column in ("was", "expected", "difference", "±"):
        return [_places(one) for one in frame["±"]]
    return [1] * len(frame)


def _of_readings(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Five digits of a mean reading."""
    if column in ("mean", "5 % below", "5 % above"):
        return [_significant(one) for one in frame["mean"]]
    return _by_unit(summary, frame, column)


def _places(half_width: float) -> int:
    if not math.isfinite(half_width) or half_width <= 0:
        return PLAIN
    return int(np.clip(decimals_for(half_width), 0, MOST))


def _significant(value: float) -> int:
    if not math.isfinite(value) or value == 0:
        return PLAIN
    return int(np.clip(SIGNIFICANT - 1 - math.floor(math.log10(abs(value))), 0, MOST))


def _whole(summary: Summary, frame: pd.DataFrame, column: str) -> list[int]:
    """Numbers of journal lines are whole, hours are not."""
    return [0 if column == "number" else PLAIN] * len(frame)


RULES: Mapping[str, Callable[[Summary, pd.DataFrame, str], list[int]]] = {
    "figures": _by_half_width,
    "comparisons": _by_half_width,
    "figures by day": _by_column,
    "tonnes": _of_tonnes,
    "expectation": _of_expectation,
    "instruments": _of_readings,
    "exclusions": _whole,
    "words": _whole,
    "alert counts": _whole,
}


def shown(column: Sequence[float], places: Sequence[int]) -> list[float]:
    """Round numbers as they are shown.

    Parameters
    ----------
    column : sequence of float
    places : sequence of int
        Decimals of each.

    Returns
    -------
    list of float
    """
    return [round(value, place) for value, place in zip(column, places, strict=True)]
