"""Exports as they were delivered: one row each, whose counts add up, and how each of them stands."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path

import pandas as pd

from ingest.account import REASONS, Account
from ingest.errors import StoreError
from ingest.records import Export
from ingest.shown import shown
from monitor import wording

TAKEN, IN_PART, ASIDE = "taken", "taken, some rejected", "set aside"
SHAPES = {TAKEN: "\u25cf", IN_PART: "\u25d0", ASIDE: "\u25b2"}
# What becomes of a reading, in the words of people; each reading is in one of these places.
PLACES = {
    "accepted": "accepted",
    "superseded": "superseded",
    "duplicates": "known already",
    "rejected": "rejected",
    "unasked": "not asked for",
    "empty": "left blank",
}


def account_of(export: Export) -> Account | None:
    """Give the account of an export.

    Parameters
    ----------
    export : Export
        Of the ledger.

    Returns
    -------
    Account or None
        None where the export was set aside: it was not read.
    """
    return Account.from_stored(export.account) if export.status == "taken" else None


def status_of(export: Export) -> str:
    """Say how an export stands.

    Parameters
    ----------
    export : Export
        Of the ledger.

    Returns
    -------
    str
        A key of SHAPES.
    """
    if export.status != "taken":
        return ASIDE
    return IN_PART if export.account.get("rejections") else TAKEN


def table(exports: Sequence[Export]) -> pd.DataFrame:
    """List exports with their counts, newest first.

    Parameters
    ----------
    exports : sequence of Export
        Of the ledger.

    Returns
    -------
    DataFrame
        Columns number, name, taken_at (UTC), status (a key of SHAPES), rows, readings and the keys of PLACES,
        which add up to the readings; all nought where the export was set aside.
    """
    rows = [_row(export) for export in exports]
    columns = ["number", "name", "taken_at", "status", "rows", "readings", *PLACES]
    frame = pd.DataFrame(rows, columns=columns)
    frame["taken_at"] = pd.to_datetime(frame["taken_at"], utc=True, format="ISO8601").dt.as_unit("us")
    newest: pd.DataFrame = frame.sort_values(["taken_at", "number"], ascending=False, ignore_index=True)
    return newest


def _row(export: Export) -> tuple[int | str, ...]:
    account = account_of(export)
    counts = [getattr(account, name) if account else 0 for name in ("rows", "readings", *PLACES)]
    return (export.number, export.name, export.taken_at, status_of(export), *counts)


def matching(frame: pd.DataFrame, words: str) -> pd.DataFrame:
    """Keep the exports whose name holds some words, whatever their capitals.

    Parameters
    ----------
    frame : DataFrame
        As `table` gives it.
    words : str
        Empty for all.

    Returns
    -------
    DataFrame
        The same columns; index 0, 1, ...
    """
    kept = frame["name"].str.contains(words.strip(), case=False, regex=False)
    found: pd.DataFrame = frame[kept].reset_index(drop=True)
    return found


def named(exports: Sequence[Export], which: str) -> list[Export]:
    """Find exports by number or by name; one name may stand for several contents.

    Parameters
    ----------
    exports : sequence of Export
        Of the ledger.
    which : str
        `12`, `march.csv`, or a path to such a file.

    Returns
    -------
    list of Export
        At least one, by number.

    Raises
    ------
    StoreError
        There is none.
    """
    name = shown(Path(which).name)
    found = [one for one in exports if one.name == name or str(one.number) == which]
    if not found:
        near = get_close_matches(name, [one.name for one in exports], n=1)
        meant = f"; did you mean {near[0]}?" if near else ""
        raise StoreError(
            f"{shown(which)}: no export of this number or name was taken in{meant}",
            remedy="See 'outlet exports' for all numbers and names.",
        )
    return found


def sum_of(account: Account) -> tuple[tuple[int, str], ...]:
    """Give the places of an account that hold readings; they add up to all its readings.

    Parameters
    ----------
    account : Account
        Of one export.

    Returns
    -------
    tuple of (int, str)
        How many, and the place in words; the accepted ones always, and first.
    """
    counts = ((getattr(account, name), words) for name, words in PLACES.items())
    return tuple((count, words) for count, words in counts if count or words == PLACES["accepted"])


def winners(account: Account, number: int, names: Mapping[int, str]) -> Iterator[str]:
    """Tell who replaced readings of an export.

    Parameters
    ----------
    account : Account
        Of the export.
    number : int
        Its own.
    names : mapping of int to str
        Of all exports by number.

    Yields
    ------
    str
        `12 superseded by april.csv (export 14)`.
    """
    for winner, count in account.superseded_by:
        by = "later rows of itself" if winner == number else f"{names.get(winner, '')} (export {winner})"
        yield f"{wording.number(count, 0)} superseded by {by}"


def faults(account: Account) -> Iterator[tuple[str, str, tuple[str, ...]]]:
    """Tell each reason for which readings were rejected.

    Parameters
    ----------
    account : Account
        Of one export.

    Yields
    ------
    tuple of str, str, tuple of str
        How many and why, what to do, and the first rows of it.
    """
    for reason, count in account.rejections:
        what, remedy = REASONS[reason]
        rows = tuple(one.describe(account.export) for one in account.evidence if one.reason == reason)
        yield f"{wording.number(count, 0)} rejected: the row or cell {what}", remedy, rows
