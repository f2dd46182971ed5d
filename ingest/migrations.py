"""The tables of the ledger, version by version: what brings a ledger from each version to the next."""

from __future__ import annotations

FIRST = (
    "CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT",
    """CREATE TABLE passes (
  number INTEGER PRIMARY KEY, started TEXT NOT NULL, finished TEXT NOT NULL,
  exports INTEGER NOT NULL, rows INTEGER NOT NULL, note TEXT NOT NULL
) STRICT""",
    """CREATE TABLE exports (
  number INTEGER PRIMARY KEY, sha256 TEXT NOT NULL UNIQUE, name TEXT NOT NULL, size INTEGER NOT NULL,
  taken_at TEXT NOT NULL, status TEXT NOT NULL CHECK (status IN ('taken', 'set aside')),
  error TEXT NOT NULL, asked TEXT NOT NULL, account TEXT NOT NULL,
  made_by INTEGER NOT NULL REFERENCES passes (number)
) STRICT""",
    """CREATE TABLE seen (path TEXT PRIMARY KEY, size INTEGER NOT NULL, mtime_ns INTEGER NOT NULL,
  sha256 TEXT NOT NULL) STRICT""",
    """CREATE TABLE parts (
  unit TEXT NOT NULL, stage TEXT NOT NULL, month TEXT NOT NULL, file TEXT NOT NULL UNIQUE,
  sha256 TEXT NOT NULL, rows INTEGER NOT NULL, size INTEGER NOT NULL,
  made_by INTEGER NOT NULL REFERENCES passes (number), PRIMARY KEY (unit, stage, month)
) STRICT""",
    """CREATE TABLE episodes (
  unit TEXT NOT NULL, position INTEGER NOT NULL, watch TEXT, raised TEXT, cleared TEXT,
  detail TEXT NOT NULL, PRIMARY KEY (unit, position)
) STRICT""",
    "CREATE TABLE episode_columns (unit TEXT PRIMARY KEY, columns TEXT NOT NULL) STRICT",
    """CREATE TABLE journal (
  number INTEGER PRIMARY KEY AUTOINCREMENT, written TEXT NOT NULL, who TEXT NOT NULL, what TEXT NOT NULL,
  note TEXT NOT NULL DEFAULT '', unit TEXT, watch TEXT, raised TEXT
) STRICT""",
)

# A line of the journal tells what it is about by one stable key; what else an act needs stands in `detail`.
SECOND = (
    "ALTER TABLE journal RENAME TO journal_before",
    """CREATE TABLE journal (
  number INTEGER PRIMARY KEY AUTOINCREMENT, written TEXT NOT NULL, who TEXT NOT NULL, act TEXT NOT NULL,
  unit TEXT, subject TEXT NOT NULL, note TEXT NOT NULL, detail TEXT NOT NULL CHECK (json_valid(detail))
) STRICT""",
    """INSERT INTO journal SELECT number, written, who, what, unit, coalesce(watch, ''), note,
  CASE WHEN raised IS NULL THEN '{}' ELSE json_object('raised', raised) END FROM journal_before""",
    "DROP TABLE journal_before",  # and its triggers with it
    """CREATE TRIGGER journal_keeps_lines BEFORE UPDATE ON journal
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END""",
    """CREATE TRIGGER journal_loses_nothing BEFORE DELETE ON journal
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END""",
    """CREATE TRIGGER journal_replaces_nothing BEFORE INSERT ON journal
  WHEN EXISTS (SELECT 1 FROM journal WHERE number = NEW.number)
  BEGIN SELECT RAISE(ABORT, 'the journal is append-only'); END""",
    """CREATE TABLE outbox (
  id TEXT PRIMARY KEY, made TEXT NOT NULL, kind TEXT NOT NULL, target TEXT NOT NULL,
  body TEXT NOT NULL CHECK (json_valid(body)),
  state TEXT NOT NULL DEFAULT 'waiting' CHECK (state IN ('waiting', 'sent', 'given up')),
  tries INTEGER NOT NULL DEFAULT 0, next_try TEXT, last_error TEXT NOT NULL DEFAULT '', sent_at TEXT
) STRICT""",
    """CREATE TABLE documents (
  unit TEXT NOT NULL, kind TEXT NOT NULL, key TEXT NOT NULL, revision INTEGER NOT NULL, made TEXT NOT NULL,
  sha256 TEXT NOT NULL, body TEXT NOT NULL, PRIMARY KEY (unit, kind, key, revision)
) STRICT""",
    """CREATE TRIGGER documents_keep_revisions BEFORE UPDATE ON documents
  BEGIN SELECT RAISE(ABORT, 'a revision of a document stays as it is'); END""",
    """CREATE TRIGGER documents_lose_nothing BEFORE DELETE ON documents
  BEGIN SELECT RAISE(ABORT, 'a revision of a document stays as it is'); END""",
    """CREATE TRIGGER documents_replace_nothing BEFORE INSERT ON documents
  WHEN EXISTS (SELECT 1 FROM documents
    WHERE (unit, kind, key, revision) = (NEW.unit, NEW.kind, NEW.key, NEW.revision))
  BEGIN SELECT RAISE(ABORT, 'a revision of a document stays as it is'); END""",
)

# Notices of an hour that had too many go out with one digest, whose id they then bear.
THIRD = (
    "ALTER TABLE outbox RENAME TO outbox_before",
    """CREATE TABLE outbox (
  id TEXT PRIMARY KEY, made TEXT NOT NULL, kind TEXT NOT NULL, target TEXT NOT NULL,
  body TEXT NOT NULL CHECK (json_valid(body)),
  state TEXT NOT NULL DEFAULT 'waiting' CHECK (state IN ('waiting', 'sent', 'given up', 'joined')),
  tries INTEGER NOT NULL DEFAULT 0, next_try TEXT NOT NULL, last_error TEXT NOT NULL DEFAULT '',
  sent_at TEXT, joined_in TEXT NOT NULL DEFAULT ''
) STRICT""",
    """INSERT INTO outbox SELECT id, made, kind, target, body, state, tries, coalesce(next_try, made),
  last_error, sent_at, '' FROM outbox_before""",
    "DROP TABLE outbox_before",
    "CREATE INDEX outbox_by_target ON outbox (target, state, next_try)",
)

STEPS = (FIRST, SECOND, THIRD)  # each from its place in this list to the next version
VERSION = len(STEPS)


def steps_from(version: int) -> tuple[str, ...]:
    """Give the statements that bring a ledger of one version to this program's.

    Parameters
    ----------
    version : int
        0 for a ledger without tables.

    Returns
    -------
    tuple of str
        To be run in this order in one transaction; none if the version is this program's.
    """
    return tuple(statement for step in STEPS[version:] for statement in step)
