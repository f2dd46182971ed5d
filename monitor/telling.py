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
from monitor.expected import JUDGED_BY, Expectation
from monitor.fit import ALONE, BASELINE, CHANGE, IN_A_ROW, LENGTHS
from monitor.judge import Judgement
from monitor.run import Episode, PassResult
from monitor.suspicion import ONE, OPEN, PLAUSIBLE, Finding, Fit, Part, Report


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
    for one in found.parallel:
        yield f"not told apart {', '.join(one)}: when one is off, the balance cannot tell which"
    yield f"unseen         {', '.join(found.unseen) or 'nothing: every flow is determined'}"
    yield f"figures        {', '.join(found.figures)}"
    yield from (f"not given      {words}" for words in found.not_given)
    if found.unseen_figures:
        yield f"not seen       {', '.join(found.unseen_figures)}: the readings do not determine them"
    yield from _needs(found.needs)
    yield f"watches        {', '.join(found.watches) or 'none'}"
    yield from _usual(found)


def _needs(needs: dict[str, tuple[str, ...]]) -> Iterator[str]:
    """Tell which instruments figures cannot do without, those with the same ones together."""
    for own in dict.fromkeys(needs.values()):
        names = [name for name, needed in needs.items() if needed == own]
        if own:
            yield f"lost           {', '.join(names)}: without any one of {', '.join(own)}"
        else:
            yield f"kept           {', '.join(names)}: without any one instrument"


def _usual(found: Judgement) -> Iterator[str]:
    """Tell the half-widths to expect, and what would narrow them."""
    if found.usual is None:
        yield "half-widths    need the usual readings: give --store, nothing is guessed"
        return
    span = (
        wording.local_time(wording.utc(time_us), found.time_zone)
        for time_us in (found.usual.first_us, found.usual.last_us)
    )
    yield f"half-widths    95 %, at the median readings while running from {' to '.join(span)};"
    yield "               over one cell, 8 h, 24 h; and which added instrument would narrow the 8 h most"
    yield from (f"  {_expected(one)}" for one in found.usual.figures)
    for name, quality in found.offered.items():
        yield f"could be added {name}: {quality}"
    if not found.offered:
        yield "could be added nothing: all is read, or the unit has no channel and no meter to compare with"


def _expected(one: Expectation) -> str:
    """Tell one figure at the usual readings."""
    told = [wide for wide in one.half_width if math.isfinite(wide)]
    if not told:
        return f"{one.figure:<40} cannot be told at these readings"
    if not max(told):
        return f"{one.figure:<40} fixed by the balance itself"
    places = wording.decimals_for(min(told))
    wide = "  ".join(f"±{wording.number(one, places):>7}" for one in one.half_width)
    value = f"{wording.number(one.value, places)} {one.unit}"
    left = 100 * (1 - one.narrowed / one.half_width[JUDGED_BY])
    with_it = f"  {wording.number(left, 0)} % narrower with a {one.narrowed_by}" if one.narrowed_by else ""
    return f"{one.figure:<40} {value:>16}  {wide}{with_it}"


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
        days = f"{unit.days} day{'s'[: unit.days != 1]}"
        solved = f" ({days}, {unit.cells} cells, {unit.solved} of them solved)" if unit.cells else ""
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


def suspected(found: Report) -> Iterator[str]:
    """Tell whether the balance fits, and if not, what is suspected and what to check first.

    Parameters
    ----------
    found : Report
        Of one unit.

    Yields
    ------
    str
        One line.
    """
    against = f"; healthy: {_from_to(found, *found.healthy_us)}" if found.healthy_us else ""
    yield f"{found.name} [{found.unit}]: {_from_to(found, *found.span_us)}{against}"
    yield f"{'windows':<9} {'alone':<16} as a change from the healthy time"
    for length in LENGTHS:
        told = {one.kind: _fitting(one) for one in found.fits if one.window == length}
        yield f"{wording.window(length):<9} {told[ALONE]:<16} {told.get(CHANGE, 'not asked: no baseline')}"
    for one in found.fits:
        if one.kind == BASELINE:
            warning = "; it holds a fault: name a better one" if one.failed > 1 else ""
            yield f"healthy time, alone: {_fitting(one)} over {wording.window(one.window)}{warning}"
    share = wording.number(100 * found.false_share, 0)
    yield f"By chance {share} % of healthy windows fail; a reading is suspected when {IN_A_ROW} in a row do."
    for finding in found.findings:
        yield from _finding(found, finding)
    parts = [part for finding in found.findings for one in finding.suspects for part in one.parts]
    if any(part.size < 0 for part in parts):
        yield "Where a channel reads low and is found right, look for a product that no channel sees."
    if not any(one.tested for one in found.fits if one.kind != BASELINE):
        yield "not tested: no window holds enough cells with readings to spare"
    elif not found.findings:
        yield "fits: no reading is suspected"


def _fitting(one: Fit) -> str:
    """Tell how many windows fit."""
    return f"{one.tested - one.failed} of {one.tested} fit" if one.tested else "not tested"


def _from_to(found: Report, first_us: int, last_us: int) -> str:
    """Write a span in plant time."""
    first, last = (wording.local_time(wording.utc(one), found.time_zone) for one in (first_us, last_us))
    return f"{first} to {last}"


def _finding(report: Report, one: Finding) -> Iterator[str]:
    """Tell one failure: when, what, how much, what each suspect does to the figures, what to check."""
    since = wording.local_time(wording.utc(one.since_us), report.time_zone)
    when = f"since {since}" if one.is_lasting else f"from {_from_to(report, one.since_us, one.until_us)}"
    how = "alone" if one.kind == ALONE else "as a change from the healthy time"
    yield ""
    yield f"does not fit ({how}) {when}: {_answer(one)}"
    for number, suspect in enumerate(one.suspects, start=1):
        for place, part in enumerate(suspect.parts):
            mark = f"({number})" if not place else "and"
            yield f"  {mark} {part.name} {_size(part, one.kind)}; check first: {part.check}"
    worst = wording.local_time(wording.utc(one.worst_us), report.time_zone)
    yield f"  {f'{wording.window(one.window)} from {worst}':<45} {'as shown':>12}" + "".join(
        f"  without ({number})" for number in range(1, len(one.suspects) + 1)
    )
    for place, (name, unit, value) in enumerate(one.figures):
        cells = [_value(suspect.without[place]) for suspect in one.suspects]
        yield f"  {f'{name}, {unit}':<45} {_value(value):>12}" + "".join(f"  {text:>11}" for text in cells)


def _answer(one: Finding) -> str:
    """Tell in a sentence what the failure points at."""
    names = [suspect.name for suspect in one.suspects if suspect.is_plausible]
    if one.answer == ONE:
        return f"{names[0]} is suspected"
    if one.answer == OPEN:
        return f"cannot tell which of {', '.join(names)}: their traces are alike"
    causes = "several causes, or one that no instrument here shows"
    if not one.suspects:
        return f"{causes}: no pair is found that explains it"
    if len(one.suspects) == 1:
        return f"{causes}; only this pair explains it: {names[0]}"
    more = f" and {one.untold} more" if one.untold else ""
    return f"{causes}; cannot tell which pair: {'; '.join(names)}{more}"


def _size(part: Part, kind: str) -> str:
    """Tell by how much a suspect would have to be off, or to have moved."""
    told = wording.amount(100 * abs(part.size), 100 * part.half_width, "%")
    unlikely = "" if abs(part.size) <= PLAUSIBLE else " (unlikely: more than half of it)"
    up = part.size > 0
    how = f"reads too {'high' if up else 'low'}" if kind == ALONE else f"has moved {'up' if up else 'down'}"
    return f"{how} by {told} of its reading{unlikely}"


def _value(value: float) -> str:
    """Write a figure, or that it is lost."""
    return "not seen" if math.isnan(value) else wording.number(value, 2)
