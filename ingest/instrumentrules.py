"""What has to hold for one instrument of a unit file: keys of its kind, unit, timing, basis, uncertainty.

A rule looks only at values that passed the table of keys, so that one fault is told once.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from ingest import chemistry, quantities
from ingest.draft import Draft, undeclared
from ingest.entries import Entry, missing
from ingest.errors import OutletError, Problem
from ingest.keys import rows
from ingest.unit import AUXILIARY_KINDS, FRACTION_KINDS


@dataclass(frozen=True, slots=True)
class KindRule:
    """Which of the keys that depend on the kind an instrument needs, and which it may have besides."""

    needs: tuple[str, ...]
    may: tuple[str, ...] = ()


_FRACTION = KindRule(("stream", "species"), ("basis", "left_out"))  # basis: see its own rule
KIND_RULES = {
    "molar flow": KindRule(("stream",)),
    "mass flow": KindRule(("stream",)),
    "volume flow": KindRule(("stream", "reference")),  # a cubic metre of what state is not guessed
    "actual volume flow": KindRule(("stream", "pressure", "temperature")),
    "differential pressure flow": KindRule(
        ("stream", "design_molar_mass"), ("reference", "design", "pressure", "temperature")
    ),
    "mole fraction": _FRACTION,
    "volume fraction": _FRACTION,  # of an ideal gas, the same as the mole fraction
    "mass fraction": _FRACTION,
    "species flow": KindRule(("stream", "species")),
    "flow ratio": KindRule(("stream", "per_stream")),
    "pressure": KindRule((), ("stream", "atmosphere")),  # atmosphere: where the unit is gauge
    "temperature": KindRule((), ("stream",)),
    "signal": KindRule((), ("stream",)),
}
_BY_KIND = tuple(dict.fromkeys(key for rule in KIND_RULES.values() for key in (*rule.needs, *rule.may)))
_OF_TAGGED = ("cycle", "max_age", "sampling")


def base_kind(kind: str) -> str:
    """Give the kind the program works with: the volume fraction of a gas is its mole fraction.

    Parameters
    ----------
    kind : str
        As written in the unit file.

    Returns
    -------
    str
        One of `unit.KINDS`.
    """
    return "mole fraction" if kind == "volume fraction" else kind


def scale_of(entry: Entry, draft: Draft) -> quantities.Scale:
    """Give the scale of an instrument from its kind, unit and what goes with them.

    Parameters
    ----------
    entry : Entry
        An instrument with kind and unit.
    draft : Draft
        The file, for the molar mass of the species it counts.

    Returns
    -------
    Scale
        Factor and offset to the base of its kind.

    Raises
    ------
    OutletError
        The unit does not fit.
    """
    species: tuple[str, ...] = entry.get("species") or ()
    counted = draft.atoms.get(species[0]) if len(species) == 1 else None
    return quantities.scale(
        base_kind(entry.get("kind")),
        entry.get("unit"),
        reference=entry.get("reference"),
        atmosphere=entry.get("atmosphere"),
        molar_mass_kg_kmol=chemistry.molar_mass_kg_kmol(counted)
        if counted
        else entry.get("design_molar_mass"),
        design=entry.get("design"),
    )


def left_out(entry: Entry, draft: Draft) -> tuple[str, ...]:
    """Give the species that the sample of a composition no longer holds.

    Parameters
    ----------
    entry : Entry
        An instrument.
    draft : Draft
        The file, for the species of its stream.

    Returns
    -------
    tuple of str
        Water for basis 'dry', what is named for 'as analysed', else nothing.
    """
    stream = draft.find("stream", entry.get("stream"))
    if entry.get("basis") == "dry" and stream is not None:
        return draft.waters(stream.get("species") or ())
    return tuple(entry.get("left_out") or ())


def is_fraction(entry: Entry) -> bool:
    """Tell whether an instrument gives a composition.

    Parameters
    ----------
    entry : Entry
        An instrument.

    Returns
    -------
    bool
        False also where its kind could not be read.
    """
    return base_kind(entry.get("kind") or "") in FRACTION_KINDS


def enters_the_balance(entry: Entry, draft: Draft) -> bool:
    """Tell whether a reading moves the balance: by itself, or as the pressure or temperature of a flow.

    Parameters
    ----------
    entry : Entry
        An instrument.
    draft : Draft
        The file.

    Returns
    -------
    bool
        False also where its kind could not be read.
    """
    kind, name = entry.get("kind"), entry.get("name")
    if kind in AUXILIARY_KINDS:
        return any(name and name == other.get(kind) for other in draft.many["instrument"])
    return kind is not None


def _keys_go_with_the_kind(entry: Entry, _draft: Draft) -> Iterator[Problem]:
    """An instrument has the keys its kind needs, and none that belong to another kind."""
    kind = entry.get("kind")
    if kind is None:
        return
    rule = KIND_RULES[kind]
    for key in rule.needs:
        if entry.lacks(key) or entry.get(key) == ():
            row = rows("instrument")[key]
            remedy = quantities.reference_remedy() if key == "reference" else f"write {key} = {row.example}"
            yield Problem(entry.at(key), f"missing for kind '{kind}' ({row.sentence})", remedy)
    for key in _BY_KIND:
        if key in entry.values and key not in (*rule.needs, *rule.may):
            yield Problem(entry.at(key), f"does not go with kind '{kind}'", "remove it, or mend kind")


def _a_reading_comes_from_somewhere(entry: Entry, _draft: Draft) -> Iterator[Problem]:
    """A reading has either a tag or a declared value."""
    if entry.lacks("tag") and entry.lacks("value") and entry.lacks("analyzer"):
        what, remedy = (
            "has neither tag nor value",
            'write tag = "..." of the historian, or value = a constant',
        )
        yield Problem(entry.place, what, remedy)
    if entry.get("tag") is not None and entry.get("value") is not None:
        yield Problem(entry.place, "has both tag and value", "remove one of them")
    if entry.get("kind") == "signal" and entry.get("value") is not None:
        yield Problem(entry.at("value"), "a signal is read from a tag", "write tag instead")


def _a_tag_has_its_timing(entry: Entry, _draft: Draft) -> Iterator[Problem]:
    """A tag states how often it is new and how long it holds; a declared value has no such thing."""
    for key in _OF_TAGGED:
        if entry.get("tag") is not None and entry.lacks(key):
            yield missing(rows("instrument")[key], entry.at(key))
        if entry.get("value") is not None and entry.get("tag") is None and key in entry.values:
            yield Problem(entry.at(key), "a declared value has no timing", "remove it")
    cycle, max_age = entry.get("cycle"), entry.get("max_age")
    if cycle and max_age and max_age < cycle and entry.get("sampling") != "lab sample":
        what = f"shorter than the cycle of {quantities.duration_words(cycle)}"
        yield Problem(entry.at("max_age"), what, "write at least one cycle")
    if is_fraction(entry) and entry.get("sampling") == "interpolated":
        what = "a composition is not interpolated between analyses"
        yield Problem(entry.at("sampling"), what, 'write sampling = "held"')


def _the_unit_fits(entry: Entry, draft: Draft) -> Iterator[Problem]:
    """The unit fits the kind, and a declared value lies in the range and in what its kind can be."""
    kind, unit, value = entry.get("kind"), entry.get("unit"), entry.get("value")
    if kind is None or unit is None or (kind == "volume flow" and entry.get("reference") is None):
        return  # each told by another rule
    conditions = list(_conditions(entry))
    if conditions:
        yield from conditions
        return
    try:
        to_base = scale_of(entry, draft).to_base
    except OutletError as error:
        yield Problem(entry.at("unit"), error.what, error.remedy)
        return
    low, high = entry.get("range") or (-math.inf, math.inf)
    if value is not None and not low <= value <= high:
        what = f"{value:g} lies outside the range {low:g} to {high:g}"
        yield Problem(entry.at("value"), what, "mend value or range")
    if value is not None and is_fraction(entry) and not 0 <= value * to_base <= 1:
        yield Problem(entry.at("value"), f"{value:g} {unit} is no fraction", "mend value or unit")


def _conditions(entry: Entry) -> Iterator[Problem]:
    """Reference and design conditions and atmosphere can be read, or are told at their own key."""
    readers = {"reference": quantities.kmol_per_m3, "atmosphere": quantities.atmosphere_kpa}
    readers["design"] = quantities.design_kmol_m3
    flowing = (
        entry.get("reference") == quantities.FLOWING and entry.get("kind") == "differential pressure flow"
    )
    for key, read in readers.items():
        try:
            if key in entry.values and not (flowing and key == "reference"):
                read(entry.get(key))
        except OutletError as error:
            yield Problem(entry.at(key), error.what, error.remedy)


def _a_design_is_compensated(entry: Entry, _draft: Draft) -> Iterator[Problem]:
    """A differential pressure flow is compensated for pressure and temperature together, or not at all."""
    if entry.get("kind") != "differential pressure flow":
        return
    keys = ("design", "pressure", "temperature")
    for key in keys:
        if entry.lacks(key) and any(other in entry.values for other in keys):
            row = rows("instrument")[key]
            what = f"missing beside {' and '.join(other for other in keys if other in entry.values)}"
            yield Problem(entry.at(key), what, f"write {key} = {row.example}, or leave all three out")
    if entry.get("reference") is not None and entry.get("unit") in quantities.COMMON["mass flow"]:
        yield Problem(entry.at("reference"), "a mass needs no reference", "remove it, or mend unit")


def _what_it_names_is_there(entry: Entry, draft: Draft) -> Iterator[Problem]:
    """Streams, species, pressures and temperatures that an instrument names are declared."""
    for key in ("stream", "per_stream"):
        names = [entry.get(key)] if entry.get(key) else []
        yield from undeclared(entry, key, names, draft.names("stream"), "declared stream")
    if entry.get("stream") and entry.get("stream") == entry.get("per_stream"):
        yield Problem(entry.at("per_stream"), "is the stream itself", "name the other stream")
    stream = draft.find("stream", entry.get("stream"))
    held = (stream.get("species") or ()) if stream else ()
    for key in ("species", "left_out") if held else ():
        noun = f"species of stream '{entry.get('stream')}'"
        yield from undeclared(entry, key, entry.get(key) or (), held, noun)
    for kind in ("pressure", "temperature"):
        known = [one.get("name") for one in draft.many["instrument"] if one.get("kind") == kind]
        names = [entry.get(kind)] if entry.get(kind) else []
        yield from undeclared(entry, kind, names, filter(None, known), f"instrument of kind '{kind}'")


def _a_composition_states_its_basis(entry: Entry, draft: Draft) -> Iterator[Problem]:
    """A composition of a stream that holds water says what was left out of the sample."""
    stream = draft.find("stream", entry.get("stream"))
    if not is_fraction(entry) or stream is None:
        return
    basis, waters = entry.get("basis"), draft.waters(stream.get("species") or ())
    if waters and entry.lacks("basis"):
        what = f"missing, and '{entry.get('stream')}' holds {waters[0]}"
        yield Problem(entry.at("basis"), what, 'write basis = "dry", "wet" or "as analysed"')
    if basis == "as analysed" and entry.lacks("left_out"):
        remedy = 'write left_out = ["water"], or [] if nothing was left out'
        yield Problem(entry.at("left_out"), 'missing for basis "as analysed"', remedy)
    if basis in ("dry", "wet") and "left_out" in entry.values:
        remedy = 'remove it, or write basis = "as analysed"'
        yield Problem(entry.at("left_out"), f'does not go with basis "{basis}"', remedy)
    for name in sorted(set(left_out(entry, draft)) & set(entry.get("species") or ())):
        yield Problem(entry.place, f"counts {name}, which its basis leaves out", "mend species or basis")


def _uncertainties_are_stated(entry: Entry, draft: Draft) -> Iterator[Problem]:
    """Whatever enters the balance states both parts of its uncertainty, and not both as zero."""
    if not enters_the_balance(entry, draft):
        return
    parts = {key: entry.get(key) for key in ("random", "systematic")}
    for key in parts:
        if entry.lacks(key):
            what = "missing (an uncertainty is never invented)"
            yield Problem(entry.at(key), what, f"write {key} = {{ relative_pct = 0.5 }}, or {{}} for zero")
    if all(part is not None and not any(part.values()) for part in parts.values()):
        remedy = "write systematic = { relative_pct = 0.5 } or a floor"
        yield Problem(entry.at("systematic"), "both uncertainties are zero", remedy)
    if entry.get("value") is not None and any((parts["random"] or {}).values()):
        remedy = "write random = {} and the whole uncertainty as systematic"
        yield Problem(entry.at("random"), "a declared value does not vary", remedy)


RULES: tuple[Callable[[Entry, Draft], Iterator[Problem]], ...] = (
    _keys_go_with_the_kind,
    _a_reading_comes_from_somewhere,
    _a_tag_has_its_timing,
    _the_unit_fits,
    _a_design_is_compensated,
    _what_it_names_is_there,
    _a_composition_states_its_basis,
    _uncertainties_are_stated,
)
