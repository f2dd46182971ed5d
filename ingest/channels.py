"""The channels of one analyzer on one axis of times, so that one analysis is looked at as a whole."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.conditions import Flags
from ingest.readings import Series
from ingest.unit import Instrument

Times = NDArray[np.int64]
Floats = NDArray[np.float64]
Places = slice | NDArray[np.intp]


def common_axis(channels: Sequence[Series]) -> Times:
    """Give all times at which any channel has a reading; the channels of one export mostly share them.

    Parameters
    ----------
    channels : sequence of Series
        At least one.

    Returns
    -------
    array of int64
        Ascending and unique [us UTC].
    """
    first = channels[0].time
    if all(np.array_equal(first, series.time) for series in channels[1:]):
        return first
    return np.unique(np.concatenate([series.time for series in channels])).astype(np.int64)


def places_on(axis: Times, time: Times) -> Places:
    """Tell where the times of one channel stand on the common axis.

    Parameters
    ----------
    axis : array of int64
        From `common_axis`.
    time : array of int64
        Of one of its channels.

    Returns
    -------
    slice or array of int
        An index for arrays on the axis.
    """
    return slice(None) if axis.size == time.size else np.searchsorted(axis, time)


def together(
    channels: Sequence[Series], usable: Sequence[Flags], age: timedelta
) -> tuple[Floats, tuple[Places, ...]]:
    """Lay the results of an analyzer side by side, each as it stood at every time of the common axis.

    Parameters
    ----------
    channels : sequence of k Series
        With at least one reading in all.
    usable : sequence of k arrays of bool
        Which readings may be looked at.
    age : timedelta
        A result that is older stands no longer.

    Returns
    -------
    values : array (k, n)
        NaN where a channel has no usable result.
    places : tuple of k indices
        Where the readings of each channel stand among the n.
    """
    axis = common_axis(channels)
    places = tuple(places_on(axis, series.time) for series in channels)
    values = np.full((len(channels), axis.size), np.nan)
    for row, series, fit, place in zip(values, channels, usable, places, strict=True):
        shown = np.where(fit, series.value, np.nan)
        if isinstance(place, slice):
            row[:] = shown
        elif series.time.size:
            last = np.searchsorted(series.time, axis, side="right") - 1
            fresh = (last >= 0) & (axis - series.time[last] <= age // timedelta(microseconds=1))
            row[fresh] = shown[last[fresh]]
    return values, places


def doubt(channel: Instrument, reading: Floats | float) -> Floats:
    """Give the standard uncertainty of readings of a channel, random and systematic together.

    Parameters
    ----------
    channel : Instrument
        With its stated uncertainties.
    reading : array or float
        In its own unit.

    Returns
    -------
    array
        In its own unit (k = 1).
    """
    parts = (one.relative * np.abs(reading) + one.floor for one in (channel.random, channel.systematic))
    return np.asarray(np.hypot(*parts))
