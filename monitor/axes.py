"""Axes in plant time and the inks of both themes: what every chart shares.

Instants lie on a UTC scale and every label is worked out here, so that no browser's own zone can move it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from monitor import wording

Spec = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Ink:
    """The colours of one theme; series and alarm colours are of the Okabe-Ito set (2008)."""

    text: str
    quiet: str
    grid: str
    shade: str
    series: str
    alarm: str
    alarm_text: str
    tag: str  # behind white text


LIGHT = Ink(
    text="#1c2a33", quiet="#4f5d66", grid="#e2e6e4", shade="#7d8a92", series="#0072B2",
    alarm="#D55E00", alarm_text="#a34400", tag="#00607f",
)  # fmt: skip
DARK = Ink(
    text="#e4eaec", quiet="#a9b6bd", grid="#2c383f", shade="#8b99a1", series="#56B4E9",
    alarm="#D55E00", alarm_text="#f08b4b", tag="#23586a",
)  # fmt: skip


def microseconds(index: pd.Index) -> NDArray[np.int64]:
    """Give the instants of a tz-aware index as whole microseconds, whatever its own resolution.

    Parameters
    ----------
    index : DatetimeIndex, shape (t,)
        Zone-aware.

    Returns
    -------
    ndarray of int64, shape (t,)
        [us since epoch, UTC].
    """
    return pd.DatetimeIndex(index).tz_convert("UTC").as_unit("us").asi8.copy()


def plant_time(index: pd.DatetimeIndex, zone: str) -> NDArray[np.object_]:
    """Write instants in plant time with the zone's name, for tooltips.

    Parameters
    ----------
    index : DatetimeIndex, shape (t,)
        Zone-aware.
    zone : str
        IANA name.

    Returns
    -------
    ndarray of str, shape (t,)
        `14 Apr 2026 09:20 CEST`.
    """
    return _strip(index.tz_convert(zone).strftime("%d %b %Y %H:%M %Z"))


TICK_HOURS = (0.25, 0.5, 1, 2, 3, 6, 12)
TICK_DAYS = (1, 2, 7, 14)
TICK_MONTHS = (1, 2, 3, 6, 12, 24, 60)


def ticks(first: pd.Timestamp, last: pd.Timestamp, zone: str, *, most: int) -> list[tuple[str, str]]:
    """Choose round plant times for an axis, with their labels; right through both clock changes.

    Parameters
    ----------
    first, last : Timestamp
        Span shown, zone-aware.
    zone : str
        IANA name of the plant's zone.
    most : int
        Greatest number of ticks.

    Returns
    -------
    list of (str, str)
        ISO instant ending in Z, and its label: `09:00`, `14 Apr`, `Apr 2026`.
    """
    days = (last - first) / pd.Timedelta(days=1)
    for hours in TICK_HOURS:
        if 24 * days / hours < most:
            return _hour_ticks(first, last, zone, hours)
    for step in TICK_DAYS:
        if days / step < most:
            return _labelled(_days(first, last, zone, f"{step}D"), "%d %b")
    months = next((m for m in TICK_MONTHS if days / 30.4 / m < most), TICK_MONTHS[-1])
    return _labelled(_days(first, last, zone, f"{months}MS"), "%b %Y")


def _hour_ticks(first: pd.Timestamp, last: pd.Timestamp, zone: str, hours: float) -> list[tuple[str, str]]:
    """Keep the quarter hours that are round in plant time; midnight bears the date."""
    quarters = pd.date_range(first.ceil("15min"), last, freq="15min").tz_convert(zone)
    minute = quarters.hour * 60 + quarters.minute
    kept = quarters[minute % round(hours * 60) == 0]
    midnight = (kept.hour == 0) & (kept.minute == 0)
    words = np.where(midnight, _strip(kept.strftime("%d %b")), kept.strftime("%H:%M"))
    return list(zip(instants(kept), words.tolist(), strict=True))


def _days(first: pd.Timestamp, last: pd.Timestamp, zone: str, freq: str) -> pd.DatetimeIndex:
    """Plant midnights inside the span, counted from the first one."""
    start = first.tz_convert(zone).ceil("D", nonexistent="shift_forward", ambiguous=True)
    return pd.date_range(start, last.tz_convert(zone), freq=freq, normalize=True)


def _labelled(index: pd.DatetimeIndex, form: str) -> list[tuple[str, str]]:
    return list(zip(instants(index), _strip(index.strftime(form)).tolist(), strict=True))


def _strip(words: pd.Index) -> NDArray[np.object_]:
    """Take the nought off 04 Apr; the format letter that would do it is not known on every system."""
    return np.asarray(words.str.lstrip("0"), dtype=object)


def instants(index: pd.DatetimeIndex) -> list[str]:
    """Write ISO instants ending in Z, the only form that axis values and domains take.

    Parameters
    ----------
    index : DatetimeIndex, shape (t,)
        Zone-aware.

    Returns
    -------
    list of str
        `2026-04-14T07:20:00Z`.
    """
    return index.tz_convert("UTC").strftime("%Y-%m-%dT%H:%M:%SZ").tolist()


def frame_spec(ink: Ink) -> Spec:
    """Give what all charts share: canvas, plain frame, fonts and the ink of the theme.

    Parameters
    ----------
    ink : Ink
        Colours.

    Returns
    -------
    dict
        A specification without marks.
    """
    axis = {
        "labelColor": ink.quiet, "titleColor": ink.quiet, "gridColor": ink.grid, "domainColor": ink.grid,
        "tickColor": ink.grid, "labelFontSize": 12, "titleFontSize": 12, "titleFontWeight": "normal",
    }  # fmt: skip
    return {
        "$schema": "https://vega.github.io/schema/vega-lite/v6.json",
        "background": "transparent",
        "width": "container",
        "autosize": {"type": "fit-x", "contains": "padding"},
        "padding": {"left": 2, "right": 8, "top": 4, "bottom": 2},
        "usermeta": {"embedOptions": {"renderer": "canvas"}},
        "config": {"axis": axis, "view": {"stroke": None}, "font": "Source Sans, sans-serif"},
    }


def time_scale(first: pd.Timestamp, last: pd.Timestamp, zone: str, *, title: bool) -> Spec:
    """Give the time channel: a UTC scale whose labels are worked out here in plant time.

    Parameters
    ----------
    first, last : Timestamp
        Span shown, zone-aware.
    zone : str
        IANA name of the plant's zone.
    title : bool
        Whether the axis names itself and the zone.

    Returns
    -------
    dict
        The channel without its field.
    """
    places = ticks(first, last, zone, most=9)
    names = dict.fromkeys(wording.zone_name(t.to_pydatetime(), zone) for t in (first, last))
    # The label is looked up by the instant, so that no formatter can put it into another zone.
    table = {str(pd.Timestamp(at).value // 10**6): label for at, label in places}
    axis: Spec = {
        "values": [at for at, _ in places],
        "labelExpr": f"({_literal(table)})[toString(toNumber(datum.value))] || ''",
        "title": f"plant time, {' / '.join(names)}" if title else None,
        "grid": True, "labelFlush": False, "labelOverlap": "greedy", "labelSeparation": 6,
    }  # fmt: skip
    domain = instants(pd.DatetimeIndex([first, last]))
    return {"type": "temporal", "scale": {"type": "utc", "domain": domain}, "axis": axis}


def _literal(table: dict[str, str]) -> str:
    """Write a lookup table in Vega's expression language; labels hold only letters, digits and ':'."""
    return "{" + ",".join(f"'{key}':'{word}'" for key, word in table.items()) + "}"
