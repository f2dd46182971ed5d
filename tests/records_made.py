"""Records of plants whose truth is known, each measured by instruments drawn anew, worked out to windows.

A record is ten hours of truth by the minute. Many stand one after the other on one axis of time, so that they
go from readings through cells, balance and windows together, as in a pass.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path

import cantera as ct
import numpy as np

from demo_data import kinetics, meters, plant
from demo_data.scenario import DAY_US
from ingest.balance import problem_of
from ingest.cells import make_cells
from ingest.instruments import balance_instruments
from ingest.readings import Readings, Series, join
from ingest.unit import Unit
from ingest.unitfile import load
from monitor.amounts import amounts_of
from monitor.figures import figures_of
from monitor.windows import TWO_SIDED_95, window_figures
from tests.balances_made import predicted
from tests.units_made import MIDNIGHT, MINUTE

FIGURES = ("conversion", "selectivity on converted", "yield on feed", "overall selectivity to all unwanted")
HOURS = (1, 8)
SLOT = 600  # minutes of one record
DAYS, EACH = 10, 50  # days of one demo plant, records taken from them
END = 540  # minute at which its windows end; the rest keeps its neighbours out of them

Floats = np.ndarray
Measure = Callable[[np.ndarray, slice, int], Readings]  # times [us], minutes of the truth, seed


@dataclass(frozen=True)
class Made:
    """A plant's flows by the minute (t, N) [kmol/h], what measures them, and the true figures of sums."""

    unit: Unit
    flow: Floats
    measure: Measure
    figures: Callable[[Floats], Mapping[str, Floats]]


Pick = Callable[[Made, int, int], Floats]  # plant, count, seed -> minutes at which records begin


@dataclass(frozen=True)
class Told:
    """What the program says less the truth, in stated standard uncertainties: (windows, figures, records)."""

    missed: Floats

    @property
    def coverage(self) -> Floats:
        """Share of the 95 % intervals that hold the truth."""
        return (np.abs(self.missed) <= TWO_SIDED_95).mean(axis=-1)

    @property
    def spread(self) -> Floats:
        """Standard error as it is over the standard error as it is stated."""
        return self.missed.std(axis=-1)


def judged(made: Made, begins: np.ndarray, seed: int) -> Told:
    """Work out the records that begin at these minutes of the truth; record k has instruments seed + k."""
    pieces = [slice(int(begin), int(begin) + SLOT) for begin in begins]
    first = MIDNIGHT + np.arange(len(pieces)) * SLOT * MINUTE
    minutes = np.arange(SLOT) * MINUTE
    parts = [
        made.measure(at + minutes, piece, seed + k)
        for k, (at, piece) in enumerate(zip(first, pieces, strict=True))
    ]
    readings = {tag: join([part[tag] for part in parts])[0] for tag in parts[0]}
    unit = dataclasses.replace(made.unit, windows=tuple(timedelta(hours=h) for h in HOURS))
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + len(pieces) * SLOT * MINUTE)
    _, amounts = amounts_of(unit, problem_of(unit), cells)
    shown = window_figures(unit, amounts, figures_of(unit, amounts.names))
    per_cell = unit.cell // timedelta(minutes=1)
    missed = []
    for hours, window in zip(HOURS, unit.windows, strict=True):
        true = made.figures(
            np.array([_sum(made.flow[piece][END - 60 * hours : END + 1]) for piece in pieces])
        )
        ends = shown[window].iloc[END // per_cell - 1 :: SLOT // per_cell]
        missed.append([_missed(ends[name]["as operated"], true[name]) for name in FIGURES])
    assert np.isfinite(missed).all()
    return Told(np.array(missed))


def _sum(flow: Floats) -> Floats:
    """Amount of what flows between the first and the last minute, the minutes joined by straight lines."""
    return flow.sum(axis=0) - (flow[0] + flow[-1]) / 2


def _missed(shown, true: Floats) -> Floats:
    return ((shown["value"] - true) / (shown["half_width"] / TWO_SIDED_95)).to_numpy()


def begins(made: Made, count: int, seed: int) -> np.ndarray:
    """Minutes at which records begin, drawn from the whole truth."""
    return np.random.default_rng(seed).integers(0, len(made.flow) - SLOT, count)


def moving(made: Made, count: int, seed: int, *, least: float = 0.05) -> np.ndarray:
    """Minutes at which records begin whose last hour holds a load move of at least that share."""
    fed = made.flow[:, 0]
    hours = np.lib.stride_tricks.sliding_window_view(fed, 61)
    moved = hours.max(axis=1) / hours.min(axis=1) - 1 >= least
    found = np.flatnonzero(moved) - (END - 60)
    found = found[(found >= 0) & (found < len(fed) - SLOT)]
    return np.random.default_rng(seed).choice(found, count)


# --- the demo plant at any bath temperature


def demo_plant(days: int, seed: int, *, bath_k: float = 0.0) -> Made:
    """The demo plant, its salt bath moved by so many kelvin; analyzer ranges widened to what then leaves."""
    stated = load(Path("config/demo.toml"))
    wide = tuple(
        dataclasses.replace(one, low=-np.inf, high=np.inf) if one.analyzer else one
        for one in stated.instruments
    )
    unit = dataclasses.replace(stated, instruments=wide)
    truth = _at_bath(plant.simulate(days, seed), bath_k)

    def measure(time: np.ndarray, piece: slice, number: int) -> Readings:
        part = plant.Truth(
            time,
            truth.flow_kmol_h[piece],
            truth.bath_degc[piece],
            truth.outlet_kpa[piece],
            truth.outlet_degc[piece],
            (),
        )
        return meters.as_readings(meters.measure(part, unit, number).results)

    return Made(unit, truth.flow_kmol_h, measure, plant.figures)


def demo_records(
    count: int,
    seed: int,
    pick: Pick,
    *,
    bath_k: float = 0.0,
    change: Callable[[Made], Made] = lambda made: made,
) -> Told:
    """Records of many demo plants, each with its own load, disturbances and certificates."""
    told = []
    for number in range(count // EACH):
        made = demo_plant(DAYS, seed + number, bath_k=bath_k)
        told.append(judged(change(made), pick(made, EACH, number), 1000 * seed + EACH * number).missed)
    return Told(np.concatenate(told, axis=-1))


def _at_bath(truth: plant.Truth, bath_k: float) -> plant.Truth:
    """The same feed through the same bed at another bath temperature."""
    into_bed = np.zeros((len(truth.time), len(kinetics.SPECIES)))
    for place, (_, name) in enumerate(plant.STATE[: plant.OUTLET.start]):
        into_bed[:, kinetics.SPECIES.index(name)] = truth.flow_kmol_h[:, place]
    age_d = plant.AGE_AT_START_D + (truth.time - truth.time[0]) / DAY_US
    activity = np.exp(-plant.ACTIVITY_LOSS_PER_DAY * age_d)
    k = kinetics.rates(truth.bath_degc + bath_k + 273.15, activity, np.zeros(len(age_d)))
    full = plant.FEED_KMOL_H * (1 + plant.AIR_PER_FEED + plant.STEAM_PER_FEED)
    left = kinetics.outlet(into_bed, k, full / into_bed.sum(axis=1))
    flow = np.hstack([truth.flow_kmol_h[:, : plant.OUTLET.start], left])
    return dataclasses.replace(truth, flow_kmol_h=flow)


# --- ethane pyrolysis by cantera

PYROLYSIS = """
[unit]
name = "stirred pyrolysis"
time_zone = "UTC"
reactor = "well-mixed"

[chemistry]
key_reactant = "C2H6"
wanted = "C2H4"
unwanted = ["CH4", "C2H2", "C3H8"]
inert = ["AR"]

[chemistry.species]
C2H6 = "C2H6"
C2H4 = "C2H4"
CH4 = "CH4"
C2H2 = "C2H2"
C3H8 = "C3H8"
H2 = "H2"
AR = "Ar"

[[stream]]
name = "feed"
direction = "in"
species = ["C2H6", "AR"]

[[stream]]
name = "outlet"
direction = "out"
species = ["C2H6", "C2H4", "CH4", "C2H2", "C3H8", "H2", "AR"]

[[instrument]]
name = "FI-1"
tag = "FI-1"
kind = "mass flow"
stream = "feed"
unit = "kg/h"
random = { relative_pct = 0.4 }
systematic = { relative_pct = 0.6 }
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[instrument]]
name = "FI-2"
tag = "FI-2"
kind = "molar flow"
stream = "outlet"
unit = "kmol/h"
random = { relative_pct = 0.5 }
systematic = { relative_pct = 0.8 }
cycle = "1min"
max_age = "5min"
sampling = "interpolated"

[[analyzer]]
name = "AI-1"
stream = "feed"
kind = "mole fraction"
unit = "mol%"
cycle = "30min"
dead_time = "5min"
max_age = "2h"
sampling = "held"
random = { relative_pct = 0.3 }
systematic = { relative_pct = 0.5 }
channel = { AR = { tag = "AI-1.AR" } }

[[analyzer]]
name = "AI-2"
stream = "outlet"
kind = "mole fraction"
unit = "mol%"
cycle = "6min"
dead_time = "4min"
max_age = "20min"
sampling = "held"
random = { relative_pct = 0.5, floor = 0.001 }
systematic = { relative_pct = 0.8, floor = 0.001 }
[analyzer.channel]
C2H6 = { tag = "AI-2.C2H6" }
C2H4 = { tag = "AI-2.C2H4" }
CH4 = { tag = "AI-2.CH4" }
C2H2 = { tag = "AI-2.C2H2" }
C3H8 = { tag = "AI-2.C3H8" }
AR = { tag = "AI-2.AR" }

[[shared]]
name = "AI-2 span"
analyzer = "AI-2"
relative_pct = 0.3
"""


def pyrolysis(folder: Path, minutes: int, seed: int, *, temperature_k: float) -> Made:
    """A stirred reactor of ethane in argon, driven through load moves of up to a third within 45 minutes."""
    path = folder / "pyrolysis.toml"
    path.write_text(PYROLYSIS)
    unit = load(path)
    problem = problem_of(unit)
    flow = _driven(problem.state, _load_moves(minutes, seed), temperature_k)
    exact = predicted(problem, flow.T)
    seen = balance_instruments(unit)

    def measure(time: np.ndarray, piece: slice, number: int) -> Readings:
        draws, *noise = np.random.default_rng(number).spawn(1 + len(seen))
        drawn = dict(zip((*problem.names, "span"), draws.standard_normal(len(seen) + 1), strict=True))
        return {
            str(one.tag): _read(one, row[piece] / one.to_base, time, (drawn[one.name], drawn["span"]), rng)
            for one, row, rng in zip(seen, exact, noise, strict=True)
        }

    return Made(unit, flow, measure, lambda kmol: _pyrolysis_figures(problem.state, kmol))


def _read(one, exact: Floats, time: np.ndarray, drawn: tuple[float, float], rng) -> Series:
    """Results once a cycle with the errors that the unit file states, stamped after the dead time."""
    every = one.cycle // timedelta(minutes=1)
    value, stamp = exact[::every], time[::every] + one.dead_time // timedelta(microseconds=1)
    value = value * (1 + (0.003 * drawn[1] if one.analyzer == "AI-2" else 0.0))
    for part, by in ((one.systematic, drawn[0]), (one.random, rng.standard_normal(len(value)))):
        value = value + (part.relative * np.abs(value) + part.floor) * by
    kept = stamp <= time[-1]
    count = int(kept.sum())
    good, source = np.full(count, 2, dtype=np.int8), np.ones(count, dtype=np.int32)
    return Series(stamp[kept], value[kept], good, source, np.arange(1, count + 1))


def _load_moves(minutes: int, seed: int) -> Floats:
    """Share of the usual feed by the minute: 0.75 to 1.1, another level every 2 h within 45 min, a wander."""
    rng = np.random.default_rng(seed)
    level = np.repeat(rng.uniform(0.75, 1.1, minutes // 120 + 1), 120)[:minutes]
    ramps = np.convolve(np.concatenate([np.full(44, level[0]), level]), np.full(45, 1 / 45), mode="valid")
    return ramps + plant.wander(rng, minutes, sd=0.004, minutes=30)


def _driven(state, load_share: Floats, temperature_k: float) -> Floats:
    """Flows into and out of 1 m3 at constant temperature and 1 atm, 0.3 s of gas at full load [kmol/h]."""
    feed = _hydrocarbons()
    feed.TPX = temperature_k, ct.one_atm, "C2H6:0.6, AR:0.4"
    source, sink = ct.Reservoir(feed, clone=True), ct.Reservoir(feed, clone=True)
    vessel = ct.IdealGasMoleReactor(feed, energy="off", volume=1.0, clone=True)
    full = feed.density / 0.3
    inlet = ct.MassFlowController(source, vessel, mdot=full)
    outlet = ct.PressureController(vessel, sink, primary=inlet, K=1e-6)
    net = ct.ReactorNet([vessel])
    net.rtol, net.atol = 1e-8, 1e-15
    net.advance(10.0)
    flows = []
    for share in load_share:
        inlet.mass_flow_rate = full * share
        net.reinitialize()
        net.advance(net.time + 60.0)
        fed = inlet.mass_flow_rate / feed.mean_molecular_weight * feed.X
        left = outlet.mass_flow_rate / vessel.phase.mean_molecular_weight * _quenched(vessel.phase)
        flows.append(
            np.where([way == "feed" for way, _ in state], _of(feed, state, fed), _of(feed, state, left))
        )
    return np.array(flows) * 3600


def _hydrocarbons() -> ct.Solution:
    """gri30 without what holds oxygen or nitrogen: none of it is fed."""
    species = [
        one for one in ct.Species.list_from_file("gri30.yaml") if set(one.composition) <= {"C", "H", "Ar"}
    ]
    names = {one.name for one in species}
    found = [one for one in ct.Solution("gri30.yaml").reactions() if {*one.reactants, *one.products} <= names]
    return ct.Solution(thermo="ideal-gas", kinetics="gas", species=species, reactions=found)


def _quenched(phase) -> Floats:
    """Mole fractions once the radicals have met hydrogen on the way to the analyzer; atoms stay."""
    share = phase.X.copy()
    for radical, stable, hydrogen in (("C2H5", "C2H4", 0.5), ("CH3", "CH4", -0.5), ("C2H3", "C2H2", 0.5)):
        held = share[phase.species_index(radical)]
        share[phase.species_index(stable)] += held
        share[phase.species_index("H2")] += hydrogen * held
    return share


def _of(phase, state, amounts: Floats) -> Floats:
    return amounts[[phase.species_index(name) for _, name in state]]


def _pyrolysis_figures(state, kmol: Floats) -> dict[str, Floats]:
    """Ratios of sums by their definitions; ethane, ethylene and acetylene hold two carbons each."""
    amount = dict(zip(state, kmol.T, strict=True))
    fed, left = amount["feed", "C2H6"], {name: amount[way, name] for way, name in state if way == "outlet"}
    unwanted = left["CH4"] + left["C2H2"] + left["C3H8"]
    return {
        "conversion": 100 * (fed - left["C2H6"]) / fed,
        "selectivity on converted": 100 * left["C2H4"] / (fed - left["C2H6"]),
        "yield on feed": 100 * left["C2H4"] / fed,
        "overall selectivity to all unwanted": left["C2H4"] / unwanted,
    }
