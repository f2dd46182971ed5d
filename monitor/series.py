"""Long series made short enough to draw: buckets of least, mean and greatest, and runs of a condition."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

MINUTE_US = 60_000_000
# Bucket widths that people can name; beyond a day whole days are used.
WIDTHS_MIN = (1, 2, 5, 10, 15, 20, 30, 60, 120, 180, 240, 360, 720, 1440)


@dataclass(frozen=True, slots=True)
class Envelope:
    """Least, mean and greatest of a series per bucket; NaN where a bucket holds no number."""

    middle: NDArray[np.int64]  # (n,) us UTC, ascending
    low: NDArray[np.float64]  # (n,)
    mean: NDArray[np.float64]  # (n,)
    high: NDArray[np.float64]  # (n,)
    count: NDArray[np.int64]  # (n,) numbers in the bucket
    width_us: int  # of a bucket; 0 where every point stands for itself


def bucket_width_us(first_us: int, last_us: int, most: int) -> int:
    """Give the narrowest named width of which `most` buckets span the time.

    Parameters
    ----------
    first_us, last_us : int
        Ends of the span [us since epoch, UTC].
    most : int
        Greatest number of buckets.

    Returns
    -------
    int
        Width [us]; a whole number of days where no named width is wide enough.
    """
    # One bucket is kept back because the grid is aligned to the epoch, not to `first_us`.
    needed = max(last_us - first_us, 1) / max(most - 1, 1)
    for minutes in WIDTHS_MIN:
        if minutes * MINUTE_US >= needed:
            return minutes * MINUTE_US
    day_us = WIDTHS_MIN[-1] * MINUTE_US
    return day_us * int(np.ceil(needed / day_us))


def envelope(
    time_us: NDArray[np.int64], value: NDArray[np.float64], *, first_us: int, last_us: int, most: int
) -> Envelope:
    """Keep the least and greatest number of every bucket, so that no spike is lost.

    Buckets lie on a grid that starts at the epoch: a later end adds buckets and moves none. A series
    that is short enough already is handed on point by point.

    Parameters
    ----------
    time_us : ndarray of int64, shape (t,)
        Ascending times [us since epoch, UTC].
    value : ndarray of float64, shape (t,)
        The series; NaN where missing [any unit].
    first_us, last_us : int
        Span to keep, both ends included [us since epoch, UTC].
    most : int
        Greatest number of buckets.

    Returns
    -------
    Envelope
        NaN in `low`, `mean` and `high` of a bucket without a number.
    """
    begin, end = np.searchsorted(time_us, [first_us, last_us + 1])
    time_us, value = time_us[begin:end], value[begin:end]
    if time_us.size <= most:
        return Envelope(time_us.copy(), value.copy(), value.copy(), value.copy(), np.isfinite(value) * 1, 0)
    return _bucketed(time_us, value, bucket_width_us(first_us, last_us, most))


def _bucketed(time_us: NDArray[np.int64], value: NDArray[np.float64], width_us: int) -> Envelope:
    """Reduce bucket by bucket over the numbers that are there."""
    first, last = time_us[0] // width_us, time_us[-1] // width_us
    middle = (np.arange(first, last + 1) * width_us + width_us // 2).astype(np.int64)
    there = np.isfinite(value)
    bucket, value = time_us[there] // width_us - first, value[there]
    count = np.bincount(bucket, minlength=middle.size).astype(np.int64)
    low, mean, high = (np.full(middle.size, np.nan) for _ in range(3))
    full = count > 0
    starts = (np.cumsum(count) - count)[full]
    if starts.size:
        low[full] = np.minimum.reduceat(value, starts)
        high[full] = np.maximum.reduceat(value, starts)
        mean[full] = np.add.reduceat(value, starts) / count[full]
    return Envelope(middle, low, mean, high, count, width_us)


def runs(
    start_us: NDArray[np.int64], holds: NDArray[np.bool_], *, step_us: int
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Join neighbouring cells for which a condition holds into runs; a hole in the grid ends a run.

    Parameters
    ----------
    start_us : ndarray of int64, shape (t,)
        Ascending cell starts [us since epoch, UTC].
    holds : ndarray of bool, shape (t,)
        Whether the condition holds in the cell.
    step_us : int
        Length of a cell [us].

    Returns
    -------
    tuple of ndarray of int64
        Start and end of each run [us since epoch, UTC].
    """
    held = start_us[holds]
    if held.size == 0:
        return held, held
    breaks = np.diff(held) > step_us
    starts = held[np.concatenate(([True], breaks))]
    ends = held[np.concatenate((breaks, [True]))] + step_us
    return starts, ends
