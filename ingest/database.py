"""The store's SQLite file: how it is made and opened, the lock between passes, its faults in words."""

from __future__ import annotations

import json
import os
import shutil
import socket
import sqlite3
import time
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, closing, contextmanager, suppress
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

from ingest import migrations
from ingest.errors import StoreError

LEDGER = "ledger.sqlite"
LOCK = "pass.lock"
HOLDER = "pass.holder"
APPLICATION_ID = 0x4F75746C  # "Outl" in the file's header says that the file is ours
BUSY_S = 30.0  # a commit waits so long for another one; each takes milliseconds

# SQLite's result codes (sqlite.org/rescode.html) that a user can mend; any other is our bug.
NO_RIGHT = "Give this account the right to write in the store's folder."
NO_ROOM = "Make room, then run the same pass again; nothing is lost."
FAULTS = {
    sqlite3.SQLITE_BUSY: ("is being written by another program", "Try again in a moment."),
    sqlite3.SQLITE_READONLY: ("cannot be written", NO_RIGHT),
    sqlite3.SQLITE_CANTOPEN: ("cannot be opened", NO_RIGHT),
    sqlite3.SQLITE_IOERR: ("the disk reports a fault", "Look to the disk, then run the same pass again."),
    sqlite3.SQLITE_FULL: ("the disk is full", NO_ROOM),
    sqlite3.SQLITE_IOERR_SHMSIZE: ("the disk is full", NO_ROOM),
    sqlite3.SQLITE_CORRUPT: ("is damaged", "Put the store back from a copy, or take the exports in anew."),
    sqlite3.SQLITE_NOTADB: ("is not a ledger of this program", "Name another folder with --store."),
}
# A reader of a ledger in WAL mode makes two small files beside it, and with them it can look while a pass
# commits. Where a full disk or a missing right forbids them it looks by itself, or at a file that is at rest.
WAYS = (("rw", "NORMAL"), ("rw", "EXCLUSIVE"), ("ro&immutable=1", "NORMAL"))
HINDERED = {sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_IOERR, sqlite3.SQLITE_FULL}


def now() -> str:
    """Give the present as text, UTC, to the second.

    Returns
    -------
    str
        ISO 8601.
    """
    return datetime.now(UTC).isoformat(timespec="seconds")


def stamp(at: datetime | None = None) -> str:
    """Give an instant as text, UTC, to the millisecond.

    Parameters
    ----------
    at : datetime or None
        With a zone; None for the present.

    Returns
    -------
    str
        ISO 8601.
    """
    at = datetime.now(UTC) if at is None else at
    if at.tzinfo is None:
        raise ValueError(f"{at.isoformat()}: an instant needs a zone")
    return at.astimezone(UTC).isoformat(timespec="milliseconds")


def program_version() -> str:
    """Give this program's version.

    Returns
    -------
    str
        'not installed' when it runs from its source folder alone.
    """
    try:
        return version("outlet-selectivity-monitor")
    except PackageNotFoundError:
        return "not installed"


@contextmanager
def reading(folder: Path) -> Iterator[sqlite3.Connection]:
    """Open the ledger of a store for one look at it, also on a full disk and without the right to write.

    Parameters
    ----------
    folder : Path
        The store.

    Yields
    ------
    sqlite3.Connection
        In one transaction: all that is read belongs together.
    """
    path = _there(folder)
    with _in_words(path), _reader(path) as ledger:
        _bring_up(ledger, path)
        ledger.execute("BEGIN")
        yield ledger


@contextmanager
def writing(folder: Path) -> Iterator[sqlite3.Connection]:
    """Open the ledger of a store in one transaction that may write; it is committed at the end.

    Parameters
    ----------
    folder : Path
        The store.

    Yields
    ------
    sqlite3.Connection
    """
    path = _there(folder)
    with _in_words(path), closing(_connect(path, "rw", BUSY_S)) as ledger:
        ledger.execute("PRAGMA synchronous = FULL")
        _bring_up(ledger, path)
        ledger.execute("PRAGMA foreign_keys = ON")
        ledger.execute("BEGIN IMMEDIATE")
        yield ledger
        ledger.execute("COMMIT")


def make_ledger(folder: Path) -> None:
    """Make the ledger of a new store, or leave the one that is there.

    Parameters
    ----------
    folder : Path
        Exists; the caller holds the lock.
    """
    path = folder / LEDGER
    with _in_words(path), closing(_connect(path, "rwc", BUSY_S)) as ledger:
        if _is_empty(ledger):
            ledger.execute("PRAGMA journal_mode = WAL")
            ledger.execute("PRAGMA synchronous = FULL")
            ledger.execute("BEGIN IMMEDIATE")
            ledger.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            _migrate(ledger, 0)
            ledger.execute("COMMIT")


@contextmanager
def only_one(folder: Path, wait_s: float) -> Iterator[None]:
    """Hold the lock between passes; it falls with the process, however that ends.

    Parameters
    ----------
    folder : Path
        The store.
    wait_s : float
        How long to wait for another pass [s].

    Yields
    ------
    None
    """
    path = folder / LOCK
    # SQLite's own file lock is the one that works alike on Linux, macOS and Windows.
    with _in_words(path), closing(_connect(path, "rwc", 0.0)) as lock:
        _take(lock, folder, wait_s)
        holder = folder / HOLDER
        holder.write_text(
            json.dumps({"pid": os.getpid(), "host": socket.gethostname(), "since": now()}), encoding="utf-8"
        )
        try:
            yield
        finally:
            with suppress(OSError):  # it is only read while the lock is held
                holder.unlink()
            lock.rollback()


def _take(lock: sqlite3.Connection, folder: Path, wait_s: float) -> None:
    """Take the lock, trying for so long [s]."""
    until = time.monotonic() + wait_s
    while True:
        try:
            lock.execute("BEGIN EXCLUSIVE")
        except sqlite3.OperationalError as fault:
            if fault.sqlite_errorcode & 0xFF != sqlite3.SQLITE_BUSY:
                raise
            if time.monotonic() >= until:
                raise _held(folder, wait_s) from None
            time.sleep(0.05)
        else:
            return


def _held(folder: Path, wait_s: float) -> StoreError:
    """Say who holds the lock, and how long it was waited for."""
    try:
        who = json.loads((folder / HOLDER).read_text(encoding="utf-8"))
        by = f"process {who['pid']} on {who['host']} since {who['since']}"
    except (OSError, ValueError, KeyError):  # the holder is just writing or removing it
        by = "a process that has only just begun or ended"
    return StoreError(
        f"{folder}: another pass is running: {by} (waited {wait_s:g} s)",
        remedy="Wait until it has finished, or end that process.",
    )


def _connect(path: Path, mode: str, busy_s: float) -> sqlite3.Connection:
    """Open a SQLite file in autocommit."""
    uri = f"{path.resolve().as_uri()}?mode={mode}"
    return sqlite3.connect(uri, uri=True, isolation_level=None, timeout=busy_s)


@contextmanager
def _reader(path: Path) -> Iterator[sqlite3.Connection]:
    """Open a ledger in the first of the ways to read that is open; say why the first of all is not."""
    still = _at_rest(path)
    with ExitStack() as opened:
        ledger, shared = _first_open(opened, path, WAYS if still else WAYS[:-1])
        yield ledger
        if not shared and _at_rest(path) != still:
            raise StoreError(f"{path}: was written while it was being read", remedy="Look again.")


def _first_open(
    opened: ExitStack, path: Path, ways: Sequence[tuple[str, str]]
) -> tuple[sqlite3.Connection, bool]:
    """Try ways to read one by one; tell whether others may write meanwhile."""
    said: sqlite3.OperationalError | None = None
    for mode, locking in ways:
        try:
            ledger = opened.enter_context(closing(_connect(path, mode, BUSY_S)))
            ledger.execute(f"PRAGMA locking_mode = {locking}")
            ledger.execute("SELECT count(*) FROM sqlite_schema").fetchone()
        except sqlite3.OperationalError as fault:
            opened.close()
            if fault.sqlite_errorcode & 0xFF not in HINDERED:
                raise
            said = said or fault
        else:
            return ledger, "immutable" not in mode
    raise said or AssertionError("no way to read")


def _at_rest(path: Path) -> tuple[int, int, int] | None:
    """Tell a ledger that nobody has open by its inode, time and size; None while commits stand beside it."""
    with suppress(FileNotFoundError):  # who closes a ledger last takes the file away
        if path.with_name(f"{path.name}-wal").stat().st_size:
            return None
    stat = path.stat()
    return stat.st_ino, stat.st_mtime_ns, stat.st_size


def _there(folder: Path) -> Path:
    """Give the place of the ledger of a folder that holds one."""
    try:
        if not (folder / LEDGER).is_file():
            raise _no_store(folder)
    except PermissionError as fault:
        raise StoreError(
            f"{folder}: may not be looked into",
            remedy="Give this account the right to read the store's folder.",
        ) from fault
    return folder / LEDGER


def _no_store(folder: Path) -> StoreError:
    return StoreError(
        f"{folder}: there is no store here", remedy="Take exports in first, or name another --store."
    )


def _is_empty(ledger: sqlite3.Connection) -> bool:
    """Tell whether a file holds no table yet: new, or its maker died before the first commit."""
    return not ledger.execute("SELECT count(*) FROM sqlite_schema").fetchone()[0]


def _bring_up(ledger: sqlite3.Connection, path: Path) -> None:
    """Bring a ledger of an earlier version of this program to the present one, whole or not at all."""
    if _is_empty(ledger):
        raise _no_store(path.parent)
    if _version(ledger, path) < migrations.VERSION:
        ledger.execute("BEGIN IMMEDIATE")
        _migrate(ledger, _version(ledger, path))  # looked at again: another process may have been faster
        ledger.execute("COMMIT")


def _migrate(ledger: sqlite3.Connection, version: int) -> None:
    """Run what is missing from one version to this program's, in the transaction that is open."""
    for statement in migrations.steps_from(version):
        ledger.execute(statement)
    facts = {"schema_version": str(migrations.VERSION), "program_version": program_version()}
    ledger.executemany("INSERT OR REPLACE INTO meta VALUES (?, ?)", list(facts.items()))


def _version(ledger: sqlite3.Connection, path: Path) -> int:
    """Give the version of a ledger's tables; refuse another program's file, and a later version's."""
    if ledger.execute("PRAGMA application_id").fetchone()[0] != APPLICATION_ID:
        raise StoreError(
            f"{path}: is not a ledger of this program", remedy="Name another folder with --store."
        )
    facts = dict(ledger.execute("SELECT key, value FROM meta"))
    if int(facts["schema_version"]) > migrations.VERSION:
        raise StoreError(
            f"{path}: schema version {facts['schema_version']}, made by program {facts['program_version']}; "
            f"this program knows schema versions up to {migrations.VERSION}",
            remedy="Use a newer version of this program, or name another folder with --store.",
        )
    return int(facts["schema_version"])


@contextmanager
def _in_words(path: Path) -> Iterator[None]:
    """Turn what SQLite reports and a user can mend into StoreError."""
    try:
        yield
    except sqlite3.DatabaseError as fault:
        code = getattr(fault, "sqlite_errorcode", 0)
        known = FAULTS.get(code) or FAULTS.get(code & 0xFF)
        if known is None:
            raise
        room = _room(path) if known[1] is NO_ROOM else ""
        raise StoreError(f"{path}: {known[0]}{room} ({fault})", remedy=known[1]) from fault


def _room(path: Path) -> str:
    """Say how much room a commit needs: every page of the ledger once more at most, and what is new."""
    size = path.stat().st_size if path.exists() else 0
    free = shutil.disk_usage(path.parent).free
    return f": it needs about {size / 1e6 + 1:.2f} MB, {free / 1e6:.2f} MB are free"
