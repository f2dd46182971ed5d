"""Plants with a healthy month and windows after it, into which one or two faults are put, cell by cell.

Two chemistries: the demo plant, minute by minute with its dead times, holds and load moves, and propene to
acrolein with an analyzer that sees water and a meter by mass at the outlet, cell by cell. On top every
calibration wanders slowly by as much as is allowed for, in the healthy month as well as after it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from demo_data import kinetics, meters, plant
from demo_data.scenario import DAY_US
from ingest.balance import Problem, problem_of
from ingest.causes import CHANNEL_DRIFT, METER_DRIFT
from ingest.cells import RUNNING, Cells, make_cells
from ingest.instruments import balance_columns, balance_instruments
from ingest.unit import FLOW_KINDS, Healthy, Unit
from ingest.unitfile import load
from tests.test_half_widths import error_free
from tests.unitfiles_made import loaded

DAY, SHIFT = 144, 48  # cells
MARGIN = 6  # cells left out between two windows
HEALTHY_DAYS, AFTER_DAYS = 30, 8
WANDER_DAYS = 5.0  # time in which a calibration wanders to another place
AIR = {"nitrogen": 0.78084, "oxygen": 0.209476, "carbon dioxide": 0.000314}  # US Standard Atmosphere 1976

Floats = np.ndarray


@dataclass(frozen=True)
class Plant:
    """A record: what is read (t, instruments) what truly flows (N, t), and what a change of reaction does.

    `changed(flow, cells, what)` gives the true flows of some cells with rates or selectivities changed.
    """

    unit: Unit
    problem: Problem
    cells: Cells
    flow: Floats
    changed: Callable[[Floats, slice, Mapping[str, float]], Floats]

    @property
    def healthy(self) -> Cells:
        """The month in which nothing is wrong."""
        return rows_of(self.cells, slice(0, HEALTHY_DAYS * DAY))

    def windows(self) -> list[slice]:
        """Eight hours each, after the healthy month."""
        first = np.arange(HEALTHY_DAYS * DAY + MARGIN, len(self.cells.start) - SHIFT, SHIFT + MARGIN)
        return [slice(int(at), int(at) + SHIFT) for at in first]


def rows_of(cells: Cells, which: slice) -> Cells:
    return Cells(*(getattr(cells, name)[which] for name in Cells.__slots__))


@dataclass(frozen=True)
class Fault:
    """One thing that is put in: a cause of the balance, a species, 'conversion' or 'unseen', and its size."""

    name: str
    size: float


# --- what happens


def with_faults(made: Plant, which: slice, faults: list[Fault]) -> Cells:
    """The cells of a window with faults in all of them; those of the reaction come first."""
    cells = rows_of(made.cells, which)
    value = cells.value.copy()
    columns = balance_columns(made.unit)
    instruments = {*made.problem.names, *(one.name for one in made.unit.shared)}
    inside = [one for one in faults if one.name not in instruments and not one.name.startswith("air into")]
    true = made.flow[:, which]
    if inside:
        moved, unseen = true, np.zeros(true.shape[1])
        told = {one.name: one.size for one in inside if one.name != "unseen"}
        moved = made.changed(moved, which, told) if told else moved
        for one in (one for one in inside if one.name == "unseen"):
            moved, unseen = _unseen(made, moved, one.size)
        value[:, columns] *= (_shown(made, moved, unseen) / _shown(made, true, 0.0)).T
    for one in (one for one in faults if one not in inside):
        _sick(made, value, one)
    return replace(cells, value=value)


OXYGEN_OF_UNSEEN = 1.5  # mol O2 taken per mole of wanted product that becomes something no channel sees


def _unseen(made: Plant, flow: Floats, share: float) -> tuple[Floats, Floats]:
    """A share of the wanted product goes on to C(n) H(m - 2) O(k + 2) and water, which no channel sees."""
    moved = flow.copy()
    place = {name: i for i, name in enumerate(made.problem.state) if name[0] == "outlet"}
    lost = share * flow[place["outlet", made.unit.wanted]]
    moved[place["outlet", made.unit.wanted]] -= lost
    moved[place["outlet", "oxygen"]] -= OXYGEN_OF_UNSEEN * lost
    moved[place["outlet", "water"]] += lost
    return moved, lost


def _shown(made: Plant, flow: Floats, unseen: Floats | float) -> Floats:
    """What error-free instruments show, (m, t), with something unseen in it, as heavy as the wanted."""
    seen = balance_instruments(made.unit)
    below = np.where(made.problem.linear[:, None], 1.0, made.problem.denominator @ flow)
    top = made.problem.numerator @ flow
    mass = {one.name: one.molar_mass_kg_kmol for one in made.unit.species}[made.unit.wanted]
    for i, one in enumerate(seen):
        if one.stream == "outlet" and one.kind in FLOW_KINDS:
            top[i] += unseen * (mass if one.kind == "mass flow" else 1.0)
        elif one.stream == "outlet":
            below[i] += unseen
    return top / below


def _sick(made: Plant, value: Floats, fault: Fault) -> None:
    """Readings too high by a fraction, or a share of air in the sample, in place."""
    shared = {one.name: one.instruments for one in made.unit.shared}
    for column, one in zip(balance_columns(made.unit), balance_instruments(made.unit), strict=True):
        if one.name == fault.name or one.name in shared.get(fault.name, ()):
            value[:, column] *= 1 + fault.size
        elif one.analyzer and fault.name == f"air into the sample of {one.analyzer}":
            drawn = sum(AIR.get(name, 0.0) for name in one.species) / one.to_base
            value[:, column] += fault.size * (drawn - value[:, column])


def wandering(unit: Unit, value: Floats, seed: int) -> Floats:
    """Every calibration wanders (first-order autoregression) by as much as is allowed for."""
    rng = np.random.default_rng(seed)
    moved = value.copy()
    for column, one in zip(balance_columns(unit), balance_instruments(unit), strict=True):
        own = plant.wander(rng, len(value), sd=1.0, minutes=WANDER_DAYS * DAY)
        moved[:, column] *= 1 + (METER_DRIFT if one.kind in FLOW_KINDS else CHANNEL_DRIFT) * own * bool(
            one.tag
        )
    return moved


# --- the demo plant


def demo(seed: int) -> Plant:
    """The demo plant with another seed, wide ranges, and thirty healthy days."""
    stated = load(Path("config/demo.toml"))
    wide = tuple(
        replace(one, low=-np.inf, high=np.inf) if one.analyzer else one for one in stated.instruments
    )
    truth = plant.simulate(HEALTHY_DAYS + AFTER_DAYS, seed)
    first, last = int(truth.time[0]), int(truth.time[-1]) + 60_000_000
    unit = replace(
        stated,
        instruments=wide,
        healthy=Healthy(_utc(first), _utc(first + HEALTHY_DAYS * DAY_US), ("TI-205", "FI-202", "FI-203")),
    )
    readings = meters.as_readings(meters.measure(truth, unit, seed + 1).results)
    cells = make_cells(unit, readings, first, last)
    cells = replace(cells, value=wandering(unit, cells.value, seed + 2))
    bath = truth.bath_degc.reshape(-1, 10).mean(axis=1)
    _, flow = plant.cells(truth)

    def changed(true: Floats, which: slice, what: Mapping[str, float]) -> Floats:
        return _bed(true, bath[which], what)

    return Plant(unit, problem_of(unit), cells, flow.T, changed)


def _utc(us: int) -> datetime:
    return datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=us)


def _bed(true: Floats, bath_degc: Floats, what: Mapping[str, float]) -> Floats:
    """True flows times what the changed kinetics let out over what the usual ones do."""
    into = np.zeros((true.shape[1], len(kinetics.SPECIES)))
    for place, (_, name) in enumerate(plant.STATE[: plant.OUTLET.start]):
        into[:, kinetics.SPECIES.index(name)] = true[place]
    usual = kinetics.rates(bath_degc + 273.15, np.full(len(bath_degc), 0.97), np.zeros(len(bath_degc)))
    k = usual * np.exp(-what.get("conversion", 0.0))
    for name, by in what.items():
        if name != "conversion":
            k = _more(k, name, by)
    full = plant.FEED_KMOL_H * (1 + plant.AIR_PER_FEED + plant.STEAM_PER_FEED)
    contact = full / into.sum(axis=1)
    left, before = (kinetics.outlet(into, one, contact) for one in (k, usual))
    moved = true.copy()
    moved[plant.OUTLET] += (left - before).T
    return moved


# The reaction that makes each by-product alone, at the cost of the wanted one.
ROUTES = {"methacrylic acid": 5, "acetic acid": 4, "acetone": 3, "carbon monoxide": 2, "carbon dioxide": 1}


def _more(k: Floats, name: str, share: float) -> Floats:
    """A share of the wanted reaction goes to one by-product instead, or is burnt."""
    moved = k.copy()
    if name == "burnt":
        lost = share * k[:, 0]
        moved[:, 1] += lost / 2
        moved[:, 2] += lost / 2
    elif kinetics.PARALLEL[ROUTES[name]]:
        lost = share * k[:, 0]
        moved[:, ROUTES[name]] += lost
    else:
        moved[:, ROUTES[name]] *= 1 + share * k[:, 0] / k[:, ROUTES[name]]
        return moved
    moved[:, 0] -= lost
    return moved


# --- propene to acrolein

PROPENE = """
[unit]
name = "propene oxidation"
time_zone = "UTC"
reactor = "packed bed"

[chemistry]
key_reactant = "propene"
wanted = "acrolein"
unwanted = ["acrylic acid", "acetic acid", "acetaldehyde", "carbon monoxide", "carbon dioxide"]
inert = ["nitrogen", "propane"]

[chemistry.species]
propene = "C3H6"
oxygen = "O2"
water = "H2O"
acrolein = "C3H4O"
"acrylic acid" = "C3H4O2"
"acetic acid" = "C2H4O2"
acetaldehyde = "C2H4O"
"carbon monoxide" = "CO"
"carbon dioxide" = "CO2"
nitrogen = "N2"
propane = "C3H8"

[[stream]]
name = "feed"
direction = "in"
species = ["propene", "propane"]

[[stream]]
name = "air"
direction = "in"
species = ["oxygen", "nitrogen"]

[[stream]]
name = "steam"
direction = "in"
species = ["water"]

[[stream]]
name = "outlet"
direction = "out"
species = ["propene", "oxygen", "water", "acrolein", "acrylic acid", "acetic acid", "acetaldehyde",
  "carbon monoxide", "carbon dioxide", "nitrogen", "propane"]

[[analyzer]]
name = "AI-9"
stream = "outlet"
kind = "mole fraction"
unit = "mol%"
basis = "wet"
cycle = "10min"
max_age = "30min"
sampling = "held"
random = { relative_pct = 0.5, floor = 0.001 }
systematic = { relative_pct = 0.8, floor = 0.001 }
[analyzer.channel]
propene = { tag = "C1" }
oxygen = { tag = "C2" }
water = { tag = "C3" }
acrolein = { tag = "C4" }
"acrylic acid" = { tag = "C5" }
"acetic acid" = { tag = "C6" }
acetaldehyde = { tag = "C7" }
"carbon monoxide" = { tag = "C8" }
"carbon dioxide" = { tag = "C9" }
nitrogen = { tag = "C10" }
propane = { tag = "C11" }

[[shared]]
name = "AI-9 span"
analyzer = "AI-9"
relative_pct = 0.3

[operating]
load = "F-1"
down_below = 5
running_above = 10
"""

METER = """
[[instrument]]
name = "{0}"
tag = "{0}"
kind = "{2}"
stream = "{1}"
unit = "{3}"
random = {{ relative_pct = 0.5 }}
systematic = {{ relative_pct = 0.7 }}
cycle = "1min"
max_age = "5min"
sampling = "interpolated"
"""
DECLARED = """
[[instrument]]
name = "{0} in {1}"
kind = "mole fraction"
value = {2}
stream = "{1}"
species = ["{0}"]
unit = "mol%"
random = {{}}
systematic = {{ floor = {3} }}
"""
BATH = """
[[instrument]]
name = "T-1"
tag = "T-1"
kind = "temperature"
unit = "degC"
cycle = "1min"
max_age = "5min"
sampling = "interpolated"
"""
# Extents: propene to each product, oxygen and water as the atoms demand.
ROUTES_OF_PROPENE = {
    "acrolein": {"propene": -1, "oxygen": -1, "acrolein": 1, "water": 1},
    "acrylic acid": {"propene": -1, "oxygen": -1.5, "acrylic acid": 1, "water": 1},
    "acetic acid": {"propene": -1, "oxygen": -2.5, "acetic acid": 1, "carbon dioxide": 1, "water": 1},
    "acetaldehyde": {"propene": -1, "oxygen": -2, "acetaldehyde": 1, "carbon dioxide": 1, "water": 1},
    "carbon monoxide": {"propene": -1, "oxygen": -3, "carbon monoxide": 3, "water": 3},
    "carbon dioxide": {"propene": -1, "oxygen": -4.5, "carbon dioxide": 3, "water": 3},
}
SPLIT = np.array([0.87, 0.045, 0.012, 0.013, 0.022, 0.038])  # at the usual load and temperature [invented]
BY_BATH = np.array([0.0, 0.004, 0.01, 0.005, 0.014, 0.018])  # log per kelvin [invented]
LAST_FED = 5  # flows of the state that go in


def propene_unit(folder: Path) -> Unit:
    """The unit file of the plant, loaded."""
    meters_ = [
        ("F-1", "feed", "mass flow", "kg/h"), ("F-2", "air", "molar flow", "kmol/h"),
        ("F-3", "steam", "mass flow", "kg/h"), ("F-4", "outlet", "mass flow", "kg/h"),
    ]  # fmt: skip
    declared = [("propane", "feed", 4.0, 0.1), ("oxygen", "air", 20.95, 0.01)]
    text = PROPENE + "".join(METER.format(*one) for one in meters_) + BATH
    return loaded(folder, text + "".join(DECLARED.format(*one) for one in declared))


def propene(folder: Path, seed: int) -> Plant:
    """Thirty healthy days and some more, at cells of ten minutes."""
    unit = propene_unit(folder)
    count = (HEALTHY_DAYS + AFTER_DAYS) * DAY
    first = int(datetime(2026, 3, 1, tzinfo=UTC).timestamp()) * 1_000_000
    unit = replace(
        unit, healthy=Healthy(_utc(first), _utc(first + HEALTHY_DAYS * DAY_US), ("T-1", "F-2", "F-3"))
    )
    problem = problem_of(unit)
    rng = np.random.default_rng(seed)
    shifts = np.where(rng.random(count // SHIFT) < 0.4, rng.uniform(0.78, 1.03, count // SHIFT), np.nan)
    shifts[0] = 0.9
    level = np.repeat(_filled(shifts), SHIFT)
    load_share = np.convolve(np.concatenate([np.full(8, level[0]), level]), np.full(9, 1 / 9), mode="valid")
    load_share = load_share + plant.wander(rng, count, sd=0.004, minutes=3)
    bath = 30.0 * np.log(load_share) + 0.6 * np.cos(2 * np.pi * np.arange(count) / DAY)
    bath = bath + plant.wander(rng, count, sd=0.25, minutes=9)
    fed = _fed(problem, load_share, rng)
    noise = {name: plant.wander(rng, count, sd=0.01, minutes=18) for name in ROUTES_OF_PROPENE}
    noise["conversion"] = plant.wander(rng, count, sd=0.01, minutes=18)
    flow = _reacted(problem, fed, bath, noise)
    value = np.array(error_free(unit, flow))
    place = [one.name for one in unit.instruments].index("T-1")
    value[:, place] = 320.0 + bath
    value = wandering(unit, _with_errors(unit, value, rng), seed + 2)
    shape = value.shape
    cells = Cells(
        first + np.arange(count) * 600_000_000, value, np.ones(shape, np.float32),
        np.zeros(shape, np.int8), np.full(count, RUNNING, np.int8),
    )  # fmt: skip

    def changed(true: Floats, which: slice, what: Mapping[str, float]) -> Floats:
        own = {name: one[which] for name, one in noise.items()}
        moved = {name: one + what.get(name, 0.0) for name, one in own.items()}
        if "burnt" in what:
            for name in ("carbon monoxide", "carbon dioxide"):
                moved[name] = moved[name] + np.log1p(what["burnt"] / 2 * SPLIT[0] / SPLIT[-1])
        for name in (name for name in what if name in SHARE):
            moved[name] = own[name] + np.log1p(what[name] * SPLIT[0] / SHARE[name])
        return _reacted(problem, true[:LAST_FED], bath[which], moved)

    return Plant(unit, problem, cells, flow, changed)


SHARE = dict(zip(ROUTES_OF_PROPENE, SPLIT, strict=True))
SHARE.pop("acrolein")


def _filled(level: Floats) -> Floats:
    known = np.where(np.isfinite(level), np.arange(len(level)), 0)
    return level[np.maximum.accumulate(known)]


def _fed(problem: Problem, load_share: Floats, rng: np.random.Generator) -> Floats:
    """Flows in, in the order of the state."""
    feed = 100 * load_share
    air = 8.5 * feed * (1 + plant.wander(rng, len(feed), sd=0.005, minutes=2))
    steam = 3.0 * feed * (1 + plant.wander(rng, len(feed), sd=0.006, minutes=2))
    propane, oxygen = 0.04 + 0.001 * rng.standard_normal(), 0.2095 + 0.0001 * rng.standard_normal()
    return np.array([feed * (1 - propane), feed * propane, air * oxygen, air * (1 - oxygen), steam])


def _reacted(problem: Problem, fed: Floats, bath: Floats, noise: Mapping[str, Floats]) -> Floats:
    """All flows; logs of rate and selectivities move by `noise`."""
    contact = 3.0 * np.exp(0.012 * bath - noise["conversion"]) / (fed[0] / 96)
    conversion = -np.expm1(-contact)
    share = SPLIT[:, None] * np.exp(BY_BATH[:, None] * bath)
    share = share * np.exp(np.array([noise[name] for name in ROUTES_OF_PROPENE]))
    share[0] = 1 - share[1:].sum(axis=0)
    names = [name for _, name in problem.state]
    out = dict.fromkeys(names, 0.0)
    for place, row in enumerate(fed):
        out[names[place]] = out[names[place]] + row
    for extent, route in zip(share * conversion * fed[0], ROUTES_OF_PROPENE.values(), strict=True):
        for name, by in route.items():
            out[name] = out[name] + by * extent
    return np.vstack([fed, [out[name] + 0.0 * bath for name in names[LAST_FED:]]])


def _with_errors(unit: Unit, value: Floats, rng: np.random.Generator) -> Floats:
    """One systematic error per instrument and shared source, one random error per independent result."""
    read = value.copy()
    for i, one in enumerate(unit.instruments):
        if one.kind == "temperature":
            continue
        shared = sum(s.relative * rng.standard_normal() for s in unit.shared if one.name in s.instruments)
        sizes = [part.relative * value[:, i] + part.floor for part in (one.systematic, one.random)]
        noise = rng.standard_normal(len(value)) * min(1.0, one.cycle / unit.cell) ** 0.5
        read[:, i] = value[:, i] * (1 + shared * 0) + sizes[0] * rng.standard_normal() + sizes[1] * noise
    for one in unit.shared:
        by = one.relative * rng.standard_normal()
        for i, seen in enumerate(unit.instruments):
            if seen.name in one.instruments:
                read[:, i] *= 1 + by
    return read
