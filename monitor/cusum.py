"""Control charts on deviations from the expectation: when did a figure leave it, since when, is it back?

Deviations are turned so that bad is above zero, in percent, one per block of time. A chart is a tabular CUSUM
(Page 1954) or an exponentially weighted average (Roberts 1959); what it needs to alarm follows from the false
alarms wanted, the noise of the healthy period, and how sure the expectation is where the unit runs (all
sources from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from monitor import runlengths
from monitor.noise import Noise

Array = NDArray[np.float64]
Places = NDArray[np.intp]

FAST = 2.4  # the fast chart looks for a shift so many times that of the slow one
KNOTS = (0.0, 0.25, 0.5)  # errors of the expectation, per reference, at which thresholds are worked out
ALLOWED = KNOTS[-1]  # a larger error raises the reference instead, so that it stays twice the error
WEIGHTS = (0.02, 0.03, 0.05, 0.08, 0.12, 0.2, 0.3, 0.5)  # of averages, of which the quickest is taken


@dataclass(frozen=True, slots=True)
class Chart:
    """One CUSUM: what is taken off each deviation, and its threshold at each error of `KNOTS` [%]."""

    reference: float
    threshold: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Found:
    """Episodes as places in the blocks; `cleared` is the number of blocks while one is open."""

    onset: Places  # the first block since which the chart that alarmed was above zero
    raised: Places
    cleared: Places


@lru_cache(maxsize=64)
def cusums(noise: Noise, *, shift_pct: float, wanted: float, charts: int) -> tuple[Chart, ...]:
    """Make the slow and the fast chart for a shift to find.

    Parameters
    ----------
    noise : Noise
        Of the healthy period [%].
    shift_pct : float
        Shift that the slow chart is made for [%].
    wanted : float
        Blocks between false alarms of all charts together.
    charts : int
        How many charts share them, these two among them.

    Returns
    -------
    tuple of Chart
        The slow one first.
    """
    return tuple(_chart(noise, factor * shift_pct / 2, wanted * charts) for factor in (1.0, FAST))


def cusum_episodes(deviation: Array, error: Array, charts: Sequence[Chart]) -> Found:
    """Episodes of CUSUMs that share one figure and one side.

    Parameters
    ----------
    deviation : ndarray, shape (n,)
        Bad is above zero; NaN leaves every sum as it is [%].
    error : ndarray, shape (n,)
        Standard error of the expectation [%].
    charts : sequence of Chart
        The slow one first; it also tells when the figure is back: a sum for that side, begun at the alarm,
        crosses the same threshold.

    Returns
    -------
    Found
        In the order of time.
    """
    row = np.flatnonzero(np.isfinite(deviation) & np.isfinite(error))
    x, unsure = deviation[row], error[row]
    limits = [_limits(chart, unsure) for chart in charts]
    reference, threshold = limits[0]
    onset, raised, cleared = [], [], []
    begin = 0
    while begin < len(x):
        alarms = [_first_alarm(x[begin:] - k[begin:], h[begin:]) for k, h in limits]
        told = [alarm for alarm in alarms if alarm is not None]
        if not told:
            break
        since, at = min(told, key=lambda alarm: alarm[1])
        back = _first_alarm((reference - x)[begin + at + 1 :], threshold[begin + at + 1 :])
        onset.append(begin + since)
        raised.append(begin + at)
        begin = len(x) if back is None else begin + at + 1 + back[1] + 1
        cleared.append(begin - 1 if back is not None else len(x))
    return _found(row, len(deviation), onset, raised, cleared)


def settled(deviation: Array, error: Array, charts: Sequence[Chart]) -> NDArray[np.bool_]:
    """Tell the blocks at which every sum is at zero, whatever it was at first, short of an alarm.

    Parameters
    ----------
    deviation, error : ndarray, shape (n,)
    charts : sequence of Chart
        All as in `cusum_episodes`.

    Returns
    -------
    ndarray of bool, shape (n,)
        False in blocks without a deviation.
    """
    row = np.flatnonzero(np.isfinite(deviation) & np.isfinite(error))
    calm = np.zeros(len(deviation), dtype=bool)
    calm[row] = True
    for chart in charts if len(row) else ():
        reference, _ = _limits(chart, error[row])
        steps = deviation[row] - reference
        steps[0] += max(chart.threshold)
        calm[row] &= _summed(steps) <= 0.0
    return calm


def statistic(deviation: Array, error: Array, chart: Chart) -> tuple[Array, Array]:
    """Give the sum of one chart, never set back by an alarm, and its threshold: what a person looks at.

    Parameters
    ----------
    deviation, error : ndarray, shape (n,)
        As in `cusum_episodes`.
    chart : Chart

    Returns
    -------
    total : ndarray, shape (n,)
        Kept over gaps [%].
    threshold : ndarray, shape (n,)
        NaN where nothing is known [%].
    """
    total, limit = (np.full(len(deviation), np.nan) for _ in range(2))
    row = np.flatnonzero(np.isfinite(deviation) & np.isfinite(error))
    reference, threshold = _limits(chart, error[row])
    total[row] = _summed(deviation[row] - reference)
    limit[row] = threshold
    seen = np.maximum.accumulate(np.where(np.isfinite(total), np.arange(len(total)), 0))
    return np.nan_to_num(total[seen]), limit


def ewma_episodes(deviation: Array, error: Array, noise: Noise, *, shift_pct: float, wanted: float) -> Found:
    """Episodes of an exponentially weighted average, back once it is within half of its limit.

    Parameters
    ----------
    deviation, error : ndarray, shape (n,)
        As in `cusum_episodes`.
    noise : Noise
        Of the healthy period; its long run is taken for that of independent values, which is on the safe
        side [%].
    shift_pct : float
        Shift that the weight is chosen for; an average below half of it does not alarm [%].
    wanted : float
        Blocks between false alarms.

    Returns
    -------
    Found
    """
    row = np.flatnonzero(np.isfinite(deviation) & np.isfinite(error))
    shift = min(shift_pct / noise.long_run_sd, 4.0) if noise.long_run_sd else 4.0
    limits = _averages(wanted / 2)  # one of two sides
    weight = min(limits, key=lambda one: runlengths.ewma(one, limits[one], shift))
    average = np.asarray(lfilter([weight], [1.0, weight - 1.0], deviation[row]))
    settled_sd = noise.long_run_sd * math.sqrt(weight / (2 - weight))
    edge = np.maximum(limits[weight] * settled_sd + error[row] / ALLOWED, shift_pct / 2)
    onset, raised, cleared = [], [], []
    begin = 0
    while (over := np.flatnonzero(average[begin:] > edge[begin:])).size:
        at = begin + int(over[0])
        below = np.flatnonzero(average[: at + 1] <= 0)
        onset.append(int(below[-1]) + 1 if below.size else 0)
        raised.append(at)
        back = np.flatnonzero(average[at:] < edge[at:] / 2)
        begin = at + int(back[0]) if back.size else len(average)
        cleared.append(begin)
    return _found(row, len(deviation), onset, raised, cleared)


@cache
def _averages(wanted: float) -> dict[float, float]:
    """Give the limit of each weight; the same for every figure of a unit."""
    return {weight: runlengths.ewma_limit(weight, wanted) for weight in WEIGHTS}


def _chart(noise: Noise, reference: float, wanted: float) -> Chart:
    """Make one chart; without noise any deviation beyond the reference is real."""
    if noise.sd == 0.0:
        return Chart(reference, (reference,) * len(KNOTS))
    scaled = reference / noise.sd
    thresholds = (
        noise.sd * runlengths.drift_threshold(scaled, wanted, phi=noise.phi, unsure=knot * scaled)
        for knot in KNOTS
    )
    return Chart(reference, tuple(thresholds))


def _limits(chart: Chart, error: Array) -> tuple[Array, Array]:
    """Reference and threshold at each block, by how sure the expectation is there."""
    reference = np.maximum(chart.reference, error / ALLOWED)
    return reference, np.interp(error / chart.reference, KNOTS, chart.threshold)


def _summed(steps: Array) -> Array:
    """Sums that never fall below zero: a running total less the least it had."""
    total = np.cumsum(steps)
    return np.asarray(total - np.minimum.accumulate(np.minimum(total, 0.0)))


def _first_alarm(steps: Array, threshold: Array) -> tuple[int, int] | None:
    """Place since which the sum was above zero, and place where it first crosses; None if it never does."""
    total = _summed(steps)
    over = np.flatnonzero(total > threshold)
    if not over.size:
        return None
    at = int(over[0])
    zero = np.flatnonzero(total[:at] <= 0.0)
    return (int(zero[-1]) + 1 if zero.size else 0), at


def _found(row: Places, count: int, onset: list[int], raised: list[int], cleared: list[int]) -> Found:
    """Turn places among the seen blocks into places among all."""
    padded = np.append(row, count)
    return Found(*(padded[np.array(one, dtype=np.intp)] for one in (onset, raised, cleared)))
