"""Episodes as rows of the ledger: a frame goes in and comes out with the same columns and types."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:  # a third of a second to import, and most passes over the ledger need no frame
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Rows:
    """A frame as text: (name, dtype) of each column, one JSON object per row."""

    columns: tuple[tuple[str, str], ...] = ()
    details: tuple[str, ...] = ()


def to_rows(frame: pd.DataFrame) -> Rows:
    """Turn a frame into rows of text that a person can read.

    Parameters
    ----------
    frame : pandas.DataFrame
        Text, numbers, truth values, times (UTC) and durations; its index is not kept; not changed.

    Returns
    -------
    Rows
        Times as ISO 8601, durations in seconds; NaN and NaT as null.
    """
    plain = {str(name): _plain(column) for name, column in frame.items()}
    columns = tuple((str(name), str(column.dtype)) for name, column in frame.items())
    lines = (dict(zip(plain, line, strict=True)) for line in zip(*plain.values(), strict=True))
    return Rows(columns, tuple(json.dumps(line, ensure_ascii=False, allow_nan=False) for line in lines))


def to_frame(rows: Rows) -> pd.DataFrame:
    """Turn rows back into the frame that they were made from.

    Parameters
    ----------
    rows : Rows

    Returns
    -------
    pandas.DataFrame
        Index 0, 1, ...
    """
    import pandas as pd

    lines: list[Mapping[str, Any]] = [json.loads(detail) for detail in rows.details]
    return pd.DataFrame({name: _typed([line[name] for line in lines], kind) for name, kind in rows.columns})


def _plain(column: pd.Series[Any]) -> list[Any]:
    """A column as what JSON knows."""
    import pandas as pd

    if column.dtype.kind == "M":
        text = column.dt.tz_convert("UTC").map(pd.Timestamp.isoformat, na_action="ignore")
        return _without_nan(text)
    if column.dtype.kind == "m":
        return _without_nan(column.dt.total_seconds())
    return _without_nan(column)


def _without_nan(column: pd.Series[Any]) -> list[Any]:
    """The values as plain Python objects, None where there is none."""
    values: list[Any] = column.astype(object).where(column.notna(), None).tolist()
    return values


def _typed(values: list[Any], kind: str) -> pd.Series[Any]:
    """A column of its first type again."""
    import pandas as pd

    column: Any = pd.Series(values, dtype=object)
    if kind.startswith("datetime64"):
        column = pd.to_datetime(column, utc=True, format="ISO8601")
    elif kind.startswith("timedelta64"):
        column = pd.to_timedelta(column, unit="s")
    typed: pd.Series[Any] = column.astype(kind)
    return typed
