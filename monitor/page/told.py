"""What the views know of alerts: each with its verdict and sentence, and how one is written in a line."""

from __future__ import annotations

from datetime import timedelta
from html import escape

from ingest.unit import Unit
from monitor import board, dossier, tellverdict, wording
from monitor.alerts import SHELVED
from monitor.board import SHIFT, Reading
from monitor.dossier import Dossier, Present
from monitor.page import data, shell


def dossiers(unit: Unit, known: data.Span, length: timedelta) -> tuple[Dossier, ...]:
    """Give the open alerts of a unit, and those raised lately, with all that belongs to them.

    Parameters
    ----------
    unit : Unit
        One reactor.
    known : Span
        Time that the store knows.
    length : timedelta
        How far back from its end those reach that are back to normal.
    """
    since = (known.last - length).to_pydatetime()
    found = [one for one in data.alerts(unit, shell.clock()) if one[1].open or one[0].raised >= since]
    names = {alert.watch: alert.figure for alert, _ in found}
    present = Present(
        figures=data.figures(unit),
        readings={name: _watched(unit, name, figure) for name, figure in names.items()},
        end=known.last.to_pydatetime(),
    )
    return dossier.dossiers(unit, found, data.episodes(unit), present)


def _watched(unit: Unit, name: str, figure: str) -> Reading | None:
    """Newest value of the window and mode that a watch looks at."""
    watch = next((w for w in unit.watches if w.name == name), None) or board.watch_on(unit, figure)
    window = watch.window if watch and watch.window in unit.windows else SHIFT
    return board.reading(data.latest(unit, window), figure, board.mode_of(watch))


def groups(
    found: tuple[Dossier, ...], known: data.Span, *, every: bool, length: timedelta
) -> tuple[tuple[Dossier, ...], ...]:
    """Choose the alerts to show, those of one cause together.

    Parameters
    ----------
    found : tuple of Dossier
        Of one unit.
    known : Span
        Time that the store knows.
    every : bool
        Whether those back to normal are shown too.
    length : timedelta
        How far back these reach.
    """
    return dossier.shown(found, every=every, since=(known.last - length).to_pydatetime())


def head(one: Dossier, unit: Unit) -> str:
    """Write where an alert stands: shape and word of its condition, by whom, until when, its priority.

    Parameters
    ----------
    one : Dossier
    unit : Unit
        Gives the zone.

    Returns
    -------
    str
        HTML.
    """
    state = one.state
    by = f" by {state.who}" if state.who else ""
    until = ""
    if state.condition == SHELVED and state.until is not None:
        until = f" until {wording.local_time(state.until, unit.time_zone, now=shell.clock())}"
    closed = f", closed as {state.closed_as}" if state.closed_as else ""
    css = "alarm" if one.asks else "some"
    words = escape(f"{state.condition}{by}{until}{closed}")
    return f"<span class='{css}'>{one.shape} {words}</span>, {one.alert.priority} priority"


def verdict(one: Dossier) -> str:
    """Write the verdict of an alert in one sentence.

    Parameters
    ----------
    one : Dossier

    Returns
    -------
    str
        HTML.
    """
    if one.verdict is None:
        return "<span class='quiet'>No verdict yet.</span>"
    return f"Verdict: {escape(tellverdict.headline(one.verdict))}"
