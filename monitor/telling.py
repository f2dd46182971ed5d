"""What the commands print: results become lines of text."""

from __future__ import annotations

import math
from collections.abc import Iterator
from zoneinfo import ZoneInfo

from ingest.exports import Description
from ingest.lag import AS_DECLARED, Lag
from ingest.unit import Unit
from monitor import wording
from monitor.delays import Analyzer, Delays
from monitor.judge import Judgement
from monitor.run import Episode, PassResult


def judged(found: Judgement) -> Iterator[str]:
    """Tell a judgement of a unit file.

    Parameters
    ----------
    found : Judgement
        Of one unit.

    Yields
    ------
    str
        One line.
    """
    yield f"{found.name} [{found.unit}]: no faults"
    yield f"streams        {', '.join(found.streams)}"
    yield f"balance        {found.flows} flows, {found.balances} balances, {found.readings} readings"
    yield f"freedom        {found.freedom} readings more than the flows need"
    yield f"checked        {', '.join(found.checked) or 'none: no reading can be checked by the others'}"
    for name in found.unchecked:
        yield f"not checked    {name}; without it unseen: {', '.join(found.lost_with[name]) or 'nothing'}"
    yield f"unseen         {', '.join(found.unseen) or 'nothing: every flow is determined'}"
    yield f"figures        {', '.join(found.figures)}"
    yield from (f"not given      {words}" for words in found.not_given)
    yield f"watches        {', '.join(found.watches) or 'none'}"


def described(found: Description, unit: Unit) -> Iterator[str]:
    """Tell how an export would be read.

    Parameters
    ----------
    found : Description
        Of one export.
    unit : Unit
        Whose tags are wanted; its zone is used for times.

    Yields
    ------
    str
        One line.
    """
    yield found.export
    yield from (f"  {line}" for line in found.dialect)
    for row in found.sample:
        readings = ", ".join(_reading(*reading) for reading in row.readings)
        yield f"  row {row.row}: {wording.local_time(wording.utc(row.time_us), unit.time_zone)}: {readings}"
    yield from (f"  {line}" for line in found.account.describe())


def _reading(tag: str, value: float, quality: str) -> str:
    """Tell one reading; a bad one has no value, and a quality that is not stated goes without saying."""
    if quality == "bad":
        return f"{tag} bad"
    return f"{tag} {value:g}" + ("" if quality == "unknown" else f" ({quality})")


def passed(result: PassResult) -> Iterator[str]:
    """Tell a pass; exports that were set aside are left to the error stream.

    Parameters
    ----------
    result : PassResult
        As `run.run_pass` gives it.

    Yields
    ------
    str
        One line.
    """
    for one in result.exports:
        if one.status != "set aside":
            yield f"{one.name}: {one.status}; {one.words}"
            yield from (f"  {line}" for line in (one.account.describe()[1:] if one.account else ()))
    yield from result.notes
    for unit in result.units:
        months = f"worked out {', '.join(unit.months)}" if unit.months else "nothing new"
        solved = f" ({unit.cells} cells, {unit.solved} of them solved)" if unit.cells else ""
        still = [one for one in unit.episodes if one.cleared is None]
        yield f"{unit.unit}: {months}{solved}; {len(unit.episodes)} episodes so far, {len(still)} open"
        yield from (f"  {_open(one, unit.time_zone)}" for one in still)


def _open(episode: Episode, zone: str) -> str:
    """Tell an open episode."""
    side = "below" if episode.side == "low" else "above"
    since = wording.local_time(episode.raised, zone)
    return f"{episode.watch}: {side} {wording.plain(episode.limit)} since {since} ({episode.priority})"


def delayed(found: Delays) -> Iterator[str]:
    """Tell how late the analyzers are: each day, then what follows from it.

    Parameters
    ----------
    found : Delays
        Of one unit.

    Yields
    ------
    str
        One line.
    """
    yield f"{found.name} [{found.unit}]: from a movement of the feeds to the analysis that shows it"
    for one in found.analyzers:
        yield f"{one.name}: declared {_minutes(one.declared_min)} min"
        yield from (f"  {_day(day, found.time_zone)}" for day in one.days)
    for one in found.analyzers:
        yield from _lags(one, found.time_zone)
    if not found.analyzers:
        yield "the unit file has no analyzer with a tag"
    yield "Nothing was changed: figures are worked out with the declared dead time."


def _day(day: Lag, zone: str) -> str:
    """Tell one local day."""
    date = _date(day.first_us, zone)
    if day.reason:
        return f"{date:>11}  {day.answer}: {day.reason}"
    return f"{date:>11}  {_estimate(day)}, {day.answer} ({day.analyses} analyses)"


def _lags(one: Analyzer, zone: str) -> Iterator[str]:
    """Tell each stretch of days over which the lag of an analyzer stayed, and what to do about it."""
    if not one.stretches:
        yield f"{one.name}: its lag could not be told on any of these days"
    for stretch in one.stretches:
        first = _date(stretch.first_us, zone)
        last = _date(stretch.last_us - 1, zone)
        first += " or before" if stretch.first_us == one.days[0].first_us else ""
        when = f"since {first}" if stretch is one.stretches[-1] else f"from {first} to {last}"
        if stretch.answer == AS_DECLARED:
            yield f"{one.name}: {_estimate(stretch)} {when}, as declared"
        else:
            declared = f"declared {_minutes(one.declared_min)} min"
            yield f"{one.name}: {declared}, the data say {_estimate(stretch)} {when}: {_remedy(stretch)}"


def _remedy(stretch: Lag) -> str:
    """Say what to do about a lag that is not the declared one."""
    if stretch.estimate_min < 0:
        return "results stand before their cause; check the clocks of analyzer and flow meters"
    return f'check the sample line flow, or set dead_time = "{stretch.estimate_min:.0f}min"'


def _estimate(lag: Lag) -> str:
    """Write a lag with its interval in whole minutes."""
    return f"{_minutes(lag.estimate_min)} ± {math.ceil(lag.half_width_min)} min"


def _minutes(value: float) -> str:
    """Write minutes as they are declared."""
    return wording.number(value, 0 if value == round(value) else 1)


def _date(time_us: int, zone: str) -> str:
    """Write the local day of an instant."""
    local = wording.utc(time_us).astimezone(ZoneInfo(zone))
    return f"{local.day} {local:%b %Y}"
