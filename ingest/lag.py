"""How late an analyzer is, told by the plant's own movement: the lag of greatest likelihood.

What is estimated: the time from a movement of the feeds to the time stamp of the analysis that shows it.
That is the unit file's `dead_time` (from the sample leaving the stream to its time stamp) plus what mixing in
reactor and sample line adds: a mean stay of 3 min about 2, one of 10 min about half, since fast movement does
not come through. It is compared with `dead_time` as it stands. Between two analyses a
historian repeats the last one; that signal is later still by `held_min`, (cycle - one minute) / 2 on the
average, and its effective lag is the sum of the two. Repeats are left out here, they are no results; and the
cells put half a cycle on either side of a sample, so that this part belongs in no `dead_time`.

The method: logs of all channels are regressed on logs of all feeds some minutes before, both without what is
slower than two hours, since load, bath and catalyst move slowly and together whatever the lag. The noise of
the channels is free and may be common to them; its likelihood is that of a multivariate regression (Wilks'
lambda). Where both sides are autocorrelated fewer analyses count (Bartlett 1935, from memory). Nothing is
applied: the answer is there to be shown.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from datetime import timedelta
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri

from ingest.cells import RULES, RUNNING, TURNED_DOWN, Carried, operating_of
from ingest.channels import common_axis, together
from ingest.conditions import Flags, takes_part
from ingest.readings import Readings, Series
from ingest.screen import screened
from ingest.unit import FLOW_KINDS, FRACTION_KINDS, Instrument, Unit
from ingest.votes import voters

ANSWERS = ("as declared", "differs", "cannot tell", "not checked")
AS_DECLARED, DIFFERS, CANNOT_TELL, NOT_CHECKED = ANSWERS

TOLERANCE_MIN = 3.0  # a lag further from the declared one, or an interval wider than this to a side, is told
SEARCHED_MIN = (-15, 45)  # below zero the clocks of analyzer and meters disagree
SLOW = timedelta(hours=2)  # slower movement has many causes; in the demo plant it makes false answers
SLOW_CYCLES = 8  # ... and what an analyzer cannot follow is left to it too
CHANCE = 1e-3  # at most, of an answer where nothing depends on the feeds, over all lags searched together
INTERVAL = 1.92  # log likelihood below the top: 95 % for one parameter, chi-square 3.84 / 2
CLEAR = 6.0  # log likelihood that the declared lag must lose to be contradicted: a factor of 400
LEAST_FREE = 20  # analyses beyond what is fitted, below which noise and movement cannot be told apart
LEAST_SHARE = 0.8  # of the analyses; a channel with fewer results is left out
# Meter noise moves with the lag as if it were movement. A box of 7 min still lets it jump from minute to
# minute; a triangle (a box twice) does not, and the interval then covers what it says.
SMOOTHER = np.convolve(np.ones(7), np.ones(7)) / 49.0

Floats = NDArray[np.float64]
Times = NDArray[np.int64]

_US = timedelta(microseconds=1)
_MINUTE = timedelta(minutes=1)
_MINUTE_US = _MINUTE // _US
_PAD = len(SMOOTHER) // 2


@dataclass(frozen=True, slots=True)
class Lag:
    """How late one analyzer is in one span of time, or why that cannot be told; all lags in minutes.

    `answer` is one of ANSWERS, `reason` says why there is no estimate and is empty where there is one. The
    estimate has an interval, half a step of the grid included: 95 % for a day, 90 % for eight hours of the
    demo plant. Both are NaN where there is none. Gains are in log likelihood, of the likeliest lag over the
    declared one and over no dependence at all; NaN where not checked.
    """

    analyzer: str
    first_us: int  # first <= time stamp < last [us UTC]
    last_us: int
    declared_min: float
    held_min: float  # how much later the signal between two analyses is: (cycle - one minute) / 2
    analyses: int
    answer: str = NOT_CHECKED
    reason: str = ""
    estimate_min: float = np.nan
    low_min: float = np.nan
    high_min: float = np.nan
    gain_declared: float = np.nan
    gain_none: float = np.nan
    parameters: int = 0  # regression coefficients fitted
    searched_min: tuple[float, ...] = ()
    gains: tuple[float, ...] = ()  # of each lag searched over no dependence

    @property
    def half_width_min(self) -> float:
        """Give the larger side of the interval."""
        return max(self.high_min - self.estimate_min, self.estimate_min - self.low_min)


@dataclass(frozen=True, slots=True)
class _Line:
    """Channels that share one sample line: their places on the instrument axis and their times."""

    name: str
    at: tuple[int, ...]
    dead_time: timedelta
    cycle: timedelta
    max_age: timedelta
    sampling: str

    @property
    def searched(self) -> NDArray[np.int64]:
        """Give the lags to search [min]."""
        declared = round(self.dead_time / _MINUTE)
        low, high = SEARCHED_MIN
        return np.arange(low if declared <= high else declared - high, max(high, declared + 30) + 1)


def lags(unit: Unit, readings: Readings, edges_us: Sequence[int]) -> tuple[Lag, ...]:
    """Estimate how late every analyzer is in every span; nothing is changed by it.

    Parameters
    ----------
    unit : Unit
        An analyzer whose channels state several dead times is looked at once for each.
    readings : Readings
        From an hour before the first edge to half an hour after the last, if there are any. Refused
        readings, and the time in which the unit is down or starting, are left out.
    edges_us : sequence of int
        Ascending [us UTC]; each pair of neighbours is one span.

    Returns
    -------
    tuple of Lag
        For each analyzer in the unit's order, each span.
    """
    usable = [takes_part(codes) for codes in screened(unit, readings)]
    found: list[Lag] = []
    for line in _lines(unit):
        first, last = edges_us[0], edges_us[-1]
        grid = _minutes(first, last, line.searched)
        moved = _movement(unit, readings, usable, grid)
        time, results = _analyses(unit, readings, usable, line)
        for begin, end in pairwise(edges_us):
            here = slice(*np.searchsorted(time, [begin, end]))
            blank = _blank(line, begin, end)
            found.append(_estimated(blank, line, time[here], results[here], (grid, moved)))
    return tuple(found)


def joined(several: Sequence[Lag]) -> Lag:
    """Judge several spans of one analyzer as one in which the lag was the same.

    Parameters
    ----------
    several : sequence of Lag
        At least one, all of one analyzer and one declared lag, ascending.

    Returns
    -------
    Lag
        The log likelihoods add up. Spans that were not checked add nothing.
    """
    checked = [one for one in several if one.gains]
    whole = replace((checked or several)[0], first_us=several[0].first_us, last_us=several[-1].last_us)
    if not checked:
        return whole
    gains = np.sum([one.gains for one in checked], axis=0)
    spent, seen = (sum(getattr(one, name) for one in checked) for name in ("parameters", "analyses"))
    return _judged(replace(whole, analyses=seen), gains, spent)


def stretches(several: Sequence[Lag]) -> tuple[Lag, ...]:
    """Join spans of one analyzer for as long as the lag stays where it is.

    Parameters
    ----------
    several : sequence of Lag
        Of one analyzer, ascending; at least one.

    Returns
    -------
    tuple of Lag
        One for each stretch; a new one begins where the estimate is more than TOLERANCE_MIN from that of the
        stretch so far. Spans without an estimate begin none and end none. Where all are such, little movement
        in each may add up to an answer for all together; else there is none.
    """
    found: list[list[Lag]] = []
    for one in several:
        if np.isnan(one.estimate_min):
            continue
        if found and _agree(found[-1], one):
            found[-1].append(one)
        else:
            found.append([one])
    whole = (joined(stretch) for stretch in found or [list(several)])
    return tuple(one for one in whole if not np.isnan(one.estimate_min))


def gains_of(results: Floats, moved: Floats, time_h: Floats, *, slow_h: float) -> tuple[Floats, int]:
    """Give the log likelihood that each lag gains over no dependence.

    Parameters
    ----------
    results : array (n, p)
        Logs of p channels in n analyses.
    moved : array (n, l, j)
        Logs of j feeds, each of l lags before the analyses.
    time_h : array (n,)
        Time of the analyses, ascending [h].
    slow_h : float
        Periods longer than this are left out of both [h].

    Returns
    -------
    gains : array (l,)
        Empty where there are too few analyses, or no channel or feed that moves at all.
    parameters : int
        Coefficients that each lag fits; without any dependence twice the gain at one lag is chi-square
        with so many degrees of freedom.
    """
    slow = _slow(time_h, slow_h)
    scored = _directions(_without(results, slow))
    fed = _scaled(_without(moved, slow))
    n, p, j = len(results), scored.shape[1], fed.shape[2]
    free = n - slow.shape[1]
    if free - p - j < LEAST_FREE or not p * j:
        return np.zeros(0), 0
    feeds = fed.transpose(1, 2, 0)
    own = feeds @ feeds.transpose(0, 2, 1) + 1e-9 * n * np.eye(j)  # two tags of one meter stay solvable
    shared = feeds @ scored
    unexplained = np.linalg.slogdet(own - shared @ shared.transpose(0, 2, 1))[1] - np.linalg.slogdet(own)[1]
    best = fed[:, int(np.argmin(unexplained))]
    # What covariance and coefficients have taken up: without it eight hours are too sure of their answer.
    counted = (free - p - j - 1) * _independent(_directions(best), scored)
    return np.asarray(-0.5 * counted * unexplained), p * j


def _agree(so_far: Sequence[Lag], one: Lag) -> bool:
    """Whether one more span has the lag of those so far, and all of them one answer."""
    apart = abs(one.estimate_min - joined(so_far).estimate_min)
    return bool(apart <= TOLERANCE_MIN and joined([*so_far, one]).answer in (AS_DECLARED, DIFFERS))


def _lines(unit: Unit) -> Iterator[_Line]:
    """Group the channels that share a sample line: those of one analyzer with the same times."""
    groups: dict[tuple[str, timedelta, timedelta, str], list[int]] = {}
    for at, one in enumerate(unit.instruments):
        if one.kind in FRACTION_KINDS and one.tag is not None:
            key = (one.analyzer or one.name, one.dead_time, one.cycle, one.sampling)
            groups.setdefault(key, []).append(at)
    for (name, dead_time, cycle, sampling), places in groups.items():
        age = max(unit.instruments[at].max_age for at in places)
        yield _Line(name, tuple(places), dead_time, cycle, age, sampling)


def _blank(line: _Line, first_us: int, last_us: int) -> Lag:
    """A span of which nothing is known yet."""
    held = max(0.0, (line.cycle - _MINUTE) / _MINUTE / 2)
    return Lag(line.name, first_us, last_us, line.dead_time / _MINUTE, held, 0)


def _minutes(first_us: int, last_us: int, searched: NDArray[np.int64]) -> Times:
    """The minutes of the feeds that the analyses of a span are compared with."""
    first = first_us // _MINUTE_US - searched[-1] - 1
    last = last_us // _MINUTE_US - searched[0] + 2
    return np.arange(first, last, dtype=np.int64) * _MINUTE_US


def _centred(instrument: Instrument | _Line) -> int:
    """From a time stamp to the middle of what the value stands for, where it is the mean of a cycle [us]."""
    rule = RULES[instrument.sampling]
    half = instrument.cycle // (2 * _US) if rule.by_cycle else 0
    return -half if rule.ends else half


def _movement(unit: Unit, readings: Readings, usable: Sequence[Flags], grid: Times) -> Floats:
    """Logs of the feeds at every minute, smoothed, array (minutes, j); NaN where the unit did not run."""
    inlets = {one.name for one in unit.streams if one.direction == "in"}
    feeds = [
        at
        for at, one in enumerate(unit.instruments)
        if one.kind in (*FLOW_KINDS, "species flow") and one.tag in readings and one.stream in inlets
    ]
    wide = np.arange(-_PAD, len(grid) + _PAD) * _MINUTE_US + grid[0]
    running = _running(unit, readings, usable, wide)
    columns = np.full((len(grid), len(feeds)), np.nan)
    for column, at in zip(columns.T, feeds, strict=True):
        flow = _at(wide, unit.instruments[at], readings, usable[at])
        fit = running & (flow > 0)
        column[:] = np.convolve(np.log(np.where(fit, flow, np.nan)), SMOOTHER, "valid")
    return columns


def _running(unit: Unit, readings: Readings, usable: Sequence[Flags], grid: Times) -> Flags:
    """Where the unit runs, turned down or not; everywhere if no rule is stated."""
    rule = unit.operating
    if rule is None:
        return np.ones(len(grid), dtype=bool)
    names = [one.name for one in unit.instruments]
    places = [names.index(vote.instrument) for vote in voters(rule)]
    load, *votes = (_at(grid, unit.instruments[at], readings, usable[at]) for at in places)
    codes = operating_of(load, grid, rule, Carried(), votes=votes)
    return np.isin(codes, (RUNNING, TURNED_DOWN))


def _at(grid: Times, instrument: Instrument, readings: Readings, usable: Flags) -> Floats:
    """Value of a signal at each minute by its way of sampling; NaN where its readings are too far apart."""
    series = readings.get(instrument.tag or "")
    if series is None or not usable.any():
        return np.full(len(grid), np.nan)
    time, value = series.time[usable] + _centred(instrument), series.value[usable]
    age = instrument.max_age // _US
    before = np.searchsorted(time, grid, side="right") - 1
    known = (before >= 0) & (grid - time[before] <= age)
    if not RULES[instrument.sampling].linear:
        return np.where(known, value[before], np.nan)
    after = np.searchsorted(time, grid)
    known &= after < len(time)
    known &= time[np.minimum(after, len(time) - 1)] - time[before] <= age
    return np.where(known, np.interp(grid, time, value), np.nan)


def _analyses(unit: Unit, readings: Readings, usable: Sequence[Flags], line: _Line) -> tuple[Times, Floats]:
    """Time and logs of all analyses, array (n, p); a row that repeats the one before is none."""
    there = [at for at in line.at if unit.instruments[at].tag in readings]
    channels: list[Series] = [readings[unit.instruments[at].tag or ""] for at in there]
    if not any(map(len, channels)):
        return np.zeros(0, dtype=np.int64), np.zeros((0, 0))
    values, _ = together(channels, [usable[at] for at in there], line.max_age)
    changed = (values[:, 1:] != values[:, :-1]) & np.isfinite(values[:, 1:])
    fresh = np.flatnonzero(changed.any(axis=0)) + 1
    shown = values[:, fresh].T
    return common_axis(channels)[fresh] + _centred(line), np.log(np.where(shown > 0, shown, np.nan))


def _estimated(blank: Lag, line: _Line, time: Times, results: Floats, movement: tuple[Times, Floats]) -> Lag:
    """The lag in one span, from its analyses and the movement of the feeds around it."""
    grid, moved = movement
    lacking = {"no feed meter": moved.shape[1] == 0, "no results": len(time) == 0}
    for reason, lacks in lacking.items():
        if lacks:
            return replace(blank, reason=reason)
    results = results[:, np.isfinite(results).mean(axis=0) >= LEAST_SHARE]
    place = (time + _MINUTE_US // 2 - grid[0]) // _MINUTE_US
    fed = moved[np.clip(place[:, None] - line.searched, 0, len(grid) - 1)]
    whole = np.isfinite(results).all(axis=1) & np.isfinite(fed).all(axis=(1, 2))
    blank = replace(blank, analyses=int(whole.sum()))
    slow_h = max(SLOW, SLOW_CYCLES * line.cycle) / timedelta(hours=1)
    gains, spent = gains_of(results[whole], fed[whole], time[whole] / (60.0 * _MINUTE_US), slow_h=slow_h)
    if not len(gains):
        return replace(blank, reason="too short")
    searched = tuple(line.searched.astype(float).tolist())
    return _judged(replace(blank, searched_min=searched), gains, spent)


def _judged(lag: Lag, gains: Floats, parameters: int) -> Lag:
    """Say what the likelihood of the lags says."""
    searched, best = np.array(lag.searched_min), int(gains.argmax())
    near = searched[gains >= gains[best] - INTERVAL]
    told = replace(
        lag,
        estimate_min=float(searched[best]),
        low_min=float(near[0]) - 0.5,
        high_min=float(near[-1]) + 0.5,
        gain_declared=float(gains[best] - np.interp(lag.declared_min, searched, gains)),
        gain_none=float(gains[best]),
        parameters=parameters,
        gains=tuple(gains.tolist()),
    )
    differs = abs(told.estimate_min - told.declared_min) > TOLERANCE_MIN
    reason = _doubt(told, differs)
    if reason:
        told = replace(told, estimate_min=np.nan, low_min=np.nan, high_min=np.nan)
        return replace(told, answer=CANNOT_TELL, reason=reason)
    return replace(told, answer=DIFFERS if differs else AS_DECLARED, reason="")


def _doubt(told: Lag, differs: bool) -> str:
    """Why the lag of greatest likelihood is no answer; empty where it is one."""
    by_chance = chdtri(told.parameters, CHANCE / len(told.gains)) / 2  # Bonferroni over the lags
    if told.gain_none < by_chance or told.half_width_min > TOLERANCE_MIN:
        return "too little movement"
    if told.estimate_min in (told.searched_min[0], told.searched_min[-1]):
        return "outside the lags searched"
    return "too little movement" if differs and told.gain_declared < CLEAR else ""


def _slow(time_h: Floats, slow_h: float) -> Floats:
    """Orthonormal columns that span all that is slower, array (n, k): cosines up to that period."""
    if len(time_h) < 2:
        return np.zeros((len(time_h), 0))
    length = float(time_h[-1] - time_h[0])
    along = (time_h - time_h[0]) / length
    waves = np.cos(np.pi * np.arange(int(2 * length / slow_h) + 1) * along[:, None])
    return np.asarray(np.linalg.qr(waves)[0])


def _without(values: Floats, slow: Floats) -> Floats:
    """Take the slow part out of each column; gaps do no harm, since only times with results are fitted."""
    flat = values.reshape(len(values), -1)
    return np.asarray((flat - slow @ (slow.T @ flat)).reshape(values.shape))


def _scaled(values: Floats) -> Floats:
    """Give each feed a mean square of about one; a feed that never moves is left out."""
    size = np.sqrt(np.mean(values**2, axis=(0, 1))) if values.size else np.zeros(values.shape[2])
    return values[:, :, size > 1e-9] / size[size > 1e-9]


def _directions(values: Floats) -> Floats:
    """Orthonormal columns that span the columns given; what rounding alone tells apart is left out."""
    size = np.sqrt(np.mean(values**2, axis=0)) if values.size else np.zeros(values.shape[1])
    kept = values[:, size > 1e-9] / size[size > 1e-9]
    if not kept.size:
        return np.zeros((len(values), 0))
    left, weight, _ = np.linalg.svd(kept, full_matrices=False)
    return np.asarray(left[:, weight > 1e-6 * weight[0]])


def _independent(feeds: Floats, scored: Floats) -> float:
    """Share of the analyses that count: where residuals and feeds are both autocorrelated not all do."""
    residual = scored - feeds @ (feeds.T @ scored)
    count = min(20, len(feeds) // 4)
    common = (_autocorrelation(feeds) * _autocorrelation(residual))[1 : count + 1]
    return float(1 / max(1.0, 1 + 2 * common.sum()))


def _autocorrelation(columns: Floats) -> Floats:
    """Autocorrelation from lag zero on, of all columns together."""
    power = np.abs(np.fft.rfft(columns, 2 * len(columns), axis=0)) ** 2
    covariance = np.fft.irfft(power.sum(axis=1))[: len(columns)]
    return np.asarray(covariance / covariance[0])
