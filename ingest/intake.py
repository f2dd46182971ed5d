"""One pass over exports: which to read, what became of each, and which spans of each unit changed."""

from __future__ import annotations

import hashlib
import json
import os
import time
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from datetime import timedelta
from pathlib import Path
from typing import Any, Literal

from ingest import database
from ingest.account import Account
from ingest.archive import Archive, Merged, Span, spans_of
from ingest.asked import Asked, asked_by, tags_of
from ingest.errors import ExportError
from ingest.exports import open_export
from ingest.files import Told, opened
from ingest.found import found
from ingest.passes import Pass
from ingest.records import Export, Seen
from ingest.shown import shown
from ingest.unit import Unit

SETTLE = timedelta(seconds=2)  # a file changed more recently may still be growing
SUFFIXES = (
    *(kind + packed for kind in (".csv", ".txt", ".tsv") for packed in ("", ".gz", ".zst")),
    ".parquet",
    ".pq",
)
NAMES_SHOWN = 5

Status = Literal["taken", "taken already", "set aside", "left for the next pass"]
Progress = Callable[[int, int], None]  # bytes done, bytes in all


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one file.

    `words` says it in one line, an error in two; `account` is None unless the file was taken in now.
    """

    name: str
    status: Status
    words: str
    account: Account | None = None


@dataclass(frozen=True, slots=True)
class IntakeResult:
    """What a pass took in: files in the order read, spans changed by unit key, notes for the user.

    A span is first <= t < last [us since 1970, UTC]; changes less than a day apart make one span.
    """

    outcomes: tuple[Outcome, ...]
    touched: Mapping[str, tuple[Span, ...]]
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _File:
    """One file to be read; `before` is its entry if it was taken in when nobody asked for `added`."""

    path: Path
    seen: Seen
    number: int
    tags: frozenset[str]  # asked of the file
    added: frozenset[str]  # those of them that go into the archive
    before: Export | None


@dataclass(frozen=True, slots=True)
class _Taken:
    """What was read of a file, and how, in sentences."""

    account: Account
    dialect: tuple[str, ...]


class _Meter:
    """How many bytes of how many were read."""

    def __init__(self, progress: Progress | None, total: int) -> None:
        """Begin at nothing."""
        self._progress = progress
        self._total = total
        self._before = 0  # bytes of the files that are done
        self._tell(0)

    def of(self, file: _File) -> Told:
        """Follow one file; one that is written faster than it is read has to end somewhere."""

        def told(count: int) -> None:
            if count > file.seen.size:
                raise ExportError(
                    f"{file.path.name}: grew while it was being read", remedy="Try again later."
                )
            self._tell(count)

        return told

    def close(self, file: _File) -> None:
        """Count a file as done, wherever its reading ended."""
        self._before += file.seen.size
        self._tell(0)

    def _tell(self, count: int) -> None:
        if self._progress is not None:
            self._progress(self._before + count, self._total)


def take_in(
    pass_: Pass,
    units: Sequence[Unit],
    paths: Iterable[Path],
    *,
    settle: timedelta = SETTLE,
    progress: Progress | None = None,
) -> IntakeResult:
    """Take exports into the archive of a site, each content once, in the order of their names.

    Parameters
    ----------
    pass_ : Pass
        Open; archive and entries become visible with its commit.
    units : sequence of Unit
        All units of the site; what they say under [exports] must agree.
    paths : iterable of Path
        Exports, or folders of which all exports are meant.
    settle : timedelta
        A file changed more recently is left for the next pass.
    progress : callable or None
        Told the bytes of all files that were read so far, and those to read, as they are on disk.

    Returns
    -------
    IntakeResult
    """
    asked = asked_by(units)
    meant = found(paths, SUFFIXES)
    files, outcomes = _plan(pass_, asked, meant.files, settle)
    outcomes += [_set_aside_unread(path, fault) for path, fault in meant.refused]
    archive = Archive(pass_, asked.tags.union(*(export.asked["tags"] for export in pass_.exports())))
    taken: list[tuple[_File, _Taken]] = []
    meter = _Meter(progress, sum(file.seen.size for file in files))
    for file in files:
        became = _read(pass_, archive, asked, file, meter.of(file))
        meter.close(file)
        if isinstance(became, _Taken):
            taken.append((file, became))
        else:
            outcomes.append(became)
    archive.finish()
    outcomes += [_enter(pass_, asked, file, read, archive.merged) for file, read in taken]
    _amend(pass_, archive.merged, {file.number for file, _ in taken})
    touched = {unit.key: spans_of(archive.merged.touched, tags_of(unit)) for unit in units}
    return IntakeResult(tuple(sorted(outcomes, key=_by_name)), touched, _notes(pass_, asked))


def _plan(
    pass_: Pass, asked: Asked, paths: Iterable[Path], settle: timedelta
) -> tuple[list[_File], list[Outcome]]:
    """Which files to read, by number in the ledger, and what is already known of the others."""
    known = {export.sha256: export for export in pass_.exports()}
    number = 1 + max((export.number for export in known.values()), default=0)
    files: dict[str, _File] = {}
    outcomes: list[Outcome] = []
    for path in paths:
        seen = _look(pass_, path, settle)
        if isinstance(seen, Outcome):
            outcomes.append(seen)
        elif seen.sha256 in files:
            twin = files[seen.sha256].path.name
            outcomes.append(_outcome(path, "taken already", f"has the same content as {shown(twin)}"))
        else:
            chosen = _choose(asked, path, seen, number, known.get(seen.sha256))
            if isinstance(chosen, Outcome):
                outcomes.append(chosen)
            else:
                files[seen.sha256] = chosen
                number += chosen.number == number
    return sorted(files.values(), key=lambda file: file.number), outcomes


def _look(pass_: Pass, path: Path, settle: timedelta) -> Seen | Outcome:
    """Size, time and content of a file; its content is read only if the others changed."""
    try:
        stat = path.lstat()
        if 0 <= time.time() - stat.st_mtime < settle.total_seconds():
            return _outcome(path, "left for the next pass", "was changed a moment ago and may still grow")
        known = pass_.seen(_place(path))
        if known is not None and (known.size, known.mtime_ns) == (stat.st_size, stat.st_mtime_ns):
            return known
        with opened(path) as file:
            fresh = Seen(stat.st_size, stat.st_mtime_ns, hashlib.file_digest(file, "sha256").hexdigest())
    except ExportError as fault:
        return _set_aside_unread(path, fault)
    except PermissionError as fault:
        what = f"{path.name}: cannot be read ({fault.strerror})"
        return _set_aside_unread(path, ExportError(what, remedy="Check the file's permissions."))
    except OSError as fault:
        return _outcome(path, "left for the next pass", f"cannot be read: {fault.strerror}")
    pass_.record_seen(_place(path), fresh)
    return fresh


def _place(path: Path) -> str:
    """Where a file lies, as the ledger keeps it; a name need not be text."""
    return os.fsencode(path.resolve()).decode("utf-8", "backslashreplace")


def _set_aside_unread(path: Path, fault: ExportError) -> Outcome:
    """Tell of what was not opened; its content is not known, so the ledger has no entry of it."""
    return _outcome(path, "set aside", str(fault))


def _outcome(path: Path, status: Status, words: str, account: Account | None = None) -> Outcome:
    return Outcome(shown(path.name), status, words, account)


def _choose(asked: Asked, path: Path, seen: Seen, number: int, entry: Export | None) -> _File | Outcome:
    """Read a file, or say why not."""
    if entry is None:
        return _File(path, seen, number, asked.tags, asked.tags, None)
    if entry.status == "set aside":
        if entry.asked == asked.entry(asked.tags):
            return _outcome(path, "set aside", entry.error)
        return _File(path, seen, number, asked.tags, asked.tags, None)
    added = _unasked_then(entry) & asked.tags
    if not added:
        return _outcome(path, "taken already", f"was taken in on {entry.taken_at} as {entry.name}")
    return _File(path, seen, entry.number, added.union(entry.asked["tags"]), added, entry)


def _unasked_then(entry: Export) -> frozenset[str]:
    """Tags in an export that nobody asked for when it was taken in."""
    return frozenset(tag for tag, _ in entry.account.get("unasked_tags", ()))


def _read(pass_: Pass, archive: Archive, asked: Asked, file: _File, told: Told) -> _Taken | Outcome:
    """Read one export into the archive, or leave no trace of it there."""
    try:
        batches = open_export(
            file.path,
            number=file.number,
            rules=asked.rules,
            wanted=file.tags,
            time_zone=None,
            units=asked.units,
            told=told,
        )
        for readings in batches:
            archive.add({tag: series for tag, series in readings.items() if tag in file.added})
    except ExportError as fault:
        archive.drop()
        return _left(file) or _set_aside(pass_, asked, file, str(fault))
    left = _left(file)
    if left is not None:
        archive.drop()
        return left
    archive.keep()
    return _Taken(batches.account(), batches.dialect.describe())


def _left(file: _File) -> Outcome | None:
    """Whether a file was changed while it was being read."""
    try:
        stat = file.path.lstat()
        same = (stat.st_size, stat.st_mtime_ns) == (file.seen.size, file.seen.mtime_ns)
    except OSError:
        same = False
    words = "was changed while it was being read"
    return None if same else _outcome(file.path, "left for the next pass", words)


def _set_aside(pass_: Pass, asked: Asked, file: _File, error: str) -> Outcome:
    """Enter a file that cannot be read; one that could be read once keeps its entry."""
    if file.before is None:
        pass_.record_export(_entry(pass_, file, asked, status="set aside", error=error, account={}))
    return _outcome(file.path, "set aside", error)


def _enter(pass_: Pass, asked: Asked, file: _File, read: _Taken, merged: Merged) -> Outcome:
    """Enter a file that was taken in, with what became of its readings in the archive."""
    earlier = file.before.account if file.before is not None else {}
    settled = read.account.settled(
        superseded=earlier.get("superseded", 0) + merged.superseded[file.number],
        duplicates=earlier.get("duplicates", 0) + merged.duplicates[file.number],
    )
    by = _superseded_by(earlier, merged, file.number)
    told = {**asdict(settled), "dialect": read.dialect, "superseded_by": by}
    told = json.loads(json.dumps(told))  # lists, as they come back from the ledger
    pass_.record_export(_entry(pass_, file, asked, status="taken", error="", account=told))
    return _outcome(file.path, "taken", settled.describe()[0], settled)


def _entry(
    pass_: Pass, file: _File, asked: Asked, *, status: str, error: str, account: Mapping[str, Any]
) -> Export:
    """The ledger's entry of a file."""
    return Export(
        number=file.number,
        sha256=file.seen.sha256,
        name=shown(file.path.name),
        size=file.seen.size,
        taken_at=database.now(),
        status=status,
        error=error,
        asked=asked.entry(file.tags),
        account=account,
        made_by=pass_.number,
    )


def _amend(pass_: Pass, merged: Merged, entered: set[int]) -> None:
    """Move readings of earlier exports that lost to this pass to where they now belong in their accounts."""
    for export in pass_.exports():
        superseded, duplicates = merged.superseded[export.number], merged.duplicates[export.number]
        if export.number not in entered and superseded + duplicates:
            account = {
                **export.account,
                "accepted": export.account["accepted"] - superseded - duplicates,
                "superseded": export.account["superseded"] + superseded,
                "duplicates": export.account["duplicates"] + duplicates,
                "superseded_by": _superseded_by(export.account, merged, export.number),
            }
            pass_.record_export(replace(export, account=account))


def _superseded_by(account: Mapping[str, Any], merged: Merged, number: int) -> list[list[int]]:
    """Who replaced readings of an export, before this pass and in it: numbers with counts."""
    counts = Counter(dict(account.get("superseded_by", ())))
    counts.update({winner: count for (loser, winner), count in merged.winners.items() if loser == number})
    return [list(pair) for pair in sorted(counts.items())]


def _notes(pass_: Pass, asked: Asked) -> tuple[str, ...]:
    """What the archive lacks or holds otherwise than the units ask now."""
    taken = [export for export in pass_.exports() if export.status == "taken"]
    lacking = [export.name for export in taken if _unasked_then(export) & asked.tags]
    rules = _in_force(asked.entry(())["rules"])
    otherwise = [export.name for export in taken if _in_force(export.asked["rules"]) != rules]
    converted = [export.name for export in taken if asked.converted_otherwise(export)]
    notes = []
    if lacking:
        notes.append(f"{_names(lacking)}: holds tags asked for only since; give it to a pass again")
    if otherwise:
        notes.append(
            f"{_names(otherwise)}: was read by other rules under [exports] than those stated now;"
            " to read all alike, take every export into a new store"
        )
    if converted:
        notes.append(
            f"{_names(converted)}: was converted to units that the unit file does not state any more;"
            " take every export into a new store"
        )
    return tuple(notes)


def _in_force(rules: Mapping[str, Any]) -> dict[str, Any]:
    """The rules that say something; one that an older program did not know said nothing then."""
    return {key: said for key, said in rules.items() if said}


def _names(names: Sequence[str]) -> str:
    """A list of names that stays readable."""
    more = f" and {len(names) - NAMES_SHOWN} more" if len(names) > NAMES_SHOWN else ""
    return ", ".join(names[:NAMES_SHOWN]) + more


def _by_name(outcome: Outcome) -> str:
    return outcome.name
