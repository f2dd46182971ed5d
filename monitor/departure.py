"""Drift watches: when a figure left what its healthy period lets one expect, as episodes like any other.

A drift watch looks at windows that do not overlap, blocks, of steady running. A block of another kind adds
nothing to any statistic and takes nothing away.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import ndtri

from ingest.unit import Healthy, Unit, Watch
from monitor.cusum import Chart, Found, cusum_episodes, cusums, ewma_episodes
from monitor.drift import MICROSECOND, Raised, episodes_frame, latched, whole_episodes
from monitor.expectation import (
    DAY_US,
    TWO_SIDED_95,
    Expectation,
    Expected,
    expected,
    fit,
    logarithm_pct,
    variables,
)
from monitor.figures import Figure
from monitor.noise import Noise
from monitor.trendtests import rolling_slopes

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Times = NDArray[np.int64]

SIDES = {"low": 1.0, "high": -1.0}  # what turns expected less seen so that bad is above zero
TRANSIENT_PCT = 5.0  # a block whose load is further than this from that of the block before is no steady one
SLOPE_D, LEAST_D = 30, 15  # days of a slope, and how many of them have to be seen
LEAST_OF_DAY = 1 / 3  # share of a day's blocks that its mean has to stand on


@dataclass(frozen=True, slots=True)
class Blocks:
    """What a drift watch looks at: windows that do not overlap; n blocks, v variables.

    `value` and `half_width` are in the figure's unit, `point` as `expectation.points` gives it. `load_pct` is
    the logarithm of the load [%], NaN where there is none. `idle`: down, starting or turned down at its end.
    `running`: every cell of it was.
    """

    end_us: Times  # (n,)
    value: Array  # (n,)
    half_width: Array  # (n,)
    point: Array  # (n, v)
    load_pct: Array  # (n,)
    idle: Mask  # (n,)
    running: Mask  # (n,)


def steady(blocks: Blocks, block_us: int) -> Mask:
    """Tell the blocks of steady running: all of it, and the load as it was in the block before.

    Parameters
    ----------
    blocks : Blocks
    block_us : int
        Length of a block [us].

    Returns
    -------
    ndarray of bool, shape (n,)
        A load that nobody measures is not held against the block; a load not known before is.
    """
    follows = np.diff(blocks.end_us, prepend=blocks.end_us[:1] - 2 * block_us) == block_us
    moved = np.abs(np.diff(blocks.load_pct, prepend=np.nan))
    known = follows & (moved <= TRANSIENT_PCT) if np.isfinite(blocks.load_pct).any() else np.True_
    return np.asarray(blocks.running & known)


def looks(watch: Watch, figure: Figure) -> tuple[str, ...]:
    """Name the sides that a drift watch looks at.

    Parameters
    ----------
    watch : Watch
        May state a side.
    figure : Figure
        Tells which way is bad where the watch states none.

    Returns
    -------
    tuple of str
        'low', 'high' or both.
    """
    bad = {True: "low", False: "high", None: "both"}[figure.higher_is_better]
    side = watch.side or bad
    return ("low", "high") if side == "both" else (side,)


def chart_count(unit: Unit, figures: Mapping[str, Figure]) -> int:
    """Count the charts that share the false alarms of a unit.

    Parameters
    ----------
    unit : Unit
        Gives the watches.
    figures : mapping of str to Figure
        By name.

    Returns
    -------
    int
        Two for each side of a CUSUM, one for each side of any other test for drift.
    """
    return sum(
        len(looks(watch, figures[watch.figure])) * (2 if watch.test == "cusum" else 1)
        for watch in unit.watches
        if watch.test != "limits"
    )


def learnt(unit: Unit, healthy: Healthy, watch: Watch, blocks: Blocks) -> Expectation:
    """Learn the expectation of a drift watch from the healthy period.

    Parameters
    ----------
    unit : Unit
        Names what the expectation depends on.
    healthy : Healthy
        Its healthy period.
    watch : Watch
        Names figure and window.
    blocks : Blocks
        Those of the healthy period; others are not looked at.

    Returns
    -------
    Expectation

    Raises
    ------
    OutletError
        The period holds too little.
    """
    block_us = watch.window // MICROSECOND
    return fit(
        watch.figure,
        healthy,
        blocks.end_us,
        blocks.point,
        logarithm_pct(blocks.value),
        names=variables(unit),
        block_us=block_us,
        usable=steady(blocks, block_us),
    )


def departures(
    watch: Watch, blocks: Blocks, one: Expectation, *, sides: Sequence[str], charts: int
) -> pd.DataFrame:
    """Episodes of one drift watch.

    Parameters
    ----------
    watch : Watch
        With a test other than limits.
    blocks : Blocks
        From the end of the healthy period on, or from a calm block.
    one : Expectation
        Of the figure.
    sides : sequence of str
        As `looks` gives them.
    charts : int
        As `chart_count` gives it.

    Returns
    -------
    DataFrame
        Columns `drift.EPISODE_COLUMNS`. `first_crossed` is the onset, the end of the first block since which
        the statistic was above zero; `limit` is what was expected when the figure was worst; `sure` counts
        the blocks whose 95 % interval lay beyond the expectation, errors of both taken together.
    """
    told, seen = held_against(blocks, one)
    should = np.exp(told.value / 100.0)
    frames = []
    for side in sides:
        deviation = SIDES[side] * (told.value - seen)
        found = _found(watch, blocks.end_us, deviation, told.error, one, charts=charts)
        error = np.hypot(blocks.half_width, TWO_SIDED_95 * told.error / 100.0 * should)
        beyond = SIDES[side] * (should - blocks.value) > error
        raised = _raised(found, deviation, beyond)
        limit = should[raised.worst]
        frames.append(episodes_frame(watch, side, limit, raised, (blocks.end_us, blocks.value, blocks.idle)))
    return whole_episodes(frames)


def held_against(blocks: Blocks, one: Expectation) -> tuple[Expected, Array]:
    """Give what was expected of each block, and what was seen.

    Parameters
    ----------
    blocks : Blocks
    one : Expectation
        Of the figure.

    Returns
    -------
    told : Expected
    seen : ndarray, shape (n,)
        Logarithm of the figure [%]; NaN in blocks that do not tell of steady running.
    """
    seen = np.where(steady(blocks, one.block_us), logarithm_pct(blocks.value), np.nan)
    return expected(one, blocks.end_us, blocks.point), seen


def charts_of(watch: Watch, noise: Noise, block_us: int, charts: int) -> tuple[Chart, ...]:
    """Make the sums of a CUSUM watch.

    Parameters
    ----------
    watch : Watch
        Gives the shift to find and the interval between false alarms.
    noise : Noise
        Of the healthy period [%].
    block_us : int
        Length of a block [us].
    charts : int
        As `chart_count` gives it.

    Returns
    -------
    tuple of Chart
        The slow one first.
    """
    wanted = watch.false_alarm_interval / MICROSECOND / block_us
    return cusums(noise, shift_pct=watch.shift_pct, wanted=wanted, charts=charts)


def _found(
    watch: Watch, end_us: Times, deviation: Array, error: Array, one: Expectation, *, charts: int
) -> Found:
    """Look for departures by the test of the watch."""
    if watch.test == "cusum":
        return cusum_episodes(deviation, error, charts_of(watch, one.noise, one.block_us, charts))
    if watch.test == "slope":
        return _slopes(watch, end_us, deviation, one, charts=charts)
    wanted = watch.false_alarm_interval / MICROSECOND / one.block_us * charts
    return ewma_episodes(deviation, error, one.noise, shift_pct=watch.shift_pct, wanted=wanted)


def _raised(found: Found, deviation: Array, beyond: Mask) -> Raised:
    """Add to each episode where it was worst, and how much of it was surely beyond."""
    seen = np.isfinite(deviation)
    sure, known = (np.concatenate([[0], np.cumsum(flag)]) for flag in (beyond & seen, seen))
    spans = list(zip(found.onset.tolist(), found.cleared.tolist(), strict=True))
    worst = [a + int(np.nan_to_num(deviation[a:z], nan=-np.inf).argmax()) for a, z in spans]
    share = (sure[found.cleared] - sure[found.onset]) / np.maximum(
        known[found.cleared] - known[found.onset], 1
    )
    return Raised(found.onset, found.raised, found.cleared, np.array(worst, dtype=np.intp), share)


def _slopes(watch: Watch, end_us: Times, deviation: Array, one: Expectation, *, charts: int) -> Found:
    """Departures by trend: within 30 d the daily means fall by the shift, which by chance they would not.

    One slope is looked at a day, so the chance is that of one day in the interval between false alarms. The
    error of the trend holds autocorrelation and how sure the expected ageing is.
    """
    if not len(end_us):
        return Found(*(np.zeros(0, dtype=np.intp) for _ in range(3)))
    day = (end_us - 1) // DAY_US - (end_us[0] - 1) // DAY_US
    slope, z = rolling_slopes(_daily(day, deviation, one.block_us), SLOPE_D, least=LEAST_D)
    moved, by_chance = slope * SLOPE_D, np.sqrt(_inflation(one.noise.phi, DAY_US // one.block_us))
    with np.errstate(divide="ignore", invalid="ignore"):
        z = np.sign(z) / np.hypot(by_chance / z, math.sqrt(one.covariance[1, 1]) / moved)
    chance = DAY_US * MICROSECOND / (charts * watch.false_alarm_interval)
    least = float(ndtri(1.0 - min(chance, 0.5)))
    raised, cleared = latched(
        (moved > watch.shift_pct) & (z > least), (moved < watch.shift_pct / 2) | (z < least / 2)
    )
    last = np.append(np.searchsorted(day, np.arange(len(slope)), side="right") - 1, len(day))
    onset = np.searchsorted(day, np.maximum(raised - SLOPE_D + 1, 0))
    return Found(onset.astype(np.intp), last[raised], last[cleared])


def _daily(day: Times, deviation: Array, block_us: int) -> Array:
    """Means of the days (UTC); NaN where too few of its blocks were seen."""
    seen = np.isfinite(deviation)
    count, total = (
        np.bincount(day[seen], weights, minlength=int(day[-1]) + 1) for weights in (None, deviation[seen])
    )
    enough = count >= LEAST_OF_DAY * DAY_US / block_us
    return np.where(enough, total / np.maximum(count, 1), np.nan)


def _inflation(phi: float, blocks: int) -> float:
    """By how much the variance of a sum of daily means exceeds that of independent ones.

    The means of n values of a first-order autoregression keep p (1 - p^n)^2 / (n (1 - p^2) - 2 p (1 - p^n)).
    """
    left = 1.0 - phi**blocks
    kept = phi * left**2 / (blocks * (1.0 - phi**2) - 2.0 * phi * left) if blocks > 1 else phi
    return (1.0 + kept) / (1.0 - kept)
