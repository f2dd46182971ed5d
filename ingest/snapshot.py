"""A consistent view of the store: which parts one pass left, and how they are read."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

import pyarrow as pa

from ingest import episodes, parts
from ingest.errors import GoneError, StoreError
from ingest.parts import Part

if TYPE_CHECKING:
    import pandas as pd

Key = tuple[str, str, str]  # unit, stage, month
Instant = int | datetime  # [us since 1970, UTC], or a time with a zone


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The store as one pass left it; `generation` is that pass's number.

    The parts a pass replaced stay on disk until the next pass begins; a read after that says so.
    """

    folder: Path
    generation: int
    parts: Mapping[Key, Part]
    episode_rows: Mapping[str, episodes.Rows]

    def months(
        self, unit: str, stage: str, *, first: Instant | None = None, last: Instant | None = None
    ) -> list[str]:
        """List the months with a part that share an instant with first <= t < last.

        Parameters
        ----------
        unit, stage : str
        first, last : int or datetime or None
            [us since 1970, UTC] or a time with a zone; None for no limit.

        Returns
        -------
        list of str
            As 2026-03, ascending.
        """
        low = "" if first is None else parts.month_of(parts.instant_us(first))
        high = "~" if last is None else parts.month_of(parts.instant_us(last) - 1)
        return sorted(m for u, s, m in self.parts if (u, s) == (unit, stage) and low <= m <= high)

    def paths(
        self, unit: str, stage: str, *, first: Instant | None = None, last: Instant | None = None
    ) -> list[Path]:
        """List the files of those months.

        Parameters
        ----------
        unit, stage : str
        first, last : int or datetime or None
            As in `months`.

        Returns
        -------
        list of Path
            Ascending by month.
        """
        months = self.months(unit, stage, first=first, last=last)
        return [self.folder / self.parts[unit, stage, month].file for month in months]

    def read(
        self,
        unit: str,
        stage: str,
        *,
        first: Instant | None = None,
        last: Instant | None = None,
        columns: Iterable[str] | None = None,
    ) -> pa.Table:
        """Read the rows of a stage with first <= label < last.

        Parameters
        ----------
        unit, stage : str
        first, last : int or datetime or None
            [us since 1970, UTC] or a time with a zone; None for no limit.
        columns : iterable of str or None
            None for all.

        Returns
        -------
        pyarrow.Table
            Ascending in time; null where a month lacks a column; no columns if the stage has no parts at all.
        """
        wanted = None if columns is None else list(columns)
        low, high = (None if edge is None else parts.instant_us(edge) for edge in (first, last))
        # Outside all months any part will do: it has no such rows, but it has the columns.
        files = self.paths(unit, stage, first=first, last=last) or self.paths(unit, stage)[:1]
        tables = [_read(file, wanted, low, high) for file in files]
        return pa.concat_tables(tables, promote_options="default") if tables else pa.table({})

    def episodes(self, unit: str) -> pd.DataFrame:
        """Give the episodes of a unit.

        Parameters
        ----------
        unit : str

        Returns
        -------
        pandas.DataFrame
            As given to `Pass.replace_episodes`, index 0, 1, ...; no columns if none were ever given.
        """
        return episodes.to_frame(self.episode_rows.get(unit, episodes.Rows()))


def _read(path: Path, columns: list[str] | None, first_us: int | None, last_us: int | None) -> pa.Table:
    """Read one part; a missing or damaged one is told as such."""
    try:
        return parts.read_part(path, columns, first_us, last_us)
    except FileNotFoundError as fault:
        raise GoneError(
            f"{path.name}: is no longer there",
            remedy="Look again: a later pass has replaced it. If that does not help run 'outlet verify'.",
        ) from fault
    except PermissionError as fault:
        raise StoreError(
            f"{path.name}: may not be read", remedy="Give this account the right to read the store's files."
        ) from fault
    except (OSError, pa.ArrowException) as fault:
        raise StoreError(
            f"{path.name}: is damaged ({str(fault).splitlines()[0]})",
            remedy="Run 'outlet verify' to see all files that are, and put the store back from a copy.",
        ) from fault
