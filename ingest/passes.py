"""One pass: parts are written beside the old ones, and one SQLite commit at its end makes them visible.

Only parts that the ledger names are ever read. A pass that fails or is killed leaves nothing but files that
nobody names; the next pass sweeps them.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterable
from contextlib import ExitStack, suppress
from dataclasses import astuple, replace
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Self

import pyarrow as pa

from ingest import database, episodes, parts, records
from ingest.records import Export, PassEntry, Seen
from ingest.snapshot import Instant, Snapshot

if TYPE_CHECKING:
    import pandas as pd


class Pass:
    """One open pass: it reads what it writes, and nobody else does before the commit at its end.

    `number` is the pass's own in the ledger; it is known once the pass has begun.
    """

    def __init__(self, folder: Path, *, wait_s: float, note: str) -> None:
        """Know what to do; nothing happens before the `with`."""
        self.number = 0
        self._folder = folder
        self._wait_s = wait_s
        self._note = note
        self._held = ExitStack()
        self._started = database.now()
        self._before = Snapshot(folder, 0, {}, {})
        self._now = self._before
        self._exports: dict[str, Export] = {}  # by content
        self._recorded: set[str] = set()
        self._seen: dict[str, Seen] = {}
        self._made: set[str] = set()
        self._steps: list[Callable[[sqlite3.Connection], object]] = []

    def __enter__(self) -> Self:
        """Take the lock, sweep what dead passes left and look at the store."""
        with ExitStack() as entering:
            try:
                parts.make_folder(self._folder)
                entering.enter_context(database.only_one(self._folder, self._wait_s))
                database.make_ledger(self._folder)
                self._look()
                _sweep(parts.leftovers(self._folder, _files(self._before)))
            except OSError as fault:
                raise parts.disk_trouble(self._folder, fault) from fault
            self._held = entering.pop_all()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Commit, or forget everything; then let the next pass in."""
        with self._held:
            kept = _files(self._before)
            if kind is None:
                # Where a commit fails nothing is swept: it may have reached the disk all the same. The next
                # pass sees what the ledger says.
                self._commit()
                kept |= _files(self._now)
            _sweep(self._folder / file for file in self._made - kept)

    def view(self) -> Snapshot:
        """Give the store as it will be if the pass ends now.

        Returns
        -------
        Snapshot
            The pass's own parts over the committed ones. Given to `go_back` it undoes what came after.
        """
        return self._now

    def go_back(self, view: Snapshot) -> None:
        """Forget all parts and episodes written since a view was taken.

        Parameters
        ----------
        view : Snapshot
            From `view` of this pass.
        """
        self._now = view

    def read(
        self,
        unit: str,
        stage: str,
        *,
        first: Instant | None = None,
        last: Instant | None = None,
        columns: Iterable[str] | None = None,
    ) -> pa.Table:
        """Read the rows of a stage with first <= label < last, the pass's own over the committed ones.

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
            As `Snapshot.read`.
        """
        return self._now.read(unit, stage, first=first, last=last, columns=columns)

    def write(self, unit: str, stage: str, month: str, table: pa.Table) -> None:
        """Put a table in the place of all rows of one month; without rows the month has no part any more.

        Parameters
        ----------
        unit, stage : str
        month : str
            As 2026-03, UTC.
        table : pyarrow.Table
            With a column `time`, `start` or `end`, ascending, all within the month. Its metadata (index of a
            frame and the like) are not kept.
        """
        others = set(parts.by_month(table) if table.num_rows else ()) - {month}
        if others:
            raise ValueError(f"{unit} {stage}: rows of {sorted(others)} in the part of {month}")

        def fill(path: Path) -> None:
            parts.write_table(path, table)

        self.write_file(unit, stage, month, rows=table.num_rows, size=table.nbytes, fill=fill)

    def write_file(
        self, unit: str, stage: str, month: str, *, rows: int, size: int, fill: Callable[[Path], None]
    ) -> None:
        """Put a Parquet file of the caller's making in the place of one month.

        Parameters
        ----------
        unit, stage, month : str
        rows : int
            How many it holds; 0: the month has no part any more.
        size : int
            How large it may become at most [bytes]; told when the disk is full.
        fill : callable
            Writes the file at the path it is given; equal content must give equal bytes.
        """
        key = (unit, stage, month)
        known = {k: part for k, part in self._now.parts.items() if k != key}
        if rows:
            try:
                made = parts.make_part(self._folder, key, made_by=self.number, rows=rows, fill=fill)
            except OSError as fault:
                raise parts.disk_trouble(self._folder, fault, size) from fault
            self._made.add(made.file)
            committed = self._before.parts.get(key)
            known[key] = committed if committed and committed.sha256 == made.sha256 else made
        self._now = replace(self._now, parts=known)

    def splice(
        self,
        unit: str,
        stage: str,
        table: pa.Table,
        *,
        first: Instant | None = None,
        last: Instant | None = None,
    ) -> None:
        """Put a table in the place of all rows with first <= label < last; other rows stay as they are.

        Parameters
        ----------
        unit, stage : str
        table : pyarrow.Table
            With a column `time`, `start` or `end`, ascending, all within the limits.
        first, last : int or datetime or None
            [us since 1970, UTC] or a time with a zone; None for no limit.
        """
        low, high = (None if edge is None else parts.instant_us(edge) for edge in (first, last))
        new = parts.by_month(table) if table.num_rows else {}
        held = [
            parts.NAME.fullmatch(path.name) for path in self._now.paths(unit, stage, first=low, last=high)
        ]
        for month in sorted({*new, *(name["month"] for name in held if name)}):
            start, end = parts.month_edges(month)
            pieces = [new.get(month, table.slice(0, 0))]
            if low is not None and low > start:
                pieces.insert(0, self.read(unit, stage, first=start, last=low))
            if high is not None and high < end:
                pieces.append(self.read(unit, stage, first=high, last=end))
            filled = [piece for piece in pieces if piece.num_rows] or pieces[:1]
            self.write(unit, stage, month, pa.concat_tables(filled, promote_options="default"))

    def replace_episodes(self, unit: str, frame: pd.DataFrame) -> None:
        """Put a frame in the place of all episodes of a unit.

        Parameters
        ----------
        unit : str
        frame : pandas.DataFrame
            One row per episode; columns `watch`, `raised` and `cleared` can be searched in the ledger.
        """
        rows = {**self._now.episode_rows, unit: episodes.to_rows(frame)}
        self._now = replace(self._now, episode_rows=rows)

    def exports(self) -> list[Export]:
        """List all exports in the ledger, with those recorded in this pass.

        Returns
        -------
        list of Export
            By number.
        """
        return sorted(self._exports.values(), key=lambda export: export.number)

    def record_export(self, export: Export) -> None:
        """Enter an export, in the place of the entry of the same content if there is one.

        Parameters
        ----------
        export : Export
        """
        self._exports[export.sha256] = export
        self._recorded.add(export.sha256)

    def seen(self, path: str) -> Seen | None:
        """Recall a file as it was when it was last hashed.

        Parameters
        ----------
        path : str
            Absolute.

        Returns
        -------
        Seen or None
            None if it never was.
        """
        return self._seen.get(path)

    def record_seen(self, path: str, seen: Seen) -> None:
        """Remember a file as it is hashed.

        Parameters
        ----------
        path : str
            Absolute.
        seen : Seen
        """
        self._seen[path] = seen

    def at_commit(self, step: Callable[[sqlite3.Connection], object]) -> None:
        """Let a step of the caller's be part of the commit, after all of the pass's own.

        Parameters
        ----------
        step : callable
            Given the ledger in the transaction of the commit; if it fails, so does the pass.
        """
        self._steps.append(step)

    def _look(self) -> None:
        """See what the last pass left."""
        with database.reading(self._folder) as ledger:
            self._before = self._now = records.read_snapshot(self._folder, ledger)
            self._exports = {export.sha256: export for export in records.read_exports(ledger)}
            self._seen = {path: Seen(*row) for path, *row in ledger.execute("SELECT * FROM seen")}
        self.number = self._before.generation + 1

    def _commit(self) -> None:
        """Make all of the pass visible at once: parts to the disk first, then the commit that names them."""
        written = [p for key, p in self._now.parts.items() if p != self._before.parts.get(key)]
        try:
            parts.sync_folders({self._folder, *(self._folder / part.unit for part in written)})
        except OSError as fault:
            raise parts.disk_trouble(self._folder, fault) from fault
        recorded = [self._exports[content] for content in self._recorded]
        entry = PassEntry(
            self.number,
            self._started,
            database.now(),
            len(recorded),
            sum(p.rows for p in written),
            self._note,
        )
        with database.writing(self._folder) as ledger:
            ledger.execute("INSERT INTO passes VALUES (?, ?, ?, ?, ?, ?)", astuple(entry))
            records.write_parts(ledger, self._before.parts, self._now.parts)
            records.write_exports(ledger, recorded)
            seen = [(path, *astuple(seen)) for path, seen in self._seen.items()]
            ledger.executemany("INSERT OR REPLACE INTO seen VALUES (?, ?, ?, ?)", seen)
            for unit, rows in self._now.episode_rows.items():
                if rows != self._before.episode_rows.get(unit):
                    records.write_episodes(ledger, unit, rows)
            for step in self._steps:
                step(ledger)


def _files(snapshot: Snapshot) -> set[str]:
    return {part.file for part in snapshot.parts.values()}


def _sweep(files: Iterable[Path]) -> None:
    """Remove files that nobody names; one that cannot be removed now is left for the next sweep."""
    for file in files:
        with suppress(OSError):
            file.unlink()
