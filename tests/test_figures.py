"""The table of figures against worked examples, hand arithmetic and laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.amounts import amount_names
from monitor.figures import Figure, evaluate, figures_of
from tests.amounts_made import amounts_between, reaction
from tests.units_made import made_unit


def _values(unit, fed, left, hours=1.0) -> dict[str, float]:
    """Every figure of one feed and outlet, by name."""
    rows = amounts_between(unit, fed, left)
    sums = np.array([list(rows.values())])
    return {one.name: evaluate(one, sums, hours=hours)[0][0] for one in figures_of(unit, tuple(rows))}


def test_ethane_dehydrogenation_with_methane():
    # Felder & Rousseau, Elementary Principles of Chemical Processes, 3rd ed. 2000, example 4.6-3, from
    # memory: feed 85 C2H6, conversion 0.501, yield 0.471; from these unrounded inputs the selectivity is
    # 7.85, from the rounded outlet printed there (40.0 / 5.2) it is 7.7.
    unit = reaction("C2H6", "C2H4", ["CH4"], ["H2"])
    found = _values(unit, {"C2H6": 85.0}, {"C2H6": 42.415, "C2H4": 40.035, "H2": 37.485, "CH4": 5.1})
    assert found["conversion"] == pytest.approx(50.1)
    assert found["yield on feed"] == pytest.approx(47.1)
    assert found["overall selectivity to CH4"] == pytest.approx(7.85)
    assert found["selectivity on converted"] == pytest.approx(94.01197604790418)
    rounded = _values(unit, {"C2H6": 85.0}, {"C2H6": 42.4, "C2H4": 40.0, "CH4": 5.2})
    assert round(rounded["overall selectivity to CH4"], 1) == 7.7


def test_ethane_to_ethylene_alone():
    # Cerro, Higgins & Whitaker, Material Balances for Chemical Engineers (LibreTexts), example 6.2, seen:
    # 100 kmol/min in, 130 out with mole fractions 7/13, 3/13, 3/13; ethylene is made at 30 kmol/min.
    unit = reaction("C2H6", "C2H4", ["CH4"], ["H2"])
    found = _values(unit, {"C2H6": 100.0}, {"C2H6": 130 * 7 / 13, "C2H4": 130 * 3 / 13, "H2": 30.0})
    assert found["conversion"] == pytest.approx(30.0)
    assert found["selectivity on converted"] == pytest.approx(100.0)
    assert found["yield on feed"] == pytest.approx(30.0)
    assert np.isnan(found["overall selectivity to CH4"])


def test_production_of_ethylene_with_two_by_products():
    # Same book, example 7.1, data seen in the text: conversion 0.2, C2H4/C3H6 = 5, 0.75 C2H4 per C2H6
    # consumed; outlet from the atom balances H2 19, CH4 1, C2H6 80, C2H4 15, C3H6 3 mol/s.
    unit = reaction("C2H6", "C2H4", ["C3H6", "CH4"], ["H2"])
    out = {"H2": 19.0, "CH4": 1.0, "C2H6": 80.0, "C2H4": 15.0, "C3H6": 3.0}
    found = _values(unit, {"C2H6": 100.0}, out)
    assert found["conversion"] == pytest.approx(20.0)
    assert found["overall selectivity to C3H6"] == pytest.approx(5.0)
    assert found["selectivity on converted"] == pytest.approx(75.0)
    assert found["overall selectivity to all unwanted"] == pytest.approx(15 / 4)
    assert found["share of C3H6"] == pytest.approx(22.5)  # 3 mol of three carbons of 20 mol of two
    assert found["share of unseen"] == pytest.approx(0.0, abs=1e-12)


def test_chlorination_of_ethane():
    # Felder & Rousseau, 3rd ed., problem 4.50, solution page seen: per 100 mol C2H5Cl 714.3 mol C2H6 in,
    # 7.143 mol C2H4Cl2, conversion 0.15, selectivity 14; of the C2H6 converted 0.9333 became C2H5Cl.
    unit = reaction("C2H6", "C2H5Cl", ["C2H4Cl2"])
    found = _values(unit, {"C2H6": 714.285714}, {"C2H6": 607.142857, "C2H5Cl": 100.0, "C2H4Cl2": 7.142857})
    assert found["conversion"] == pytest.approx(15.0)
    assert found["overall selectivity to C2H4Cl2"] == pytest.approx(14.0)
    assert found["selectivity on converted"] == pytest.approx(93.33333, rel=1e-6)


def test_hydration_of_ethylene_with_ether_that_holds_two_molecules():
    # Felder & Rousseau, 3rd ed., problem 4.51: outlet analysis seen quoted; published 6.0 %, 0.054 and 17.9
    # from memory, recomputed 6.03299, 0.0542535, 17.857143 and 89.928 % of the carbon.
    unit = reaction("C2H4", "C2H5OH", ["C4H10O"])
    found = _values(unit, {"C2H4": 46.08}, {"C2H4": 43.3, "C2H5OH": 2.5, "C4H10O": 0.14})
    assert found["conversion"] == pytest.approx(6.03299, rel=1e-5)
    assert found["yield on feed"] == pytest.approx(5.42535, rel=1e-5)
    assert found["overall selectivity to C4H10O"] == pytest.approx(17.857143)
    assert found["selectivity on converted"] == pytest.approx(89.92805755395684)


def test_chlorination_of_benzene():
    # Felder & Rousseau, 3rd ed., problem 4.53, solution page seen: per 100 mol C6H6 fed 73.2 left, 25.0
    # mono-, 1.5 di-, 0.3 trichlorobenzene; conversion 0.268; of the benzene converted 0.9328 became C6H5Cl.
    unit = reaction("C6H6", "C6H5Cl", ["C6H4Cl2", "C6H3Cl3"])
    out = {"C6H6": 73.2, "C6H5Cl": 25.0, "C6H4Cl2": 1.5, "C6H3Cl3": 0.3}
    found = _values(unit, {"C6H6": 100.0}, out)
    assert found["conversion"] == pytest.approx(26.8)
    assert found["selectivity on converted"] == pytest.approx(93.28358208955224)
    assert found["share of unseen"] == pytest.approx(0.0, abs=1e-12)


def test_allyl_chloride():
    # Himmelblau & Riggs, Basic Principles and Calculations in Chemical Engineering, 7th ed., chapter 9, from
    # memory: 680.1 C3H6 fed, selectivity 0.19 mol C3H5Cl per mol C3H6Cl2, 0.012 g C3H5Cl per g C3H6.
    unit = reaction("C3H6", "C3H5Cl", ["C3H6Cl2"])
    found = _values(unit, {"C3H6": 680.1}, {"C3H6": 651.0, "C3H5Cl": 4.6, "C3H6Cl2": 24.5})
    assert found["overall selectivity to C3H6Cl2"] == pytest.approx(0.1877551)
    assert found["conversion"] == pytest.approx(4.278782531980591)
    assert 1 / found["specific consumption fed"] == pytest.approx(0.012301, rel=2e-4)  # older weights there


def test_degree_of_completion_of_the_combustion_of_heptane():
    # Same book, from memory: 14.4 kg CO2 from 10 kg C7H16 is 46.8 % (recomputed 46.8372);
    # CO2 holds one of the seven carbons.
    unit = reaction("C7H16", "CO2", ["CO"])
    found = _values(unit, {"C7H16": 10 / 100.205}, {"C7H16": 0.0, "CO2": 14.4 / 44.009})
    assert found["yield on feed"] == pytest.approx(46.8372, rel=1e-4)


def test_olefins_from_methanol():
    # Same book, seen quoted elsewhere: outlet 19 C2H4 and 8 C3H6 is a selectivity of 2.4 (2.375).
    # 19 x 2 + 8 x 3 = 62 mol CH3OH consumed at 80 % conversion: 77.5 fed.
    unit = reaction("CH3OH", "C2H4", ["C3H6"])
    found = _values(unit, {"CH3OH": 77.5}, {"CH3OH": 15.5, "C2H4": 19.0, "C3H6": 8.0})
    assert found["overall selectivity to C3H6"] == pytest.approx(2.375)
    assert found["conversion"] == pytest.approx(80.0)
    assert found["selectivity on converted"] == pytest.approx(100 * 38 / 62)


def test_product_that_a_recycle_brings_back_was_not_made():
    # Kantor, CBE20255 notebook 05.01, seen, after Felder & Rousseau example 4.7-2: 4.75 C3H6 return with
    # the recycle; single-pass conversion 0.0953910172328011, no by-product.
    unit = reaction("C3H8", "C3H6", ["CH4"], ["H2"])
    found = _values(
        unit, {"C3H8": 995.9009009, "C3H6": 4.75}, {"C3H8": 900.9009009, "C3H6": 99.75, "H2": 95.0}
    )
    assert found["conversion"] == pytest.approx(9.53910172328011)
    assert found["selectivity on converted"] == pytest.approx(100.0)


def test_ethylene_oxide_of_a_single_pass():
    # Kantor, CBE20255 notebook 04.02, seen, after Murphy 2005 example 3.19: conversion 0.06 per pass,
    # ethylene oxide 4.62 in, 153.85 out (rounded), 149.24 kmol/h ethylene consumed, no loss.
    unit = reaction("C2H4", "C2H4O", ["CO2"], ["O2"])
    found = _values(unit, {"C2H4": 2487.31, "C2H4O": 4.62}, {"C2H4": 2338.07, "C2H4O": 153.85})
    assert found["conversion"] == pytest.approx(6.000056, rel=1e-6)
    assert found["selectivity on converted"] == pytest.approx(100.0, abs=0.01)


def test_selectivity_is_wanted_over_unwanted_and_10_over_2_is_5():
    # Common practice, no source: 10 mol wanted with 2 mol unwanted is 5 mol/mol; 10.5 means 10.5 mol
    # wanted per 1 mol unwanted.
    unit = reaction("C2H6", "C2H4", ["CH4"])
    five = _values(unit, {"C2H6": 20.0}, {"C2H6": 9.0, "C2H4": 10.0, "CH4": 2.0})
    assert five["overall selectivity to CH4"] == 5.0
    more = _values(unit, {"C2H6": 20.0}, {"C2H6": 9.0, "C2H4": 10.5, "CH4": 1.0})
    assert more["overall selectivity to CH4"] == 10.5
    figure = next(f for f in figures_of(unit, ("made C2H4", "made CH4")) if f.name.startswith("overall"))
    assert figure.label == "Overall selectivity, C2H4 over CH4"
    assert (figure.unit, figure.higher_is_better) == ("mol/mol", True)


def test_the_selectivity_with_the_products_exchanged_is_the_reciprocal():
    # Common practice, no source.
    fed, left = {"C2H6": 20.0}, {"C2H6": 9.0, "C2H4": 10.0, "CH4": 2.0}
    way = _values(reaction("C2H6", "C2H4", ["CH4"]), fed, left)["overall selectivity to CH4"]
    back = _values(reaction("C2H6", "CH4", ["C2H4"]), fed, left)["overall selectivity to C2H4"]
    assert way * back == pytest.approx(1.0)


def test_loss_of_the_olefin_in_selective_hydrogenation_is_shown_as_it_is():
    # Hand arithmetic: 1 of 1.2 kmol acetylene converted, ethylene falls from 98 to 97.65: -35 %.
    unit = reaction("C2H2", "C2H4", ["C2H6"])
    found = _values(unit, {"C2H2": 1.2, "C2H4": 98.0}, {"C2H2": 0.2, "C2H4": 97.65, "C2H6": 1.35})
    assert found["selectivity on converted"] == pytest.approx(-35.0)
    assert found["share of C2H6"] == pytest.approx(135.0)


def test_exchanged_inlet_and_outlet_give_a_negative_conversion_not_zero():
    # Hand arithmetic: 25.2 in, 28 out.
    unit = reaction("C2H4", "C2H4O", ["CO2"])
    found = _values(unit, {"C2H4": 25.2, "C2H4O": 2.408}, {"C2H4": 28.0})
    assert found["conversion"] == pytest.approx(100 * (25.2 - 28) / 25.2)


def test_nothing_made_gives_no_number_rather_than_infinity_or_zero():
    unit = reaction("C2H4", "C2H4O", ["CO2"])
    found = _values(unit, {"C2H4": 28.0}, {"C2H4": 28.0})
    assert found["conversion"] == 0.0
    for name in ("overall selectivity to CO2", "selectivity on converted", "specific consumption fed"):
        assert np.isnan(found[name]), name
    figure = figures_of(unit, ("made C2H4O", "made CO2"))[0]
    value, gradient = evaluate(figure, np.array([[1.0, 1e-320]]))
    assert np.isnan(value).all()
    assert np.isnan(gradient).all()


def test_weight_yield_of_maleic_anhydride_is_not_its_molar_yield():
    # 97.9 kg C4H2O3 per 100 kg butane; molar masses 98.057 and 58.124 (CIAAW 2021), ratio 1.687: 58 mol %,
    # of equal carbon numbers.
    unit = reaction("C4H10", "C4H2O3", ["CO2"])
    found = _values(unit, {"C4H10": 100 / 58.124}, {"C4H10": 0.2, "C4H2O3": 97.9 / 98.057})
    assert found["yield on feed"] == pytest.approx(58.03, abs=0.01)
    assert 100 / found["specific consumption fed"] == pytest.approx(97.9)


def test_a_make_is_tonnes_per_running_hour():
    # Hand arithmetic: 40 kmol of 30.069 kg/kmol in 8 h: 0.150 t/h.
    unit = reaction("CH4", "C2H6", ["C2H4"])
    found = _values(unit, {"CH4": 100.0}, {"CH4": 10.0, "C2H6": 40.0, "C2H4": 5.0}, hours=8.0)
    assert found["make of C2H6"] == pytest.approx(40 * (2 * 12.011 + 6 * 1.008) / 8 / 1000)


def test_uncertainty_of_a_ratio_of_correlated_inputs():
    # JCGM 100:2008 annex H.2, tables H.2 to H.4 (from memory, every digit reproduced): Z = V/I = 254.26 ohm,
    # u = 0.236; without the correlation r(V, I) = -0.36 it would be 0.204.
    volt = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
    milliampere = np.array([19.663, 19.639, 19.640, 19.685, 19.678])
    impedance = Figure("Z", "Z", "ohm", {"V": 1.0}, {"I": 1.0}, 1000.0, "V per I.", None, ("V", "I"))
    value, gradient = evaluate(impedance, np.array([[volt.mean(), milliampere.mean()]]))
    covariance = np.cov(volt, milliampere) / 5
    assert value[0] == pytest.approx(254.26, abs=0.005)
    assert np.sqrt(gradient[0] @ covariance @ gradient[0]) == pytest.approx(0.236336, abs=1e-6)
    alone = np.diag(np.diag(covariance))
    assert np.sqrt(gradient[0] @ alone @ gradient[0]) == pytest.approx(0.204076, abs=1e-6)


def test_uncertainty_of_a_conversion_falls_with_what_is_left():
    # JCGM 100:2008, 5.1.6 for X = 1 - out/in: u(X) = (1 - X) sqrt((u_out/out)^2 + (u_in/in)^2).
    unit = reaction("C2H6", "C2H4", ["CH4"])
    conversion = figures_of(unit, ("fed C2H6", "consumed C2H6"))[0]
    fed, left = 100.0, 5.0
    _, gradient = evaluate(conversion, np.array([[fed, fed - left]]))
    to_readings = np.array([[1.0, 0.0], [1.0, -1.0]])  # fed and consumed by feed and outlet
    spread = gradient[0] @ to_readings * [0.01 * fed, 0.02 * left]
    assert np.linalg.norm(spread) == pytest.approx(100 * 0.05 * np.hypot(0.01, 0.02))


NAMES = tuple(amounts_between(reaction("C2H6", "C2H4", ["C3H6", "CH4"]), {"C2H6": 1.0}, {}))
PLENTY = st.lists(st.floats(0.1, 1e3), min_size=len(NAMES), max_size=len(NAMES))


@given(PLENTY)
def test_selectivity_shares_and_the_unseen_add_to_100(amounts):
    unit = reaction("C2H6", "C2H4", ["C3H6", "CH4"])
    found = {f.name: evaluate(f, np.array([amounts]))[0][0] for f in figures_of(unit, NAMES)}
    shares = [value for name, value in found.items() if name.startswith("share of ")]
    assert len(shares) == 3
    total = found["selectivity on converted"] + sum(shares)
    assert total == pytest.approx(100.0, abs=1e-9 * max(map(abs, shares)))


@given(PLENTY)
def test_yield_is_conversion_times_selectivity_on_converted(amounts):
    found = {
        f.name: evaluate(f, np.array([amounts]))[0][0]
        for f in figures_of(reaction("C2H6", "C2H4", ["C3H6", "CH4"]), NAMES)
    }
    product = found["conversion"] * found["selectivity on converted"] / 100
    assert found["yield on feed"] == pytest.approx(product)


@given(PLENTY, st.floats(1e-3, 1e3))
def test_scaling_all_amounts_changes_makes_and_no_ratio(amounts, factor):
    # Euler's theorem besides: the gradient of a ratio is at right angles to the amounts.
    for figure in figures_of(reaction("C2H6", "C2H4", ["C3H6", "CH4"]), NAMES):
        before, gradient = evaluate(figure, np.array([amounts]))
        after, _ = evaluate(figure, factor * np.array([amounts]))
        degree = 1 if figure.denominator is None else 0
        assert after == pytest.approx(before * factor**degree, rel=1e-9, abs=1e-9)
        along = np.abs(gradient[0]) @ np.abs(amounts)
        assert gradient[0] @ amounts == pytest.approx(degree * before[0], abs=1e-9 * along)


def test_the_gradient_is_the_change_of_the_value():
    rng = np.random.default_rng(7)
    sums = rng.uniform(1, 10, (4, len(NAMES)))
    for figure in figures_of(reaction("C2H6", "C2H4", ["C3H6", "CH4"]), NAMES):
        _, gradient = evaluate(figure, sums, hours=2.0)
        for p in range(len(NAMES)):
            step = np.zeros(len(NAMES))
            step[p] = 1e-6
            rise = evaluate(figure, sums + step, hours=2.0)[0] - evaluate(figure, sums - step, hours=2.0)[0]
            assert gradient[:, p] == pytest.approx(rise / 2e-6, rel=1e-5, abs=1e-5)


def test_an_amount_without_weight_may_be_unseen():
    unit = reaction("C2H6", "C2H4", ["CH4"])
    names = ("made C2H4", "made CH4", "fed C2H6", "consumed C2H6")
    conversion = figures_of(unit, names)[0]
    sums = np.array([[np.nan, np.nan, 10.0, 4.0]])
    before = sums.copy()
    assert evaluate(conversion, sums)[0][0] == 40.0
    np.testing.assert_array_equal(sums, before)


def test_a_figure_whose_amounts_are_not_there_is_not_there():
    unit = reaction("C2H6", "C2H4", ["CH4"])
    names = [one.name for one in figures_of(unit, ("fed C2H6", "consumed C2H6", "raw in C", "raw out C"))]
    assert names == ["conversion", "carbon closure"]


def test_a_by_product_without_the_key_element_has_a_selectivity_but_no_share():
    unit = reaction("C2H6", "C2H4", ["H2", "CH4"])
    names = {one.name for one in figures_of(unit, tuple(amounts_between(unit, {"C2H6": 1.0}, {})))}
    assert "overall selectivity to H2" in names
    assert "share of H2" not in names


def test_closures_are_named_by_element_and_no_direction_is_good():
    unit = reaction("C2H6", "C2H5Cl", ["C2H4Cl2"])
    raw = [f"raw {way} {symbol}" for symbol in ("C", "H", "O", "N", "Cl") for way in ("in", "out")]
    closures = figures_of(unit, (*raw, "raw made C", "raw consumed C"))
    assert [one.name for one in closures] == [
        "carbon closure", "hydrogen closure", "oxygen closure", "nitrogen closure", "Cl closure",
        "converted closure",
    ]  # fmt: skip
    assert {one.higher_is_better for one in closures} == {None}


def test_the_amounts_of_a_real_unit_make_the_figures_they_should():
    unit = made_unit()
    names = [one.name for one in figures_of(unit, amount_names(unit))]
    assert names[:3] == ["conversion", "selectivity on converted", "yield on feed"]
    assert {"make of isobutane", "carbon closure", "converted closure", "share of unseen"} <= set(names)


def test_what_is_said_of_instantaneous_selectivity_depends_on_the_reactor():
    said = {
        kind: figures_of(reaction("C2H6", "C2H4", ["CH4"], reactor=kind), NAMES)[3].definition
        for kind in ("well-mixed", "packed bed", "batch")
    }
    assert "also the instantaneous" in said["well-mixed"]
    assert "do not give the instantaneous" in said["packed bed"]
    assert len(set(said.values())) == 3
