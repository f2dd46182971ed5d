"""The invented plant, minute by minute: how it was run, and what truly went in and came out.

`simulate` gives the truth; `demo_data.meters.measure` gives what instruments say about it. Both are pure
functions of their arguments and seed.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from demo_data import scenario
from demo_data.kinetics import SPECIES, Floats, outlet, rates
from demo_data.scenario import Event

# The state axis: streams and species in the order of config/demo.toml.
STATE = (
    ("isobutene feed", "isobutene"),
    ("isobutene feed", "isobutane"),
    ("air", "oxygen"),
    ("air", "nitrogen"),
    ("steam", "water"),
    *(("outlet", name) for name in SPECIES),
)
OUTLET = slice(5, None)

# Full load. The isobutene feed is 5.5, air 62 and steam 32.5 mol% of what enters the bed.
FEED_KMOL_H = 106.0
AIR_PER_FEED, STEAM_PER_FEED = 11.3, 5.9
PURGE_SHARE = 0.15  # of full-load air, kept on while the feed is off
# True contents are drawn about what certificates state, with the certificates' standard uncertainty.
ISOBUTANE_PCT, ISOBUTANE_SD_PCT = 1.8, 0.05
OXYGEN_PCT, OXYGEN_SD_PCT = 20.95, 0.01

LOAD_LOW, LOAD_HIGH = 0.75, 1.05
BATH_DEGC = 350.0
BATH_PER_LOG_LOAD_K = (
    28.0  # operators cool the bath at low load, about three quarters of what would hold conversion
)
BATH_PER_WEEK_K = 0.3  # and raise it as the catalyst ages
BATH_SETBACK_K = 25.0  # while the feed is off
ACTIVITY_LOSS_PER_DAY = 0.0012
AGE_AT_START_D = 20.0
GROWTH_H = 48.0  # a selectivity loss reaches its size in this time
RAMP_DOWN_H, RAMP_UP_H = 2.0, 3.0


@dataclass(frozen=True, slots=True)
class Truth:
    """What truly happened, at every minute.

    `time` is UTC [us], shape (t,); `flow_kmol_h` has shape (t, N) with the axis `STATE`; the salt bath,
    outlet pressure and outlet temperature have shape (t,). `events` are those that were put in.
    """

    time: NDArray[np.int64]
    flow_kmol_h: Floats
    bath_degc: Floats
    outlet_kpa: Floats
    outlet_degc: Floats
    events: tuple[Event, ...]


def simulate(
    days: int, seed: int, events: tuple[Event, ...] = (), *, start: date = date(2026, 3, 1)
) -> Truth:
    """Run the plant; the same arguments give the same truth to the last bit.

    Parameters
    ----------
    days : int
        Local days.
    seed : int
        Of the load moves and disturbances. Events never change what is drawn.
    events : tuple of Event
        What is put in; events of instruments are left to `measure`.
    start : date
        First local day.

    Returns
    -------
    Truth
        One row per minute, no gaps, no NaN.
    """
    time = scenario.minutes(start, days)
    moves, mixing, certificate = np.random.default_rng(seed).spawn(3)
    running = _running(time, events)
    demand = _demand(moves, len(time))
    fed = _fed(mixing, certificate, demand * running, _richness(time, events))
    bath = _bath(moves, time, demand, running)
    age_d = AGE_AT_START_D + (time - time[0]) / scenario.DAY_US
    k = rates(bath + 273.15, np.exp(-ACTIVITY_LOSS_PER_DAY * age_d), _diverted(time, events))
    full = FEED_KMOL_H * (1 + AIR_PER_FEED + STEAM_PER_FEED)
    into_bed = np.zeros((len(time), len(SPECIES)))
    for place, (_, name) in enumerate(STATE[: OUTLET.start]):
        into_bed[:, SPECIES.index(name)] = fed[:, place]
    left = outlet(into_bed, k, full / fed.sum(axis=1))
    pressure = 175.0 + 12.0 * (demand * running - 1.0) + wander(mixing, len(time), sd=1.0, minutes=30)
    temperature = 230.0 + 1.0 * _afternoon(time) + wander(mixing, len(time), sd=1.5, minutes=60)
    return Truth(time, np.hstack([fed, left]), bath, pressure, temperature, events)


def wander(rng: np.random.Generator, count: int, *, sd: float, minutes: float) -> Floats:
    """Give a stationary autocorrelated disturbance (first-order autoregression, one value a minute).

    Parameters
    ----------
    rng : Generator
        Source of randomness.
    count : int
        Number of minutes.
    sd : float
        Standard deviation of the disturbance, in the unit wanted.
    minutes : float
        Correlation time [min].

    Returns
    -------
    array, shape (count,)
        In the unit of `sd`.
    """
    keep = np.exp(-1.0 / minutes)
    own_sd = (1 - keep) / np.sqrt(1 - keep**2)  # of an exponential mean of white noise
    white = rng.standard_normal(count)
    white[:1] *= own_sd  # start inside the stationary distribution
    smooth = pd.Series(white).ewm(alpha=1 - keep, adjust=False).mean().to_numpy()
    return np.asarray(smooth * (sd / own_sd))


def _trailing_mean(value: Floats, minutes: int) -> Floats:
    """Mean of the last minutes: turns steps into ramps. Before the first value stands the first value."""
    padded = np.concatenate([np.full(minutes, value[0]), value])
    total = np.cumsum(padded)
    return np.asarray((total[minutes:] - total[:-minutes]) / minutes)


def _demand(rng: np.random.Generator, count: int) -> Floats:
    """Load asked for: held for one to several shifts, then ramped to another level in 90 min."""
    shifts = count // 480 + 1
    level = rng.uniform(LOAD_LOW + 0.02, LOAD_HIGH - 0.02, shifts)
    changed = rng.random(shifts) < 0.4
    level = level[np.maximum.accumulate(np.where(changed, np.arange(shifts), 0))]
    steps = _trailing_mean(np.repeat(level, 480)[:count], 90)
    return np.clip(steps + wander(rng, count, sd=0.004, minutes=30), LOAD_LOW, LOAD_HIGH)


def _running(time: NDArray[np.int64], events: tuple[Event, ...]) -> Floats:
    """Share of the feed that is on: 1, or less in an outage and its ramps."""
    share = np.ones(len(time))
    for event in scenario.of_kind(events, "outage"):
        start, end = scenario.span_us(event, time[0])
        hour = 60 * scenario.MINUTE_US
        corners = [start, start + RAMP_DOWN_H * hour, end - RAMP_UP_H * hour, end]
        share *= np.interp(time, corners, [1, 0, 0, 1])
    return share


def _richness(time: NDArray[np.int64], events: tuple[Event, ...]) -> Floats:
    """Isobutene feed per air and steam, relative to the usual; a feed change comes in over 2 h."""
    rich = np.ones(len(time))
    for event in scenario.of_kind(events, "feed change"):
        inside = scenario.during(time, event, time[0])
        rich += _trailing_mean(np.where(inside, event.size / 100, 0.0), 120)
    return rich


def _diverted(time: NDArray[np.int64], events: tuple[Event, ...]) -> Floats:
    """Share of the wanted reaction that burns."""
    share = np.zeros(len(time))
    for event in scenario.of_kind(events, "selectivity loss"):
        start, end = scenario.span_us(event, time[0])
        grown = np.clip((time - start) / (GROWTH_H * 60 * scenario.MINUTE_US), 0, 1)
        share += np.where(time < end, grown * event.size / 100, 0.0)
    return share


def _fed(mixing: np.random.Generator, certificate: np.random.Generator, load: Floats, rich: Floats) -> Floats:
    """What goes in, shape (t, 5), in the order of `STATE`; air never falls below the purge [kmol/h]."""
    count = len(load)
    feed = FEED_KMOL_H * load
    air = np.maximum(load, PURGE_SHARE) * FEED_KMOL_H * AIR_PER_FEED / rich
    air *= 1 + wander(mixing, count, sd=0.005, minutes=20)
    steam = feed * STEAM_PER_FEED / rich * (1 + wander(mixing, count, sd=0.006, minutes=20))
    isobutane = (ISOBUTANE_PCT + ISOBUTANE_SD_PCT * certificate.standard_normal()) / 100
    oxygen = (OXYGEN_PCT + OXYGEN_SD_PCT * certificate.standard_normal()) / 100
    return np.column_stack(
        [feed * (1 - isobutane), feed * isobutane, air * oxygen, air * (1 - oxygen), steam],
    )


def _afternoon(time: NDArray[np.int64]) -> Floats:
    """One wave a day between -1 and 1, highest at 14:00 UTC."""
    return np.asarray(np.cos(2 * np.pi * (time / scenario.DAY_US - 14 / 24)))


def _bath(rng: np.random.Generator, time: NDArray[np.int64], demand: Floats, running: Floats) -> Floats:
    """Salt bath: follows load within 2 h, the day, and the weekly rise against ageing [degC]."""
    week = np.floor((time - time[0]) / (7 * scenario.DAY_US))
    bath: Floats = (
        BATH_DEGC
        + BATH_PER_LOG_LOAD_K * np.log(_trailing_mean(demand, 120))
        + BATH_PER_WEEK_K * week
        - BATH_SETBACK_K * _trailing_mean(1 - running, 240)
        + 0.6 * _afternoon(time)
        + wander(rng, len(time), sd=0.25, minutes=90)
    )
    return bath


def cells(truth: Truth, minutes: int = 10) -> tuple[NDArray[np.int64], Floats]:
    """Mean true flows of each cell, the minutes joined by straight lines.

    Parameters
    ----------
    truth : Truth
        What `simulate` gave.
    minutes : int
        Length of a cell; the minutes of the truth must be a whole number of cells.

    Returns
    -------
    start : array, shape (c,)
        Start of each cell, UTC [us].
    flow : array, shape (c, N)
        Mean molar flows, axis `STATE` [kmol/h].
    """
    following = np.vstack([truth.flow_kmol_h[1:], truth.flow_kmol_h[-1:]])
    between = (truth.flow_kmol_h + following) / 2
    return truth.time[::minutes], between.reshape(-1, minutes, len(STATE)).mean(axis=1)


def figures(kmol: Floats) -> dict[str, Floats]:
    """True figures as ratios of sums, by the definitions of the figures the program shows.

    Parameters
    ----------
    kmol : array, shape (n, N)
        Amounts in n spans of time, axis `STATE` [kmol].

    Returns
    -------
    dict of array, shape (n,)
        Percent for conversion, selectivity on converted, yield and carbon shares; mol/mol for overall
        selectivity. NaN where nothing was fed.
    """
    amount = dict(zip(STATE, kmol.T, strict=True))
    left = {name: amount["outlet", name] for name in SPECIES}
    fed = amount["isobutene feed", "isobutene"]
    wanted = left["methacrolein"]
    unwanted = ("methacrylic acid", "acetic acid", "acetone", "carbon monoxide", "carbon dioxide")
    with np.errstate(invalid="ignore", divide="ignore"):
        consumed = fed - left["isobutene"]
        return {
            "conversion": 100 * consumed / fed,
            "selectivity on converted": 100 * wanted / consumed,
            "yield on feed": 100 * wanted / fed,
            "overall selectivity to all unwanted": wanted / sum(left[name] for name in unwanted),
            **{f"overall selectivity to {name}": wanted / left[name] for name in unwanted},
        }
