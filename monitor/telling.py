"""What the commands print: results become lines of text."""

from __future__ import annotations

from collections.abc import Iterator

from ingest.exports import Description
from ingest.unit import Unit
from monitor import wording
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
