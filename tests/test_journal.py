"""The journal and the documents: written once, never lost, never changed; ledgers of earlier versions."""

from __future__ import annotations

import json
import signal
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from datetime import UTC, datetime, timedelta, timezone
from functools import partial
from pathlib import Path

import pytest

from ingest import database, documents, journal, migrations
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.passes import Pass
from tests.store_made import FEBRUARY, ROOT, cells, undisturbed

WRITERS, EACH = 8, 125  # 1,000 lines in all


@contextmanager
def plain(folder: Path) -> Iterator[sqlite3.Connection]:
    """The ledger as SQLite alone sees it."""
    with closing(sqlite3.connect(folder / "ledger.sqlite")) as ledger:
        yield ledger


def noted(folder: Path, note: str = "", **changes: object) -> journal.Line:
    given = {"who": "A. Example", "act": "note", "unit": "north", "subject": "yield low", "note": note}
    return journal.write(folder, **{**given, **changes})


# The journal


def test_a_line_comes_back_as_it_was_written(tmp_path):
    undisturbed(tmp_path)
    summer = timezone(timedelta(hours=2))
    line = noted(
        tmp_path,
        "valve checked, 'fine'",
        detail={"until": None, "reason": "größer"},
        at=datetime(2026, 7, 1, 14, 30, 0, 250_000, summer),
    )
    assert journal.lines(tmp_path) == (line,)
    # 14:30 at UTC+2 is 12:30 UTC.
    assert line == journal.Line(
        1,
        "2026-07-01T12:30:00.250+00:00",
        "A. Example",
        "note",
        "north",
        "yield low",
        "valve checked, 'fine'",
        {"until": None, "reason": "größer"},
    )


def test_lines_are_chosen_by_unit_and_by_what_came_after(tmp_path):
    undisturbed(tmp_path)
    for unit in ("north", "south", None, "north"):
        noted(tmp_path, unit=unit)
    assert [line.number for line in journal.lines(tmp_path)] == [1, 2, 3, 4]
    assert [line.number for line in journal.lines(tmp_path, unit="north", after=1)] == [4]


@pytest.mark.parametrize("who", ["", "  \t"])
def test_a_line_without_a_name_is_refused(tmp_path, who):
    undisturbed(tmp_path)
    with pytest.raises(StoreError, match=r"journal: nobody is named\n  Say who writes the line\."):
        noted(tmp_path, who=who)
    assert journal.lines(tmp_path) == ()


def test_an_instant_without_a_zone_is_refused(tmp_path):
    undisturbed(tmp_path)
    with pytest.raises(ValueError, match="an instant needs a zone"):
        noted(tmp_path, at=datetime(2026, 7, 1))  # noqa: DTZ001 - what is refused
    assert journal.lines(tmp_path) == ()


def test_a_journal_needs_a_store(tmp_path):
    with pytest.raises(StoreError, match="there is no store here"):
        noted(tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_the_number_is_the_order_where_a_clock_went_backwards(tmp_path):
    undisturbed(tmp_path)
    noted(tmp_path, "first", at=datetime(2026, 7, 1, 12, tzinfo=UTC))
    noted(tmp_path, "second", at=datetime(2026, 7, 1, 11, tzinfo=UTC))
    assert [line.note for line in journal.lines(tmp_path)] == ["first", "second"]


def test_a_thousand_lines_of_eight_processes_are_all_there_once_and_in_order(tmp_path):
    store = undisturbed(tmp_path)
    script = (
        "import sys; from pathlib import Path; from ingest import journal\n"
        "sys.stdin.readline()\n"
        f"for n in range({EACH}):\n"
        "    line = journal.write(Path(sys.argv[1]), who=sys.argv[2], act='acknowledge', unit='north',\n"
        "                         subject='yield low', note=str(n))\n"
        "    print(line.number)\n"
    )
    writers = [
        subprocess.Popen(
            [sys.executable, "-c", script, str(tmp_path), f"writer {n}"],
            cwd=ROOT,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        for n in range(WRITERS)
    ]
    for writer in writers:
        assert writer.stdin is not None
        writer.stdin.write("go\n")
        writer.stdin.flush()
    while len(journal.lines(tmp_path)) < WRITERS * EACH / 4:
        assert any(writer.poll() is None for writer in writers)
    with store.begin() as pass_:  # commits while they write
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
    amid = len(journal.lines(tmp_path))
    told = [[int(number) for number in writer.communicate()[0].split()] for writer in writers]
    lines = journal.lines(tmp_path)
    assert amid < WRITERS * EACH
    assert [line.number for line in lines] == list(range(1, WRITERS * EACH + 1))
    written = [line.written for line in lines]
    assert written == sorted(written)
    for n, numbers in enumerate(told):
        own = [line for line in lines if line.who == f"writer {n}"]
        assert [line.note for line in own] == [str(k) for k in range(EACH)]
        assert [line.number for line in own] == numbers
    assert store.snapshot().generation == 2
    assert store.verify() == []


def test_a_line_waits_for_a_ledger_that_is_being_written(tmp_path):
    undisturbed(tmp_path)
    script = (
        "import sys, time; from pathlib import Path; from ingest import database\n"
        "with database.writing(Path(sys.argv[1])):\n    print('in', flush=True); time.sleep(0.5)\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", script, str(tmp_path)], cwd=ROOT, stdout=subprocess.PIPE, text=True
    ) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == "in\n"
        noted(tmp_path, "waited")
        assert other.wait() == 0
    assert [line.note for line in journal.lines(tmp_path)] == ["waited"]


def test_a_ledger_that_stays_busy_is_told_and_takes_nothing(tmp_path, monkeypatch):
    undisturbed(tmp_path)
    monkeypatch.setattr(database, "BUSY_S", 0.1)
    with database.writing(tmp_path):
        said = r"ledger\.sqlite: is being written by another program .*\n  Try again in a moment"
        with pytest.raises(StoreError, match=said):
            noted(tmp_path)
    assert journal.lines(tmp_path) == ()


def test_a_line_of_a_pass_stands_with_its_commit_and_only_then(tmp_path):
    store = undisturbed(tmp_path)
    line = partial(journal.put, who="A. Example", act="note", unit=None, subject="2026-02")
    with pytest.raises(ValueError, match="rows of"), store.begin() as pass_:
        _add_a_step_and_what_is_refused(pass_, line)
    assert journal.lines(tmp_path) == ()
    with store.begin() as pass_:
        pass_.at_commit(line)
        assert journal.lines(tmp_path) == ()
    assert [line.subject for line in journal.lines(tmp_path)] == ["2026-02"]


def _add_a_step_and_what_is_refused(pass_: Pass, step: Callable[[sqlite3.Connection], object]) -> None:
    pass_.at_commit(step)
    pass_.write("north", "cells", "2026-03", cells(FEBRUARY, [1.0]))


def test_a_step_that_fails_takes_the_whole_commit_with_it(tmp_path):
    store = undisturbed(tmp_path)
    before = store.content_hash()
    nobody = partial(journal.put, who="", act="note", unit=None, subject="")
    with pytest.raises(StoreError, match="nobody is named"), store.begin() as pass_:
        _write_and_add_a_step(pass_, nobody)
    assert store.content_hash() == before
    assert store.snapshot().generation == 1


def _write_and_add_a_step(pass_: Pass, step: Callable[[sqlite3.Connection], object]) -> None:
    pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
    pass_.at_commit(step)


def test_what_people_wrote_is_no_part_of_the_content_hash(tmp_path):
    store = undisturbed(tmp_path)
    before = store.content_hash()
    noted(tmp_path)
    documents.write(tmp_path, unit="north", kind="month", key="2026-02", body={"yield": 71.2})
    assert store.content_hash() == before


@pytest.mark.parametrize(
    "change",
    [
        "UPDATE journal SET who = 'somebody else'",
        "DELETE FROM journal",
        "INSERT OR REPLACE INTO journal VALUES (1, '', 'somebody else', '', '', '', '', '{}')",
    ],
)
def test_the_journal_is_append_only(tmp_path, change):
    undisturbed(tmp_path)
    line = noted(tmp_path)
    with plain(tmp_path) as ledger, pytest.raises(sqlite3.IntegrityError, match="the journal is append-only"):
        ledger.execute(change)
    assert journal.lines(tmp_path) == (line,)


# Documents


def test_a_document_keeps_every_revision(tmp_path):
    undisturbed(tmp_path)
    about = {"unit": "north", "kind": "month", "key": "2026-02"}
    first = documents.write(tmp_path, **about, body={"yield": 71.2, "days": [1, 2]})
    second = documents.write(tmp_path, **about, body={"yield": 71.3, "days": [1, 2]})
    other = documents.write(tmp_path, **{**about, "key": "2026-01"}, body={})
    assert [one.revision for one in (first, second, other)] == [1, 2, 1]
    assert documents.latest(tmp_path, *about.values()) == second
    assert documents.revisions(tmp_path, *about.values()) == (first, second)
    assert documents.revisions(tmp_path, "north", "month") == (other, first, second)
    assert documents.latest(tmp_path, "south", "month", "2026-02") is None


def test_a_document_that_equals_its_latest_revision_adds_none(tmp_path):
    undisturbed(tmp_path)
    about = {"unit": "north", "kind": "month", "key": "2026-02"}
    first = documents.write(tmp_path, **about, body={"a": 1, "b": 2})
    assert documents.write(tmp_path, **about, body={"b": 2, "a": 1}) == first
    documents.write(tmp_path, **about, body={"a": 2})
    # Back to what it said at first is a change again.
    assert documents.write(tmp_path, **about, body={"a": 1, "b": 2}).revision == 3


def test_a_document_of_a_pass_stands_with_its_commit(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.at_commit(partial(documents.put, unit="north", kind="band", key="yield", body={"low": 70.5}))
        assert documents.latest(tmp_path, "north", "band", "yield") is None
    kept = documents.latest(tmp_path, "north", "band", "yield")
    assert kept is not None
    assert kept.body == {"low": 70.5}


@pytest.mark.parametrize("change", ["UPDATE documents SET body = '{}'", "DELETE FROM documents"])
def test_a_revision_cannot_be_changed(tmp_path, change):
    undisturbed(tmp_path)
    documents.write(tmp_path, unit="north", kind="month", key="2026-02", body={"yield": 71.2})
    with plain(tmp_path) as ledger, pytest.raises(sqlite3.IntegrityError, match="stays as it is"):
        ledger.execute(change)


def test_verify_names_a_document_that_was_changed_behind_the_triggers(tmp_path):
    store = undisturbed(tmp_path)
    documents.write(tmp_path, unit="north", kind="month", key="2026-02", body={"yield": 71.2})
    assert store.verify() == []
    with plain(tmp_path) as ledger, ledger:
        ledger.execute("DROP TRIGGER documents_keep_revisions")
        ledger.execute("""UPDATE documents SET body = '{"yield": 72.2}'""")
    (finding,) = store.verify()
    assert finding.what == "north month 2026-02 revision 1: holds another text than was written"


# Ledgers of other versions

VERSION_1 = """
BEGIN;
PRAGMA application_id = 1333097580;
CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT;
CREATE TABLE passes (
  number INTEGER PRIMARY KEY, started TEXT NOT NULL, finished TEXT NOT NULL,
  exports INTEGER NOT NULL, rows INTEGER NOT NULL, note TEXT NOT NULL
) STRICT;
CREATE TABLE exports (
  number INTEGER PRIMARY KEY, sha256 TEXT NOT NULL UNIQUE, name TEXT NOT NULL, size INTEGER NOT NULL,
  taken_at TEXT NOT NULL, status TEXT NOT NULL CHECK (status IN ('taken', 'set aside')),
  error TEXT NOT NULL, asked TEXT NOT NULL, account TEXT NOT NULL,
  made_by INTEGER NOT NULL REFERENCES passes (number)
) STRICT;
CREATE TABLE seen (path TEXT PRIMARY KEY, size INTEGER NOT NULL, mtime_ns INTEGER NOT NULL,
  sha256 TEXT NOT NULL) STRICT;
CREATE TABLE parts (
  unit TEXT NOT NULL, stage TEXT NOT NULL, month TEXT NOT NULL, file TEXT NOT NULL UNIQUE,
  sha256 TEXT NOT NULL, rows INTEGER NOT NULL, size INTEGER NOT NULL,
  made_by INTEGER NOT NULL REFERENCES passes (number), PRIMARY KEY (unit, stage, month)
) STRICT;
CREATE TABLE episodes (
  unit TEXT NOT NULL, position INTEGER NOT NULL, watch TEXT, raised TEXT, cleared TEXT,
  detail TEXT NOT NULL, PRIMARY KEY (unit, position)
) STRICT;
CREATE TABLE episode_columns (unit TEXT PRIMARY KEY, columns TEXT NOT NULL) STRICT;
CREATE TABLE journal (
  number INTEGER PRIMARY KEY AUTOINCREMENT, written TEXT NOT NULL, who TEXT NOT NULL, what TEXT NOT NULL,
  note TEXT NOT NULL DEFAULT '', unit TEXT, watch TEXT, raised TEXT
) STRICT;
CREATE TRIGGER journal_keeps_lines BEFORE UPDATE ON journal
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;
CREATE TRIGGER journal_loses_nothing BEFORE DELETE ON journal
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;
CREATE TRIGGER journal_replaces_nothing BEFORE INSERT ON journal
  WHEN EXISTS (SELECT 1 FROM journal WHERE number = NEW.number)
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END;
INSERT INTO meta VALUES ('schema_version', '1'), ('program_version', '0.1');
"""
KEPT = ("passes", "exports", "seen", "parts", "episodes", "episode_columns")


def version_1(folder: Path) -> Store:
    """A store whose ledger the first version of the program made: its own SQL, rows of a real pass."""
    store = undisturbed(folder)
    ledger, old = folder / "ledger.sqlite", folder / "old.sqlite"
    with closing(sqlite3.connect(old)) as made:
        made.execute("PRAGMA journal_mode = WAL")
        made.executescript(VERSION_1)
        made.execute("ATTACH ? AS new", (str(ledger),))
        for table in KEPT:
            made.execute(f"INSERT INTO main.{table} SELECT * FROM new.{table}")  # noqa: S608 - our own names
        made.execute(
            "INSERT INTO journal (written, who, what, note, unit, watch, raised) VALUES"
            " ('2026-02-03', 'A. Example', 'noted', 'a word', 'north', 'yield low', '2026-02-01'),"
            " ('2026-02-04', 'B. Example', 'noted', '', NULL, NULL, NULL)"
        )
        made.commit()
    for name in ("ledger.sqlite-wal", "ledger.sqlite-shm"):
        (folder / name).unlink(missing_ok=True)
    old.replace(ledger)
    return store


def tables(folder: Path) -> dict[str, list[tuple[object, ...]]]:
    """Every row of every table, and the tables' own definitions."""
    with plain(folder) as ledger:
        names = [name for (name,) in ledger.execute("SELECT name FROM sqlite_schema WHERE type = 'table'")]
        rows = {name: ledger.execute(f"SELECT * FROM {name}").fetchall() for name in names}  # noqa: S608
        return {**rows, "schema": ledger.execute("SELECT sql FROM sqlite_schema ORDER BY name").fetchall()}


def test_a_ledger_of_the_first_version_is_brought_up_with_all_it_holds(tmp_path):
    expected = undisturbed(tmp_path / "new")
    store = version_1(tmp_path / "old")
    before = tables(store.folder)
    assert store.content_hash() == expected.content_hash()
    after = tables(store.folder)
    assert {name: after[name] for name in KEPT} == {name: before[name] for name in KEPT}
    assert dict(after["meta"])["schema_version"] == str(migrations.VERSION)
    assert after["schema"] == tables(expected.folder)["schema"]
    about = ("A. Example", "noted", "north", "yield low", "a word", {"raised": "2026-02-01"})
    assert journal.lines(store.folder) == (
        journal.Line(1, "2026-02-03", *about),
        journal.Line(2, "2026-02-04", "B. Example", "noted", None, "", "", {}),
    )
    assert noted(store.folder).number == 3
    assert store.verify() == []


def test_a_ledger_made_today_has_the_tables_of_the_first_version_as_they_were(tmp_path):
    # The program's own list of steps against the first version's SQL, kept above as it was.
    with closing(sqlite3.connect(tmp_path / "then.sqlite")) as then:
        then.executescript(VERSION_1 + "COMMIT;")
        query = "SELECT name, sql FROM sqlite_schema WHERE type = 'table' AND name NOT LIKE 'sqlite%'"
        first = dict(then.execute(query))
    with closing(sqlite3.connect(tmp_path / "now.sqlite")) as now:
        for statement in migrations.FIRST:
            now.execute(statement)
        assert dict(now.execute(query)) == first


@pytest.mark.parametrize("step", range(1, len(migrations.steps_from(1)) + 1))
def test_a_ledger_is_still_the_old_one_when_bringing_it_up_is_killed(tmp_path, step):
    store = version_1(tmp_path)
    before = tables(tmp_path)
    script = (
        "import sys; from pathlib import Path; from ingest import migrations\n"
        "from tests.store_made import die; from ingest.ledger import Store\n"
        f"real, left = migrations.steps_from, {step}\n"
        "def steps(version):\n"
        "    for number, statement in enumerate(real(version), 1):\n"
        "        yield statement\n"
        f"        if number == left:\n            die()\n"
        "migrations.steps_from = steps\n"
        "Store(Path(sys.argv[1])).snapshot()\n"
    )
    done = subprocess.run([sys.executable, "-c", script, str(tmp_path)], cwd=ROOT, check=False)
    assert done.returncode == -signal.SIGKILL
    assert tables(tmp_path) == before
    assert store.verify() == []
    assert dict(tables(tmp_path)["meta"])["schema_version"] == str(migrations.VERSION)


def test_several_processes_that_find_an_old_ledger_bring_it_up_once(tmp_path):
    version_1(tmp_path)
    script = (
        "import sys; from pathlib import Path; from ingest.ledger import Store\n"
        "sys.stdin.readline(); print(Store(Path(sys.argv[1])).content_hash())\n"
    )
    children = [
        subprocess.Popen(
            [sys.executable, "-c", script, str(tmp_path)],
            cwd=ROOT,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        for _ in range(4)
    ]
    hashes = {child.communicate("go\n")[0] for child in children}
    assert [child.returncode for child in children] == [0] * 4
    assert hashes == {Store(tmp_path).content_hash() + "\n"}
    assert len(journal.lines(tmp_path)) == 2


def test_a_store_of_a_later_version_is_refused_with_words_and_left_alone(tmp_path):
    store = undisturbed(tmp_path)
    with plain(tmp_path) as ledger, ledger:
        ledger.execute("UPDATE meta SET value = '99' WHERE key = 'schema_version'")
        ledger.execute("UPDATE meta SET value = '7.1' WHERE key = 'program_version'")
    before = tables(tmp_path)
    said = (
        r"schema version 99, made by program 7\.1; this program knows schema versions up to 3\n  Use a newer"
    )
    with pytest.raises(StoreError, match=said):
        store.snapshot()
    with pytest.raises(StoreError, match=said):
        noted(tmp_path)
    with pytest.raises(StoreError, match=said), store.begin():
        pass
    assert tables(tmp_path) == before


def test_notices_wait_in_an_outbox_of_known_states(tmp_path):
    undisturbed(tmp_path)
    made = "2026-02-03T00:00:00+00:00"
    row = ("2026-02-03-1", made, "raise", "mail", json.dumps({"watch": "yield low"}), made)
    with plain(tmp_path) as ledger, ledger:
        insert = "INSERT INTO outbox (id, made, kind, target, body, next_try) VALUES (?, ?, ?, ?, ?, ?)"
        ledger.execute(insert, row)
        kept = ledger.execute("SELECT state, tries, next_try, last_error, sent_at FROM outbox").fetchall()
        assert kept == [("waiting", 0, made, "", None)]
        with pytest.raises(sqlite3.IntegrityError, match="CHECK constraint failed"):
            ledger.execute("UPDATE outbox SET state = 'perhaps'")
        with pytest.raises(sqlite3.IntegrityError, match="UNIQUE constraint failed"):
            ledger.execute(insert, row)
