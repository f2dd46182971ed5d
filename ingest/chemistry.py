"""Formula to atoms and molar mass, and the element matrix of a set of species.

Atomic weights are those of IUPAC/CIAAW 2021, abridged (Prohaska et al., Pure Appl. Chem. 94 (2022) 573).
The parser of the `chemicals` package splits the formula; its own, older atomic weights are not used.
"""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from chemicals.elements import nested_formula_parser
from numpy.typing import NDArray

from ingest.errors import OutletError

Atoms = tuple[tuple[str, float], ...]

# The 84 elements that have a standard atomic weight; read from the pyciaaw 1.3.2 wheel (CIAAW 2021).
_WEIGHTS = """
H 1.008    He 4.0026  Li 6.94    Be 9.0122  B 10.81    C 12.011   N 14.007   O 15.999   F 18.998   Ne 20.18
Na 22.99   Mg 24.305  Al 26.982  Si 28.085  P 30.974   S 32.06    Cl 35.45   Ar 39.95   K 39.098   Ca 40.078
Sc 44.956  Ti 47.867  V 50.942   Cr 51.996  Mn 54.938  Fe 55.845  Co 58.933  Ni 58.693  Cu 63.546  Zn 65.38
Ga 69.723  Ge 72.63   As 74.922  Se 78.971  Br 79.904  Kr 83.798  Rb 85.468  Sr 87.62   Y 88.906   Zr 91.224
Nb 92.906  Mo 95.95   Ru 101.07  Rh 102.91  Pd 106.42  Ag 107.87  Cd 112.41  In 114.82  Sn 118.71  Sb 121.76
Te 127.6   I 126.9    Xe 131.29  Cs 132.91  Ba 137.33  La 138.91  Ce 140.12  Pr 140.91  Nd 144.24  Sm 150.36
Eu 151.96  Gd 157.25  Tb 158.93  Dy 162.5   Ho 164.93  Er 167.26  Tm 168.93  Yb 173.05  Lu 174.97  Hf 178.49
Ta 180.95  W 183.84   Re 186.21  Os 190.23  Ir 192.22  Pt 195.08  Au 196.97  Hg 200.59  Tl 204.38  Pb 207.2
Bi 208.98  Th 232.04  Pa 231.04  U 238.03
"""
ATOMIC_WEIGHT_KG_KMOL = {
    symbol: float(weight) for symbol, weight in re.findall(r"([A-Z][a-z]?) ([\d.]+)", _WEIGHTS)
}
ELEMENT_NAMES = {"C": "carbon", "H": "hydrogen", "O": "oxygen", "N": "nitrogen"}  # others go by their symbol

# The parser reads past what it does not know, so a formula has to have this form before it is handed over.
# Mole fractions: US Standard Atmosphere 1976, table 3 (from memory). Nitrogen over oxygen is 3.73.
DRY_AIR = {"N2": 0.78084, "O2": 0.20948}

_COUNT = r"(?:[0-9]+(?:\.[0-9]+)?)?"
_FORMULA = re.compile(rf"(?:[A-Z][a-z]?{_COUNT}|\(|\){_COUNT})+")
_SIGNS = "+-\u2212"  # the last one is the typographic minus
_HYDROGEN = ("D", "T")


def atoms(formula: str) -> Atoms:
    """Count the atoms of a formula, in the order of the Hill system (C, H, then by letter).

    Parameters
    ----------
    formula : str
        Symbols, counts and round brackets: 'C4H8', '(C2H5)2O', 'CH1.8O0.5N0.2'.

    Returns
    -------
    tuple of (str, float)
        Symbol and atoms per molecule.

    Raises
    ------
    OutletError
        Not a formula, a charge, or a symbol without a standard atomic weight.
    """
    if any(sign in formula for sign in _SIGNS):
        raise OutletError(
            f"'{formula}' carries a charge", remedy="write the neutral species, for example 'NaCl', not 'Na+'"
        )
    _check_form(formula)
    counts = {symbol: float(count) for symbol, count in nested_formula_parser(formula).items()}
    for symbol in counts:
        _check_symbol(symbol, formula)
    if not all(count > 0 for count in counts.values()):
        raise OutletError(f"'{formula}' counts an element zero times", remedy="leave that element out")
    order = ("C", "H") if "C" in counts else ()
    return tuple(sorted(counts.items(), key=lambda pair: (pair[0] not in order, pair[0])))


def _check_form(formula: str) -> None:
    """Refuse what the parser would read past: unknown signs, square brackets, brackets that do not pair."""
    depth, paired = 0, True
    for sign in formula:
        depth += (sign == "(") - (sign == ")")
        paired = paired and depth >= 0
    if not _FORMULA.fullmatch(formula) or depth != 0 or not paired or "()" in formula:
        raise OutletError(
            f"'{formula}' is not a formula",
            remedy="write symbols, counts and round brackets: 'C4H8', '(C2H5)2O', 'CH1.8O0.5N0.2'",
        )


def _check_symbol(symbol: str, formula: str) -> None:
    """Refuse a symbol that has no standard atomic weight; isotopes are written as their element."""
    if symbol in ATOMIC_WEIGHT_KG_KMOL:
        return
    before = formula[: formula.index(symbol)][-1:]
    meant = symbol.upper() if len(symbol) > 1 else before + symbol.lower()
    if symbol in _HYDROGEN:
        remedy = "write isotopes of hydrogen as 'H'"
    elif len(symbol) > 1 and set(meant) <= ATOMIC_WEIGHT_KG_KMOL.keys():
        remedy = f"did you mean '{meant}'? A second letter in small belongs to the symbol"
    elif meant in ATOMIC_WEIGHT_KG_KMOL:
        remedy = f"did you mean '{meant}'? The second letter of a symbol is small"
    else:
        remedy = "write the symbol of an element that has a standard atomic weight (CIAAW 2021)"
    raise OutletError(f"'{symbol}' in '{formula}' is no element known here", remedy=remedy)


def molar_mass_kg_kmol(composition: Atoms) -> float:
    """Add up the atomic weights of a molecule [kg/kmol].

    Parameters
    ----------
    composition : tuple of (str, float)
        As `atoms` gives it.

    Returns
    -------
    float
        Molar mass [kg/kmol], IUPAC/CIAAW 2021 abridged.
    """
    return sum(ATOMIC_WEIGHT_KG_KMOL[symbol] * count for symbol, count in composition)


def elements_of(compositions: Sequence[Atoms]) -> tuple[str, ...]:
    """List the elements found in any of the species, in the order of the Hill system.

    Parameters
    ----------
    compositions : sequence of tuple of (str, float)
        As `atoms` gives them, one per species.

    Returns
    -------
    tuple of str
        Symbols: C, H, then by letter.
    """
    found = {symbol for composition in compositions for symbol, _ in composition}
    return tuple(sorted(found, key=lambda symbol: (symbol not in ("C", "H"), symbol)))


def element_matrix(compositions: Sequence[Atoms], elements: Sequence[str]) -> NDArray[np.float64]:
    """Give the atoms of each element (row) in each species (column).

    Parameters
    ----------
    compositions : sequence of tuple of (str, float), (s,)
        As `atoms` gives them, one per species.
    elements : sequence of str, (e,)
        The rows wanted; an element that no species holds gives a row of zeros.

    Returns
    -------
    ndarray, (e, s)
        Atoms per molecule [-]; holds no NaN.
    """
    counts = [dict(composition) for composition in compositions]
    return np.array([[count.get(symbol, 0.0) for count in counts] for symbol in elements], dtype=np.float64)
