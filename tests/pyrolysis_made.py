"""Months of an ethane cracker as cantera knows them, read by instruments whose errors are drawn as stated.

The truth is the outlet of a well-stirred reactor (gri30) at one temperature a day, times the hour's load.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import cantera as ct
import numpy as np

from ingest.cells import RUNNING, TURNED_DOWN, Cells, cells_frame
from ingest.ledger import Store
from ingest.unit import Unit
from ingest.unitfile import load
from monitor.layout import table_of
from tests.plants_made import ERROR, Seen, unit_text

TEMPERATURES_K = (1120.0, 1135.0, 1150.0, 1165.0)
LEAST = 1e-6  # mole fraction that is kept
FEED = "C2H6:0.6, AR:0.4"
HOURS = 30 * 24
START_US = 1_775_001_600_000_000  # 2026-04-01T00:00Z
SYSTEMATIC = RANDOM = 0.005  # as plants_made.ERROR states


@dataclass(frozen=True)
class Truth:
    """Flows of each hour [kmol/h], (hours, species), with what turns them into readings."""

    names: list[str]
    formulas: dict[str, str]
    fed: np.ndarray
    left: np.ndarray
    turned_down: np.ndarray

    def made(self, name: str, mask: np.ndarray) -> float:
        """Out minus in over some hours [kmol]."""
        at = self.names.index(name)
        return float((self.left[mask, at] - self.fed[mask, at]).sum())

    def readings(self) -> np.ndarray:
        """Error-free readings, in the order of the instruments, (hours, m)."""
        feed, out = self.fed.sum(axis=1), self.left.sum(axis=1)
        argon = self.fed[:, self.names.index("AR")] / feed
        return np.column_stack([feed, argon, out, self.left / out[:, None]])


@cache
def outlets() -> tuple[tuple[str, ...], dict[str, str], np.ndarray, np.ndarray]:
    """Names, formulas, feed and outlet of each temperature per kmol fed, (temperatures, species)."""
    runs = [_stirred(one) for one in TEMPERATURES_K]
    phase = ct.Solution("gri30.yaml")
    phase.TPX = 1150.0, ct.one_atm, FEED
    fed = phase.X
    there = np.flatnonzero((np.max([run / run.sum() for run in runs], axis=0) > LEAST) | (fed > 0))
    names = tuple(phase.species_name(int(k)) for k in there)
    formulas = {name: _formula(phase.species(name)) for name in names}
    return names, formulas, fed[there], np.array([run[there] for run in runs])


def _stirred(temperature_k: float) -> np.ndarray:
    """Outlet [kmol per kmol fed] of a well-stirred reactor of 0.3 s."""
    gas = ct.Solution("gri30.yaml")
    gas.TPX = temperature_k, ct.one_atm, FEED
    source, sink = ct.Reservoir(gas, clone=True), ct.Reservoir(gas, clone=True)
    vessel = ct.IdealGasMoleReactor(gas, energy="off", volume=1.0, clone=True)
    inlet = ct.MassFlowController(source, vessel, mdot=vessel.phase.density / 0.3)
    outlet = ct.PressureController(vessel, sink, primary=inlet, K=1e-6)
    net = ct.ReactorNet([vessel])
    net.rtol, net.atol = 1e-12, 1e-18
    net.advance(5.0)
    net.solve_steady()
    fed = inlet.mass_flow_rate / gas.mean_molecular_weight
    return np.array(outlet.mass_flow_rate / vessel.phase.mean_molecular_weight * vessel.phase.X / fed)


def _formula(species: ct.Species) -> str:
    return "".join(
        f"{'Ar' if element == 'AR' else element.capitalize()}{int(number)}"
        for element, number in species.composition.items()
    )


def truth() -> Truth:
    """April 2026: load between 70 and 130 kmol/h, 40 in the first six hours of every fifth day."""
    names, formulas, fed, left = outlets()
    hour = np.arange(HOURS)
    turned_down = (hour // 24 % 5 == 0) & (hour % 24 < 6)
    load = np.where(turned_down, 40.0, 100 + 30 * np.sin(hour / 17))
    state = hour // 24 % len(left)
    return Truth(list(names), formulas, load[:, None] * fed, load[:, None] * left[state], turned_down)


def unit_of(folder: Path, true: Truth) -> Unit:
    """The unit: both flows and every species, 0.5 % random and systematic each, one result an hour."""
    unwanted = [name for name in true.names if "C" in true.formulas[name] and name not in ("C2H6", "C2H4")]
    first = true.readings()[0]
    seen = [
        Seen("molar flow", "feed", first[0], "kmol/h"),
        Seen("mole fraction", "feed", first[1], "mol/mol", "AR"),
        Seen("molar flow", "outlet", first[2], "kmol/h"),
        *(
            Seen("mole fraction", "outlet", value, "mol/mol", name)
            for name, value in zip(true.names, first[3:], strict=True)
        ),
    ]
    chemistry = (
        f'key_reactant = "C2H6"\nwanted = "C2H4"\nunwanted = {unwanted}\ninert = ["AR"]\nkey_element = "C"'
    )
    text = unit_text(
        true.formulas, {"feed": ("in", ["C2H6", "AR"]), "outlet": ("out", true.names)}, seen, chemistry
    )
    assert f"{{ relative_pct = {100 * RANDOM:g}, floor = 1e-9 }}" == ERROR
    hourly = text.replace('"10min"', '"1h"').replace('max_age = "30min"', 'max_age = "2h"')
    load_rules = '[operating]\nload = "I0"\ndown_below = 5\nrunning_above = 10\nturned_down_below = 55\n'
    (folder / "made.toml").write_text(hourly + load_rules, encoding="utf-8")
    return load(folder / "made.toml")


def read(unit: Unit, true: Truth, seed: int) -> Cells:
    """Cells of the month with errors drawn: one systematic error per instrument, one random per result."""
    rng = np.random.default_rng(seed)
    exact = true.readings()
    own = 1 + SYSTEMATIC * rng.standard_normal(exact.shape[1])
    value = exact * own * (1 + RANDOM * rng.standard_normal(exact.shape))
    return Cells(
        start=START_US + 3_600_000_000 * np.arange(HOURS),
        value=value,
        share=np.ones(value.shape, np.float32),
        condition=np.zeros(value.shape, np.int8),
        operating=np.where(true.turned_down, TURNED_DOWN, RUNNING).astype(np.int8),
    )


def stored(folder: Path, unit: Unit, cells: Cells) -> None:
    """Put cells into a store, as a pass does."""
    with Store(folder).begin() as pass_:
        pass_.write(unit.key, "cells", "2026-04", table_of(cells_frame(unit, cells)))


def true_figures(true: Truth) -> dict[tuple[str, str], float]:
    """What every figure of the month is, by hand from cantera's flows: (figure, mode) to its value."""
    gas = ct.Solution("gri30.yaml")
    carbon = {name: _carbon(true.formulas[name]) for name in true.names}
    mass = {name: gas.molecular_weights[gas.species_index(name)] for name in ("C2H6", "C2H4")}
    products = [name for name in true.names if carbon[name] and name != "C2H6"]
    found = {}
    for mode, mask in (("as operated", np.ones(HOURS, bool)), ("steady", ~true.turned_down)):
        fed = float(true.fed[mask, true.names.index("C2H6")].sum())
        consumed, made = -true.made("C2H6", mask), {name: true.made(name, mask) for name in products}
        told = {
            "conversion": 100 * consumed / fed,
            "selectivity on converted": 100 * made["C2H4"] / consumed,
            "yield on feed": 100 * made["C2H4"] / fed,
            "selectivity by raw difference": 100 * made["C2H4"] / consumed,
            "selectivity by raw products": 200
            * made["C2H4"]
            / sum(carbon[name] * made[name] for name in products),
            "carbon closure": 100.0,
            "converted closure": 100.0,
            "make of C2H4": made["C2H4"] * mass["C2H4"] / 1000 / mask.sum(),
            "C2H6 fed": fed * mass["C2H6"] / 1000 / mask.sum(),
            "specific consumption fed": fed * mass["C2H6"] / (made["C2H4"] * mass["C2H4"]),
            "specific consumption consumed": consumed * mass["C2H6"] / (made["C2H4"] * mass["C2H4"]),
        }
        told |= {
            f"share of {one}": 50 * carbon[one] * made[one] / consumed for one in products if one != "C2H4"
        }
        told |= {
            f"overall selectivity to {one}": made["C2H4"] / made[one] for one in products if one != "C2H4"
        }
        found |= {(name, mode): value for name, value in told.items()}
    return found


def _carbon(formula: str) -> int:
    found = re.search(r"C(\d+)", formula)
    return int(found[1]) if found else 0
