"""The store under faults of its surroundings: no room, no right to write, clocks that go backwards."""

from __future__ import annotations

import functools
import json
import os
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from contextlib import closing
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from ingest import database, documents, intake, journal
from ingest.errors import StoreError
from ingest.ledger import Store
from tests.store_made import FEBRUARY, ROOT, cells, fill, undisturbed
from tests.units_made import made_unit

posix = pytest.mark.skipif(os.name != "posix", reason="rights and limits of files as POSIX has them")


def in_python(script: str, *args: object, before: str = "") -> str:
    """What a script says in a process of its own; `before` is run by a shell in a mount namespace."""
    command = [sys.executable, "-c", script, *map(str, args)]
    if before:
        command = ["unshare", "-rm", "sh", "-ec", f'{before}\nexec "$@"', "sh", *command]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return done.stdout


@functools.cache
def no_mounts() -> str:
    """Why this account cannot mount in a namespace of its own; empty if it can."""
    if shutil.which("unshare") is None:
        return "there is no 'unshare' here"
    with tempfile.TemporaryDirectory() as folder:
        command = ["unshare", "-rm", "mount", "-t", "tmpfs", "tmpfs", folder]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
    return done.stderr.strip()


@pytest.fixture
def mounts() -> None:
    """Leave tests that mount to machines that allow it."""
    if no_mounts():
        pytest.skip(f"a disk of the test's own cannot be mounted: {no_mounts()}")


# No room

FILLED = """
import json, shutil, sys
from pathlib import Path
from ingest.errors import StoreError
from tests.store_made import *

def noisy(pass_):
    for month in (JANUARY, FEBRUARY):
        table = cells(month, [1.0] * 600)
        for number, column in enumerate(np.random.default_rng(1).random((40, 600))):
            table = table.append_column(f'more {number}', pa.array(column))
        pass_.splice('north', 'cells', table, first=month, last=month + 600 * HOUR)
    note = {'notes': ['a long account'] * 2000}
    for number, content in enumerate('bcdef', 2):
        pass_.record_export(export(number, content, account=note, made_by=pass_.number))
    pass_.replace_episodes('north', episodes_made().iloc[:1])

def again(folder):
    with Store(folder).begin() as pass_:
        noisy(pass_)

def fill_up(path, left):
    chunk = bytes(4096)
    with path.open('wb', buffering=0) as file:
        try:
            while file.write(chunk):
                pass
        except OSError:
            file.truncate(max(0, file.tell() - left))

home, told = Path(sys.argv[1]), []
for left in range(0, 1_200_001, 80_000):
    store = undisturbed(home / 'store')
    before, entry = store.content_hash(), {'left': left, 'words': ''}
    fill_up(home / 'filler', left)
    try:
        again(home / 'store')
    except StoreError as fault:
        entry['words'] = str(fault)
        entry['same'] = store.content_hash() == before
    entry['rows'] = store.read('north', 'cells').num_rows
    entry['findings'] = [one.what for one in store.verify()]
    (home / 'filler').unlink()
    again(home / 'store')
    with store.begin():
        pass
    entry['after'] = store.content_hash()
    entry['left over'] = len(list(store.folder.rglob('*'))) - len(store.snapshot().parts)
    told.append(entry)
    shutil.rmtree(home / 'store')
again(home / 'store') if undisturbed(home / 'store') else None
print(json.dumps({'undisturbed': Store(home / 'store').content_hash(), 'told': told}))
"""


def test_a_full_disk_leaves_the_old_state_readable_and_says_how_much_room_is_needed(tmp_path, mounts):
    # A real disk of 2 MB: where less room is left than the pass needs, it ends in words.
    told = json.loads(in_python(FILLED, tmp_path, before=f"mount -t tmpfs -o size=2m tmpfs '{tmp_path}'"))
    failed = [one for one in told["told"] if one["words"]]
    assert 3 <= len(failed) < len(told["told"])
    for one in failed:
        what, remedy = one["words"].splitlines()
        assert "MB are free" in what, one
        assert "needs up to" in what or "needs about" in what, one
        assert "Make room, then run the same pass again" in remedy, one
        assert one["same"], one
    # Parts were what had no room in some cases, and the commit in others.
    assert {"ledger.sqlite: the disk is full" in one["words"] for one in failed} == {True, False}
    for one in told["told"]:
        assert one["findings"] == []
        assert one["rows"] == (4 if one["words"] else 1202)
        assert one["after"] == told["undisturbed"]
        assert one["left over"] == 3  # the folder of the unit, the ledger, the lock


@posix
def test_a_disk_that_takes_no_more_leaves_the_old_state_and_says_how_much_is_needed(tmp_path):
    # A ceiling on the size of one file stands in for the full disk: both fail in write(2).
    store = undisturbed(tmp_path)
    before, files = store.content_hash(), sorted(tmp_path.glob("*/*"))
    script = (
        "import resource, signal, sys; from pathlib import Path; from ingest.errors import StoreError\n"
        "from tests.store_made import *\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "rows = cells(FEBRUARY, np.random.default_rng(1).random(600).tolist())\n"
        "try:\n"
        "    with Store(Path(sys.argv[1])).begin() as pass_:\n"
        "        resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000))\n"
        "        pass_.write('north', 'cells', '2026-02', rows)\n"
        "except StoreError as error:\n    print(error)\n"
    )
    what, remedy = in_python(script, tmp_path).splitlines()
    # 600 rows of two numbers of 8 bytes and one of 1 byte are 10,200 bytes.
    assert "the next part needs up to 0.01 MB" in what
    assert "MB are free" in what
    assert "run the same pass again" in remedy
    assert store.content_hash() == before
    assert sorted(tmp_path.glob("*/*")) == files


# No right to write

LOOKED = """
import os, sys
from pathlib import Path
from ingest import journal
from ingest.errors import StoreError
from ingest.ledger import Store
if 'nobody' in sys.argv and os.geteuid() == 0:  # root may do anything
    os.setgid(65534); os.setuid(65534)
store = Store(Path(sys.argv[1]))
def told(question):
    try:
        return question()
    except StoreError as fault:
        return str(fault)
def begun():
    with store.begin():
        return 'begun'
print(told(store.content_hash))
print(told(lambda: store.read('north', 'cells').num_rows))
print(told(store.verify))
print(told(begun))
print(told(lambda: journal.write(store.folder, who='A. Example', act='note', unit=None, subject='')))
"""
READ_ONLY = "mount --bind '{0}' '{0}'; mount -o remount,bind,ro '{0}'"


@pytest.fixture
def shared() -> Iterator[Path]:
    """A folder that every account may look into, which those of pytest are not."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    yield folder
    shutil.rmtree(folder)


def test_a_store_on_a_disk_that_is_read_only_is_read_and_a_pass_is_told_what_it_needs(tmp_path, mounts):
    store = undisturbed(tmp_path)
    told = in_python(LOOKED, tmp_path, before=READ_ONLY.format(tmp_path))
    assert told.splitlines() == [
        store.content_hash(),
        "4",
        "[]",
        f"{tmp_path}: nothing was taken in: Read-only file system",
        "  Give this account the right to write there, then run the same pass again.",
        f"{tmp_path}/ledger.sqlite: cannot be opened (unable to open database file)",
        "  Give this account the right to write in the store's folder.",
    ]


@posix
def test_an_account_that_may_only_look_reads_a_store_and_is_told_what_a_pass_needs(shared):
    store = undisturbed(shared)
    shared.chmod(0o555)
    hash_, rows, findings, what, remedy, *line = in_python(LOOKED, shared, "nobody").splitlines()
    assert (hash_, rows, findings) == (store.content_hash(), "4", "[]")
    assert what.startswith(f"{shared}")
    assert "the right to write" in remedy
    assert "the right to write" in line[-1]


@posix
def test_an_account_that_may_only_look_sees_the_last_commit_while_another_writes(shared):
    store = undisturbed(shared)
    # One more connection keeps what is committed in the file ahead of the ledger.
    with closing(sqlite3.connect(shared / "ledger.sqlite")) as held:
        held.execute("SELECT count(*) FROM parts").fetchone()
        with store.begin() as pass_:
            pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
        assert (shared / "ledger.sqlite-wal").stat().st_size
        hash_, rows, *_ = in_python(LOOKED, shared, "nobody").splitlines()
        assert (hash_, rows) == (store.content_hash(), "3")


@posix
def test_commits_that_a_killed_process_left_beside_the_ledger_are_never_overlooked(shared):
    # Without the right to write SQLite cannot take them up: it is said, and no older state is shown.
    store = undisturbed(shared)
    script = (
        "import os, signal, sys; from pathlib import Path; from ingest import database\n"
        "with database.writing(Path(sys.argv[1])) as ledger:\n"
        "    ledger.execute(\"UPDATE parts SET rows = 7\"); ledger.execute('COMMIT')\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    command = [sys.executable, "-c", script, str(shared)]
    assert subprocess.run(command, cwd=ROOT, check=False).returncode == -signal.SIGKILL
    (shared / "ledger.sqlite-shm").unlink()
    what, remedy, *_ = in_python(LOOKED, shared, "nobody").splitlines()
    assert what.startswith(f"{shared}/ledger.sqlite: cannot be")
    assert remedy == "  Give this account the right to write in the store's folder."
    assert {part.rows for part in store.snapshot().parts.values()} == {7}


@posix
def test_a_ledger_that_is_written_while_it_is_read_as_a_file_at_rest_is_read_again(tmp_path, monkeypatch):
    monkeypatch.setattr(database, "WAYS", database.WAYS[-1:])
    store = undisturbed(tmp_path)
    with pytest.raises(StoreError, match="was written while it was being read\n  Look again"):
        _read_while_it_is_written(tmp_path)
    assert store.content_hash()


def _read_while_it_is_written(folder: Path) -> None:
    with database.reading(folder) as ledger:
        ledger.execute("SELECT count(*) FROM parts").fetchone()
        journal.write(folder, who="A. Example", act="note", unit=None, subject="")


@posix
def test_an_account_that_may_not_look_is_told_which_right_it_lacks(shared):
    store = undisturbed(shared)
    parts = store.snapshot().paths("north", "cells")
    parts[0].chmod(0o000)
    _, what, remedy, finding, *_ = in_python(LOOKED, shared, "nobody").splitlines()
    assert what == f"{parts[0].name}: may not be read"
    assert remedy == "  Give this account the right to read the store's files."
    assert "cannot be read: Permission denied" in finding
    shared.chmod(0o700)
    what, remedy, *_ = in_python(LOOKED, shared, "nobody").splitlines()
    assert what == f"{shared}: may not be looked into"
    assert remedy == "  Give this account the right to read the store's folder."


# Clocks that go backwards


def test_numbers_order_passes_and_lines_where_the_clock_went_back_a_year(tmp_path, monkeypatch):
    store = undisturbed(tmp_path)
    journal.write(tmp_path, who="A. Example", act="note", unit=None, subject="before")
    documents.write(tmp_path, unit="north", kind="month", key="2026-02", body={"yield": 71.2})
    before = store.passes()[0]
    monkeypatch.setattr(database, "datetime", _Behind)
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
    journal.write(tmp_path, who="A. Example", act="note", unit=None, subject="after")
    documents.write(tmp_path, unit="north", kind="month", key="2026-02", body={"yield": 71.3})
    first, second = store.passes()
    assert (first, second.number) == (before, 2)
    assert second.finished < first.started
    assert store.snapshot().generation == 2
    assert store.read("north", "cells")["value"].to_pylist() == [1.0, 2.0, 30.0]
    assert [line.subject for line in journal.lines(tmp_path)] == ["before", "after"]
    latest = documents.latest(tmp_path, "north", "month", "2026-02")
    assert latest is not None
    assert latest.body == {"yield": 71.3}


class _Behind(datetime):
    """A clock that is a year late; no process can set the machine's own."""

    @classmethod
    def now(cls, tz: Any = UTC) -> datetime:
        return datetime.now(tz) - timedelta(days=365)


def test_a_store_made_with_a_late_clock_equals_one_made_in_time(tmp_path, monkeypatch):
    expected = undisturbed(tmp_path / "in time").content_hash()
    monkeypatch.setattr(database, "datetime", _Behind)
    assert undisturbed(tmp_path / "late").content_hash() == expected


def test_an_export_from_the_future_is_taken_in_at_once_and_not_left_for_ever(tmp_path):
    # A clock that went back makes every file on the disk one from the future.
    export = tmp_path / "march.csv"
    export.write_text("time,FI-1.PV\n2026-03-02T00:00:00Z,1.0\n2026-03-02T00:01:00Z,2.0\n", encoding="utf-8")
    ahead = datetime.now(UTC).timestamp() + 365 * 86_400
    os.utime(export, (ahead, ahead))
    with Store(tmp_path / "store").begin() as pass_:
        (outcome,) = intake.take_in(pass_, [made_unit()], [export]).outcomes
    assert outcome.status == "taken"


def test_waiting_for_another_pass_does_not_go_by_the_clock_of_the_day(tmp_path, monkeypatch):
    monkeypatch.setattr(database, "datetime", _Behind)
    with Store(tmp_path).begin() as pass_:
        fill(pass_)
        with pytest.raises(StoreError, match=r"another pass is running: .* \(waited 0\.2 s\)"):
            Store(tmp_path).begin(wait_s=0.2).__enter__()
