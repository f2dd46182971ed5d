"""Small units and readings made by hand, for tests that need one without a unit file."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np

from ingest.readings import Series
from ingest.unit import ExportRules, Instrument, Operating, Species, Stream, Uncertainty, Unit

MINUTE = 60_000_000  # microseconds
HOUR = 60 * MINUTE
DAY = 24 * HOUR
MIDNIGHT = int(datetime(2026, 3, 2, tzinfo=UTC).timestamp()) * 1_000_000
GOOD_QUALITY = 2


def made_instrument(name: str = "FI-1", **changes: Any) -> Instrument:
    """A mass flow meter exported each minute, 0 to 200 kg/h, readings no more than 5 min apart."""
    meter = Instrument(
        name=name,
        kind="mass flow",
        tag=f"{name}.PV",
        value=None,
        unit="kg/h",
        to_base=1.0,
        offset=0.0,
        stream="feed",
        per_stream=None,
        species=(),
        left_out=(),
        random=Uncertainty(0.003, 0.0),
        systematic=Uncertainty(0.005, 0.0),
        low=0.0,
        high=200.0,
        cycle=timedelta(minutes=1),
        dead_time=timedelta(0),
        max_age=timedelta(minutes=5),
        sampling="interpolated",
        analyzer=None,
        pressure=None,
        temperature=None,
    )
    return replace(meter, **changes)


def made_channel(name: str, species: str, **changes: Any) -> Instrument:
    """A channel of an outlet analyzer: a result each 6 min, 4 min late, held for 20 min at most, in mol%."""
    channel: dict[str, Any] = {
        "kind": "mole fraction",
        "unit": "mol%",
        "to_base": 0.01,
        "stream": "outlet",
        "species": (species,),
        "random": Uncertainty(0.004, 0.002),
        "systematic": Uncertainty(0.007, 0.002),
        "high": 100.0,
        "cycle": timedelta(minutes=6),
        "dead_time": timedelta(minutes=4),
        "max_age": timedelta(minutes=20),
        "sampling": "held",
        "analyzer": "AI-2",
    }
    return made_instrument(name, **{**channel, **changes})


def made_unit(*instruments: Instrument, **changes: Any) -> Unit:
    """n-Butane to isobutane, seen by a feed meter, an analyzer of two channels and a certificate.

    Instruments given take the place of those four; `changes` are fields of Unit.
    """
    carbon4 = (("C", 4.0), ("H", 10.0))
    declared: dict[str, Any] = {"tag": None, "value": 98.0, "stream": "feed", "analyzer": None}
    unit = Unit(
        key="made",
        name="made by hand",
        time_zone="Europe/Berlin",
        cell=timedelta(minutes=10),
        reactor="packed bed",
        # Molar mass: 4 x 12.011 + 10 x 1.008 (CIAAW 2021, abridged).
        species=tuple(Species(name, "C4H10", carbon4, 58.124, False) for name in ("n-butane", "isobutane")),
        key_reactant="n-butane",
        wanted="isobutane",
        unwanted=(),
        key_element="C",
        streams=tuple(
            Stream(name, way, ("n-butane", "isobutane")) for name, way in (("feed", "in"), ("outlet", "out"))
        ),
        instruments=instruments
        or (
            made_instrument(),
            made_channel("AI-2 n-butane", "n-butane"),
            made_channel("AI-2 isobutane", "isobutane"),
            made_channel("certificate", "n-butane", **declared),
        ),
        shared=(),
        operating=Operating("FI-1", 10.0, 20.0, 40.0, timedelta(hours=2)),
        catalyst_charged=None,
        watches=(),
        windows=(timedelta(hours=1), timedelta(hours=8)),
        least_coverage=0.75,
        exports=ExportRules(None, (), None),
    )
    return replace(unit, **changes)


def made_series(minutes: Sequence[float], values: Sequence[float], quality: int = GOOD_QUALITY) -> Series:
    """Readings at minutes after MIDNIGHT, all of one quality, from rows 2, 3, ... of export 1."""
    count = len(minutes)
    return Series(
        time=MIDNIGHT + np.round(np.asarray(minutes, dtype=float) * MINUTE).astype(np.int64),
        value=np.broadcast_to(np.asarray(values, dtype=np.float64), count).copy(),
        quality=np.full(count, quality, dtype=np.int8),
        source=np.ones(count, dtype=np.int32),
        row=np.arange(2, count + 2),
    )
