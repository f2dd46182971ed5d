"""What is printed about ageing: rates with their intervals, and the dates by which limits are reached."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from datetime import date, timedelta

from monitor import wording
from monitor.aged import Aged, Limit
from monitor.ageing import HORIZON_D, Reach
from monitor.trendtests import Trend

TONNES = 1000.0


def told(found: Sequence[Aged]) -> Iterator[str]:
    """Tell how figures age.

    Parameters
    ----------
    found : sequence of Aged
        Of one unit.

    Yields
    ------
    str
        One line.
    """
    if not found:
        yield 'No figure has a drift watch: write test = "cusum" in a [[watch]] and a section [healthy].'
    for one in found:
        yield from _figure(one)


def _figure(one: Aged) -> Iterator[str]:
    """Tell one figure."""
    if one.rates is None or one.first is None or one.last is None:
        yield f"{one.figure}: {one.why}"
        return
    span = f"{_date(one.first)} to {_date(one.last)}"
    yield f"{one.figure}, as at its usual operating point, {span} ({(one.last - one.first).days + 1} days)"
    yield f"  in 30 days {_rate(one.rates.per_month, 1.0)}"
    if one.rates.per_tonne is not None:
        yield f"  per {TONNES:,.0f} t made {_rate(one.rates.per_tonne, TONNES)}"
    for limit in one.limits:
        yield from _limit(limit, one.last)


def _rate(trend: Trend, scale: float) -> str:
    """Write a rate with its interval."""
    if not math.isfinite(trend.low) or not math.isfinite(trend.high):
        return f"{scale * trend.slope:+.2f} % of it (its interval is not bounded)"
    low, rate, high = (f"{scale * one:+.2f}" for one in (trend.low, trend.slope, trend.high))
    sure = "" if trend.low * trend.high > 0 else "; may be none"
    return f"{rate} % of it ({low} to {high}{sure})"


def _limit(limit: Limit, last: date) -> Iterator[str]:
    """Tell when a limit is reached, by each model, and by both."""
    side = "down to" if limit.side == "low" else "up to"
    for reach in limit.reach:
        yield f"  {side} {wording.plain(limit.value)}, {reach.model}: {_range(reach, last)}"


def _range(reach: Reach, last: date) -> str:
    """Write a range of dates."""
    late = f"later than in {HORIZON_D // 365} years"
    if reach.earliest is None:
        return f"not within {HORIZON_D // 365} years"
    if reach.latest == 0:
        return "already there"
    until = late if reach.latest is None else _date(last + timedelta(days=reach.latest))
    return f"{_date(last + timedelta(days=reach.earliest))} to {until}"


def _date(day: date) -> str:
    """Write a date."""
    return f"{day.day} {day:%b %Y}"
