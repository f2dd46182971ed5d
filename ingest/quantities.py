"""Engineering units, reference conditions and durations, turned into the program's own base.

Base units: kmol/h, kg/h, m3/h, mole or mass fraction, mol/mol, kPa (absolute), K. The common spellings
of each kind stand in one table, which also tells the user what fits; any other spelling goes to the pint
library, which is imported only then because its import takes longer than reading a unit file.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass
from datetime import timedelta
from functools import cache
from typing import Any

from ingest.errors import OutletError

R_KPA_M3_KMOL_K = 8.31446261815324  # CODATA 2018 and 2022, exact: 1.380649e-23 J/K x 6.02214076e23 1/mol
LB_KG = 0.45359237  # international pound, exact (1959 agreement)
FT3_M3 = 0.3048**3  # international foot, exact
PSI_KPA = LB_KG * 9.80665 / 0.0254**2 / 1000.0  # lbf/in2 with standard gravity, exact

_MOLAR = {"kmol/h": 1.0, "mol/h": 1e-3, "mol/s": 3.6, "kmol/s": 3600.0, "lbmol/h": LB_KG}
_MASS = {"kg/h": 1.0, "t/h": 1000.0, "kg/s": 3600.0, "kg/min": 60.0, "g/h": 1e-3, "lb/h": LB_KG}
_VOLUME = {"m3/h": 1.0, "m3/min": 60.0, "m3/s": 3600.0, "L/h": 1e-3, "L/min": 0.06}
_VOLUME |= {"ft3/h": FT3_M3, "ft3/min": 60 * FT3_M3}
_MOLE = {"mol/mol": 1.0, "mol%": 1e-2, "vol%": 1e-2, "mmol/mol": 1e-3, "ppm": 1e-6, "ppmv": 1e-6, "ppb": 1e-9}
_WEIGHT = {"kg/kg": 1.0, "wt%": 1e-2, "mass%": 1e-2, "g/kg": 1e-3, "mg/kg": 1e-6, "ppm by mass": 1e-6}
_RATIO = {"mol/mol": 1.0, "mol%": 1e-2, "m3/m3": 1.0}
_PRESSURE = {"kPa": 1.0, "Pa": 1e-3, "MPa": 1000.0, "mbar": 0.1, "bar": 100.0, "atm": 101.325, "psi": PSI_KPA}
_TEMPERATURE = {"K": (1.0, 0.0), "degC": (1.0, 273.15), "degF": (5 / 9, 459.67)}

COMMON: Mapping[str, Mapping[str, float]] = {
    "molar flow": _MOLAR,
    "mass flow": _MASS,
    "volume flow": _VOLUME,
    "actual volume flow": _VOLUME,
    "differential pressure flow": _MASS | _MOLAR | _VOLUME,
    "species flow": _MOLAR | _MASS,
    "mole fraction": _MOLE,
    "mass fraction": _WEIGHT,
    "flow ratio": _RATIO,
    "pressure": _PRESSURE,
    "temperature": {unit: scale for unit, (scale, _) in _TEMPERATURE.items()},
}
_BASES = {
    "molar flow": "kmol/h",
    "mass flow": "kg/h",
    "volume flow": "m**3/h",
    "actual volume flow": "m**3/h",
    "pressure": "kPa",
}
# Words that mean different amounts to different readers.
_AMBIGUOUS = {
    "ton": "write 't' for 1000 kg or 'short_ton' for 2000 lb",
    "gal": "write 'L' or 'm3'",
    "gallon": "write 'L' or 'm3'",
    "Mscf": "write '1000 ft3' or '1e6 ft3'",
}
REFERENCES = {
    "0 degC, 101.325 kPa": "DIN 1343",
    "15 degC, 101.325 kPa": "ISO 13443",
    "60 degF, 14.696 psia": "customary in the United States",
    "0 degC, 100 kPa": "IUPAC standard temperature and pressure, 1982",
    "20 degC, 101.325 kPa": "",
    "25 degC, 101.325 kPa": "",
}
FLOWING = "flowing"  # in place of a reference: cubic metres as a differential pressure meter holds them
_AT_REFERENCE = re.compile(r"\b[NS](?=m3\b)|\bscf")
_SCF = re.compile(r"\b(MM|M)?scf(?:/?([hdm])(?:in)?)?\b")
_PER = {"h": "/h", "d": "/day", "m": "/min"}
_GAUGE = re.compile(r"^(.+?)\s?(?:\bgauge|\(g\)|(?<=psi|bar|kPa|MPa)g)$")
_ABSOLUTE = re.compile(r"^(.+?)\s?(?:\babs(?:olute)?|\(a\)|(?<=psi|bar|kPa|MPa)a)$")
_REFERENCE = re.compile(r"^([\d.]+) ?(degC|degF|K), ?([\d.]+) ?([A-Za-z]+)$")
_DURATION = re.compile(r"^(\d{1,9}(?:\.\d{1,6})?) ?(s|min|h|d)$")
_SECONDS = {"s": 1, "min": 60, "h": 3600, "d": 86400}


@dataclass(frozen=True, slots=True)
class Scale:
    """How a reading becomes a base value: `(reading + offset) * to_base`."""

    to_base: float
    offset: float = 0.0


def kmol_per_m3(reference: str) -> float:
    """Give the amount in one cubic metre of ideal gas at stated reference conditions.

    Parameters
    ----------
    reference : str
        Temperature and absolute pressure, for example '0 degC, 101.325 kPa'.

    Returns
    -------
    float
        Ideal-gas amount concentration p / (R T) [kmol/m3].

    Raises
    ------
    OutletError
        Not of that form, or far from any reference conditions in use.
    """
    kelvin, kpa = _gas_at(reference, reference_remedy())
    if not (250 <= kelvin <= 320 and 80 <= kpa <= 120):
        raise OutletError(
            f"'{reference}' lies outside 250 to 320 K and 80 to 120 kPa absolute", remedy=reference_remedy()
        )
    return kpa / (R_KPA_M3_KMOL_K * kelvin)


def design_kmol_m3(design: str) -> float:
    """Give the amount in one cubic metre of ideal gas at the conditions a meter is designed for.

    Parameters
    ----------
    design : str
        Temperature and absolute pressure, for example '180 degC, 350 kPa'.

    Returns
    -------
    float
        Ideal-gas amount concentration p / (R T) [kmol/m3].

    Raises
    ------
    OutletError
        Not of that form, or not the state of a gas in a plant.
    """
    remedy = 'write temperature and absolute pressure as design = "180 degC, 350 kPa"'
    kelvin, kpa = _gas_at(design, remedy)
    if not (50 <= kelvin <= 2000 and 1 <= kpa <= 50_000):
        raise OutletError(f"'{design}' lies outside 50 to 2000 K and 1 to 50000 kPa absolute", remedy=remedy)
    return kpa / (R_KPA_M3_KMOL_K * kelvin)


def _gas_at(conditions: str, remedy: str) -> tuple[float, float]:
    """Read a temperature [K] and an absolute pressure [kPa]."""
    match = _REFERENCE.match(conditions.strip())
    if match is None:
        raise OutletError(f"'{conditions}' states no temperature and pressure", remedy=remedy)
    degrees, temperature_unit, pressure, pressure_unit = match.groups()
    per_degree, offset = _TEMPERATURE[temperature_unit]
    kelvin = (_number(degrees, conditions) + offset) * per_degree
    try:
        return kelvin, _number(pressure, conditions) * scale("pressure", pressure_unit).to_base
    except OutletError as error:
        raise OutletError(error.what, remedy=remedy) from None


def reference_remedy() -> str:
    """Say what to write for a reference condition, with the standard each belongs to."""
    offers = [f'"{text}"' + (f" ({source})" if source else "") for text, source in REFERENCES.items()]
    return f"write reference = one of {', '.join(offers)}"


def _number(text: str, whole: str) -> float:
    """Read a plain number or say where it stands."""
    try:
        return float(text)
    except ValueError:
        raise OutletError(f"'{text}' in '{whole}' is not a number", remedy="write it as 101.325") from None


def scale(
    kind: str,
    unit: str,
    *,
    reference: str | None = None,
    atmosphere: str | None = None,
    molar_mass_kg_kmol: float | None = None,
    design: str | None = None,
) -> Scale:
    """Give the factor and offset that turn a reading into the base unit of its kind.

    Parameters
    ----------
    kind : str
        One of `unit.KINDS`; a signal keeps its own unit.
    unit : str
        Engineering unit as the user wrote it.
    reference : str, optional
        Reference conditions of a volume flow.
    atmosphere : str, optional
        Atmospheric pressure that a gauge pressure adds to, for example '101.3 kPa'.
    molar_mass_kg_kmol : float, optional
        Molar mass of the one species that a species flow in mass units counts, or that a differential
        pressure flow is read with [kg/kmol].
    design : str, optional
        Design conditions of a differential pressure flow.

    Returns
    -------
    Scale
        Factor to kmol/h (molar, volume, species and differential pressure flow), kg/h (mass flow), m3/h
        (actual volume flow), mole or mass fraction, mol/mol (flow ratio), kPa absolute or K.

    Raises
    ------
    OutletError
        The unit is not known, has two meanings, does not fit the kind, or needs a statement that is missing.
    """
    if kind == "signal":
        return Scale(1.0)
    text = unit.strip().replace("\u00b3", "3").replace("\u00b2", "2").replace("\u00b0C", "degC")
    if kind == "pressure":
        return _pressure(text, atmosphere)
    if kind == "temperature" and text in _TEMPERATURE:
        return Scale(*_TEMPERATURE[text])
    if kind == "actual volume flow" and _AT_REFERENCE.search(text):
        raise OutletError(
            f"'{unit}' is a volume at reference conditions",
            remedy='write kind = "volume flow" and a reference',
        )
    by_kind: dict[str, Callable[[], Scale]] = {
        "volume flow": lambda: _volume_flow(text, reference),
        "species flow": lambda: _species_flow(text, molar_mass_kg_kmol),
        "differential pressure flow": lambda: _differential_pressure(
            text, reference, design, molar_mass_kg_kmol
        ),
    }
    return by_kind[kind]() if kind in by_kind else Scale(_factor(kind, text))


def _volume_flow(text: str, reference: str | None) -> Scale:
    """Scale a volume flow at reference conditions to kmol/h."""
    if reference is None:
        raise OutletError(f"'{text}' states no reference conditions", remedy=reference_remedy())
    _refuse_ambiguous(text)
    plain = _SCF.sub(_cubic_feet, re.sub(r"\b[NS](?=m3\b)", "", text))
    return Scale(_factor("volume flow", plain) * kmol_per_m3(reference))


def _differential_pressure(
    text: str, reference: str | None, design: str | None, molar_mass_kg_kmol: float | None
) -> Scale:
    """Scale what a meter shows, in moles, mass or volume, to kmol/h by the design it is read with."""
    for kind, kmol in (("molar flow", 1.0), ("mass flow", 1.0 / (molar_mass_kg_kmol or 1.0))):
        with suppress(OutletError):
            return Scale(_factor(kind, text) * kmol)
    if reference != FLOWING:
        return _volume_flow(text, reference)
    if design is None:
        raise OutletError(
            f"'{text}' at flowing conditions needs the design", remedy='write design = "180 degC, 350 kPa"'
        )
    return Scale(_factor("volume flow", text) * design_kmol_m3(design))


def _cubic_feet(match: re.Match[str]) -> str:
    """Write the trade's scfh, scfm, scf/d and MMscfd in cubic feet; MM is a million."""
    million, per = match.groups()
    return f"{'1e6 ' if million else ''}ft3{_PER[per] if per else ''}"


def _species_flow(text: str, molar_mass_kg_kmol: float | None) -> Scale:
    """Scale the flow of a species to kmol/h; a mass needs the one molar mass that turns it."""
    try:
        return Scale(_factor("molar flow", text))
    except OutletError:
        per_hour = _factor("mass flow", text, shown="species flow")
    if molar_mass_kg_kmol is None:
        raise OutletError(
            f"'{text}' of several species has no single molar mass",
            remedy="name one species, or write 'kmol/h'",
        )
    return Scale(per_hour / molar_mass_kg_kmol)


def _pressure(text: str, atmosphere: str | None) -> Scale:
    """Scale a pressure to kPa absolute; a gauge pressure adds the stated atmosphere."""
    gauge = _GAUGE.match(text)
    absolute = _ABSOLUTE.match(text)
    plain = gauge[1] if gauge else absolute[1] if absolute else text
    factor = _factor("pressure", plain)
    if not gauge:
        if atmosphere is not None:
            raise OutletError(f"'{text}' is absolute, so no atmosphere is added", remedy="remove atmosphere")
        return Scale(factor)
    if atmosphere is None:
        raise OutletError(
            f"'{text}' is a gauge pressure of no stated atmosphere",
            remedy='write atmosphere = "101.325 kPa" with the mean pressure of the site',
        )
    return Scale(factor, offset=atmosphere_kpa(atmosphere) / factor)


def atmosphere_kpa(atmosphere: str) -> float:
    """Read the atmospheric pressure of the site [kPa absolute].

    Parameters
    ----------
    atmosphere : str
        Number and unit of an absolute pressure: '101.3 kPa'.

    Returns
    -------
    float
        Between 50 and 110 kPa.

    Raises
    ------
    OutletError
        Not a pressure, or none that a site on land has.
    """
    match = re.match(r"^([\d.]+) ?([A-Za-z].*)$", atmosphere.strip())
    kpa = _number(match[1], atmosphere) * _pressure(match[2], None).to_base if match else 0.0
    if not 50 <= kpa <= 110:
        raise OutletError(
            f"'{atmosphere}' is no atmospheric pressure between 50 and 110 kPa",
            remedy='write it as atmosphere = "101.325 kPa"',
        )
    return kpa


def fitting(kind: str) -> str:
    """List the common units that fit a kind, for messages and documents.

    Parameters
    ----------
    kind : str
        One of `unit.KINDS`.

    Returns
    -------
    str
        Units, separated by commas.
    """
    return ", ".join(f"'{unit}'" for unit in COMMON.get(kind, ()))


def _factor(kind: str, text: str, *, shown: str | None = None) -> float:
    """Find the factor to base: from the table of common spellings, else from pint."""
    if text in COMMON[kind]:
        return COMMON[kind][text]
    fits = fitting(shown or kind)
    if text in ("%", "percent", "pct"):
        raise OutletError(f"'{text}' states no basis", remedy="write 'mol%', 'vol%' or 'wt%'")
    if kind == "mass fraction" and text in ("ppm", "ppmv", "ppb"):
        raise OutletError(f"'{text}' means mol per million mol", remedy="write 'ppm by mass'")
    _refuse_ambiguous(text)
    factor = _from_pint(text, _BASES[kind]) if kind in _BASES else None
    if factor is None:
        raise OutletError(f"'{text}' does not fit kind '{shown or kind}'", remedy=f"write one of {fits}")
    return factor


def _refuse_ambiguous(text: str) -> None:
    """Refuse words that stand for different amounts in different places."""
    for word, remedy in _AMBIGUOUS.items():
        if re.search(rf"(?<![A-Za-z_]){word}s?[hdm]?(?![A-Za-z_])", text):
            raise OutletError(f"'{word}' in '{text}' has more than one meaning", remedy=remedy)


# pint evaluates what it reads, so only short products and quotients of named units are handed over.
_SAFE = re.compile(r"(?:\d[\d.]*(?:e\d)? )?[A-Za-z_]+[\^]?[23]?(?: ?[*/] ?[A-Za-z_]+[\^]?[23]?){0,3}")


def _from_pint(text: str, base: str) -> float | None:
    """Convert one of a unit that is not in the table; None when it is unknown or of another dimension."""
    if not _SAFE.fullmatch(text):
        return None
    registry, errors = _registry()
    try:
        plain = re.sub(r"(?<=[A-Za-z])([23])", r"**\1", text)
        factor = float(registry.Quantity(plain).to(base).magnitude)
    except (errors.PintError, ValueError, AttributeError):
        return None
    return factor if 1e-9 <= factor <= 1e9 else None  # 'am3/h' would be cubic attometres


@cache
def _registry() -> tuple[Any, Any]:
    """Build the registry once, on the first uncommon unit, with two moles of the trade added."""
    import pint

    registry: Any = pint.UnitRegistry()
    registry.define(f"lbmol = {LB_KG} * kmol")
    registry.define("kgmol = kmol")
    return registry, pint.errors


def duration(text: str) -> timedelta:
    """Read a time span.

    Parameters
    ----------
    text : str
        A number and s, min, h or d: '10min', '8 h', '7d'.

    Returns
    -------
    timedelta
        The span, to the microsecond.

    Raises
    ------
    OutletError
        Not of that form.
    """
    match = _DURATION.match(text.strip())
    if match is None:
        raise OutletError(f"'{text}' is no time span", remedy='write a number and s, min, h or d, as "10min"')
    return timedelta(seconds=float(match[1]) * _SECONDS[match[2]])


def duration_words(span: timedelta) -> str:
    """Say a time span in its largest whole unit: '10 min', '8 h', '24 h', '7 d' (days from two on).

    Parameters
    ----------
    span : timedelta
        Zero or longer.

    Returns
    -------
    str
        Number, space and s, min, h or d.
    """
    for unit, least in (("d", timedelta(days=2)), ("h", timedelta(hours=1)), ("min", timedelta(minutes=1))):
        length = timedelta(seconds=_SECONDS[unit])
        if span >= least and span % length == timedelta(0):
            return f"{span // length} {unit}"
    return f"{span.total_seconds():.15g} s"
