"""The summary as one frozen object of tables: these, and nothing else, are printed, stored and compared."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

SIGNIFICANT = 9  # digits that are kept: far finer than any meter, coarser than what rounding leaves
# Which columns name a row of each table; the order is that of sheets and headings.
KEYS: Mapping[str, tuple[str, ...]] = {
    "identity": ("item",),
    "hours": ("stretch", "item"),
    "tonnes": ("stretch", "flow"),
    "figures": ("stretch", "figure"),
    "comparisons": ("stretch", "against", "figure"),
    "expectation": ("stretch", "figure"),
    "catalyst": ("charge",),
    "days": ("day",),
    "figures by day": ("day",),
    "balances": ("day",),
    "instruments": ("instrument",),
    "alert counts": ("item",),
    "alerts": ("watch", "side", "raised"),
    "exclusions": ("start", "code", "number"),
    "words": ("when", "kind", "number"),
    "changes": ("table", "row", "column"),
    "definitions": ("term",),
}
IDENTITY, CHANGES = "identity", "changes"
BESIDE = (IDENTITY, CHANGES)  # no part of the results: who, when, with what, and what a revision changed


@dataclass(frozen=True, slots=True)
class Summary:
    """One unit over one span. `tables` are frames of texts and numbers by the names of `KEYS`.

    `decimals` are those of tonnes; `revision` counts from 1, 0 is a draft.
    """

    unit: str
    unit_name: str
    span: str
    span_name: str
    decimals: int
    revision: int
    tables: Mapping[str, pd.DataFrame]

    @property
    def results(self) -> dict[str, pd.DataFrame]:
        """Give the tables that make a revision when they change."""
        return {name: frame for name, frame in self.tables.items() if name not in BESIDE}

    @property
    def digest(self) -> str:
        """Give the hash of the results; equal results have equal hashes wherever they are made."""
        text = json.dumps(_plain(self.results), ensure_ascii=False, allow_nan=False, sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()


def names(frame: pd.DataFrame) -> list[str]:
    """List the columns of a table.

    Parameters
    ----------
    frame : DataFrame

    Returns
    -------
    list of str
    """
    return [str(one) for one in frame.columns]


def rows(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """List the rows of a table, each by the names of its columns.

    Parameters
    ----------
    frame : DataFrame

    Returns
    -------
    list of dict
        Texts, and numbers that are NaN where they are missing.
    """
    return [{str(name): value for name, value in row.items()} for row in frame.to_dict("records")]


def settled(frame: pd.DataFrame) -> pd.DataFrame:
    """Round every number to nine significant digits and nine decimals, so that noise makes no revision.

    Parameters
    ----------
    frame : DataFrame
        Texts and numbers.

    Returns
    -------
    DataFrame
        New; index 0, 1, ...; numbers as float64, texts as str, nothing else.
    """
    columns = {str(name): _settled(column) for name, column in frame.items()}
    return pd.DataFrame(columns)


def body_of(summary: Summary) -> dict[str, Any]:
    """Give a summary as JSON knows it.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    dict
    """
    fields = {name: getattr(summary, name) for name in Summary.__slots__ if name != "tables"}
    return fields | {"digest": summary.digest, "tables": _plain(summary.tables)}


def from_body(body: Mapping[str, Any]) -> Summary:
    """Take a summary back from what `body_of` gave.

    Parameters
    ----------
    body : mapping

    Returns
    -------
    Summary
    """
    tables = {name: _frame(one) for name, one in body["tables"].items()}
    fields = {name: body[name] for name in Summary.__slots__ if name != "tables"}
    return Summary(**fields, tables={name: tables[name] for name in KEYS if name in tables})


def changes(old: Summary, new: Summary) -> pd.DataFrame:
    """List exactly what differs between two summaries of one span.

    Parameters
    ----------
    old, new : Summary

    Returns
    -------
    DataFrame
        Columns table, row, column, was, is: texts; a row that came or went has no column.
    """
    found: list[tuple[str, ...]] = []
    for name, frame in new.results.items():
        found += _table_changes(name, old.results.get(name, frame.iloc[:0]), frame)
    return pd.DataFrame(found, columns=["table", "row", "column", "was", "is"], dtype="str")


def with_tables(summary: Summary, revision: int, **tables: pd.DataFrame) -> Summary:
    """Give a summary with another revision number and some tables put in.

    Parameters
    ----------
    summary : Summary
    revision : int
    tables : DataFrame
        By name.

    Returns
    -------
    Summary
        Tables in the order of `KEYS`.
    """
    merged = {**summary.tables, **tables}
    return replace(summary, revision=revision, tables={name: merged[name] for name in KEYS if name in merged})


def _settled(column: pd.Series) -> pd.Series:
    if column.dtype.kind not in "fiub":
        return column.fillna("").astype("str").reset_index(drop=True)
    value = column.to_numpy(dtype=np.float64)
    known = np.isfinite(value) & (value != 0)
    size = np.floor(np.log10(np.abs(value), where=known, out=np.zeros_like(value)))
    power = 10.0 ** np.clip(SIGNIFICANT - 1 - size, 0, SIGNIFICANT)
    rounded = np.where(known, np.round(value * power) / power, value)
    return pd.Series(rounded + 0.0)  # no negative zero


def _plain(tables: Mapping[str, pd.DataFrame]) -> dict[str, Any]:
    """Tables as JSON knows them: columns in a list, since the store sorts names; missing numbers as null."""
    return {
        name: [[column, frame[column].dtype.kind == "f", _json(frame[column])] for column in names(frame)]
        for name, frame in tables.items()
    }


def _json(column: pd.Series) -> list[str | float | None]:
    if column.dtype.kind == "f":
        return [None if math.isnan(value) else value for value in column.tolist()]
    return [str(value) for value in column]


def _frame(columns: Sequence[tuple[str, bool, list[Any]]]) -> pd.DataFrame:
    """A table from its columns, each of numbers or of texts."""
    return pd.DataFrame(
        {name: pd.Series(values, dtype="float64" if numbers else "str") for name, numbers, values in columns}
    )


def _table_changes(name: str, old: pd.DataFrame, new: pd.DataFrame) -> list[tuple[str, ...]]:
    """What differs in one table, in the order of its new rows; rows that are gone come last."""
    before, after = (_by_key(name, frame) for frame in (old, new))
    found: list[tuple[str, ...]] = []
    for key, row in after.items():
        was = before.get(key)
        if was is None:
            found.append((name, key, "", "", "new row"))
            continue
        columns = dict.fromkeys([*was, *row])
        found += [
            (name, key, column, told(was.get(column)), told(row.get(column)))
            for column in columns
            if told(was.get(column)) != told(row.get(column))
        ]
    return found + [(name, key, "", "was there", "") for key in before if key not in after]


def _by_key(name: str, frame: pd.DataFrame) -> dict[str, dict[str, Any]]:
    keys = [one for one in KEYS[name] if one in frame]
    return {", ".join(told(row[one]) for one in keys): row for row in rows(frame)}


def told(value: Any) -> str:
    """Write one cell of a table as it is compared and listed.

    Parameters
    ----------
    value : str, float or None
        None or NaN is nothing.

    Returns
    -------
    str
    """
    if value is None or isinstance(value, str):
        return value or ""
    return "" if math.isnan(value) else repr(float(value)).removesuffix(".0")
