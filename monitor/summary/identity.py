"""What a summary says of itself: unit, span, who prepared it, and the hashes of all that it was made from."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np
import pandas as pd

from ingest.archive import SITE, STAGE
from ingest.cells import look_back, reach
from ingest.readings import read_months
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.summary.span import Span, Stretch, charge_name

_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Stamp:
    """Who prepares a summary and with what: name, hash of the unit file, version of the program."""

    prepared_by: str
    unit_file: str
    program: str


def identity(
    unit: Unit,
    asked: Span,
    stretches: Sequence[Stretch],
    snapshot: Snapshot,
    *,
    stamp: Stamp,
    until: datetime,
) -> pd.DataFrame:
    """List what a summary is of and what it was made from.

    Parameters
    ----------
    unit : Unit
        One reactor.
    asked : Span
    stretches : sequence of Stretch
        Of the span.
    snapshot : Snapshot
        The store as one pass left it.
    stamp : Stamp
    until : datetime
        End of the record in the span.

    Returns
    -------
    DataFrame
        Columns item and text.
    """
    zone = unit.time_zone
    digest, count = _readings(unit, asked, snapshot)
    edges = [
        plant_iso(pd.Timestamp(edge, unit="us", tz="UTC"), zone) for edge in (asked.first_us, asked.last_us)
    ]
    charged = [charge_name(stretch.charged, zone) for stretch in stretches]
    items = {
        "unit": unit.name,
        "unit file": unit.key,
        "span": asked.name,
        "from": edges[0],
        "to": edges[1],
        "time zone": zone,
        "catalyst": ", ".join(dict.fromkeys(charged)),
        "record until": plant_iso(pd.Timestamp(until), zone),
        "prepared by": stamp.prepared_by,
        "program": f"outlet {stamp.program}",
        "unit file sha256": stamp.unit_file,
        "readings": f"{count}",
        "readings sha256": digest,
    }
    return pd.DataFrame({"item": list(items), "text": list(items.values())})


def _readings(unit: Unit, asked: Span, snapshot: Snapshot) -> tuple[str, int]:
    """Hash the readings that the cells of the span were made of; how many there are."""
    first = asked.first_us - look_back(unit) // _US
    last = asked.last_us + reach(unit) // _US
    tags = sorted(one.tag for one in unit.instruments if one.tag is not None)
    found = read_months(snapshot.paths(SITE, STAGE, first=first, last=last), tags, first, last)
    digest, count = hashlib.sha256(), 0
    for tag in tags:
        if tag in found:
            series = found[tag]
            digest.update(f"{tag}\n{len(series.time)}\n".encode())
            for column in (series.time, series.value, series.quality):
                digest.update(np.ascontiguousarray(column).tobytes())
            count += len(series.time)
    return digest.hexdigest(), count


def plant_iso(moment: pd.Timestamp | None, zone: str) -> str:
    """Write an instant in plant time with its offset, which sorts and has one meaning everywhere.

    Parameters
    ----------
    moment : Timestamp or None
        Zone-aware; None and NaT for one that did not come yet.
    zone : str
        IANA name of the plant's zone.

    Returns
    -------
    str
        `2026-04-14 09:20 +02:00`; empty for one that did not come yet.
    """
    if moment is None or pd.isna(moment):
        return ""
    text = f"{moment.tz_convert(zone):%Y-%m-%d %H:%M %z}"
    return f"{text[:-2]}:{text[-2:]}"
