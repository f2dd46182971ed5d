"""What is told of a watch that was tried on the past, and the lines of the unit file that would set it."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from typing import Any

from ingest.quantities import duration_words
from ingest.unit import Unit, Watch
from monitor import wording
from monitor.trials import FALSE, OPEN, SUPPRESSED, Catch, Point, Trial, Tried

MOST_EPISODES = 20  # told one by one
HEAD = "       low     high  false a month  mean delay, h  caught  missed"


def toml(watch: Watch) -> Iterator[str]:
    """Write the lines of the unit file that set a watch.

    Parameters
    ----------
    watch : Watch
        Any.

    Yields
    ------
    str
        One line of TOML.
    """
    yield "[[watch]]"
    if watch.name:
        yield f"name = {_quoted(watch.name)}"
    yield f"figure = {_quoted(watch.figure)}"
    yield f"window = {_quoted(duration_words(watch.window))}"
    if watch.test == "limits":
        yield from _limits(watch)
    else:
        yield from _drift(watch)
    yield f"priority = {_quoted(watch.priority)}"
    if not watch.steady:
        yield "steady = false"


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)


def _limits(watch: Watch) -> Iterator[str]:
    for key, limit in (("low", watch.low), ("high", watch.high)):
        if limit is not None:
            yield f"{key} = {limit!r}"
    if watch.among > 1:
        yield from (f"count = {watch.count}", f"among = {watch.among}")
    yield f"deadband = {watch.deadband!r}"
    yield f"on_delay = {_quoted(duration_words(watch.on_delay))}"
    yield f"off_delay = {_quoted(duration_words(watch.off_delay))}"


def _drift(watch: Watch) -> Iterator[str]:
    yield f"test = {_quoted(watch.test)}"
    yield f"shift_pct = {watch.shift_pct!r}"
    yield f"false_alarm_interval = {_quoted(duration_words(watch.false_alarm_interval))}"
    if watch.side is not None:
        yield f"side = {_quoted(watch.side)}"


def lines(trial: Trial, points: Sequence[Point], unit: Unit) -> Iterator[str]:
    """Tell a trial: what it would have given, what it caught, other limits, and the lines to paste.

    Parameters
    ----------
    trial : Trial
        Of one watch.
    points : sequence of Point
        Other limits; empty for a test for drift.
    unit : Unit
        Gives the zone.

    Yields
    ------
    str
        One line.
    """
    yield headline(trial, unit)
    for one in trial.tried[-MOST_EPISODES:]:
        yield f"  {episode(one, unit)}"
    if len(trial.tried) > MOST_EPISODES:
        yield f"  (the last {MOST_EPISODES} of {len(trial.tried)})"
    yield from (f"  {caught(one, unit)}" for one in trial.catches)
    if points:
        yield HEAD
        yield from (f"  {_point(one)}" for one in points)
    yield "to use it, write into the unit file:"
    yield from (f"  {line}" for line in toml(trial.watch))


def headline(trial: Trial, unit: Unit) -> str:
    """Tell a trial in one sentence.

    Parameters
    ----------
    trial : Trial
        Of one watch.
    unit : Unit
        Gives the zone.
    """
    first, last = (wording.local_time(at, unit.time_zone) for at in (trial.first, trial.last))
    count, catches = len(trial.tried), len(trial.catches)
    parts = [f"{count} episode{'' if count == 1 else 's'} from {first} to {last}"]
    if catches:
        late = f", on the mean {_hours(trial.delay_h)}" if math.isfinite(trial.delay_h) else ""
        parts.append(f"{catches - trial.missed} of {catches} known events caught{late}")
    else:
        parts.append("nothing is known that it should have caught")
    month = "" if math.isnan(trial.false_per_month) else f" ({trial.false_per_month:.2f} a month of running)"
    parts.append(f"{trial.count(FALSE)} false{month}")
    for word in (OPEN, SUPPRESSED):
        if trial.count(word):
            parts.append(f"{trial.count(word)} {word}")
    return "; ".join(parts)


def _hours(hours: float) -> str:
    return f"{hours:.1f} h late" if hours >= 0 else f"{-hours:.1f} h early"


def episode(one: Tried, unit: Unit) -> str:
    """Tell one episode of a trial.

    Parameters
    ----------
    one : Tried
        Of a trial.
    unit : Unit
        Gives the zone.
    """
    first = wording.local_time(one.raised, unit.time_zone)
    until = wording.local_time(one.cleared, unit.time_zone) if one.cleared else "open"
    by = f" ({one.by})" if one.by else ""
    return f"{first} to {until}, worst {wording.number(one.worst, 2)}: {one.word}{by}"


def caught(one: Catch, unit: Unit) -> str:
    """Tell whether something known was caught, and how late.

    Parameters
    ----------
    one : Catch
        Of a trial.
    unit : Unit
        Gives the zone.
    """
    when = wording.local_time(one.first, unit.time_zone)
    return f"{one.name}, from {when}: {'missed' if one.late_h is None else _hours(one.late_h)}"


def _point(one: Point) -> str:
    low, high = ("-" if limit is None else wording.plain(limit) for limit in (one.low, one.high))
    delay = "-" if math.isnan(one.delay_h) else f"{one.delay_h:.1f}"
    asked = "  <- asked for" if one.is_asked else ""
    return (
        f"{low:>8} {high:>8} {one.false_per_month:>14.2f} {delay:>14} {one.caught:>7} {one.missed:>7}{asked}"
    )


def as_table(trial: Trial, points: Sequence[Point]) -> dict[str, Any]:
    """Give a trial for programs.

    Parameters
    ----------
    trial : Trial
        Of one watch.
    points : sequence of Point
        Other limits.

    Returns
    -------
    dict
        What JSON knows but for times, which become text; what is not known is None.
    """
    rates = {"false_per_month": _known(trial.false_per_month), "delay_h": _known(trial.delay_h)}
    curve = [{name: _known(value) for name, value in asdict(one).items()} for one in points]
    return {**asdict(trial), **rates, "missed": trial.missed, "curve": curve, "toml": [*toml(trial.watch)]}


def _known(value: Any) -> Any:
    return None if isinstance(value, float) and math.isnan(value) else value
