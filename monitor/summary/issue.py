"""Issuing a summary: its results are kept in the store, and late data make a numbered revision of them."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from ingest import documents, journal
from ingest.unit import Unit
from monitor.summary.identity import Stamp
from monitor.summary.making import summarise
from monitor.summary.span import Span
from monitor.summary.table import CHANGES, IDENTITY, Summary, body_of, changes, from_body, with_tables

KIND = "summary"
ISSUED = "summary issued"  # act in the journal


@dataclass(frozen=True, slots=True)
class Issued:
    """What was issued; `is_new` tells whether the store did not hold it before."""

    summary: Summary
    is_new: bool


def issue(folder: Path, unit: Unit, asked: Span, stamp: Stamp) -> Issued:
    """Make a summary and keep it; the same results again are the revision that was kept, word by word.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    asked : Span
    stamp : Stamp

    Returns
    -------
    Issued
        A revision after the first lists what changed since the one before.
    """
    made = summarise(folder, unit, asked, stamp)
    before = documents.latest(folder, unit.key, KIND, asked.key)
    if before is not None and before.body["digest"] == made.digest:
        return Issued(from_body(before.body), is_new=False)
    if before is None:
        final = sealed(made, 1)
    else:
        listed = changes(from_body(before.body), made)
        final = with_tables(sealed(made, before.revision + 1), before.revision + 1, **{CHANGES: listed})
    documents.write(folder, unit=unit.key, kind=KIND, key=asked.key, body=body_of(final))
    journal.write(
        folder,
        who=stamp.prepared_by,
        act=ISSUED,
        unit=unit.key,
        subject=asked.key,
        note=f"revision {final.revision}",
        detail={"sha256": made.digest},
    )
    return Issued(final, is_new=True)


def kept(folder: Path, unit: str, key: str | None = None) -> tuple[Summary, ...]:
    """Give the summaries that were issued, as they were.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    key : str or None
        Key of a span, such as 2026-04; None for all spans.

    Returns
    -------
    tuple of Summary
        By span, then by revision.
    """
    return tuple(from_body(one.body) for one in documents.revisions(folder, unit, KIND, key))


def sealed(made: Summary, revision: int) -> Summary:
    """Put the hash of the results and the revision into what a summary says of itself.

    Parameters
    ----------
    made : Summary
        A draft.
    revision : int
        0 leaves it a draft.

    Returns
    -------
    Summary
    """
    told = pd.DataFrame(
        {"item": ["results sha256", "revision"], "text": [made.digest, str(revision or "draft")]}
    )
    identity = pd.concat([made.tables[IDENTITY], told], ignore_index=True)
    return with_tables(made, revision, **{IDENTITY: identity})
