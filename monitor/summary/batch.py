"""The summaries of many units, on as many processes as there are processors."""

from __future__ import annotations

import multiprocessing
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from ingest.database import program_version
from ingest.errors import OutletError
from ingest.parts import sha256_of
from ingest.unitfile import load
from monitor.summary.files import write
from monitor.summary.identity import Stamp
from monitor.summary.issue import issue, sealed
from monitor.summary.making import summarise
from monitor.summary.span import WHOLE, Span, month_span, span_of
from monitor.summary.tonnes import NO_DATA

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Order:
    """What is wanted of each unit: a month of its calendar or some days of it, where to, in which forms."""

    store: Path
    out: Path
    forms: tuple[str, ...]
    prepared_by: str
    is_draft: bool
    month: tuple[int, int] | None
    days: tuple[date, date] | None


@dataclass(frozen=True, slots=True)
class Done:
    """What became of one unit file: files, revision (0 a draft), whether it is new; or what was wrong."""

    unit_file: Path
    span: str
    files: tuple[Path, ...]
    revision: int
    is_new: bool
    changed: int  # entries that this revision changes
    no_data_h: float  # of the span
    fault: str


def all_of(unit_files: Sequence[Path], order: Order, progress: Progress) -> list[Done]:
    """Make the summaries of some units; a fault of one does not stop the others.

    Parameters
    ----------
    unit_files : sequence of Path
    order : Order
    progress : callable
        Told what is done, how many units, and of how many.

    Returns
    -------
    list of Done
        In the order of the unit files.
    """
    progress("summaries", 0, len(unit_files))
    if len(unit_files) == 1:
        return [one_of(unit_files[0], order)]
    workers = min(os.cpu_count() or 1, len(unit_files))
    # A process that was forked could inherit a library's threads in the middle of something.
    context = multiprocessing.get_context("spawn")
    found: dict[int, Done] = {}
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        waiting = {pool.submit(one_of, file, order): place for place, file in enumerate(unit_files)}
        for future in as_completed(waiting):
            found[waiting[future]] = future.result()
            progress("summaries", len(found), len(unit_files))
    return [found[place] for place in range(len(unit_files))]


def one_of(unit_file: Path, order: Order) -> Done:
    """Make the summary of one unit and write its files.

    Parameters
    ----------
    unit_file : Path
    order : Order

    Returns
    -------
    Done
        With the fault in two lines where it could not be made.
    """
    try:
        unit = load(unit_file)
        stamp = Stamp(order.prepared_by, sha256_of(unit_file), program_version())
        asked = _span(unit.time_zone, order)
        if order.is_draft:
            summary, is_new = sealed(summarise(order.store, unit, asked, stamp), 0), False
        else:
            issued = issue(order.store, unit, asked, stamp)
            summary, is_new = issued.summary, issued.is_new
        files = write(summary, order.out, order.forms)
    except OutletError as fault:
        return Done(unit_file, "", (), 0, is_new=False, changed=0, no_data_h=0.0, fault=str(fault))
    changed = len(summary.tables["changes"]) if "changes" in summary.tables else 0
    hours = summary.tables["hours"]
    missing = hours.loc[(hours["stretch"] == WHOLE) & (hours["item"] == NO_DATA), "hours"]
    return Done(
        unit_file=unit_file,
        span=asked.name,
        files=tuple(files),
        revision=summary.revision,
        is_new=is_new,
        changed=changed,
        no_data_h=float(missing.iloc[0]),
        fault="",
    )


def _span(zone: str, order: Order) -> Span:
    if order.month is not None:
        return month_span(zone, *order.month)
    if order.days is None:
        raise OutletError("month: no time is named", remedy="Write a month, or --from and --to.")
    return span_of(zone, *order.days)
