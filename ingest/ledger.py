"""The store: a folder of Parquet parts, and the ledger of which exports they came from."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import pyarrow as pa

from ingest import database, documents, parts, records
from ingest.errors import GoneError
from ingest.parts import Part
from ingest.passes import Pass
from ingest.records import Export, PassEntry
from ingest.snapshot import Instant, Snapshot

Answer = TypeVar("Answer")
LOCK_WAIT_S = 30.0
VISIBLE = (  # all that a pass leaves to be read; clock times and the list of passes do not belong to it
    "SELECT unit, stage, month, sha256, rows FROM parts ORDER BY unit, stage, month",
    "SELECT number, sha256, name, size, status, error, asked, account FROM exports ORDER BY number",
    "SELECT unit, position, detail FROM episodes ORDER BY unit, position",
    "SELECT unit, columns FROM episode_columns ORDER BY unit",
)


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that is wrong with the store on disk."""

    file: str
    what: str
    remedy: str


@dataclass(frozen=True, slots=True)
class Store:
    """One site's folder of parts and their ledger."""

    folder: Path

    def begin(self, *, wait_s: float = LOCK_WAIT_S, note: str = "") -> Pass:
        """Begin a pass: `with store.begin() as pass_:` commits at the end, or leaves all as it was.

        Parameters
        ----------
        wait_s : float
            How long to wait for another pass [s]; then StoreError says who runs it.
        note : str
            Kept in the ledger.

        Returns
        -------
        Pass
        """
        return Pass(self.folder, wait_s=wait_s, note=note)

    def snapshot(self) -> Snapshot:
        """Give the store as the last finished pass left it.

        Returns
        -------
        Snapshot
        """
        with database.reading(self.folder) as ledger:
            return records.read_snapshot(self.folder, ledger)

    def look(self, question: Callable[[Snapshot], Answer]) -> Answer:
        """Ask a snapshot of this moment, and a newer one if passes replaced meanwhile what it was to read.

        Parameters
        ----------
        question : callable
            A function of a snapshot; all that it reads is of one pass.

        Returns
        -------
        object
            What it answers.
        """
        while True:
            snapshot = self.snapshot()
            try:
                return question(snapshot)
            except GoneError:
                if self.snapshot().generation == snapshot.generation:
                    raise

    def read(
        self,
        unit: str,
        stage: str,
        *,
        first: Instant | None = None,
        last: Instant | None = None,
        columns: Iterable[str] | None = None,
    ) -> pa.Table:
        """Read the rows of a stage with first <= label < last from a snapshot of this moment.

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
        wanted = None if columns is None else list(columns)  # it may have to be read twice
        return self.look(lambda view: view.read(unit, stage, first=first, last=last, columns=wanted))

    def exports(self) -> list[Export]:
        """List all exports taken in or set aside.

        Returns
        -------
        list of Export
            By number.
        """
        with database.reading(self.folder) as ledger:
            return records.read_exports(ledger)

    def passes(self) -> list[PassEntry]:
        """List all finished passes.

        Returns
        -------
        list of PassEntry
            By number.
        """
        with database.reading(self.folder) as ledger:
            return [PassEntry(*row) for row in ledger.execute("SELECT * FROM passes ORDER BY number")]

    def content_hash(self) -> str:
        """Hash all that readers can see: equal stores have equal hashes, whenever they were made.

        Returns
        -------
        str
            64 hexadecimal digits.
        """
        with database.reading(self.folder) as ledger:
            visible = [ledger.execute(query).fetchall() for query in VISIBLE]
        return hashlib.sha256(json.dumps(visible).encode()).hexdigest()

    def verify(self) -> list[Finding]:
        """Read every part that the ledger names and compare it with what was written.

        Returns
        -------
        list of Finding
            Empty when all is well.
        """
        while True:
            generation, findings = self._verified()
            if not findings or self.snapshot().generation == generation:
                return findings

    def _verified(self) -> tuple[int, list[Finding]]:
        """Verify one generation; what a pass that committed meanwhile took away stands there as missing."""
        with database.reading(self.folder) as ledger:
            said = [str(line) for (line,) in ledger.execute("PRAGMA integrity_check")]
            snapshot = records.read_snapshot(self.folder, ledger)
            said += [f"{one}: holds another text than was written" for one in documents.damaged(ledger)]
        remedy = "Put the store back from a copy, or take the exports in anew."
        faults = [Finding(database.LEDGER, line, remedy) for line in said if line != "ok"]
        checked = ((part, _fault(self.folder / part.file, part)) for part in snapshot.parts.values())
        return snapshot.generation, faults + [
            Finding(part.file, fault, remedy) for part, fault in checked if fault
        ]


def _fault(path: Path, part: Part) -> str:
    """What is wrong with one part on disk; empty if it is as it was written."""
    try:
        size, digest = path.stat().st_size, parts.sha256_of(path)
    except FileNotFoundError:
        return "is missing"
    except OSError as fault:
        return f"cannot be read: {fault.strerror}"
    if size != part.size:
        return f"has {size} bytes where {part.size} were written"
    return "" if digest == part.sha256 else "holds other bytes than were written"
