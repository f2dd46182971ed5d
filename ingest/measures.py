"""In which unit does an export write each tag? Held against the unit files, converted where it differs.

What cannot be converted, since it is not known or measures something else, is refused, never taken as it is.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from contextlib import suppress
from dataclasses import dataclass

from ingest.errors import ExportError, OutletError
from ingest.quantities import Scale, scale
from ingest.unit import Unit

# A reference, an atmosphere and a molar mass are the same on both sides and fall out of the conversion.
_REFERENCE = "0 degC, 101.325 kPa"
_GAUGE = "101.325 kPa"
_KINDS = {
    "species flow": ("molar flow", "mass flow"),
    "differential pressure flow": ("molar flow", "mass flow", "volume flow"),
}
_PERCENTS = ("mol%", "vol%", "wt%", "mass%")
_DEGREES = re.compile(r"(?:°|deg\.? ?)?([CFK])", re.IGNORECASE)
_UNSTATED = ("", "-")


@dataclass(frozen=True, slots=True)
class Stated:
    """What a unit file says of a tag: the instrument it belongs to, its kind and its unit."""

    instrument: str
    kind: str
    unit: str


@dataclass(frozen=True, slots=True)
class Conversion:
    """How a tag's value in an export becomes one in the unit of the unit file: `value * factor + offset`."""

    tag: str
    written: str
    stated: str
    factor: float
    offset: float

    @property
    def changes(self) -> bool:
        """Tell whether a number is another one afterwards."""
        return (self.factor, self.offset) != (1.0, 0.0)

    def describe(self) -> str:
        """Say what is done.

        Returns
        -------
        str
            One sentence.
        """
        done = "converted to" if self.changes else "taken as"
        return f"{self.tag}: {self.written} {done} {self.stated}."


def stated_units(units: Iterable[Unit]) -> dict[str, tuple[Stated, ...]]:
    """Gather what unit files state about the unit of each tag.

    Parameters
    ----------
    units : iterable of Unit
        All units that ask for tags.

    Returns
    -------
    dict of str to tuple of Stated
        Tag to every instrument that has it.
    """
    found: dict[str, tuple[Stated, ...]] = {}
    for one in (instrument for unit in units for instrument in unit.instruments):
        if one.tag is not None:
            found[one.tag] = (*found.get(one.tag, ()), Stated(one.name, one.kind, one.unit))
    return found


def conversions(
    place: str, written: Mapping[str, str], stated: Mapping[str, tuple[Stated, ...]]
) -> tuple[Conversion, ...]:
    """Compare the units that an export writes with those of the unit files.

    Parameters
    ----------
    place : str
        `file:row` of the row of units, for the error.
    written : mapping of str to str
        Tag to what stands in its cell of that row.
    stated : mapping of str to tuple of Stated
        As `stated_units` gives it.

    Returns
    -------
    tuple of Conversion
        Of the tags whose unit is not written as the unit file writes it.
    """
    found: dict[str, Conversion] = {}
    for tag, unit in written.items():
        for one in stated.get(tag, ()):
            conversion = _conversion(place, tag, unit.strip(" []()"), one)
            if conversion is not None and found.setdefault(tag, conversion) != conversion:
                raise ExportError(
                    f"{place} [{tag}]: {unit!r} would become {found[tag].stated!r} and {one.unit!r},"
                    " since two instruments share the tag",
                    remedy="State one unit for both instruments in the unit file.",
                )
    return tuple(found.values())


def _conversion(place: str, tag: str, written: str, one: Stated) -> Conversion | None:
    """The conversion to what is stated; None where that is what is written, or nothing is."""
    if written in _UNSTATED or written == one.unit:
        return None
    if written == "%" and one.unit in _PERCENTS:
        return Conversion(tag, written, one.unit, 1.0, 0.0)
    for kind in _KINDS.get(one.kind, (one.kind,)):
        with suppress(OutletError):
            theirs, ours = _scales(kind, written, one.unit)
            factor = theirs.to_base / ours.to_base
            return Conversion(tag, written, one.unit, factor, theirs.offset * factor - ours.offset)
    if _plainer(written) == _plainer(one.unit):
        return None
    raise ExportError(
        f"{place} [{tag}]: {written!r} cannot be converted to {one.unit!r}, the unit of {one.instrument}"
        f" ({one.kind})",
        remedy=f"State the unit of the export at {one.instrument} in the unit file, or mend the export.",
    )


def _scales(kind: str, written: str, stated: str) -> tuple[Scale, Scale]:
    """Both units to the base of one kind; gauge and absolute pressure do not become one another here."""
    if kind == "signal":
        raise OutletError("a signal keeps its own unit", remedy="State that.")
    if kind == "temperature":
        written, stated = map(_degrees, (written, stated))
    if kind == "pressure":
        for atmosphere in (None, _GAUGE):
            with suppress(OutletError):
                pair = [scale(kind, text, atmosphere=atmosphere) for text in (written, stated)]
                return Scale(pair[0].to_base), Scale(pair[1].to_base)
    reference = _REFERENCE if kind == "volume flow" else None
    return scale(kind, written, reference=reference), scale(kind, stated, reference=reference)


def _degrees(text: str) -> str:
    """A unit of temperature, however plants write it, in the spelling of the program."""
    match = _DEGREES.fullmatch(text)
    return text if match is None else "K" if match[1] in "Kk" else f"deg{match[1].upper()}"


def _plainer(text: str) -> str:
    return text.casefold().replace(" ", "")
