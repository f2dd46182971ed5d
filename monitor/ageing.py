"""How fast a figure ages, and when it will reach a limit: a range of dates, by more than one law of ageing.

Looked at is the figure as it would be at the usual operating point (`expectation.at_usual_point`), day by
day, between two events that change its level. A straight line and a fall that levels out fit a year of data
about equally well and part beyond it; so the answer is the range of both, each with its prediction interval.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest.unit import Event
from monitor.noise import noise_of
from monitor.trendtests import Trend, trend

Array = NDArray[np.float64]
Times = NDArray[np.int64]

DAY_US = 86_400_000_000
BREAKS = ("catalyst change", "calibration")
MONTH_D = 30.0
LEAST_D = 20  # days of a stretch from which anything is projected
HORIZON_D = 1826  # five years; what is reached later is not told
MODELS = ("straight line", "levelling out")
LIKELY = 3.841  # chi-square of one degree of freedom at 95 %
TWO_SIDED_95 = 1.959963984540054


@dataclass(frozen=True, slots=True)
class Days:
    """One stretch day by day: day since 1970 (UTC), mean of the day [%], tonnes made from its start on."""

    day: Times  # (n,)
    value: Array  # (n,)
    tonnes: Array  # (n,)


@dataclass(frozen=True, slots=True)
class Ageing:
    """Trends of one stretch: per 30 days and per tonne made [%], intervals widened for autocorrelation."""

    per_month: Trend
    per_tonne: Trend | None  # None where nothing was made, or it is not known


@dataclass(frozen=True, slots=True)
class Reach:
    """When a limit is reached by one model, in days from the last day on; None: not within five years.

    `earliest` to `latest` is by the 95 % prediction interval of a day's mean; 0 where that is there already.
    """

    model: str
    earliest: int | None
    latest: int | None


def stretches(end_us: Times, events: Sequence[Event]) -> NDArray[np.intp]:
    """Number the stretches between events that break ageing.

    Parameters
    ----------
    end_us : ndarray of int64, shape (n,)
        Ends of blocks [us UTC].
    events : sequence of Event
        In the order of time; catalyst changes and calibrations break.

    Returns
    -------
    ndarray of int, shape (n,)
        0 before the first break.
    """
    breaks = [round(one.at.timestamp() * 1e6) for one in events if one.kind in BREAKS]
    return np.searchsorted(np.array(breaks, dtype=np.int64), end_us, side="left")


def days_of(end_us: Times, value: Array, tonnes: Array) -> Days:
    """Take the blocks of one stretch together to days.

    Parameters
    ----------
    end_us : ndarray of int64, shape (n,)
        Ends of blocks, ascending [us UTC].
    value : ndarray, shape (n,)
        As `expectation.at_usual_point` gives it; NaN takes no part [%].
    tonnes : ndarray, shape (n,)
        Made in each block; what is not known counts as nothing [t].

    Returns
    -------
    Days
        Days with at least one value.
    """
    day = (end_us - 1) // DAY_US
    made = np.cumsum(np.nan_to_num(tonnes))
    seen = np.isfinite(value)
    which, first, place = np.unique(day[seen], return_index=True, return_inverse=True)
    count = np.bincount(place, minlength=len(which))
    mean = np.bincount(place, value[seen], minlength=len(which)) / np.maximum(count, 1)
    return Days(which, mean, made[seen][first])


def ageing(days: Days) -> Ageing | None:
    """Tell how fast a stretch ages.

    Parameters
    ----------
    days : Days

    Returns
    -------
    Ageing or None
        None below `LEAST_D` days.
    """
    if len(days.day) < LEAST_D:
        return None
    day = days.day.astype(np.float64)
    first = trend(day / MONTH_D, days.value)
    if first is None:
        return None
    left = days.value - first.intercept - first.slope * day / MONTH_D
    noise = noise_of(days.day, left, 1)
    inflation = (1 + noise.phi) / (1 - noise.phi)
    per_month = trend(day / MONTH_D, days.value, inflation=inflation)
    rising = np.concatenate([[True], np.diff(days.tonnes) > 0])
    per_tonne = trend(days.tonnes[rising], days.value[rising], inflation=inflation)
    return Ageing(per_month or first, per_tonne)


def reached(days: Days, limit_pct: float, *, bad: str) -> tuple[Reach, ...]:
    """Tell when a limit will be reached, by each model.

    Parameters
    ----------
    days : Days
        The last stretch.
    limit_pct : float
        Logarithm of the limit, as `expectation.logarithm_pct` gives it [%].
    bad : str
        'low' where the limit is reached by falling, 'high' by rising.

    Returns
    -------
    tuple of Reach
        One for each of `MODELS`; nothing below `LEAST_D` days.
    """
    if len(days.day) < LEAST_D:
        return ()
    way = 1.0 if bad == "low" else -1.0
    ahead = np.arange(HORIZON_D + 1, dtype=np.float64)
    found = []
    for model in MODELS:
        low, high = projected(days, ahead, model=model)
        near, far = (low, high) if bad == "low" else (high, low)
        found.append(Reach(model, *(_first(way * (bound - limit_pct) <= 0) for bound in (near, far))))
    return tuple(found)


def projected(days: Days, ahead: Array, *, model: str) -> tuple[Array, Array]:
    """Give the 95 % prediction interval of a day's mean in days to come.

    Parameters
    ----------
    days : Days
        At least three.
    ahead : ndarray, shape (h,)
        Days after the last one.
    model : str
        One of `MODELS`.

    Returns
    -------
    low, high : ndarray, shape (h,)
        [%]. For a fall that levels out the interval spans all time constants that the data do not rule out.

    Notes
    -----
    Least squares with the variance inflated for autocorrelation; time constants by their profile likelihood.
    """
    age = (days.day - days.day[-1]).astype(np.float64)
    span = max(-float(age[0]), 1.0)
    curves = [(age, ahead)]
    if model == MODELS[1]:
        curves = [(-np.expm1(-(age + span) / c), -np.expm1(-(ahead + span) / c)) for c in _constants(span)]
    fits = [_fitted(past, days, future) for past, future in curves]
    best = min(fits, key=lambda one: one[0])
    likely = [one for one in fits if one[0] - best[0] <= LIKELY * best[3]]
    lows = [centre - TWO_SIDED_95 * np.sqrt(spread) for _, centre, spread, _ in likely]
    highs = [centre + TWO_SIDED_95 * np.sqrt(spread) for _, centre, spread, _ in likely]
    return np.min(lows, axis=0), np.max(highs, axis=0)


def _constants(span: float) -> Array:
    """Time constants to look at: from a twentieth of what was seen to three times it."""
    return np.geomspace(span / 20, span * 3, 40)


def _fitted(past: Array, days: Days, future: Array) -> tuple[float, Array, Array, float]:
    """Sum of squares, prediction, its variance, and the long-run variance of what is left."""
    terms, later = (np.column_stack([np.ones(len(one)), one]) for one in (past, future))
    weight, *_ = np.linalg.lstsq(terms, days.value, rcond=None)
    left = days.value - terms @ weight
    noise = noise_of(days.day, left, 1)
    covariance = np.linalg.pinv(terms.T @ terms) * noise.long_run_sd**2
    spread = np.einsum("np,pq,nq->n", later, covariance, later) + noise.sd**2
    return float(left @ left), later @ weight, spread, noise.long_run_sd**2


def _first(flag: NDArray[np.bool_]) -> int | None:
    """Place of the first flag; None if there is none."""
    return int(flag.argmax()) if flag.any() else None
