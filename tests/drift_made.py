"""Many demo plants hour by hour: what their figures were said to be, and where they were run.

The plant of `demo_data` in blocks of an hour, each block balanced by the program itself. Every plant has its
own calibration errors (as the unit file states them), slow wander of each calibration, load moves between 77
and 103 %, salt bath, mixing of air and steam, and disturbances that nobody measures.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import cache

import numpy as np
from scipy.signal import lfilter

from demo_data import kinetics, meters, plant
from demo_data.plant import OUTLET, STATE
from ingest.balance import problem_of
from ingest.cells import RUNNING, Cells
from ingest.instruments import measured
from ingest.reconcile import reconcile
from ingest.unit import Healthy, Unit, Watch
from ingest.unitfile import load
from monitor.departure import Blocks
from monitor.expectation import logarithm_pct, points
from tests.source import ROOT
from tests.units_made import MIDNIGHT

Floats = np.ndarray

HOUR_US = 3_600_000_000
FIGURES = ("yield on feed", "selectivity on converted", "conversion")
POINT = ("FI-201", "TI-205", "FI-202", "FI-203")  # the load first
WANDER, WANDER_H = 0.003, 240.0  # standard deviation of each calibration, and how long it remembers
UNSEEN, UNSEEN_H = 0.0026, 4.0  # disturbances of selectivity that nobody measures, and how long they last
UNSEEN_ACTIVITY = 0.012  # the same of activity
PIECE = 50_000  # blocks balanced in one go


@dataclass(frozen=True)
class Plants:
    """Figures told and true by name (plants, hours) [%]; readings (plants, hours, POINT); catalyst age."""

    told: dict[str, Floats]
    true: dict[str, Floats]
    point: Floats
    age_d: Floats  # (hours,)


@cache
def hourly_unit() -> Unit:
    """The demo unit with cells of an hour."""
    unit = load(ROOT / "config/demo.toml")
    return dataclasses.replace(unit, cell=timedelta(hours=1), windows=(timedelta(hours=1),))


def remembered(rng: np.random.Generator, shape: tuple[int, ...], *, hours: float) -> Floats:
    """First-order autoregressions of unit standard deviation along the last axis."""
    keep = np.exp(-1.0 / hours)
    white = rng.standard_normal(shape) * np.sqrt(1 - keep**2)
    white[..., 0] /= np.sqrt(1 - keep**2)
    return np.asarray(lfilter([1.0], [1.0, -keep], white, axis=-1))


def plants(count: int, hours: int, seed: int, *, loss: Floats | float = 0.0) -> Plants:
    """Run plants for so many hours; the same seed gives the same plants whatever is lost.

    `loss` is the share of the wanted reaction that burns, (plants, hours) or one number.
    """
    moves, unseen, errors = np.random.default_rng(seed).spawn(3)
    shape = (count, hours)
    demand = _demand(moves, shape)
    bath = _bath(moves, demand)
    age_d = plant.AGE_AT_START_D + np.arange(hours) / 24.0
    activity = np.exp(-plant.ACTIVITY_LOSS_PER_DAY * age_d) * (
        1 + UNSEEN_ACTIVITY * remembered(unseen, shape, hours=UNSEEN_H)
    )
    lost = np.broadcast_to(loss, shape) + UNSEEN * remembered(unseen, shape, hours=UNSEEN_H)
    flow = _through_bed(_fed(moves, demand), bath.ravel(), activity.ravel(), lost.ravel())
    truth = plant.Truth(
        np.zeros(count * hours, dtype=np.int64),
        flow,
        bath.ravel(),
        175.0 + 12.0 * (demand.ravel() - 1.0),
        np.full(count * hours, 230.0),
        (),
    )
    value = _readings(truth, shape, errors)
    unit = hourly_unit()
    names = [one.name for one in unit.instruments]
    told = plant.figures(_balanced(unit, value))
    true = plant.figures(flow)
    return Plants(
        {name: told[name].reshape(shape) for name in FIGURES},
        {name: true[name].reshape(shape) for name in FIGURES},
        value[:, [names.index(name) for name in POINT]].reshape(*shape, len(POINT)),
        age_d,
    )


def _demand(rng: np.random.Generator, shape: tuple[int, int]) -> Floats:
    """Load held for one to several shifts, then ramped within two hours."""
    count, hours = shape
    shifts = hours // 8 + 1
    level = rng.uniform(plant.LOAD_LOW + 0.02, plant.LOAD_HIGH - 0.02, (count, shifts))
    changed = rng.random((count, shifts)) < 0.4
    changed[:, 0] = True
    last = np.maximum.accumulate(np.where(changed, np.arange(shifts), 0), axis=1)
    held = np.repeat(np.take_along_axis(level, last, axis=1), 8, axis=1)[:, :hours]
    before = np.concatenate([held[:, :1], held[:, :-1]], axis=1)
    return (held + before) / 2 + 0.003 * rng.standard_normal(shape)


def _bath(rng: np.random.Generator, demand: Floats) -> Floats:
    """Salt bath: follows load, the day and the week, and wanders [degC]."""
    hour = np.arange(demand.shape[1])
    before = np.concatenate([demand[:, :1], demand[:, :-1]], axis=1)
    return (
        plant.BATH_DEGC
        + plant.BATH_PER_LOG_LOAD_K * np.log((demand + before) / 2)
        + plant.BATH_PER_WEEK_K * (hour // 168)
        + 0.6 * np.cos(2 * np.pi * (hour - 14) / 24)
        + 0.25 * remembered(rng, demand.shape, hours=1.5)
    )


def _fed(rng: np.random.Generator, demand: Floats) -> Floats:
    """What goes in, (blocks, 5), in the order of `STATE` [kmol/h]."""
    feed = plant.FEED_KMOL_H * demand.ravel()
    ratios = (
        per * (1 + sd * remembered(rng, demand.shape, hours=8.0)).ravel()
        for per, sd in ((plant.AIR_PER_FEED, 0.008), (plant.STEAM_PER_FEED, 0.01))
    )
    air, steam = (feed * ratio for ratio in ratios)
    isobutane, oxygen = plant.ISOBUTANE_PCT / 100, plant.OXYGEN_PCT / 100
    return np.column_stack(
        [feed * (1 - isobutane), feed * isobutane, air * oxygen, air * (1 - oxygen), steam]
    )


def _through_bed(fed: Floats, bath: Floats, activity: Floats, lost: Floats) -> Floats:
    """Flows of all streams, axis `STATE` [kmol/h]."""
    into = np.zeros((len(fed), len(kinetics.SPECIES)))
    for place, (_, name) in enumerate(STATE[: OUTLET.start]):
        into[:, kinetics.SPECIES.index(name)] = fed[:, place]
    full = plant.FEED_KMOL_H * (1 + plant.AIR_PER_FEED + plant.STEAM_PER_FEED)
    k = kinetics.rates(bath + 273.15, activity, lost)
    return np.hstack([fed, kinetics.outlet(into, k, full / into.sum(axis=1))])


def _readings(truth: plant.Truth, shape: tuple[int, int], rng: np.random.Generator) -> Floats:
    """Block means of every instrument, (blocks, instruments), each in its own unit."""
    unit = hourly_unit()
    shared = dict.fromkeys((name for one in unit.shared for name in one.instruments), 0.0)
    for one in unit.shared:
        common = one.relative * rng.standard_normal((shape[0], 1))
        shared |= dict.fromkeys(one.instruments, common)
    columns = []
    for one in unit.instruments:
        if one.tag is None or one.kind == "signal":
            columns.append(np.full(shape, np.nan if one.value is None else one.value))
            continue
        exact = meters.true_reading(one, truth, unit).reshape(shape)
        results = max(1.0, timedelta(hours=1) / one.cycle)
        wander = WANDER if one.kind not in ("temperature", "pressure") else 0.0
        constant = (one.systematic.relative * np.abs(exact) + one.systematic.floor) * rng.standard_normal(
            (shape[0], 1)
        )
        noise = (one.random.relative * np.abs(exact) + one.random.floor) / np.sqrt(results)
        columns.append(
            exact * (1 + shared.get(one.name, 0.0) + wander * remembered(rng, shape, hours=WANDER_H))
            + constant
            + noise * rng.standard_normal(shape)
        )
    return np.stack(columns, axis=-1).reshape(shape[0] * shape[1], -1)


def _balanced(unit: Unit, value: Floats) -> Floats:
    """Reconciled flows of every block, axis `STATE` [kmol/h]."""
    problem = problem_of(unit)
    assert problem.state == STATE
    parts = []
    for first in range(0, len(value), PIECE):
        piece = value[first : first + PIECE]
        cells = Cells(
            start=MIDNIGHT + np.arange(len(piece)) * HOUR_US,
            value=piece,
            share=np.ones(piece.shape, dtype=np.float32),
            condition=np.zeros(piece.shape, dtype=np.int8),
            operating=np.full(len(piece), RUNNING, dtype=np.int8),
        )
        states, _ = reconcile(problem, cells, measured(unit, cells.value, cells.share))
        parts.append(states.flow_kmol_h)
    return np.concatenate(parts)


def operated(hours: int) -> Unit:
    """The hourly unit with a healthy period of so many hours from the first block on."""
    begun = datetime.fromtimestamp(MIDNIGHT / 1e6, UTC)
    healthy = Healthy(begun, begun + timedelta(hours=hours), POINT[1:])
    return dataclasses.replace(hourly_unit(), healthy=healthy)


def blocks_of(unit: Unit, made: Plants, place: int, figure: str = "yield on feed") -> Blocks:
    """What a drift watch sees of one plant: every hour of it ran."""
    count = made.point.shape[1]
    return Blocks(
        end_us=MIDNIGHT + (np.arange(count) + 1) * HOUR_US,
        value=made.told[figure][place],
        half_width=np.full(count, 0.5),
        point=points(unit, {name: made.point[place, :, at] for at, name in enumerate(POINT)}),
        load_pct=logarithm_pct(made.point[place, :, 0]),
        idle=np.zeros(count, dtype=bool),
        running=np.ones(count, dtype=bool),
    )


def since(blocks: Blocks, first: int) -> Blocks:
    """The blocks from one on."""
    return Blocks(*(getattr(blocks, one.name)[first:] for one in dataclasses.fields(Blocks)))


def drift_watch(test: str = "cusum", **changes: object) -> Watch:
    """A watch on the yield of every hour."""
    plain = Watch(
        name="yield drift",
        figure="yield on feed",
        window=timedelta(hours=1),
        low=None,
        high=None,
        priority="medium",
        deadband=0.0,
        on_delay=timedelta(0),
        off_delay=timedelta(0),
        steady=True,
        test=test,
    )
    return dataclasses.replace(plain, **changes)  # type: ignore[arg-type]
