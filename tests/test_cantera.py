"""Figures against cantera: ethane pyrolysis by gri30, written as an export, taken in, worked out again.

cantera knows the truth (its outlet, and its own net production rates); error-free readings must give it back.
"""

from __future__ import annotations

from dataclasses import dataclass

import cantera as ct
import numpy as np
import pytest

from tests.plants_made import Seen, unit_text, work_out

TEMPERATURE_K, PRESSURE_PA, FEED = 1150.0, 101_325.0, "C2H6:0.6, AR:0.4"
LEAST = 1e-15  # mole fraction; gri30 leaves oxygenates at 1e-28


@dataclass(frozen=True)
class Run:
    """What cantera says: flows in and out [kmol/s], net production rates at the outlet [kmol/m3/s]."""

    names: list[str]
    formulas: dict[str, str]
    fed: np.ndarray
    left: np.ndarray
    rates: np.ndarray

    def made(self, name: str) -> float:
        at = self.names.index(name)
        return float(self.left[at] - self.fed[at])

    def rate(self, name: str) -> float:
        return float(self.rates[self.names.index(name)])


def gas():
    found = ct.Solution("gri30.yaml")
    found.TPX = TEMPERATURE_K, PRESSURE_PA, FEED
    return found


def kept(phase, fed, left) -> Run:
    there = np.flatnonzero((phase.X > LEAST) | (fed > 0))
    names = [phase.species_name(k) for k in there]
    formulas = {
        phase.species_name(k): "".join(
            f"{'Ar' if e == 'AR' else e.capitalize()}{int(n)}"
            for e, n in phase.species(int(k)).composition.items()
        )
        for k in there
    }
    return Run(names, formulas, fed[there], left[there], phase.net_production_rates[there])


@pytest.fixture(scope="module")
def stirred() -> Run:
    """A well-stirred reactor of 1 m3 at constant temperature and pressure, at steady state."""
    feed = gas()
    source, sink = ct.Reservoir(feed, clone=True), ct.Reservoir(feed, clone=True)
    vessel = ct.IdealGasMoleReactor(feed, energy="off", volume=1.0, clone=True)
    inlet = ct.MassFlowController(source, vessel, mdot=vessel.phase.density / 0.3)
    outlet = ct.PressureController(vessel, sink, primary=inlet, K=1e-6)
    net = ct.ReactorNet([vessel])
    net.rtol, net.atol = 1e-12, 1e-18
    net.advance(5.0)
    net.solve_steady()
    fed = inlet.mass_flow_rate / feed.mean_molecular_weight * feed.X
    left = outlet.mass_flow_rate / vessel.phase.mean_molecular_weight * vessel.phase.X
    return kept(vessel.phase, fed, left)


@pytest.fixture(scope="module")
def plug() -> Run:
    """One kilogram a second through a tube, followed as a batch at constant temperature and pressure."""
    feed = gas()
    parcel = ct.IdealGasConstPressureMoleReactor(feed, energy="off", clone=True)
    net = ct.ReactorNet([parcel])
    net.rtol, net.atol = 1e-12, 1e-18
    net.advance(0.3)
    fed = feed.X / feed.mean_molecular_weight
    return kept(parcel.phase, fed, parcel.phase.X / parcel.phase.mean_molecular_weight)


def figures(folder, run):
    unwanted = [name for name in run.names if "C" in run.formulas[name] and name not in ("C2H6", "C2H4")]
    streams = {"feed": ("in", ["C2H6", "AR"]), "outlet": ("out", run.names)}
    shares = run.left / run.left.sum()
    seen = [
        Seen("molar flow", "feed", float(run.fed.sum()), "kmol/s"),
        Seen("mole fraction", "feed", float(run.fed[run.names.index("AR")] / run.fed.sum()), "mol/mol", "AR"),
        Seen("molar flow", "outlet", float(run.left.sum()), "kmol/s"),
        *(
            Seen("mole fraction", "outlet", float(share), "mol/mol", name)
            for name, share in zip(run.names, shares, strict=True)
        ),
    ]
    chemistry = (
        f'key_reactant = "C2H6"\nwanted = "C2H4"\nunwanted = {unwanted}\ninert = ["AR"]\nkey_element = "C"'
    )
    text = unit_text(run.formulas, streams, seen, chemistry)
    return work_out(folder, text, [one.value for one in seen])[1]["value"]


@pytest.mark.parametrize("reactor", ["stirred", "plug"])
def test_conversion_selectivity_and_yield_are_canteras(reactor, request, tmp_path):
    run = request.getfixturevalue(reactor)
    told = figures(tmp_path, run)
    fed = float(run.fed[run.names.index("C2H6")])
    converted = -run.made("C2H6")
    unwanted = (
        sum(run.made(name) for name in run.names if "C" in run.formulas[name]) - run.made("C2H4") + converted
    )
    assert told["conversion"] == pytest.approx(100 * converted / fed, rel=1e-9)
    assert told["yield on feed"] == pytest.approx(100 * run.made("C2H4") / fed, rel=1e-9)
    assert told["selectivity on converted"] == pytest.approx(100 * run.made("C2H4") / converted, rel=1e-9)
    assert told["overall selectivity to CH4"] == pytest.approx(run.made("C2H4") / run.made("CH4"), rel=1e-9)
    assert told["overall selectivity to all unwanted"] == pytest.approx(run.made("C2H4") / unwanted, rel=1e-9)
    assert told["carbon closure"] == pytest.approx(100, abs=1e-7)


def test_in_a_stirred_reactor_the_ratio_of_rates_is_the_overall_selectivity(stirred, tmp_path):
    told = figures(tmp_path, stirred)
    ratio = stirred.rate("C2H4") / stirred.rate("CH4")
    assert told["overall selectivity to CH4"] == pytest.approx(ratio, rel=1e-8)


def test_in_plug_flow_it_is_not(plug, tmp_path):
    told = figures(tmp_path, plug)
    ratio = plug.rate("C2H4") / plug.rate("CH4")
    assert abs(told["overall selectivity to CH4"] - ratio) > 1  # ethylene is already being consumed there
