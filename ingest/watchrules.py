"""What has to hold for a watch of a unit file: its figure and window, its limits, or its test for drift."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import timedelta

from ingest import chemistry, quantities
from ingest.draft import Draft, undeclared
from ingest.entries import Entry
from ingest.errors import Problem
from ingest.unit import NO_RATES

DAY = timedelta(days=1)
PER_PASS = ("conversion", "selectivity on converted", "yield on feed")


def figure_names(draft: Draft) -> tuple[str, ...]:
    """List the figures that can be watched, by the chemistry alone.

    Parameters
    ----------
    draft : Draft
        The file.

    Returns
    -------
    tuple of str
        Names of figures, as a watch writes them.
    """
    entry = draft.chemistry
    wanted, unwanted = entry.get("wanted"), entry.get("unwanted") or ()
    targets = (*unwanted, "all unwanted")
    compositions = draft.reacting()
    carriers = [name for name in unwanted if entry.get("key_element") in dict(compositions.get(name, ()))]
    elements = chemistry.elements_of(list(compositions.values()))
    return (
        "conversion",
        "selectivity on converted",
        "yield on feed",
        *(f"overall selectivity to {name}" for name in targets),
        *(f"share of {name}" for name in (*carriers, "unseen")),
        *(f"{chemistry.ELEMENT_NAMES.get(symbol, symbol)} closure" for symbol in elements),
        "converted closure",
        *(f"make of {name}" for name in (wanted, *unwanted)),
        "specific consumption fed",
        "specific consumption consumed",
        *(f"instantaneous selectivity to {name}" for name in targets if draft.once["hold_up"].values),
        *(f"{name} per pass" for name in PER_PASS if draft.many["node"]),
        *(["recycle ratio"] if any(entry.get("role") for entry in draft.many["stream"]) else []),
    )


def hold(draft: Draft) -> Iterator[Problem]:
    """Yield what is wrong with watches: each names a figure and a window that exist, and can be judged.

    Parameters
    ----------
    draft : Draft
        The file.
    """
    windows = draft.once["unit"].get("windows") or ()
    for watch in draft.many["watch"]:
        yield from _figure_is_there(watch, draft)
        if windows and watch.get("window") and watch.get("window") not in windows:
            words = quantities.duration_words(watch.get("window"))
            allowed = ", ".join(quantities.duration_words(window) for window in windows)
            yield Problem(
                watch.at("window"), f"{words} is not among the unit's windows", f"write one of {allowed}"
            )
        yield from _limits(watch) if watch.get("test") == "limits" else _drift_test(watch, draft)
    yield from _watch_names(draft)


def _figure_is_there(watch: Entry, draft: Draft) -> Iterator[Problem]:
    """The figure is one of the unit's; where outlet data cannot give it, that is the reason told."""
    figure, reactor = watch.get("figure"), draft.once["unit"].get("reactor")
    known = figure_names(draft)
    rates = str(figure).startswith("instantaneous selectivity")
    if rates and reactor in NO_RATES and not draft.once["hold_up"].values:
        what, remedy = NO_RATES[reactor]
        yield Problem(watch.at("figure"), f"'{figure}' {what}", remedy)
    else:
        yield from undeclared(watch, "figure", [figure] if figure else [], known, "figure of this unit")


def _limits(watch: Entry) -> Iterator[Problem]:
    """At least one limit, low below high, and a deadband smaller than the room between."""
    low, high, deadband = watch.get("low"), watch.get("high"), watch.get("deadband")
    yield from _counts(watch)
    if watch.lacks("low") and watch.lacks("high"):
        yield Problem(watch.place, "has neither low nor high", "write low = ... or high = ...")
    if low is None or high is None:
        return
    if low >= high:
        yield Problem(
            watch.at("low"), f"{low:g} is not below high = {high:g}", "write the lower limit as low"
        )
    elif deadband is not None and deadband >= high - low:
        what = f"{deadband:g} is not smaller than the band of {high - low:g}"
        yield Problem(watch.at("deadband"), what, "write a smaller deadband or wider limits")


def _counts(watch: Entry) -> Iterator[Problem]:
    """Count and among are whole numbers, and no more are counted than there are."""
    count, among = watch.get("count"), watch.get("among")
    for key, number in (("count", count), ("among", among)):
        if number is not None and number % 1:
            yield Problem(watch.at(key), f"{number:g} is no whole number", f"write {key} = {round(number)}")
    if None not in (count, among) and count > among:
        what = f"{count:g} windows are more than among = {among:g}"
        yield Problem(watch.at("count"), what, f"write among = {count:g} or more")


def _drift_test(watch: Entry, draft: Draft) -> Iterator[Problem]:
    """A test for drift has no limits, a healthy period to learn from, and windows that divide a day."""
    for key in ("low", "high"):
        if watch.get(key) is not None:
            what = f"a test for drift ({watch.get('test')}) has no limits"
            yield Problem(watch.at(key), what, f"leave {key} out, or write another watch with it")
    if not draft.once["healthy"].values and not draft.once["healthy"].told:
        what = "a test for drift needs a healthy period to learn from"
        yield Problem(watch.at("test"), what, "write a section [healthy]")
    window = watch.get("window")
    if window is not None and DAY % window:
        words = quantities.duration_words(window)
        yield Problem(watch.at("window"), f"{words} do not divide a day", 'write for example window = "1h"')


def watch_name(watch: Entry) -> str | None:
    """Give the name of a watch: as written, else figure and window.

    Parameters
    ----------
    watch : Entry
        A watch.

    Returns
    -------
    str or None
        None when neither could be read.
    """
    if watch.get("name"):
        return str(watch.get("name"))
    if watch.get("figure") and watch.get("window"):
        test = "" if watch.get("test") in (None, "limits") else f" {watch.get('test')}"
        return f"{watch.get('figure')} {quantities.duration_words(watch.get('window'))}{test}"
    return None


def _watch_names(draft: Draft) -> Iterator[Problem]:
    """Names of watches are unique, those made from figure and window too."""
    seen: set[str] = set()
    for watch in draft.many["watch"]:
        name = watch_name(watch)
        if name in seen:
            yield Problem(
                watch.at("name"), f"'{name}' is the name of two watches", 'write name = "..." for one'
            )
        seen |= {name} if name else set()
