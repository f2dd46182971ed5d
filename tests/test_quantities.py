"""Engineering units, reference conditions and time spans."""

from __future__ import annotations

import json
import subprocess
import sys
from datetime import timedelta

import pint
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants

from ingest import quantities
from ingest.errors import OutletError
from ingest.quantities import COMMON, REFERENCES, duration, duration_words, kmol_per_m3, scale
from ingest.unit import KINDS
from tests.source import ROOT

CONSTANTS = json.loads((ROOT / "tests/published/constants.json").read_text(encoding="utf-8"))
NORMAL = "0 degC, 101.325 kPa"
STANDARD = "15 degC, 101.325 kPa"
CUSTOMARY = "60 degF, 14.696 psia"


def to_base(kind: str, unit: str, **stated) -> float:
    return scale(kind, unit, **stated).to_base


def test_the_constants_are_those_of_codata_and_of_the_international_yard_and_pound():
    # scipy.constants holds CODATA; published R in the file too
    assert pytest.approx(constants.R, rel=1e-12) == quantities.R_KPA_M3_KMOL_K
    assert pytest.approx(CONSTANTS["R"], rel=1e-12) == quantities.R_KPA_M3_KMOL_K
    assert pytest.approx(constants.lb, rel=1e-12) == quantities.LB_KG
    assert pytest.approx(constants.foot**3, rel=1e-12) == quantities.FT3_M3
    assert pytest.approx(constants.psi / 1000, rel=1e-12) == quantities.PSI_KPA


@pytest.mark.parametrize(
    ("reference", "key"),
    [
        (NORMAL, "Vm_273p15_101325_L_mol"),
        ("0 degC, 100 kPa", "Vm_273p15_100000_L_mol"),
        (STANDARD, "Vm_288p15_101325"),
        ("20 degC, 101.325 kPa", "Vm_293p15_101325"),
        ("25 degC, 101.325 kPa", "Vm_298p15_101325"),
        ("25 degC, 1 bar", "Vm_298p15_100000"),
    ],
)
def test_molar_volumes_agree_with_codata_to_a_millionth(reference: str, key: str):
    # CODATA lists 22.413 969 54 and 22.710 954 64 L/mol; the others are R T / p
    assert 1 / kmol_per_m3(reference) == pytest.approx(CONSTANTS[key], rel=1e-6)


def test_molar_volumes_agree_with_the_quoted_tables_to_one_in_ten_thousand():
    quoted = CONSTANTS["published_GPA"]
    assert 1 / kmol_per_m3(NORMAL) == pytest.approx(quoted["Nm3_per_kmol"], rel=1e-4)
    assert 1 / kmol_per_m3(STANDARD) == pytest.approx(quoted["Sm3_per_kmol_15C_101.325kPa"], rel=1e-4)
    lbmol_per_scf = to_base("volume flow", "ft3/h", reference=CUSTOMARY) / quantities.LB_KG
    assert 1 / lbmol_per_scf == pytest.approx(quoted["scf_per_lbmol"], rel=1e-4)


@pytest.mark.parametrize("pressure", ["14.696", "14.73", "14.65"])
def test_a_standard_cubic_foot_follows_its_stated_pressure(pressure: str):
    expected = CONSTANTS["scf_per_lbmol"][f"60F,{pressure} psia"]
    lbmol_per_scf = to_base("volume flow", "scf/h", reference=f"60 degF, {pressure} psia") / quantities.LB_KG
    assert 1 / lbmol_per_scf == pytest.approx(expected, rel=1e-9)


def test_a_million_standard_cubic_feet_a_day_is_109_8_pound_moles_an_hour():
    for unit in ("MMscfd", "MMscf/d", "1e6 ft3/day"):
        lbmol_h = to_base("volume flow", unit, reference=CUSTOMARY) / quantities.LB_KG
        assert lbmol_h == pytest.approx(CONSTANTS["lbmol_h_per_MMscfd"], rel=1e-9)


def test_taking_15_degrees_for_0_degrees_is_a_flow_error_of_5_5_percent():
    # 288.15 / 273.15 = 1.0549
    ratio = kmol_per_m3(NORMAL) / kmol_per_m3(STANDARD)
    assert ratio == pytest.approx(CONSTANTS["Sm3_per_Nm3"], rel=1e-9)
    assert ratio == pytest.approx(1.0549, abs=5e-5)


@pytest.mark.parametrize("unit", ["Nm3/h", "Sm3/h", "scf/h", "scfm", "MMscfd", "m3/h", "ft3/h"])
def test_a_volume_flow_without_reference_conditions_is_refused_with_all_that_can_be_written(unit: str):
    with pytest.raises(OutletError, match="states no reference conditions") as caught:
        scale("volume flow", unit)
    assert all(f'"{reference}"' in caught.value.remedy for reference in REFERENCES)
    assert "DIN 1343" in caught.value.remedy
    assert "ISO 13443" in caught.value.remedy


@pytest.mark.parametrize("unit", ["Nm3/h", "Sm3/h", "m3/h", "m\u00b3/h", "m^3/h"])
def test_the_stated_reference_decides_whatever_the_letter_before_the_cubic_metre(unit: str):
    assert to_base("volume flow", unit, reference=NORMAL) == pytest.approx(
        CONSTANTS["kmol_per_Nm3"], rel=1e-12
    )


@pytest.mark.parametrize("reference", ["normal", "0 degC", "0, 101.325", "", "0 degC; 101.325 kPa"])
def test_a_reference_that_states_no_temperature_and_pressure_is_refused(reference: str):
    with pytest.raises(OutletError, match="states no temperature and pressure"):
        kmol_per_m3(reference)


@pytest.mark.parametrize("reference", ["0 K, 101.325 kPa", "0 degC, 101.325 bar", "0 degF, 1 kPa"])
def test_a_reference_far_from_any_in_use_is_refused(reference: str):
    with pytest.raises(OutletError, match="lies outside 250 to 320 K and 80 to 120 kPa"):
        kmol_per_m3(reference)


def test_a_reference_with_two_decimal_points_is_refused():
    with pytest.raises(OutletError, match=r"'1\.01\.3' in .* is not a number"):
        kmol_per_m3("0 degC, 1.01.3 bar")


def test_the_table_of_common_units_agrees_with_pint():
    # pint 0.25 knows the definitions; lbmol it does not, so a pound mole is a pound of kilomoles
    registry = pint.UnitRegistry()
    bases = {"molar flow": "kmol/h", "mass flow": "kg/h", "actual volume flow": "m**3/h", "pressure": "kPa"}
    for kind, base in bases.items():
        for unit, factor in COMMON[kind].items():
            if unit != "lbmol/h":
                plain = unit.replace("m3", "m**3").replace("ft3", "ft**3")
                assert factor == pytest.approx(registry.Quantity(plain).m_as(base), rel=1e-12), unit
    for unit in COMMON["temperature"]:
        one = registry.Quantity(100, unit).m_as("K")
        found = scale("temperature", unit)
        assert (100 + found.offset) * found.to_base == pytest.approx(one, rel=1e-12)


@pytest.mark.parametrize(
    ("kind", "unit", "expected"),
    [
        # hand arithmetic from exact definitions
        ("mass flow", "t/day", 1000 / 24),
        ("mass flow", "short_ton/h", 2000 * 0.45359237),
        ("mass flow", "klb/h", 453.59237),
        ("molar flow", "lbmol/day", 0.45359237 / 24),
        ("molar flow", "kgmol/h", 1.0),
        ("actual volume flow", "L/s", 3.6),
        ("actual volume flow", "m3/day", 1 / 24),
        ("pressure", "hPa", 0.1),
        ("pressure", "kgf/cm2", 98.0665),
        ("pressure", "torr", 101.325 / 760),
        ("pressure", "psia", 4.4482216152605 / 0.0254**2 / 1000),
        ("pressure", "kPaa", 1.0),
        ("pressure", "bar abs", 100.0),
        ("mole fraction", "ppm", 1e-6),
        ("mole fraction", "vol%", 1e-2),
        ("mass fraction", "ppm by mass", 1e-6),
        ("mass fraction", "wt%", 1e-2),
        ("flow ratio", "mol/mol", 1.0),
    ],
)
def test_a_unit_becomes_the_base_of_its_kind(kind: str, unit: str, expected: float):
    assert scale(kind, unit) == quantities.Scale(pytest.approx(expected, rel=1e-12), 0.0)


@pytest.mark.parametrize(
    ("unit", "atmosphere", "reading", "kpa"),
    [
        ("kPa gauge", "101.325 kPa", 0.0, 101.325),
        ("barg", "1013.25 mbar", 2.0, 301.325),
        ("bar(g)", "1 atm", 2.0, 301.325),
        ("psig", "14.696 psia", 0.0, 101.325),
        ("mbarg", "0.95 bar", 50.0, 100.0),
    ],
)
def test_a_gauge_pressure_adds_the_stated_atmosphere(unit: str, atmosphere: str, reading: float, kpa: float):
    found = scale("pressure", unit, atmosphere=atmosphere)
    assert (reading + found.offset) * found.to_base == pytest.approx(kpa, rel=1e-5)


@pytest.mark.parametrize("unit", ["kPa gauge", "barg", "psig", "bar gauge", "kPa(g)", "mbarg"])
def test_a_gauge_pressure_without_an_atmosphere_is_refused(unit: str):
    with pytest.raises(OutletError, match="gauge pressure of no stated atmosphere") as caught:
        scale("pressure", unit)
    assert 'atmosphere = "101.325 kPa"' in caught.value.remedy


def test_an_atmosphere_beside_an_absolute_pressure_is_refused():
    with pytest.raises(OutletError, match="is absolute, so no atmosphere is added"):
        scale("pressure", "kPa", atmosphere="101.325 kPa")


@pytest.mark.parametrize("atmosphere", ["1.2 kPa", "14.7", "sea level", "14.7 bar"])
def test_an_atmosphere_that_is_none_is_refused(atmosphere: str):
    with pytest.raises(OutletError, match="is no atmospheric pressure between 50 and 110 kPa"):
        scale("pressure", "barg", atmosphere=atmosphere)


def test_a_species_flow_in_mass_is_turned_by_the_molar_mass_of_its_species():
    # 18.015 kg of water is one kilomole
    assert to_base("species flow", "kg/h", molar_mass_kg_kmol=18.015) * 18.015 == pytest.approx(1.0)
    assert to_base("species flow", "kmol/h") == 1.0
    with pytest.raises(OutletError, match="of several species has no single molar mass"):
        scale("species flow", "kg/h")


@pytest.mark.parametrize(
    ("kind", "unit", "what", "remedy"),
    [
        ("mole fraction", "%", "'%' states no basis", "'mol%', 'vol%' or 'wt%'"),
        ("mass fraction", "percent", "'percent' states no basis", "'mol%', 'vol%' or 'wt%'"),
        ("mass fraction", "ppm", "means mol per million mol", "'ppm by mass'"),
        ("mole fraction", "kg/h", "does not fit kind 'mole fraction'", "'mol%'"),
        ("mole fraction", "wt%", "does not fit kind 'mole fraction'", "'mol%'"),
        ("mass flow", "kmol/h", "does not fit kind 'mass flow'", "'kg/h', 't/h'"),
        ("mass flow", "Kg/h", "does not fit kind 'mass flow'", "'kg/h', 't/h'"),
        ("mass flow", "ton/h", "'ton' in 'ton/h' has more than one meaning", "'t' for 1000 kg"),
        ("mass flow", "tons/h", "'ton' in 'tons/h' has more than one meaning", "'t' for 1000 kg"),
        ("actual volume flow", "gal/min", "more than one meaning", "write 'L' or 'm3'"),
        ("actual volume flow", "Nm3/h", "is a volume at reference conditions", 'kind = "volume flow"'),
        ("actual volume flow", "am3/h", "does not fit kind 'actual volume flow'", "'m3/h'"),
        ("pressure", "degC", "does not fit kind 'pressure'", "'kPa'"),
        ("temperature", "C", "does not fit kind 'temperature'", "'degC'"),
        ("species flow", "m3/h", "does not fit kind 'species flow'", "'kmol/h'"),
        ("flow ratio", "kg/kg", "does not fit kind 'flow ratio'", "'mol/mol'"),
        ("mass flow", "9**9**9 kg/h", "does not fit kind 'mass flow'", "'kg/h'"),
        ("mass flow", "", "does not fit kind 'mass flow'", "'kg/h'"),
    ],
)
def test_a_unit_that_does_not_fit_is_refused_with_what_does(kind: str, unit: str, what: str, remedy: str):
    with pytest.raises(OutletError, match=what.replace("(", r"\(")) as caught:
        scale(kind, unit)
    assert remedy in caught.value.remedy


def test_mscf_is_refused_because_m_is_a_thousand_to_some_and_a_million_to_others():
    with pytest.raises(OutletError, match="'Mscf' in 'Mscfd' has more than one meaning"):
        scale("volume flow", "Mscfd", reference=CUSTOMARY)


def test_a_signal_keeps_its_own_unit():
    assert scale("signal", "anything") == quantities.Scale(1.0, 0.0)


def test_every_kind_but_the_signal_has_common_units():
    assert set(COMMON) == set(KINDS) - {"signal"}


def test_a_common_unit_does_not_import_pint_and_an_uncommon_one_does():
    script = (
        "import sys; from ingest import quantities as q\n"
        "q.scale('mass flow', 't/h'); q.scale('pressure', 'psia')\n"
        "print('pint' in sys.modules); q.scale('mass flow', 't/day'); print('pint' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert done.stdout.split() == ["False", "True"]


@pytest.mark.parametrize(
    ("text", "span", "words"),
    [
        ("10min", timedelta(minutes=10), "10 min"),
        ("8 h", timedelta(hours=8), "8 h"),
        ("24h", timedelta(hours=24), "24 h"),
        ("7d", timedelta(days=7), "7 d"),
        ("1.5h", timedelta(minutes=90), "90 min"),
        ("30s", timedelta(seconds=30), "30 s"),
        ("0 s", timedelta(0), "0 s"),
    ],
)
def test_a_time_span_is_read_and_said_again(text: str, span: timedelta, words: str):
    assert duration(text) == span
    assert duration_words(span) == words


@pytest.mark.parametrize(
    "text", ["", "10", "m", "10 m", "-1h", "1h30", "ten min", "1e3s", "10 Min", "9999999999d"]
)
def test_what_is_no_time_span_is_refused_with_what_to_write(text: str):
    with pytest.raises(OutletError, match="is no time span") as caught:
        duration(text)
    assert '"10min"' in caught.value.remedy


@given(st.integers(0, 10**7))
def test_a_span_said_in_words_is_read_back_as_it_was(seconds: int):
    span = timedelta(seconds=seconds)
    assert duration(duration_words(span)) == span
