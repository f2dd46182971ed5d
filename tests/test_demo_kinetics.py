"""The invented reactions: atoms close, and the closed solution is that of the textbook."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from demo_data.kinetics import (
    ISOBUTENE,
    METHACROLEIN,
    PARALLEL,
    REACTIONS,
    SPECIES,
    WANTED,
    outlet,
    rates,
    stoichiometry,
)
from ingest import chemistry
from ingest.unitfile import load

FORMULA = {s.name: s.formula for s in load(Path("config/demo.toml")).species}
ATOMS = chemistry.element_matrix([chemistry.atoms(FORMULA[name]) for name in SPECIES], ("C", "H", "O", "N"))


def _fed(rows=1):
    fed = np.zeros((rows, len(SPECIES)))
    fed[:, ISOBUTENE], fed[:, SPECIES.index("oxygen")], fed[:, SPECIES.index("nitrogen")] = (
        100.0,
        700.0,
        900.0,
    )
    return fed


def _k(**given):
    """Rate constants that are zero but for the reactions named by their place, r0 to r8."""
    k = np.zeros((1, len(REACTIONS)))
    for name, value in given.items():
        k[0, int(name[1:])] = value
    return k


def test_no_reaction_makes_or_loses_an_atom():
    # conservation of the elements, formulas from the unit file
    np.testing.assert_array_equal(stoichiometry() @ ATOMS.T, 0)


def test_atoms_in_equal_atoms_out_over_all_temperatures_and_loads():
    rng = np.random.default_rng(5)
    fed = _fed(500) * rng.uniform(0.5, 1.5, (500, 1))
    k = rates(rng.uniform(560, 660, 500), rng.uniform(0.5, 1, 500), rng.uniform(0, 0.2, 500))
    left = outlet(fed, k, rng.uniform(0.5, 3, 500))
    np.testing.assert_allclose(left @ ATOMS.T, fed @ ATOMS.T, rtol=1e-13)


def test_without_reactions_in_series_the_products_stand_in_the_ratio_of_their_rate_constants():
    # parallel first-order reactions: any textbook of reaction engineering, from memory.
    # By hand: K = 3, isobutene left 100 exp(-3); methacrolein to acetone = 2.4 to 0.6
    left = outlet(_fed(), _k(r0=2.4, r3=0.6), np.ones(1))[0]
    assert left[ISOBUTENE] == pytest.approx(100 * np.exp(-3), rel=1e-14)
    assert left[METHACROLEIN] == pytest.approx(100 * (1 - np.exp(-3)) * 0.8, rel=1e-14)
    assert left[METHACROLEIN] / left[SPECIES.index("acetone")] == pytest.approx(4.0, rel=1e-14)


def test_two_reactions_in_series_give_the_intermediate_of_the_textbook():
    # A -> B -> C, first order, plug flow: B/A0 = k1/(k2 - k1) (exp(-k1 t) - exp(-k2 t))
    # Levenspiel, Chemical Reaction Engineering, ch. 8, from memory
    k1, k2, t = 2.0, 0.5, 1.3
    left = outlet(_fed(), _k(r0=k1, r5=k2), np.full(1, t))[0]
    intermediate = 100 * k1 / (k2 - k1) * (np.exp(-k1 * t) - np.exp(-k2 * t))
    assert left[METHACROLEIN] == pytest.approx(intermediate, rel=1e-13)
    last = 100 - left[ISOBUTENE] - left[METHACROLEIN]
    assert left[SPECIES.index("methacrylic acid")] == pytest.approx(last, rel=1e-12)


def test_the_intermediate_is_greatest_at_the_time_of_the_textbook():
    # same source: t_max = ln(k2/k1)/(k2 - k1), and there B/A0 = (k1/k2)^(k2/(k2 - k1))
    k1, k2 = 2.0, 0.5
    at_best = np.log(k2 / k1) / (k2 - k1)
    times = at_best + np.array([-0.01, 0.0, 0.01])
    left = outlet(_fed(3), np.repeat(_k(r0=k1, r5=k2), 3, axis=0), times)[:, METHACROLEIN]
    assert left[1] == pytest.approx(100 * (k1 / k2) ** (k2 / (k2 - k1)), rel=1e-13)
    assert left[1] > max(left[0], left[2])


def test_equal_rate_constants_in_series_are_no_trouble():
    # limit k2 -> k1 of the same result: B/A0 = k t exp(-k t)
    left = outlet(_fed(), _k(r0=1.5, r5=1.5), np.full(1, 0.8))[0]
    assert left[METHACROLEIN] == pytest.approx(100 * 1.2 * np.exp(-1.2), rel=1e-13)


def test_the_closed_solution_is_what_stepping_along_the_bed_gives():
    # scipy.integrate.solve_ivp steps through the same rate laws without knowing the solution
    k = rates(np.array([620.0]), np.array([0.9]), np.array([0.04]))[0]

    def slope(_, flow):
        return (k * np.where(PARALLEL, flow[ISOBUTENE], flow[METHACROLEIN])) @ stoichiometry()

    stepped = solve_ivp(slope, (0, 1.2), _fed()[0], rtol=1e-11, atol=1e-11).y[:, -1]
    np.testing.assert_allclose(outlet(_fed(), k[None], np.full(1, 1.2))[0], stepped, rtol=1e-8, atol=1e-8)


def test_a_rate_constant_doubles_as_arrhenius_says():
    # by hand: ln 2 = E/R (1/T1 - 1/T2); with T1 = 623.15 K and E = 85 kJ/mol, T2 = 650.63 K
    twice = 1 / (1 / 623.15 - np.log(2) * 8.31446261815324e-3 / 85.0)
    k = rates(np.array([623.15, twice]), np.ones(2), np.zeros(2))[:, WANTED]
    assert twice == pytest.approx(650.63, abs=0.01)
    assert k[1] / k[0] == pytest.approx(2.0, rel=1e-12)


def test_a_selectivity_loss_leaves_the_conversion_and_takes_its_share_of_methacrolein():
    k = rates(np.full(2, 623.15), np.ones(2), np.array([0.0, 0.04]))
    before, after = outlet(_fed(2), k, np.ones(2))
    assert after[ISOBUTENE] == pytest.approx(before[ISOBUTENE], rel=1e-13)
    assert after[METHACROLEIN] / before[METHACROLEIN] == pytest.approx(0.96, rel=1e-12)
