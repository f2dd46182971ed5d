"""Which instrument to look at first: what speaks against each, ordered, with the reason and what to do."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

import pandas as pd

from ingest.unit import Unit
from monitor import wording
from monitor.alerts import Alert
from monitor.attendance import ABSENT, CALIBRATED, KIND_OF, REFUSED
from monitor.verdict import INSTRUMENT

LEAST_NOW = timedelta(minutes=30)  # shorter silences come and go
LONG_CALIBRATION = timedelta(hours=2)
LEAST_AVAILABLE = 0.95
MOST_DOUBTED = 0.05
MOST_OUTVOTED = 0.01
# What is worth a walk first stands first; every row with what to do.
KINDS = {
    "suspected": "Open the alert under Alerts: its verdict says what to check.",
    "absent": "Look whether the signal reaches the historian, and whether the exports hold its tag.",
    "refused": "Look at the instrument itself, and at its range and limits in the unit file.",
    "calibrating": "Look whether it is back on its sample, and whether its status signal is right.",
    "stands out": "Compare it with what it is checked by; a zero or span check settles which one is off.",
    "late": "Look at sample line, pump and filter; outlet lag tells it day by day.",
    "outvoted": "Look at its zero and at its limits for down and running in the unit file.",
    "often out": "Look at when it was out in the strips below, and at what happened then.",
    "doubted": "Look at the answers of the checks below.",
}
WORDS = {
    "suspected": "suspected",
    "absent": "no reading",
    "refused": "refused",
    "calibrating": "calibrating for long",
    "stands out": "does not fit the balance",
    "late": "dead time differs",
    "outvoted": "outvoted",
    "often out": "often out",
    "doubted": "often doubted",
}


@dataclass(frozen=True, slots=True)
class Concern:
    """What speaks against one instrument, or against channels of one analyzer alike."""

    name: str
    kind: str  # key of KINDS
    reason: str
    weight: float  # the greater, the sooner among those of one kind

    @property
    def remedy(self) -> str:
        """Give what to do about it."""
        return KINDS[self.kind]


@dataclass(frozen=True, slots=True)
class Evidence:
    """All that speaks for and against the instruments of a unit over a span.

    `attendance` and `outvoted` as `attendance` gives them, `adjusted` as `witnesses.adjustments` does,
    `late` says in words of each analyzer whose lag is not the declared one. `end` is that of the span.
    """

    attendance: pd.DataFrame
    outvoted: pd.Series[float]
    adjusted: pd.DataFrame
    alerts: Sequence[Alert]
    late: Mapping[str, str]
    parallel: Sequence[Sequence[str]]
    end: datetime


def concerns(unit: Unit, found: Evidence) -> tuple[Concern, ...]:
    """Order what speaks against the instruments of a unit; channels with one reason stand as one.

    Parameters
    ----------
    unit : Unit
        One reactor.
    found : Evidence

    Returns
    -------
    tuple of Concern
        What to look at first comes first; empty where nothing speaks against any.
    """
    every = [
        *_suspected(unit, found.alerts, found.end),
        *_now(unit, found),
        *_standing_out(found),
        *(Concern(name, "late", words, 1.0) for name, words in found.late.items()),
        *_outvoted(found.outvoted),
        *_over_the_span(found.attendance),
    ]
    order = list(KINDS)
    joined = sorted(_joined(unit, every), key=lambda one: (order.index(one.kind), -one.weight, one.name))
    return tuple(joined)


def _suspected(unit: Unit, alerts: Iterable[Alert], end: datetime) -> Iterator[Concern]:
    """Instruments that the verdict of an alert names while it stands."""
    names = {one.name for one in unit.instruments}
    told: dict[str, list[str]] = {}
    for alert in alerts:
        if alert.active and alert.cause == INSTRUMENT and alert.raised < end:
            for name in alert.suspects:
                told.setdefault(name, []).append(alert.id)
    for name, ids in told.items():
        if name in names:
            yield Concern(name, "suspected", f"named by the verdict of {', '.join(ids)}", float(len(ids)))


def _now(unit: Unit, found: Evidence) -> Iterator[Concern]:
    """Instruments that give nothing usable at the end of the span."""
    kinds = {ABSENT: "absent", REFUSED: "refused", CALIBRATED: "calibrating"}
    for name, row in found.attendance.dropna(subset=["since"]).iterrows():
        lasted = pd.Timestamp(found.end) - row["since"]
        kind = kinds[KIND_OF[row["now"]]]
        if lasted < (LONG_CALIBRATION if kind == "calibrating" else LEAST_NOW):
            continue
        since = wording.local_time(row["since"].to_pydatetime(), unit.time_zone, now=found.end)
        words = f"{row['now']} at the end of the span, out since {since} ({wording.duration(lasted)})"
        yield Concern(str(name), kind, words, lasted.total_seconds())


def _standing_out(found: Evidence) -> Iterator[Concern]:
    """Instruments whose mean adjustment is more than twice the spread that it should have."""
    for name, row in found.adjusted[found.adjusted["word"] == "stands out"].iterrows():
        mean, expected = float(row["mean"]), float(row["expected"])
        words = (
            f"adjusted by {wording.number(mean, 1)} of its standard uncertainties on average, "
            f"where {wording.number(expected, 1)} is expected at most"
        )
        alike = {other for one in found.parallel if name in one for other in one if other != name}
        if alike:
            words += f"; the balance cannot tell it apart from {', '.join(sorted(alike))}"
        yield Concern(str(name), "stands out", words, abs(mean) / expected)


def _outvoted(share: pd.Series[float]) -> Iterator[Concern]:
    for name, part in share[share > MOST_OUTVOTED].items():
        words = f"contradicted what most signals said of down and running in {100 * part:.0f} % of the time"
        yield Concern(str(name), "outvoted", words, float(part))


def _over_the_span(table: pd.DataFrame) -> Iterator[Concern]:
    """Instruments that were often out or doubted while the unit was not down."""
    for name, row in table.iterrows():
        if row["available"] < LEAST_AVAILABLE:
            words = f"took part in {100 * row['available']:.0f} % of the time, mostly {row['trouble']}"
            yield Concern(str(name), "often out", words, 1 - float(row["available"]))
        if row["doubted"] > MOST_DOUBTED:
            words = f"doubted in {100 * row['doubted']:.0f} % of the time"
            yield Concern(str(name), "doubted", words, float(row["doubted"]))


def _joined(unit: Unit, every: Iterable[Concern]) -> Iterator[Concern]:
    """Put channels of one analyzer against which the same speaks together."""
    home = {one.name: one.analyzer or one.name for one in unit.instruments}
    alike: dict[tuple[str, str, str], list[Concern]] = {}
    for one in every:
        alike.setdefault((home.get(one.name, one.name), one.kind, one.reason), []).append(one)
    for (whose, kind, reason), members in alike.items():
        name = members[0].name
        if len(members) > 1:
            whole = list(home.values()).count(whose)
            part = "all channels" if len(members) == whole else f"{len(members)} of {whole} channels"
            name = f"{whose}, {part}"
        yield Concern(name, kind, reason, max(one.weight for one in members))
