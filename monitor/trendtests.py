"""Does a series rise or fall, and by how much? Mann-Kendall's test and Theil-Sen's slope with its interval.

Both look at every pair of values, so neither asks for normal noise and a few wild values move neither.
Sources: Mann 1945, Kendall 1975, Theil 1950, Sen 1968, Gilbert 1987 (interval), US EPA 530/R-09-007 (2009)
chapter 17; for autocorrelated noise the variance of Kendall's sum is inflated as Yue & Wang 2004 do.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

Array = NDArray[np.float64]

MOST = 5000  # values in one test; their pairs then take some hundred MB


@dataclass(frozen=True, slots=True)
class Trend:
    """A trend: Kendall's sum, its variance, z, two-sided p, tau; slope with its interval, and intercept.

    The line is `intercept + slope * time`, through the medians of time and value. Where the values are too
    few to bound the slope, `low` and `high` are infinite.
    """

    total: float
    variance: float
    z: float
    p: float
    tau: float
    slope: float
    low: float
    high: float
    intercept: float


def trend(time: Array, value: Array, *, level: float = 0.95, inflation: float = 1.0) -> Trend | None:
    """Test one series for a trend and tell its slope.

    Parameters
    ----------
    time : ndarray, shape (n,)
        Ascending, no two equal [any unit].
    value : ndarray, shape (n,)
        NaN takes no part [any unit].
    level : float
        Of the interval of the slope.
    inflation : float
        By how much autocorrelation makes the variance larger than that of independent values.

    Returns
    -------
    Trend or None
        None where fewer than three values are seen, since no slope has an interval then.

    Raises
    ------
    ValueError
        Times do not ascend, or there are too many values.

    Notes
    -----
    Kendall's sum is corrected for ties and, in z, for continuity.
    """
    seen = np.isfinite(value)
    t, y = time[seen], value[seen]
    if (np.diff(t) <= 0).any() or len(t) > MOST:
        msg = f"times have to ascend, and at most {MOST} values are tested at once; got {len(t)}"
        raise ValueError(msg)
    if len(t) < 3:
        return None
    early, late = np.triu_indices(len(t), 1)
    rise = y[late] - y[early]
    slopes = np.sort(rise / (t[late] - t[early]))
    total, variance = float(np.sign(rise).sum()), inflation * kendall_variance(y)
    sd = math.sqrt(variance)
    z = (total - math.copysign(1.0, total)) / sd if total and sd else 0.0
    slope, half = float(np.median(slopes)), float(ndtri(0.5 + level / 2)) * sd / 2
    return Trend(
        total=total,
        variance=variance,
        z=z,
        p=2 * float(ndtr(-abs(z))),
        tau=total / len(slopes),
        slope=slope,
        low=_ranked(slopes, len(slopes) / 2 - half),
        high=_ranked(slopes, len(slopes) / 2 + half + 1),
        intercept=float(np.median(y) - slope * np.median(t)),
    )


def kendall_variance(value: Array) -> float:
    """Variance of Kendall's sum for independent values, some of which may be equal.

    Parameters
    ----------
    value : ndarray, shape (n,)
        Finite.

    Returns
    -------
    float
        n (n - 1)(2 n + 5) / 18, less the same of each group of equal values.
    """
    sizes = np.concatenate([[len(value)], np.unique(value, return_counts=True)[1]]).astype(np.float64)
    parts = sizes * (sizes - 1) * (2 * sizes + 5) / 18
    return float(parts[0] - parts[1:].sum())


def rolling_slopes(value: Array, length: int, *, least: int) -> tuple[Array, Array]:
    """Theil-Sen's slope over the last so many values at each value, and Kendall's z of each.

    Parameters
    ----------
    value : ndarray, shape (n,)
        At even steps; NaN where there is none.
    length : int
        Values in a window, three or more.
    least : int
        Values that have to be seen in it.

    Returns
    -------
    slope : ndarray, shape (n,)
        Per step; NaN where too few are seen, and before the first whole window.
    z : ndarray, shape (n,)
        Corrected for continuity but not for ties; NaN where the slope is.
    """
    slope, z = (np.full(len(value), np.nan) for _ in range(2))
    if len(value) < length:
        return slope, z
    windows = np.lib.stride_tricks.sliding_window_view(value, length)
    early, late = np.triu_indices(length, 1)
    rise = windows[:, late] - windows[:, early]
    count = np.isfinite(windows).sum(axis=1)
    told = count >= max(least, 3)
    total = np.nansum(np.sign(rise[told]), axis=1)
    n = count[told].astype(np.float64)
    sd = np.sqrt(n * (n - 1) * (2 * n + 5) / 18)
    at = np.flatnonzero(told) + length - 1
    slope[at] = np.nanmedian(rise[told] / (late - early), axis=1)
    z[at] = np.sign(total) * np.maximum(np.abs(total) - 1.0, 0.0) / sd
    return slope, z


def _ranked(ordered: Array, rank: float) -> float:
    """Give the value of a rank counted from one, by a straight line between two; infinite past the ends."""
    ranks = np.arange(1, len(ordered) + 1)
    return float(np.interp(rank, ranks, ordered, left=-np.inf, right=np.inf))
