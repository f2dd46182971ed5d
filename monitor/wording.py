"""Numbers and conditions become sentences: units, local time, the reason where a number is missing."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

from ingest.unit import PRIORITIES

MINUS = "\u2212"

# Why a figure is not shown: what stands in its place, and what it means. Keys as in windows.REASONS.
MISSING = {
    "": ("no figure yet", "No window has been worked out here yet."),
    "too little coverage": (
        "too little coverage",
        "Too little of the running time in this window has a valid balance.",
    ),
    "too little made to tell": (
        "too little made to tell",
        "The denominator is smaller than twice its own uncertainty.",
    ),
    "cannot be seen": (
        "cannot be seen",
        "The readings present do not fix this figure; an instrument it needs is missing.",
    ),
    "not running": ("not running", "The unit was not running in this window."),
    "balance did not solve": (
        "balance did not solve",
        "The readings of this window contradict each other too much to be reconciled.",
    ),
}

# The standing of a figure against its limits: shape and rank (worst first). The word is written beside it.
SHAPES = {
    "above": "\u25b2",
    "below": "\u25bc",
    "near": "\u25d0",
    "within": "\u25cf",
    "free": "\u25cb",
    "missing": "\u25c7",
}
PRIORITY_RANK = {priority: rank for rank, priority in enumerate(PRIORITIES)}
OPERATING_SHAPES = {
    "running": "\u25cf",
    "starting": "\u25d4",
    "turned down": "\u25d2",
    "down": "\u25a0",
    "not known": "\u25c7",
}

CAUTIONS = (
    "Advice only: no safety function, no protective alarm, no basis for interlock or trip settings; those "
    "stay with the plant's own protective systems (IEC 61511 / ISA-84).",
    "Flammability and oxygen limits, runaway protection and emergency response stay with the protective "
    "systems and the operating procedures.",
    "Figures are delayed and averaged: do not act on them at once. Changes to operation go through the "
    "plant's management of change; local codes and licensed professional practice come first.",
    "Figures for contracts, tax or emissions need the site's certified method. Nothing is written to control "
    "systems.",
)


@dataclass(frozen=True, slots=True)
class Standing:
    """How a value stands against its limits: a key of SHAPES and the words to show beside the shape."""

    kind: str
    words: str

    @property
    def shape(self) -> str:
        """Give the shape that goes with the words, so that colour is never alone."""
        return SHAPES[self.kind]


def decimals_for(half_width: float) -> int:
    """Give the decimals that show two significant digits of a half-width (JCGM 100:2008, 7.2.6).

    Parameters
    ----------
    half_width : float
        Positive half-width, any unit.

    Returns
    -------
    int
        Decimals; negative where tens or hundreds are the last digit that means anything; at most 6.
    """
    places = 1 - math.floor(math.log10(half_width))
    # 0.0996 becomes 0.10, which has one digit less behind the point than 0.0996 asked for.
    if round(half_width, places) >= 10.0 ** (2 - places):
        places -= 1
    return min(places, 6)


def number(value: float, decimals: int) -> str:
    """Write a number with a true minus sign and no negative zero; negative decimals round to tens.

    Parameters
    ----------
    value : float
        Finite number, any unit.
    decimals : int
        Digits behind the point.

    Returns
    -------
    str
        The digits, thousands parted by a narrow no-break space.
    """
    text = f"{round(value, decimals):,.{max(decimals, 0)}f}".replace(",", "\u202f")
    if text.startswith("-"):
        text = text[1:] if not text.strip("-0.\u202f") else MINUS + text[1:]
    return text


def plain(value: float) -> str:
    """Write a number that somebody typed, such as a limit: as typed, one decimal at least.

    Parameters
    ----------
    value : float
        Finite number, any unit.

    Returns
    -------
    str
        Shortest digits that give the number back, at most 6 decimals.
    """
    text = f"{value:.6f}".rstrip("0")
    return number(value, max(len(text.partition(".")[2]), 1))


def amount(value: float, half_width: float, unit: str) -> str:
    """Write value, half-width and unit with the digits that the half-width supports.

    Parameters
    ----------
    value : float
        The figure [unit]; NaN gives a dash.
    half_width : float
        95 % half-width [unit]; NaN or 0 gives four significant digits and no half-width.
    unit : str
        Written after the number; may be empty.

    Returns
    -------
    str
        `75.12 ± 0.63 %`.
    """
    if not math.isfinite(value):
        return "\u2013"
    tail = f"\u00a0{unit}" if unit else ""
    if not math.isfinite(half_width) or half_width <= 0:
        size = math.floor(math.log10(abs(value))) if value else 0
        return number(value, min(max(3 - size, 0), 6)) + tail
    places = decimals_for(half_width)
    return f"{number(value, places)}\u00a0±\u00a0{number(half_width, places)}{tail}"


def zone_name(moment: datetime, zone: str) -> str:
    """Name the plant's zone at a moment: its letters (CEST), or the offset where it has none.

    Parameters
    ----------
    moment : datetime
        Zone-aware.
    zone : str
        IANA name.

    Returns
    -------
    str
        `CEST` or `UTC+03:00`.
    """
    local = moment.astimezone(ZoneInfo(zone))
    name = local.tzname() or ""
    return name if name.isalpha() else f"UTC{local:%z}"[:6] + ":" + f"{local:%z}"[3:5]


def local_time(moment: datetime, zone: str, *, now: datetime | None = None) -> str:
    """Write a moment in plant time with the zone's name, 24-hour clock.

    Parameters
    ----------
    moment : datetime
        Zone-aware.
    zone : str
        IANA name of the plant's zone.
    now : datetime, optional
        Zone-aware; the year is written where it differs from the year of `now`, or where there is none.

    Returns
    -------
    str
        `14 Apr 09:20 CEST`.
    """
    local = moment.astimezone(ZoneInfo(zone))
    same_year = now is not None and now.astimezone(ZoneInfo(zone)).year == local.year
    year = "" if same_year else f" {local.year}"
    return f"{local.day} {local:%b}{year} {local:%H:%M} {zone_name(moment, zone)}"


def duration(length: timedelta) -> str:
    """Write a length of time in its two largest parts.

    Parameters
    ----------
    length : timedelta
        Not negative.

    Returns
    -------
    str
        `2 d 4 h`, `5 h 10 min`, `12 min`, `under a minute`.
    """
    minutes = int(length.total_seconds() // 60)
    if minutes < 1:
        return "under a minute"
    days, hours, rest = minutes // 1440, minutes // 60 % 24, minutes % 60
    parts = [(days, "d"), (hours, "h")] if days else [(hours, "h"), (rest, "min")]
    return " ".join(f"{count} {name}" for count, name in parts if count)


def window(length: timedelta) -> str:
    """Name a window as people say it: 1 h, 8 h, 24 h, 7 d.

    Parameters
    ----------
    length : timedelta
        Whole hours or minutes.

    Returns
    -------
    str
        Days from two days on.
    """
    hours = length / timedelta(hours=1)
    if hours >= 48 and hours % 24 == 0:
        return f"{int(hours // 24)} d"
    return f"{int(hours)} h" if hours == int(hours) else f"{int(length / timedelta(minutes=1))} min"


def standing(
    value: float, half_width: float, *, low: float | None, high: float | None, unit: str
) -> Standing:
    """Say how a value stands against its limits; "near" when the limit lies inside the error bar.

    Parameters
    ----------
    value, half_width : float
        The figure and its 95 % half-width [unit]; a NaN value gives "missing".
    low, high : float or None
        Limits [unit]; None where there is no such limit.
    unit : str
        Of the figure.

    Returns
    -------
    Standing
        Kind and words.
    """
    if not math.isfinite(value):
        return Standing("missing", "not shown")
    if low is None and high is None:
        return Standing("free", "no limit set")
    margin = half_width if math.isfinite(half_width) else 0.0
    for kind, limit, beyond in _distances(value, low, high):
        if beyond > 0:
            sure = "" if beyond > margin else ", by less than its error bar"
            return Standing(kind, f"{kind} {plain(limit)} {unit}{sure}".strip())
    for _, limit, beyond in _distances(value, low, high):
        if beyond > -margin:
            return Standing("near", f"within; {plain(limit)} {unit} lies inside the error bar")
    return Standing("within", f"within {limits(low, high, unit)}")


def _distances(value: float, low: float | None, high: float | None) -> list[tuple[str, float, float]]:
    """List each limit with how far the value lies beyond it (negative: inside)."""
    found = [] if low is None else [("below", low, low - value)]
    return found if high is None else [*found, ("above", high, value - high)]


def limits(low: float | None, high: float | None, unit: str) -> str:
    """Write the limits of a watch.

    Parameters
    ----------
    low, high : float or None
        Limits [unit].
    unit : str
        Written once, at the end.

    Returns
    -------
    str
        `97.0 to 103.0 %`, `at least 76.0 %`, `at most 2.0 %`, `no limit`.
    """
    tail = f" {unit}" if unit else ""
    if low is not None and high is not None:
        return f"{plain(low)} to {plain(high)}{tail}"
    if low is not None:
        return f"at least {plain(low)}{tail}"
    return f"at most {plain(high)}{tail}" if high is not None else "no limit"


@dataclass(frozen=True, slots=True)
class Told:
    """What is needed to tell of one episode; times zone-aware UTC, `cleared` None while it is open.

    `drift` tells that the limit is what the figure was expected to be.
    """

    figure: str
    unit: str
    side: str  # "low" or "high"
    limit: float
    raised: datetime
    cleared: datetime | None
    worst: float
    worst_at: datetime | None
    drift: bool = False

    @property
    def beyond(self) -> str:
        """Say what the figure is beyond: `below 76.0 %`, `below the 82.38 % expected`."""
        side = "below" if self.side == "low" else "above"
        if self.drift:
            return f"{side} the {number(self.limit, 2)} {self.unit}".rstrip() + " expected"
        return f"{side} {plain(self.limit)} {self.unit}".strip()


def episode(told: Told, *, value: float, half_width: float, now: datetime, zone: str) -> str:
    """Tell an episode in one sentence: what, beyond which limit, since when, now, and the worst of it.

    Parameters
    ----------
    told : Told
        The episode.
    value, half_width : float
        The figure now and its 95 % half-width [the figure's unit]; NaN when it is missing now.
    now : datetime
        End of the last window (zone-aware), the moment of `value`.
    zone : str
        IANA name of the plant's zone.

    Returns
    -------
    str
        `Yield on feed has been below 76.0 % since 14 Apr 09:20 CEST (5 h); now 75.12 ± 0.63 %.`
    """
    what = f"{told.figure[:1].upper()}{told.figure[1:]}"
    limit = told.beyond
    since = local_time(told.raised, zone, now=now)
    worst = _worst(told, decimals_for(half_width) if half_width > 0 else 2, now, zone)
    if told.cleared is not None:
        until = local_time(told.cleared, zone, now=now)
        return f"{what} was {limit} from {since} to {until} ({duration(told.cleared - told.raised)}){worst}."
    lasted = duration(max(now - told.raised, timedelta(0)))
    current = f"now {amount(value, half_width, told.unit)}" if math.isfinite(value) else "not shown now"
    return f"{what} has been {limit} since {since} ({lasted}); {current}{worst}."


def _worst(told: Told, decimals: int, now: datetime, zone: str) -> str:
    """Write the worst value and its time, where they are known."""
    if told.worst_at is None or not math.isfinite(told.worst):
        return ""
    value = f"{number(told.worst, decimals)} {told.unit}".strip()
    return f", worst {value} at {local_time(told.worst_at, zone, now=now)}"


def age(moment: datetime | None, *, now: datetime, zone: str) -> str:
    """Say when something last happened and how long ago that is.

    Parameters
    ----------
    moment : datetime or None
        Zone-aware; None when it never happened.
    now : datetime
        Zone-aware.
    zone : str
        IANA name of the plant's zone.

    Returns
    -------
    str
        `14 Apr 14:10 CEST, 12 min ago`; `never`.
    """
    if moment is None:
        return "never"
    written = local_time(moment, zone, now=now)
    ahead = moment - now
    if ahead > timedelta(minutes=1):
        return f"{written}, {duration(ahead)} ahead of this computer's clock"
    return f"{written}, {duration(max(now - moment, timedelta(0)))} ago"


def utc(us: int) -> datetime:
    """Make a zone-aware moment from microseconds.

    Parameters
    ----------
    us : int
        Microseconds since epoch [us], UTC.

    Returns
    -------
    datetime
        Zone-aware UTC.
    """
    return datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=int(us))
