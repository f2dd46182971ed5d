# ruff: noqa: E501 -- the cases are read across
"""Instantaneous selectivity: what is formed by hand, and cantera's own rates through load steps and at rest."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import timedelta

import cantera as ct
import numpy as np
import pandas as pd
import pytest

from ingest.balance import problem_of
from ingest.cells import make_cells
from ingest.errors import UnitFileError
from ingest.ledger import Store
from ingest.readings import Series
from ingest.unit import HoldUp
from monitor.amounts import amount_names, amounts_of
from monitor.days import DAY_US, plan_of
from monitor.expected import expectations
from monitor.figures import figures_of
from monitor.formation import between_middles, contents, difference_share
from monitor.judge import judge
from monitor.layout import figure_stage
from monitor.months import figure_tables, worked_out
from monitor.run import run_pass
from monitor.telling import judged
from monitor.windows import window_figures
from tests.plants_made import START, Seen, unit_text
from tests.unitfiles_made import DEMO, loaded, with_edit

# At 850 K ethane cracks in tens of minutes, so that a load step takes longer than the cells of one minute.
TEMPERATURE_K, PRESSURE_PA = 850.0, 101_325.0
FEED = {"C2H6": 0.6, "AR": 0.4}
SUB_S, MINUTES = 6, 360
LEAST = 1e-8
WANTED, UNWANTED = "C2H4", ["CH4", "C3H8"]


def load_kg_s(minute: float, density: float) -> float:
    """Two hours at a residence time of 20 min, then steps to 5 min, to 40 min and back, an hour or so each."""
    minutes = {0: 20, 120: 5, 180: 40, 270: 20}
    return density / (60 * [span for since, span in minutes.items() if since <= minute][-1])


@dataclass(frozen=True)
class Run:
    """What cantera says: means by minute [kmol/s, mol/mol], rates each six seconds [kmol/s], contents [kmol]."""

    formulas: dict[str, str]
    fed: np.ndarray
    left: np.ndarray
    share: np.ndarray
    rate: dict[str, np.ndarray]
    held_kmol: float


@pytest.fixture(scope="module")
def run() -> Run:
    feed = ct.Solution("gri30.yaml")
    feed.TPX = TEMPERATURE_K, PRESSURE_PA, FEED
    density, mass = feed.density, feed.mean_molecular_weight
    source, sink = ct.Reservoir(feed, clone=True), ct.Reservoir(feed, clone=True)
    vessel = ct.IdealGasMoleReactor(feed, energy="off", volume=1.0, clone=True)
    inlet = ct.MassFlowController(source, vessel, mdot=load_kg_s(0, density))
    outlet = ct.PressureController(vessel, sink, primary=inlet, K=1e-3)
    net = ct.ReactorNet([vessel])
    net.rtol, net.atol = 1e-10, 1e-18
    net.advance(36_000)  # ten hours: at rest
    rows = []
    for _ in range(MINUTES * 60 // SUB_S):
        inlet.mass_flow_rate = load_kg_s((net.time - 36_000 + 1e-6) / 60, density)
        net.reinitialize()
        net.advance(net.time + SUB_S)
        phase = vessel.phase
        flows = inlet.mass_flow_rate / mass, outlet.mass_flow_rate / phase.mean_molecular_weight
        rows.append((*flows, phase.X.copy(), phase.net_production_rates.copy(), phase.density_mole))
    fed, left, share, rates, held = (np.array(column) for column in zip(*rows, strict=True))
    there = np.flatnonzero(share.max(axis=0) > LEAST)
    names = [vessel.phase.species_name(k) for k in there]
    formulas = {name: _formula(vessel.phase, name) for name in names}
    mean = MINUTES, 60 // SUB_S
    return Run(
        formulas=formulas,
        fed=fed.reshape(mean).mean(axis=1),
        left=left.reshape(mean).mean(axis=1),
        share=share[:, there].reshape(*mean, -1).mean(axis=1),
        rate={name: rates[:, there[names.index(name)]] for name in (WANTED, *UNWANTED)},
        held_kmol=float(held.mean()),
    )


def _formula(phase: ct.Solution, name: str) -> str:
    atoms = phase.species(name).composition.items()
    return "".join(f"{'Ar' if e == 'AR' else e.capitalize()}{int(n)}" for e, n in atoms)


def plant(run: Run) -> tuple[str, list[np.ndarray]]:
    """Unit file with the true hold-up, and the column of each tag."""
    names = list(run.formulas)
    seen = [Seen("molar flow", "feed", 1, "kmol/s"), Seen("molar flow", "outlet", 1, "kmol/s")]
    seen += [Seen("mole fraction", "feed", 1, "mol/mol", "AR")]
    seen += [Seen("mole fraction", "outlet", 1, "mol/mol", name) for name in names]
    chemistry = f'key_reactant = "C2H6"\nwanted = "{WANTED}"\nunwanted = {UNWANTED}\ninert = ["AR"]\nkey_element = "C"'
    streams = {"feed": ("in", ["C2H6", "AR"]), "outlet": ("out", names)}
    text = unit_text(run.formulas, streams, seen, chemistry)
    text = text.replace('cell = "10min"', 'cell = "1min"\nwindows = ["5min", "1h"]')
    text = text.replace('sampling = "held"', 'sampling = "mean at end"').replace(
        'cycle = "10min"', 'cycle = "1min"'
    )
    text += f"[hold_up]\ntotal_kmol = {run.held_kmol!r}\nrelative_pct = 5\n"
    return text, [run.fed, run.left, np.full(MINUTES, FEED["AR"]), *run.share.T]


@pytest.fixture(scope="module")
def told(run: Run, tmp_path_factory: pytest.TempPathFactory) -> pd.DataFrame:
    """The five-minute figures as the store holds them, by window end."""
    folder = tmp_path_factory.mktemp("stirred")
    text, columns = plant(run)
    unit = loaded(folder, text)
    stamps = pd.date_range(START, periods=MINUTES, freq="min") + pd.Timedelta(minutes=1)
    frame = pd.DataFrame(
        {f"T{i}": one for i, one in enumerate(columns)}, index=stamps.strftime("%Y-%m-%dT%H:%M:%SZ")
    )
    frame.to_csv(folder / "export.csv", index_label="time")
    result = run_pass(
        [unit], folder / "store", [folder / "export.csv"], progress=lambda *_: None, settle=timedelta(0)
    )
    assert not result.set_aside
    table = Store(folder / "store").read(unit.key, figure_stage(timedelta(minutes=5)))
    return table.to_pandas(ignore_metadata=True).set_index("end")


def figure(told: pd.DataFrame, name: str) -> pd.Series:
    return told[f"{name} | as operated | value"]


def from_middle_to_middle(run: Run, end: pd.Timestamp, unwanted: str) -> float:
    """cantera's ratio of rates over the five minutes of a window, each begun and ended in the middle of a cell."""
    last = round((end - START) / pd.Timedelta(seconds=SUB_S)) - 30 // SUB_S
    span = slice(last - 300 // SUB_S, last)
    return float(run.rate[WANTED][span].sum() / run.rate[unwanted][span].sum())


@pytest.mark.parametrize("unwanted", UNWANTED)
def test_through_load_steps_it_follows_the_ratio_of_canteras_rates(run, told, unwanted):
    ends = told.index[told.index > START + pd.Timedelta(minutes=6)]
    assert len(ends) > 65  # a row each five minutes
    truth = np.array([from_middle_to_middle(run, end, unwanted) for end in ends])
    instantaneous = figure(told, f"instantaneous selectivity to {unwanted}")[ends].to_numpy()
    overall = figure(told, f"overall selectivity to {unwanted}")[ends].to_numpy()
    assert truth.max() > 1.5 * truth.min()  # the steps move it
    assert np.abs(instantaneous / truth - 1).max() < 0.02
    assert np.abs(overall / truth - 1).max() > 0.5
    # twenty minutes behind the step down to a quarter of the load and more
    behind = ends.get_loc(START + pd.Timedelta(minutes=200))
    assert overall[behind] > 1.3 * truth[behind]


@pytest.mark.parametrize("unwanted", UNWANTED)
def test_at_rest_it_is_the_overall_one_and_canteras(run, told, unwanted):
    rest = told.index[
        (told.index > START + pd.Timedelta(minutes=6)) & (told.index <= START + pd.Timedelta(hours=2))
    ]
    instantaneous = figure(told, f"instantaneous selectivity to {unwanted}")[rest]
    overall = figure(told, f"overall selectivity to {unwanted}")[rest]
    np.testing.assert_allclose(instantaneous, overall, rtol=1e-6)
    np.testing.assert_allclose(instantaneous, from_middle_to_middle(run, rest[0], unwanted), rtol=1e-6)


def test_without_a_stated_hold_up_there_is_none(run, tmp_path):
    text = plant(run)[0]
    with_it, without = (loaded(tmp_path, one) for one in (text, text[: text.index("[hold_up]")]))
    names = [{one.name for one in figures_of(unit, amount_names(unit))} for unit in (with_it, without)]
    gone = names[0] - names[1]
    assert gone == {f"instantaneous selectivity to {name}" for name in (*UNWANTED, "all unwanted")}
    assert amount_names(without) == amount_names(with_it)[: len(amount_names(without))]


def test_half_of_what_two_cells_made_and_what_the_contents_gained():
    made, inside = np.array([[2.0], [4.0], [8.0]]), np.array([[1.0], [1.5], [1.0]])
    # half of 2 and 4 with 0.5 gained, half of 4 and 8 with 0.5 lost
    np.testing.assert_allclose(between_middles(made, inside), [[np.nan], [3.5], [5.5]])


def test_the_contents_are_the_share_at_the_outlet_and_their_slope_is_that_of_a_share():
    flow, slope = (
        np.array([[2.0], [8.0]]),
        np.array([[[1.0]], [[1.0]]]),
    )  # 2 of 8 kmol/h, one reading adds to both
    found = contents(HoldUp(40.0, 0.05), flow, slope)
    assert found.value[0, 0] == pytest.approx(10)  # 40 x 2 / 8
    assert found.slope[0, 0, 0] == pytest.approx(40 * (1 / 8 - 2 / 64))  # derivative of a / b


def test_a_window_carries_the_contents_of_its_two_ends_once(run, tmp_path):
    unit = loaded(tmp_path, plant(run)[0])  # windows from five cells on
    five_cells, one_cell = timedelta(minutes=5), timedelta(minutes=1)
    share = difference_share(unit, [one_cell, five_cells])
    assert 5 * share[0] == pytest.approx(2)
    # a result held over the five cells counts five times over wherever variances are summed
    assert 5 * 5 * share[1] == pytest.approx(2)


def test_days_worked_out_one_by_one_give_what_all_cells_in_one_go_give(run, tmp_path):
    # Half-widths of traces far below their uncertainty differ in the fifth digit, with or without a hold-up.
    text, columns = plant(run)
    unit = loaded(tmp_path, text)
    midnight = START.value // 1000 // DAY_US * DAY_US
    first, last = midnight - 200 * 60_000_000, midnight + (MINUTES - 200) * 60_000_000
    stamps, count = np.arange(first, last, 60_000_000) + 60_000_000, np.arange(MINUTES)
    readings = {
        f"T{i}": Series(stamps, one, np.full(MINUTES, 2, np.int8), np.ones(MINUTES, np.int32), count)
        for i, one in enumerate(columns)
    }
    plan, cells = plan_of(unit), make_cells(unit, readings, first, last)
    _, amounts = amounts_of(unit, plan.problem, cells)
    whole = window_figures(unit, amounts, plan.figures)
    today = midnight // DAY_US
    days = worked_out(plan, cells, {today - 1, today}, {})
    tables = figure_tables(plan, days, (today - 1, today))
    name = "instantaneous selectivity to CH4"
    for window, stage in ((timedelta(minutes=5), "figures-5min"), (timedelta(hours=1), "figures-1h")):
        told = tables[stage].to_pandas(ignore_metadata=True).set_index("end")
        direct = whole[window].loc[told.index, name]["as operated"]
        assert len(told) == MINUTES // 5
        assert told[f"{name} | as operated | value"].notna().sum() > 60
        for field in ("value", "half_width"):
            one, other = told[f"{name} | as operated | {field}"], direct[field].astype("float32")
            pd.testing.assert_series_equal(one, other, rtol=1e-4, check_names=False)


def test_its_half_width_is_the_spread_over_the_shortest_window_and_more_over_longer_ones(run, tmp_path):
    text, columns = plant(run)
    only_random = text.replace("systematic = { relative_pct = 0.5, floor = 1e-9 }", "systematic = {}")
    unit = loaded(tmp_path, only_random.replace("relative_pct = 5\n", "relative_pct = 0.001\n"))
    count, draw = 4000, np.random.default_rng(1)
    first, minute = START.value // 1000, 60_000_000
    stamps, ones = first + minute * np.arange(1, count + 1), np.ones(count, np.int32)
    readings = {  # the plant at rest, each minute's readings off by 0.5 % by chance
        f"T{i}": Series(
            stamps, one[100] * (1 + 0.005 * draw.normal(size=count)), 2 * ones.astype(np.int8), ones, ones
        )
        for i, one in enumerate(columns)
    }
    cells = make_cells(unit, readings, first, first + count * minute)
    _, amounts = amounts_of(unit, problem_of(unit), cells)
    ratio = {}
    for window, frame in window_figures(unit, amounts, figures_of(unit, amounts.names)).items():
        judged = frame["instantaneous selectivity to CH4"]["as operated"].iloc[100:]
        ratio[window] = judged["half_width"].mean() / (1.96 * judged["value"].std())
    # 4000 cells hold 800 windows of five minutes: their spread is known to 2.5 %
    assert ratio[timedelta(minutes=5)] == pytest.approx(1, abs=0.1)
    assert ratio[timedelta(hours=1)] > 1.5


def test_a_judgement_of_the_unit_at_rest_sees_it_and_expects_the_overall_one(run, tmp_path):
    text, columns = plant(run)
    unit = loaded(tmp_path, text)
    assert not judge(unit).unseen_figures
    at_rest = np.array([[one[100] for one in columns]])
    found = {one.figure: one for one in expectations(unit, at_rest[0], ())}
    overall, instantaneous = (found[f"{kind} selectivity to CH4"] for kind in ("overall", "instantaneous"))
    assert instantaneous.value == pytest.approx(overall.value, rel=1e-9)
    assert all(np.array(instantaneous.half_width) > np.array(overall.half_width))


BAD = {
    "a packed bed": (
        ('reactor = "well-mixed"', 'reactor = "packed bed"'),
        "hold_up", "a packed bed reactor does not hold what leaves it", "remove the section",
    ),
    "nothing held": (
        ("total_kmol = ", "total_kmol = -"), "hold_up.total_kmol", "must be at least", "total_kmol = 12.5",
    ),
    "no uncertainty": (
        ("relative_pct = 5\n[[w", "[[w"), "hold_up.relative_pct", "missing (standard uncertainty", "relative_pct = 5",
    ),
    "two outlets": (
        ("[hold_up]", '[[stream]]\nname = "vent"\ndirection = "out"\nspecies = ["AR"]\n[hold_up]'),
        "hold_up", "several streams leave what reacts", "describe the reactor alone",
    ),
    "a watch without the hold-up": (
        ("[hold_up]", "[exports]\n#"),
        "watch[1].figure", "'instantaneous selectivity to CH4' needs what the reactor holds", "write a section [hold_up]",
    ),
}  # fmt: skip
WATCH = '[[watch]]\nfigure = "instantaneous selectivity to CH4"\nwindow = "1h"\nlow = 5\npriority = "low"\n'


@pytest.mark.parametrize("case", BAD)
def test_a_hold_up_that_cannot_be_is_told(case, run, tmp_path):
    (old, new), place, fault, remedy = BAD[case]
    text = with_edit(old, new, plant(run)[0] + WATCH)
    if case == "a watch without the hold-up":
        text = re.sub("^(total_kmol|relative_pct = 5$).*$", "", text, flags=re.MULTILINE)
    with pytest.raises(UnitFileError, match="problem") as caught:
        loaded(tmp_path, text)
    assert any(
        one.where == place and fault in one.what and remedy in one.remedy for one in caught.value.problems
    ), caught.value.problems


def test_a_packed_bed_says_why_it_has_none(tmp_path):
    with pytest.raises(UnitFileError, match="is not given by outlet data of a packed bed; take the overall"):
        loaded(tmp_path, DEMO + WATCH.replace("CH4", "acetone"))
    told = "\n".join(judged(judge(loaded(tmp_path, DEMO))))
    assert "instantaneous selectivity is not given by outlet data of a packed bed" in told


def test_what_is_formed_can_be_watched(run, tmp_path):
    assert loaded(tmp_path, plant(run)[0] + WATCH).watches[0].figure == "instantaneous selectivity to CH4"
