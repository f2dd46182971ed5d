# ruff: noqa: E501 -- the cases are read across
"""Reactor, separator and recycle as one problem: published loops come back per pass and overall.

Readings are worked out from the inputs of an example to all digits; its published numbers, which are rounded,
are held to theirs.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from ingest import draft, unitfile, watchrules
from ingest.balance import conservation_of, null_space, problem_of, sign_around, sign_of, state_of
from ingest.errors import UnitFileError
from monitor.amounts import amount_names
from monitor.figures import figures_of
from tests.loops_made import NODES, loop, oxide_readings, oxide_text, seen
from tests.plants_made import Seen, unit_text, work_out
from tests.unitfiles_made import loaded, with_edit

TEXT = oxide_text(oxide_readings())


def test_the_ethylene_oxide_loop_per_pass_and_overall(tmp_path: Path):
    # Kantor, CBE20255 notebook 04.02 after Murphy 2005, example 3.19 (seen in source text)
    readings = oxide_readings()
    flow = {(one.stream, one.species): one.value for one in readings}
    assert [flow["effluent", name] for name in ("ethylene", "oxygen", "oxide")] == pytest.approx(
        [2338.07, 1976.14, 153.85], abs=0.005
    )
    assert [flow["product", name] for name in ("ethylene", "oxygen", "oxide")] == pytest.approx(
        [46.76, 9.88, 149.24], abs=0.005
    )
    figures = work_out(tmp_path, TEXT, [one.value for one in readings])[1]["value"]
    assert figures["conversion per pass"] == pytest.approx(6, abs=1e-9)
    # 76.142857 is recomputed from flows of two decimals
    assert figures["conversion"] == pytest.approx(76.14285714285715, abs=0.005)
    assert figures["conversion"] == pytest.approx(100 * (1 - flow["product", "ethylene"] / 196), abs=1e-9)
    # one reaction only: what is converted is all made into the oxide
    assert figures["selectivity on converted"] == pytest.approx(100, abs=1e-9)
    assert figures["selectivity on converted per pass"] == pytest.approx(100, abs=1e-9)
    assert figures["yield on feed"] == pytest.approx(figures["conversion"], abs=1e-9)
    assert figures["yield on feed per pass"] == pytest.approx(6, abs=1e-9)
    # all three species, effluent less product over the fresh feed of 196 + 84.5
    recycled = (2338.07 - 46.76) + (1976.14 - 9.88) + (153.85 - 149.24)
    assert figures["recycle ratio"] == pytest.approx(recycled / 280.5, abs=1e-4)
    assert figures["carbon closure"] == pytest.approx(100, abs=1e-9)


def test_the_propane_dehydrogenation_loop_per_pass_and_overall(tmp_path: Path):
    # Kantor, CBE20255 notebook 05.01 after Felder & Rousseau, example 4.7-2 (seen in source text):
    # 9.0065 mol recycled per mol fed, 9.539 % per pass at 95 % overall
    species = {"propane": "C3H8", "propylene": "C3H6", "hydrogen": "H2"}
    names = list(species)
    # 0.555 % of the propane behind the reactor leaves with the product: 5 / 0.00555
    behind, product = (5 / 0.00555, 99.75, 95.0), (5.0, 95.0, 95.0)
    readings = [
        Seen("molar flow", "fresh", 100, "kmol/h"),
        *(
            Seen("mole fraction", stream, 100 * amount / sum(amounts), "mol%", name)
            for stream, amounts in (("effluent", behind), ("product", product))
            for name, amount in zip(names, amounts, strict=True)
        ),
    ]
    chemistry = 'key_reactant = "propane"\nwanted = "propylene"\nunwanted = ["hydrogen"]\nkey_element = "C"'
    text = unit_text(species, loop(["propane"], names[:2], names, names[:2]), readings, chemistry, NODES)
    figures = work_out(tmp_path, text, [one.value for one in readings])[1]["value"]
    assert [one.value for one in readings[4:]] == pytest.approx([2.56, 48.72, 48.72], abs=0.005)
    assert figures["conversion"] == pytest.approx(95, abs=1e-9)
    assert figures["conversion per pass"] == pytest.approx(9.53910172328011, abs=1e-7)
    assert figures["recycle ratio"] == pytest.approx(9.00650900900901, abs=1e-7)
    assert figures["yield on feed"] == pytest.approx(95, abs=1e-9)
    assert figures["yield on feed per pass"] == pytest.approx(9.53910172328011, abs=1e-7)
    assert figures["selectivity on converted per pass"] == pytest.approx(100, abs=1e-9)


def test_an_ammonia_loop_with_a_purge_for_argon(tmp_path: Path):
    # By hand: 25 N2 + 75 H2 + 1 Ar fresh, 25 % per pass, all ammonia drawn off, 5 % of the gas purged:
    # N2 to the reactor 25 / (1 - 0.95 * 0.75) = 86.957, Ar 1 / 0.05 = 20, N2 consumed 0.25 * 86.957 = 21.739
    species = {"nitrogen": "N2", "hydrogen": "H2", "ammonia": "NH3", "argon": "Ar"}
    gas = ["nitrogen", "hydrogen", "argon"]
    streams = loop(gas, gas, list(species), gas)
    streams |= {"product": ("separator >", ["ammonia"]), "purge": ("separator >", gas)}
    behind = dict(zip(gas, (0.75 * 25 / 0.2875, 0.75 * 75 / 0.2875, 20.0), strict=True))
    readings = [
        *seen("fresh", {"nitrogen": 25, "hydrogen": 75, "argon": 1}),
        *seen("purge", {name: 0.05 * amount for name, amount in behind.items()}),
        Seen("molar flow", "recycle", 0.95 * sum(behind.values()), "kmol/h"),
        *(
            Seen("mole fraction", "recycle", behind[name] / sum(behind.values()), "mol/mol", name)
            for name in ("nitrogen", "argon")
        ),
    ]
    chemistry = 'key_reactant = "nitrogen"\nwanted = "ammonia"\nunwanted = []\ninert = ["argon"]\n'
    text = unit_text(species, streams, readings, f'{chemistry}key_element = "N"', NODES)
    figures = work_out(tmp_path, text, [one.value for one in readings])[1]["value"]
    assert figures["conversion per pass"] == pytest.approx(25, abs=1e-7)
    assert figures["conversion"] == pytest.approx(100 * 21.73913043478261 / 25, abs=1e-7)
    assert figures["recycle ratio"] == pytest.approx(0.95 * (65.2173913 * 4 + 20) / 101, abs=1e-7)
    # 2 x 21.739 kmol/h at 14.007 + 3 x 1.008 = 17.031 kg/kmol (CIAAW 2021)
    assert figures["make of ammonia"] == pytest.approx(2 * 21.73913043478261 * 17.031 / 1000, abs=1e-7)


def test_a_node_that_reacts_keeps_elements_and_any_other_keeps_species(tmp_path: Path):
    # mixer and separator: ethylene, oxygen, oxide; reactor: C, H, O
    rows = conservation_of(loaded(tmp_path, TEXT), state_of(loaded(tmp_path, TEXT)))
    assert rows.shape == (3 + 3 + 3, 2 + 4 * 3)
    assert set(rows[:3].ravel()) | set(rows[6:].ravel()) == {-1.0, 0.0, 1.0}
    # 2 C in ethylene and in the oxide, into the reactor and out of it
    assert sorted(rows[3][rows[3] != 0]) == [-2.0, -2.0, 2.0, 2.0]


def test_what_the_reactor_makes_is_what_the_whole_unit_makes(tmp_path: Path):
    unit = loaded(tmp_path, TEXT)
    state = state_of(unit)
    flows = problem_of(unit).basis @ np.random.default_rng(3).normal(size=problem_of(unit).basis.shape[1])
    for species in ("ethylene", "oxygen", "oxide"):
        of_it = np.array([name == species for _, name in state])
        around = [
            sign @ (flows * of_it) for sign in (sign_of(unit, state), sign_around(unit, state, ["reactor"]))
        ]
        assert around[0] == pytest.approx(around[1], abs=1e-12)


def test_one_node_with_a_name_is_a_unit_without_nodes(tmp_path: Path):
    chemistry = 'key_reactant = "propane"\nwanted = "propylene"\nunwanted = ["hydrogen"]\nkey_element = "C"'
    species = {"propane": "C3H8", "propylene": "C3H6", "hydrogen": "H2"}
    readings = seen("outlet", {"propane": 10, "propylene": 90, "hydrogen": 90})

    def unit(ways: tuple[str, str], nodes: str):
        streams = {"feed": (ways[0], ["propane"]), "outlet": (ways[1], list(species))}
        return loaded(tmp_path, unit_text(species, streams, readings, chemistry, nodes))

    plain = unit(("in", "out"), "")
    named = unit(("> reactor", "reactor >"), '[[node]]\nname = "reactor"\nreacts = true')
    rows = [conservation_of(one, state_of(one)) for one in (plain, named)]
    np.testing.assert_array_equal(null_space(rows[0]), null_space(rows[1]))
    assert amount_names(named) == (*_up_to_raw(plain), "fed propane per pass", *_raw(plain))


def _raw(unit):
    return tuple(name for name in amount_names(unit) if name.startswith("raw"))


def _up_to_raw(unit):
    return tuple(name for name in amount_names(unit) if not name.startswith("raw"))


def test_the_figures_of_a_loop_can_be_watched_and_say_what_they_go_around(tmp_path: Path):
    watch = '[[watch]]\nfigure = "conversion per pass"\nwindow = "8h"\nlow = 5\npriority = "low"\n'
    unit = loaded(tmp_path, TEXT + watch)
    figures = {one.name: one for one in figures_of(unit, amount_names(unit))}
    read, problems = draft.read(unitfile.parse(tmp_path / "made.toml"))
    assert not problems
    assert set(watchrules.figure_names(read)) == set(figures)
    assert figures["conversion"].definition.startswith("Around the whole unit: part of the ethylene fed")
    assert figures["conversion per pass"].definition.startswith("Around the reactor alone: part of the")
    assert "recycle over fresh" in figures["recycle ratio"].label


def test_without_roles_there_is_no_recycle_ratio(tmp_path: Path):
    unit = loaded(tmp_path, TEXT.replace('role = "recycle"', "").replace('role = "fresh feed"', ""))
    names = {one.name for one in figures_of(unit, amount_names(unit))}
    assert "conversion per pass" in names
    assert "recycle ratio" not in names


SIDE = '[[node]]\nname = "side"\nreacts = false\n'
STREAM = '[[stream]]\nname = "more"\nspecies = ["oxygen"]\n'

# What is wrong: the text, the dotted place, words of the fault, words of the remedy.
BAD = {
    "a node without a word on reaction": (
        with_edit('name = "mixer"\nreacts = false', 'name = "mixer"', TEXT),
        "node[mixer].reacts", "missing (true: a reactor", "write reacts = false",
    ),
    "no node reacts": (
        with_edit("reacts = true", "reacts = false", TEXT),
        "node", "none of them reacts", "write reacts = true for the reactor",
    ),
    "two nodes of one name": (
        with_edit('name = "mixer"', 'name = "reactor"', TEXT),
        "node[reactor].name", "'reactor' already belongs to node[reactor]", "give each its own name",
    ),
    "a stream to a node that is not there": (
        with_edit('to = "mixer"', 'to = "mixxer"', TEXT),
        "stream[fresh].to", "'mixxer' is no declared node", "did you mean 'mixer'?",
    ),
    "a stream from a node to itself": (
        with_edit('from = "mixer"\nto = "reactor"', 'from = "mixer"\nto = "mixer"', TEXT),
        "stream[reactor feed].to", "goes from 'mixer' to itself", "name the other node",
    ),
    "a stream that joins nothing": (
        TEXT + STREAM, "stream[more]", "has neither from nor to", 'write to = "mixer" or from = "mixer"',
    ),
    "both direction and nodes": (
        with_edit('to = "mixer"', 'to = "mixer"\ndirection = "in"', TEXT),
        "stream[fresh].direction", "does not go with nodes", "remove it; from and to say where",
    ),
    "a direction where there are nodes": (
        TEXT + STREAM + 'direction = "in"\n',
        "stream[more].direction", "does not go with nodes", "remove it; from and to say where",
    ),
    "from without any node": (
        TEXT.replace(NODES, ""),
        "stream[product].from", "names a node, and the file declares none", 'section [[node]] with name = "separator"',
    ),
    "a role without any node": (
        TEXT.replace(NODES, ""),
        "stream[recycle].role", "does not go without nodes", "remove it, or write sections [[node]]",
    ),
    "a number for a node": (
        with_edit('to = "mixer"', "to = 3", TEXT),
        "stream[fresh].to", "3 is not a text in quotes", 'write to = "mixer"',
    ),
    "a node that no stream names": (
        TEXT + SIDE, "node[side]", "no stream names it", 'write to = "side" and from = "side"',
    ),
    "a node that nothing leaves": (
        TEXT + SIDE + STREAM + 'to = "side"\n',
        "node[side]", "no stream goes from it", 'write from = "side" for a stream',
    ),
    "nodes that do not hang together": (
        TEXT + SIDE + STREAM + 'to = "side"\n' + STREAM.replace("more", "less") + 'from = "side"\n',
        "node[side]", "is not joined to 'mixer'", "join them by a stream, or write a unit file for each",
    ),
    "a species that cannot leave a separator": (
        TEXT.replace('to = "separator"\nspecies = ["ethylene", "oxygen", "oxide"]',
                     'to = "separator"\nspecies = ["ethylene", "oxygen", "oxide", "water"]').replace(
            '[chemistry.species]', '[chemistry.species]\nwater = "H2O"'),
        "node[separator]", "'water' goes into it and not out of it", "add it to the species of a stream with from",
    ),
    "an inert that the reactor swallows": (
        TEXT.replace('unwanted = []', 'unwanted = []\ninert = ["argon"]').replace(
            '[chemistry.species]', '[chemistry.species]\nargon = "Ar"').replace(
            'to = "reactor"\nspecies = [', 'to = "reactor"\nspecies = ["argon", '),
        "node[reactor]", "'argon' goes into it and not out of it", 'a stream with from = "reactor"',
    ),
    "an element from nowhere": (
        TEXT.replace('[chemistry.species]', '[chemistry.species]\nsulfide = "H2S"').replace(
            'from = "reactor"\nto = "separator"\nspecies = [',
            'from = "reactor"\nto = "separator"\nspecies = ["sulfide", '),
        "node[reactor]", "S of reacting species goes out of it and not into it",
        'add a species with S to the species of a stream with to = "reactor"',
    ),
    "a wanted product that the reactor does not make": (
        with_edit('from = "reactor"\nto = "separator"\nspecies = ["ethylene", "oxygen", "oxide"]',
                  'from = "reactor"\nto = "separator"\nspecies = ["ethylene", "oxygen"]', TEXT),
        "chemistry.wanted", "'oxide' is in no stream that goes from a node that reacts", "or mend wanted",
    ),
    "fresh feed from inside": (
        with_edit('to = "reactor"', 'to = "reactor"\nrole = "fresh feed"', TEXT),
        "stream[reactor feed].role", "comes from a node", "name a stream without from as fresh feed",
    ),
    "a recycle that leaves": (
        with_edit('name = "product"', 'name = "product"\nrole = "recycle"', TEXT),
        "stream[product].role", "does not lead from behind a reactor to before it", "mend from and to",
    ),
    "a recycle without fresh feed": (
        TEXT.replace('role = "fresh feed"', ""),
        "stream", "a stream is the recycle and none is the fresh feed", 'write role = "fresh feed" for one',
    ),
    "a role that is no word for it": (
        with_edit('role = "recycle"', 'role = "recycled"', TEXT),
        "stream[recycle].role", "'recycled' is not one of its words", "did you mean 'recycle'?",
    ),
    "nothing comes from outside": (
        with_edit('to = "mixer"', 'from = "separator"\nto = "mixer"', TEXT).replace('role = "fresh feed"', ""),
        "stream", "no stream goes in", "write to without from for one",
    ),
    "no direction where there are no nodes": (
        unit_text({"A": "C2H4", "B": "C4H8"}, {"feed": ("in", ["A"]), "out": ("out", ["A", "B"])},
                  seen("feed", {"A": 1}), 'key_reactant = "A"\nwanted = "B"\nunwanted = []').replace(
            'direction = "in"', ""),
        "stream[feed].direction", "missing (into the envelope or out of it)", 'write direction = "in"',
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_a_fault_of_nodes_is_told_with_its_place_and_what_to_write(case: str, tmp_path: Path):
    text, place, fault, remedy = BAD[case]
    with pytest.raises(UnitFileError, match=r"made\.toml: \d+ problem") as caught:
        loaded(tmp_path, text)
    told = [one for one in caught.value.problems if one.where == place and fault in one.what]
    assert told, caught.value.problems
    assert any(remedy in one.remedy for one in told), told


ALONE = (
    "no node reacts", "a stream to a node that is not there", "a stream from a node to itself",
    "a node that no stream names", "a node that nothing leaves", "nodes that do not hang together",
    "both direction and nodes", "a number for a node", "a recycle without fresh feed", "fresh feed from inside",
)  # fmt: skip


@pytest.mark.parametrize("case", ALONE)
def test_one_fault_of_nodes_is_told_once(case: str, tmp_path: Path):
    with pytest.raises(UnitFileError, match=r"made\.toml: 1 problem") as caught:
        loaded(tmp_path, BAD[case][0])
    assert len(caught.value.problems) == 1
