"""Formulas, atomic weights and the element matrix."""

from __future__ import annotations

import contextlib
import json

import cantera
import numpy as np
import pytest
from chemicals import periodic_table
from hypothesis import given
from hypothesis import strategies as st

from ingest import chemistry
from ingest.errors import OutletError
from tests.source import ROOT

CONSTANTS = json.loads((ROOT / "tests/published/constants.json").read_text(encoding="utf-8"))
WEIGHTS = CONSTANTS["atomic_weights"]  # its source stands in the file


def molar_mass(formula: str) -> float:
    return chemistry.molar_mass_kg_kmol(chemistry.atoms(formula))


@pytest.mark.parametrize("symbol", WEIGHTS)
def test_a_common_atomic_weight_is_the_abridged_one_of_2021(symbol: str):
    assert chemistry.ATOMIC_WEIGHT_KG_KMOL[symbol] == pytest.approx(WEIGHTS[symbol]["abridged"], rel=1e-9)


@pytest.mark.parametrize("symbol", chemistry.ATOMIC_WEIGHT_KG_KMOL)
def test_every_atomic_weight_agrees_with_cantera_to_its_last_digit(symbol: str):
    # cantera 3.2 carries the same recommendation unabridged; abridged ones have five digits or fewer.
    weight = chemistry.ATOMIC_WEIGHT_KG_KMOL[symbol]
    digits = len(str(weight).split(".")[1])
    assert weight == pytest.approx(cantera.Element(symbol).weight, abs=0.5000001 * 10**-digits)


def test_the_older_weights_of_the_parser_package_are_not_used():
    # chemicals 1.5.2 returns values of before 2009 for these; the difference shows from the fifth digit.
    older = {e.symbol: e.MW for e in periodic_table}
    for symbol in ("H", "C", "N", "O", "S", "Cl"):
        assert older[symbol] == pytest.approx(WEIGHTS[symbol]["chemicals_1_5_2"])
        assert chemistry.ATOMIC_WEIGHT_KG_KMOL[symbol] != older[symbol]


def test_elements_without_a_standard_atomic_weight_are_refused():
    # CIAAW gives none for technetium, promethium, polonium to actinium and all beyond uranium.
    for symbol in ("Tc", "Pm", "Po", "At", "Rn", "Fr", "Ra", "Ac", "Np", "Pu"):
        with pytest.raises(OutletError, match=f"'{symbol}' in '{symbol}O2' is no element known here"):
            chemistry.atoms(f"{symbol}O2")


@pytest.mark.parametrize(
    ("formula", "counts"),
    [
        ("C4H8", {"C": 4, "H": 8}),
        ("CO", {"C": 1, "O": 1}),
        ("Co", {"Co": 1}),
        ("(C2H5)2O", {"C": 4, "H": 10, "O": 1}),
        ("CH3CH(OH)CH3", {"C": 3, "H": 8, "O": 1}),
        ("Ca(NO3)2", {"Ca": 1, "N": 2, "O": 6}),
        ("((CH3)2N)3P", {"C": 6, "H": 18, "N": 3, "P": 1}),
        ("CH1.8O0.5N0.2", {"C": 1, "H": 1.8, "O": 0.5, "N": 0.2}),
        ("H2O", {"H": 2, "O": 1}),
        ("He", {"He": 1}),
    ],
)
def test_a_formula_gives_its_atoms(formula: str, counts: dict[str, float]):
    # counted by eye
    assert dict(chemistry.atoms(formula)) == pytest.approx(counts)


def test_atoms_come_in_the_order_of_the_hill_system():
    # E. A. Hill, J. Am. Chem. Soc. 22 (1900) 478: C, H, then by letter; without carbon all by letter
    assert [symbol for symbol, _ in chemistry.atoms("OClNHC")] == ["C", "H", "Cl", "N", "O"]
    assert [symbol for symbol, _ in chemistry.atoms("OHCl")] == ["Cl", "H", "O"]


def test_molar_masses_of_hand_arithmetic():
    # 4 x 12.011 + 6 x 1.008 + 15.999 and so on, CIAAW 2021 abridged
    assert molar_mass("C4H6O") == pytest.approx(70.091, rel=1e-12)
    assert molar_mass("(C2H5)2O") == pytest.approx(74.123, rel=1e-12)
    assert molar_mass("CH1.8O0.5N0.2") == pytest.approx(24.6263, rel=1e-12)


@pytest.mark.parametrize(
    ("formula", "published"), [("C6H6", 78.11), ("C6H5Cl", 112.56), ("C6H4Cl2", 147.01), ("C6H3Cl3", 181.46)]
)
def test_molar_masses_of_the_chlorinated_benzenes(formula: str, published: float):
    # Felder & Rousseau, 3rd ed., problem 4.53 (seen in its solution page); older weights, two decimals:
    # Cl 35.453 against 35.45 moves the trichloride by 0.02
    assert molar_mass(formula) == pytest.approx(published, abs=0.025)


@pytest.mark.parametrize(
    ("formula", "what", "remedy"),
    [
        ("Na+", "carries a charge", "write the neutral species"),
        ("SO4-2", "carries a charge", "write the neutral species"),
        ("NO3\u2212", "carries a charge", "write the neutral species"),
        ("c2h4", "is not a formula", "write symbols, counts and round brackets"),
        ("CH4)", "is not a formula", "write symbols, counts and round brackets"),
        (")CH4(", "is not a formula", "write symbols, counts and round brackets"),
        ("((CH4)", "is not a formula", "write symbols, counts and round brackets"),
        ("C()", "is not a formula", "write symbols, counts and round brackets"),
        ("[CH2]3", "is not a formula", "write symbols, counts and round brackets"),
        ("CuSO4\u00b75H2O", "is not a formula", "write symbols, counts and round brackets"),
        ("2H2O", "is not a formula", "write symbols, counts and round brackets"),
        ("C2 H4", "is not a formula", "write symbols, counts and round brackets"),
        ("C1e5", "is not a formula", "write symbols, counts and round brackets"),
        ("", "is not a formula", "write symbols, counts and round brackets"),
        ("D2O", "'D' in 'D2O' is no element", "write isotopes of hydrogen as 'H'"),
        ("HCL", "'L' in 'HCL' is no element", "did you mean 'Cl'"),
        ("Ch4", "'Ch' in 'Ch4' is no element", "did you mean 'CH'"),
        ("Xx2", "'Xx' in 'Xx2' is no element", "write the symbol of an element"),
        ("C0H4", "counts an element zero times", "leave that element out"),
    ],
)
def test_what_is_no_formula_is_refused_with_what_to_write(formula: str, what: str, remedy: str):
    with pytest.raises(OutletError, match=what) as caught:
        chemistry.atoms(formula)
    assert remedy in caught.value.remedy


def test_the_element_matrix_of_a_combustion_closes():
    # CH4 + 2 O2 -> CO2 + 2 H2O: atoms in = atoms out
    compositions = [chemistry.atoms(formula) for formula in ("CH4", "O2", "CO2", "H2O")]
    elements = chemistry.elements_of(compositions)
    matrix = chemistry.element_matrix(compositions, elements)
    assert elements == ("C", "H", "O")
    np.testing.assert_array_equal(matrix, [[1, 0, 1, 0], [4, 0, 0, 2], [0, 2, 2, 1]])
    np.testing.assert_array_equal(matrix @ [-1, -2, 1, 2], 0)


def test_an_element_that_no_species_holds_gives_a_row_of_zeros():
    np.testing.assert_array_equal(chemistry.element_matrix([chemistry.atoms("CO2")], ("S", "O")), [[0], [2]])


symbols = st.sampled_from(sorted(chemistry.ATOMIC_WEIGHT_KG_KMOL))
parts = st.lists(st.tuples(symbols, st.integers(1, 40)), min_size=1, max_size=5)


@given(parts, st.integers(1, 9))
def test_brackets_with_a_count_weigh_that_many_times_their_content(content, times: int):
    inner = "".join(f"{symbol}{count}" for symbol, count in content)
    assert molar_mass(f"({inner}){times}") == pytest.approx(times * molar_mass(inner), rel=1e-12)


@given(st.text(alphabet="CHON()[]+-.0123456789 aelx", max_size=12))
def test_any_text_is_a_formula_with_positive_counts_or_is_refused(text: str):
    with contextlib.suppress(OutletError):
        composition = chemistry.atoms(text)
        assert composition
        assert all(count > 0 for _, count in composition)
        assert {symbol for symbol, _ in composition} <= chemistry.ATOMIC_WEIGHT_KG_KMOL.keys()
