"""Is an analyzer off its sample? By a status tag, or by channels that all read what the certificate says."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.channels import doubt
from ingest.conditions import LARGEST, NOT_CHECKED, PASSED, REFUSED, Codes
from ingest.readings import BAD, Series
from ingest.unit import Analyzer, Instrument

SURE = 3.0  # standard uncertainties by which a channel may miss the gas: all of a dozen do so 97 times in 100
_LONG_AGO = np.iinfo(np.int64).min // 2
_US = timedelta(microseconds=1)


def by_status(time: NDArray[np.int64], status: Series, analyzer: Analyzer, age: timedelta) -> Codes:
    """Refuse what is stamped while the status says calibrating, and for the settling time after.

    Parameters
    ----------
    time : array (n,) of int64
        Of the results [us UTC].
    status : Series
        The status signal.
    analyzer : Analyzer
        Which values of the status mean that it calibrates.
    age : timedelta
        How long a status stands without a new one.

    Returns
    -------
    array (n,) of int8
        Places in conditions.ANSWERS; not checked where no status stands.
    """
    told = status.take((np.abs(status.value) < LARGEST) & (status.quality != BAD))
    if not len(told):
        return np.full(time.size, NOT_CHECKED, dtype=np.int8)
    on = np.isin(told.value, analyzer.calibrating)
    last = np.searchsorted(told.time, time, side="right") - 1
    known = (last >= 0) & (time - told.time[last] <= age // _US)
    ended = np.full(len(told), _LONG_AGO)
    back = np.flatnonzero(on[:-1] & ~on[1:] & (np.diff(told.time) <= age // _US)) + 1
    ended[back] = told.time[back]
    since = time - np.maximum.accumulate(ended)[last]
    off = known & (on[last] | (since < analyzer.settle // _US))
    return np.select([off, known], [REFUSED, PASSED], NOT_CHECKED).astype(np.int8)


def repeated(series: Series, answers: Codes, cycle: timedelta) -> Codes:
    """Refuse what only repeats a result of the calibration gas, for a cycle at most.

    An export goes on showing the last result after the status went back, until there is a new one.

    Parameters
    ----------
    series : Series
        n readings of one channel.
    answers : array (n,) of int8
        From `by_status`.
    cycle : timedelta
        Time between results.

    Returns
    -------
    array (n,) of int8
    """
    off = answers == REFUSED
    if not off.any():
        return answers
    place = np.arange(off.size)
    new = np.concatenate([[True], series.value[1:] != series.value[:-1]])
    begun = np.maximum.accumulate(np.where(new, place, 0))
    before = np.maximum.accumulate(np.where(off, place, -1))
    again = (before >= begun) & (series.time - series.time[before] <= cycle // _US)
    return np.where(again, REFUSED, answers).astype(np.int8)


def by_certificate(values: NDArray[np.float64], members: Sequence[Instrument], analyzer: Analyzer) -> Codes:
    """Refuse the analyses that read what the certificate of the calibration gas says, on every channel of it.

    A channel may miss it by the tolerance of the certificate and three of its own standard uncertainties. A
    gas that is like the process gas cannot be told from it: such an analyzer needs its status.

    Parameters
    ----------
    values : array (k, n)
        Results side by side, NaN where there is none.
    members : sequence of k Instrument
        The channels, in the same order.
    analyzer : Analyzer
        With a certificate.

    Returns
    -------
    array (n,) of int8
        Places in conditions.ANSWERS; not checked where a channel of the certificate has no result.
    """
    stated = dict(analyzer.certificate)
    rows = [at for at, one in enumerate(members) if one.name in stated]
    gas = np.array([stated[members[at].name] for at in rows])
    sigma = np.array([doubt(members[at], stated[members[at].name]) for at in rows])
    allowed = analyzer.tolerance * np.abs(gas) + SURE * sigma
    seen = values[rows]
    # The slack keeps a reading that is off by just the tolerance inside it, whatever its last binary digit.
    near = (np.abs(seen - gas[:, None]) <= allowed[:, None] * (1 + 1e-9)).all(axis=0)
    whole = np.isfinite(seen).all(axis=0) & (len(rows) == len(stated))
    return np.select([near & whole, whole], [REFUSED, PASSED], NOT_CHECKED).astype(np.int8)


def settled(time: NDArray[np.int64], answers: Codes, settle: timedelta) -> Codes:
    """Refuse what comes within the settling time after a refused analysis too.

    Parameters
    ----------
    time : array (n,) of int64
        [us UTC]
    answers : array (n,) of int8
        From `by_certificate`.
    settle : timedelta
        How long results are not yet of the stream.

    Returns
    -------
    array (n,) of int8
    """
    last = np.maximum.accumulate(np.where(answers == REFUSED, time, _LONG_AGO))
    return np.where(time - last < settle // _US, REFUSED, answers).astype(np.int8)
