"""What has to hold between the keys of a unit file; each rule yields the faults it finds.

A rule looks only at values that passed the table of keys, so one fault is told once.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import timedelta

from ingest import chemistry, quantities
from ingest.draft import Draft
from ingest.errors import OutletError, Problem
from ingest.keys import Entry, nearest
from ingest.unit import FRACTION_KINDS

HOUR = timedelta(hours=1)
DAY = timedelta(days=1)
ELEMENT_NAMES = {"C": "carbon", "H": "hydrogen", "O": "oxygen", "N": "nitrogen"}


@dataclass(frozen=True, slots=True)
class KindRule:
    """Which of the keys that depend on the kind an instrument needs, and which it may have besides."""

    needs: tuple[str, ...]
    may: tuple[str, ...] = ()


_FRACTION = KindRule(
    ("stream", "species"), ("basis", "left_out")
)  # basis: needed where the stream holds water
KIND_RULES = {
    "molar flow": KindRule(("stream",)),
    "mass flow": KindRule(("stream",)),
    "volume flow": KindRule(("stream", "reference")),  # a cubic metre of what state is not guessed
    "actual volume flow": KindRule(("stream", "pressure", "temperature")),
    "mole fraction": _FRACTION,
    "volume fraction": _FRACTION,  # of an ideal gas, the same as the mole fraction
    "mass fraction": _FRACTION,
    "species flow": KindRule(("stream", "species")),
    "flow ratio": KindRule(("stream", "per_stream")),
    "pressure": KindRule((), ("stream", "atmosphere")),  # atmosphere: needed where the unit is gauge
    "temperature": KindRule((), ("stream",)),
    "signal": KindRule((), ("stream",)),
}
_BY_KIND = tuple(dict.fromkeys(key for rule in KIND_RULES.values() for key in (*rule.needs, *rule.may)))
_OF_TAGGED = ("cycle", "max_age", "sampling")


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
    species = entry.get("species") or ()
    counted = draft.atoms.get(species[0]) if len(species) == 1 else None
    return quantities.scale(
        base_kind(entry.get("kind")),
        entry.get("unit"),
        reference=entry.get("reference"),
        atmosphere=entry.get("atmosphere"),
        molar_mass_kg_kmol=chemistry.molar_mass_kg_kmol(counted) if counted else None,
    )


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


def reacting(draft: Draft) -> dict[str, chemistry.Atoms]:
    """Give the composition of every species that is not declared inert and whose formula could be read.

    Parameters
    ----------
    draft : Draft
        The file.

    Returns
    -------
    dict
        Species name to atoms, in the order of the file.
    """
    inert = draft.chemistry.get("inert") or ()
    return {name: atoms for name, atoms in draft.atoms.items() if atoms and name not in inert}


def figure_names(elements: Sequence[str], wanted: str, unwanted: Sequence[str]) -> tuple[str, ...]:
    """List the figures that can be watched.

    Parameters
    ----------
    elements : sequence of str
        Symbols found in reacting species.
    wanted : str
        The wanted product.
    unwanted : sequence of str
        The unwanted products.

    Returns
    -------
    tuple of str
        Names of figures, as a watch writes them.
    """
    return (
        "conversion",
        *(f"overall selectivity to {name}" for name in unwanted),
        "overall selectivity to all unwanted",
        "selectivity on converted",
        "yield on feed",
        *(f"share of {name}" for name in unwanted),
        *(f"{ELEMENT_NAMES.get(symbol, symbol)} closure" for symbol in elements),
        "converted closure",
        *(f"make of {name}" for name in (wanted, *unwanted)),
        "specific consumption fed",
        "specific consumption consumed",
    )


def _undeclared(
    entry: Entry, key: str, names: Iterable[str], allowed: Iterable[str], noun: str
) -> Iterator[Problem]:
    """Yield a fault for each name that is not among the declared ones."""
    known = list(allowed)
    for name in names:
        if name not in known:
            yield Problem(entry.at(key), f"'{name}' is no {noun}", nearest(name, known))


def _twice(entries: Iterable[Entry], key: str, remedy: str) -> Iterator[Problem]:
    """Yield a fault for each value of a key that more than one entry has."""
    stated = [(entry.get(key), entry) for entry in entries if entry.get(key) is not None]
    first: dict[str, Entry] = {}
    for value, entry in stated:
        if value in first:
            yield Problem(entry.at(key), f"'{value}' already belongs to {first[value].place}", remedy)
        first.setdefault(value, entry)


def names_are_unique(draft: Draft) -> Iterator[Problem]:
    """Names are unique in their section, and every tag belongs to one instrument."""
    for section in ("stream", "instrument", "analyzer", "shared"):
        yield from _twice(draft.many[section], "name", "give each its own name")
    yield from _twice(draft.many["instrument"], "tag", "give each instrument its own tag")


def time_fits(draft: Draft) -> Iterator[Problem]:
    """Cells divide an hour or a day, and windows are whole numbers of cells."""
    unit = draft.once["unit"]
    cell, windows = unit.get("cell"), unit.get("windows") or ()
    if cell is None:
        return
    if HOUR % cell and (cell % HOUR or DAY % cell):
        yield Problem(
            unit.at("cell"),
            f"{quantities.duration_words(cell)} divides neither an hour nor a day into whole cells",
            'write for example cell = "10min"',
        )
    for window in windows:
        if window % cell:
            words = quantities.duration_words(window)
            yield Problem(
                unit.at("windows"), f"{words} is no whole number of cells", "write multiples of cell"
            )
    for window, count in Counter(windows).items():
        if count > 1:
            words = quantities.duration_words(window)
            yield Problem(unit.at("windows"), f"{words} stands twice", "name each window once")


def roles_are_declared(draft: Draft) -> Iterator[Problem]:
    """Key reactant, wanted, unwanted and inert are declared species, and each has one role."""
    entry = draft.chemistry
    roles: dict[str, str] = {}
    for key in ("key_reactant", "wanted", "unwanted", "inert"):
        value = entry.get(key) or ()
        names = (value,) if isinstance(value, str) else value
        yield from _undeclared(entry, key, names, draft.atoms, "declared species")
        for name in names:
            if name in roles:
                yield Problem(entry.at(key), f"'{name}' is also {roles[name]}", "give each species one role")
            roles.setdefault(name, key)


def key_element_is_carried(draft: Draft) -> Iterator[Problem]:
    """The key element is in the key reactant and in the wanted product."""
    entry, symbol = draft.chemistry, draft.chemistry.get("key_element")
    if symbol is None:
        return
    if symbol not in chemistry.ATOMIC_WEIGHT_KG_KMOL:
        yield Problem(entry.at("key_element"), f"'{symbol}' is no element", 'write a symbol, for example "C"')
        return
    for key in ("key_reactant", "wanted"):
        composition = draft.atoms.get(entry.get(key) or "")
        if composition and symbol not in dict(composition):
            yield Problem(
                entry.at("key_element"),
                f"'{symbol}' is not in {entry.get(key)}, the {key}",
                f"choose an element that both hold, for example from {', '.join(dict(composition))}",
            )


def streams_hold_species(draft: Draft) -> Iterator[Problem]:
    """Streams hold declared species, some go in and some go out, and no species is left without a stream."""
    streams = draft.many["stream"]
    for entry in streams:
        yield from _undeclared(entry, "species", entry.get("species") or (), draft.atoms, "declared species")
        if entry.get("species") == ():
            yield Problem(entry.at("species"), "holds no species", "name every species the stream may hold")
    for direction in ("in", "out"):
        if streams and not any(entry.get("direction") in (direction, None) for entry in streams):
            yield Problem("stream", f"no stream goes {direction}", f'write direction = "{direction}" for one')
    held = {name for entry in streams for name in entry.get("species") or ()}
    for name in draft.atoms if _all_read(streams) else ():
        if name not in held:
            yield Problem(f"chemistry.species.{name}", "is in no stream", "add it to a stream or remove it")


def _all_read(streams: Sequence[Entry]) -> bool:
    """Tell whether every stream's direction and species could be read, so that absence means something."""
    return bool(streams) and all(entry.get("direction") and entry.get("species") for entry in streams)


def _carried(draft: Draft, direction: str) -> set[str]:
    """Give the species that streams of one direction hold."""
    streams = [entry for entry in draft.many["stream"] if entry.get("direction") == direction]
    return {name for entry in streams for name in entry.get("species")}


def what_enters_can_leave(draft: Draft) -> Iterator[Problem]:
    """Products leave, the key reactant enters and leaves, inerts and every element do both."""
    if not _all_read(draft.many["stream"]):
        return
    entry = draft.chemistry
    sides = {"in": _carried(draft, "in"), "out": _carried(draft, "out")}
    wants = [("key_reactant", "in"), ("key_reactant", "out"), ("wanted", "out"), ("unwanted", "out")]
    for key, side in [*wants, ("inert", "in"), ("inert", "out")]:
        value = entry.get(key) or ()
        for name in (value,) if isinstance(value, str) else value:
            if name in draft.atoms and name not in sides[side]:
                what = f"'{name}' is in no stream that goes {side}"
                yield Problem(
                    entry.at(key), what, f"add it to the species of such a stream or to none as {key}"
                )
    known = reacting(draft)
    elements = {side: {e for n in names if n in known for e, _ in known[n]} for side, names in sides.items()}
    for side, other in (("in", "out"), ("out", "in")) if None not in draft.atoms.values() else ():
        for symbol in sorted(elements[side] - elements[other]):
            what = f"reacting species hold {symbol} only in streams that go {side}"
            yield Problem("stream", what, f"add a species with {symbol} to a stream that goes {other}")


def keys_go_with_the_kind(draft: Draft) -> Iterator[Problem]:
    """An instrument has the keys its kind needs, and none that belong to another kind."""
    for entry in draft.many["instrument"]:
        rule = KIND_RULES.get(entry.get("kind") or "")
        if rule is None:
            continue
        for key in rule.needs:
            if entry.get(key) in (None, ()):
                remedy = quantities.reference_remedy() if key == "reference" else f"write {key} = ..."
                yield Problem(entry.at(key), f"missing for a {entry.get('kind')}", remedy)
        for key in _BY_KIND:
            if key in entry.values and key not in (*rule.needs, *rule.may):
                yield Problem(entry.at(key), f"does not go with a {entry.get('kind')}", "remove it")


def readings_come_from_somewhere(draft: Draft) -> Iterator[Problem]:
    """A reading has a tag with its timing, or a declared value without."""
    for entry in draft.many["instrument"]:
        tag, value = entry.get("tag"), entry.get("value")
        if (tag is None) is (value is None):
            what = "has neither tag nor value" if tag is None else "has both tag and value"
            yield Problem(
                entry.place, what, 'write tag = "..." for a historian tag, or value = ... for a constant'
            )
        for key in _OF_TAGGED:
            if tag is not None and key not in entry.values:
                yield Problem(
                    entry.at(key), "missing (timing of a tag)", f"write {key}, see config/README.md"
                )
            if value is not None and key in entry.values:
                yield Problem(entry.at(key), "a declared value has no timing", "remove it")
        cycle, max_age = entry.get("cycle"), entry.get("max_age")
        if cycle and max_age and max_age < cycle:
            words = quantities.duration_words(cycle)
            yield Problem(
                entry.at("max_age"), f"shorter than the cycle of {words}", "write at least one cycle"
            )
        if base_kind(entry.get("kind") or "") in FRACTION_KINDS and entry.get("sampling") == "interpolated":
            what = "a composition is not interpolated between analyses"
            yield Problem(entry.at("sampling"), what, 'write sampling = "held"')


def uncertainties_are_stated(draft: Draft) -> Iterator[Problem]:
    """Whatever enters the balance states both parts of its uncertainty, and not both as zero."""
    helpers = {entry.get(key) for entry in draft.many["instrument"] for key in ("pressure", "temperature")}
    for entry in draft.many["instrument"]:
        auxiliary = entry.get("kind") in (None, "pressure", "temperature", "signal")
        if auxiliary and entry.get("name") not in helpers:
            continue
        parts = {key: entry.get(key) for key in ("random", "systematic")}
        for key, part in parts.items():
            if part is None:
                yield Problem(
                    entry.at(key), "missing; an uncertainty is never invented", _uncertainty_remedy(key)
                )
        if None not in parts.values() and not any(v for part in parts.values() for v in part.values()):
            yield Problem(
                entry.at("systematic"), "both uncertainties are zero", _uncertainty_remedy("systematic")
            )
        if entry.get("value") is not None and any((parts["random"] or {}).values()):
            what = "a declared value does not vary"
            yield Problem(
                entry.at("random"), what, "write random = {} and give its uncertainty as systematic"
            )


def _uncertainty_remedy(key: str) -> str:
    return f"write {key} = {{ relative_pct = 0.5 }} or a floor; {{}} states zero"


def instruments_name_what_is_there(draft: Draft) -> Iterator[Problem]:
    """Streams, species, pressures and temperatures that an instrument names are declared."""
    for entry in draft.many["instrument"]:
        for key in ("stream", "per_stream"):
            names = [entry.get(key)] if entry.get(key) else []
            yield from _undeclared(entry, key, names, draft.names("stream"), "declared stream")
        if entry.get("stream") and entry.get("stream") == entry.get("per_stream"):
            yield Problem(entry.at("per_stream"), "is the stream itself", "name the other stream")
        stream = draft.find("stream", entry.get("stream"))
        held = (stream.get("species") or ()) if stream else ()
        for key in ("species", "left_out") if held else ():
            noun = f"species of stream '{entry.get('stream')}'"
            yield from _undeclared(entry, key, entry.get(key) or (), held, noun)
        for kind in ("pressure", "temperature"):
            if (name := entry.get(kind)) is not None:
                allowed = [
                    e.get("name") for e in draft.many["instrument"] if e.get("kind") == kind and e.get("name")
                ]
                yield from _undeclared(entry, kind, [name], allowed, f"instrument of kind {kind}")


def compositions_state_their_basis(draft: Draft) -> Iterator[Problem]:
    """A composition of a stream that holds water says what was left out of the sample."""
    for entry in draft.many["instrument"]:
        stream = draft.find("stream", entry.get("stream"))
        if base_kind(entry.get("kind") or "") not in FRACTION_KINDS or stream is None:
            continue
        basis, waters = entry.get("basis"), draft.waters(stream.get("species") or ())
        if waters and basis is None:
            what = f"missing; '{entry.get('stream')}' holds {waters[0]}"
            yield Problem(entry.at("basis"), what, 'write basis = "dry", "wet" or "as analysed"')
        if basis == "as analysed" and "left_out" not in entry.values:
            what = 'missing for basis "as analysed"'
            yield Problem(
                entry.at("left_out"), what, 'write left_out = ["water"], or [] if nothing was left out'
            )
        if basis != "as analysed" and "left_out" in entry.values:
            yield Problem(
                entry.at("left_out"), 'goes with basis = "as analysed" only', "remove it or write that"
            )
        for name in set(left_out(entry, draft)) & set(entry.get("species") or ()):
            yield Problem(entry.place, f"counts {name}, which its basis leaves out", "mend species or basis")


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


def units_fit(draft: Draft) -> Iterator[Problem]:
    """The unit fits the kind, and a declared value lies in the range and in what its kind can be."""
    for entry in draft.many["instrument"]:
        kind = entry.get("kind")
        if (
            kind is None
            or entry.get("unit") is None
            or (kind == "volume flow" and not entry.get("reference"))
        ):
            continue
        try:
            scale = scale_of(entry, draft)
        except OutletError as error:
            yield Problem(entry.at("unit"), error.what, error.remedy)
            continue
        value, (low, high) = entry.get("value"), entry.get("range") or (-float("inf"), float("inf"))
        if value is None:
            continue
        if not low <= value <= high:
            yield Problem(entry.at("value"), f"{value:g} is outside range", "mend value or range")
        if base_kind(kind) in FRACTION_KINDS and not 0 <= value * scale.to_base <= 1:
            yield Problem(
                entry.at("value"), f"{value:g} {entry.get('unit')} is no fraction", "mend value or unit"
            )


def shared_errors_have_members(draft: Draft) -> Iterator[Problem]:
    """A shared error names an analyzer or at least two instruments."""
    for entry in draft.many["shared"]:
        names, analyzer = entry.get("instruments"), entry.get("analyzer")
        if (names is None) is (analyzer is None):
            what = "needs either instruments or analyzer"
            yield Problem(entry.place, what, 'write instruments = ["...", "..."] or analyzer = "..."')
            continue
        yield from _undeclared(
            entry, "instruments", names or (), draft.names("instrument"), "declared instrument"
        )
        asked = [analyzer] if analyzer else []
        yield from _undeclared(entry, "analyzer", asked, draft.names("analyzer"), "declared analyzer")
        if names is not None and len(names) < 2:
            what = "an error shared by fewer than two instruments"
            yield Problem(entry.at("instruments"), what, "name at least two, or put it under systematic")


def load_limits_are_in_order(draft: Draft) -> Iterator[Problem]:
    """The load is read from a tag, and its limits leave room between down and back."""
    entry = draft.once["operating"]
    load, down = entry.get("load"), entry.get("down_below")
    known = [e.get("name") for e in draft.many["instrument"] if e.get("name") and e.get("value") is None]
    yield from _undeclared(entry, "load", [load] if load else [], known, "instrument with a tag")
    if down is None:
        return
    above, turned = entry.get("running_above"), entry.get("turned_down_below")
    if above is not None and above <= down:
        what = f"{above:g} is not above down_below = {down:g}"
        yield Problem(entry.at("running_above"), what, "write a higher load")
    if turned is not None and turned <= down:
        what = f"{turned:g} is not above down_below = {down:g}"
        yield Problem(entry.at("turned_down_below"), what, "write a higher load, or leave it out")


def watches_can_be_judged(draft: Draft) -> Iterator[Problem]:
    """A watch names a figure and a window that exist, and limits that leave room for its deadband."""
    entry = draft.chemistry
    elements = chemistry.elements_of(list(reacting(draft).values()))
    figures = figure_names(elements, entry.get("wanted") or "", entry.get("unwanted") or ())
    windows = draft.once["unit"].get("windows") or ()
    for watch in draft.many["watch"]:
        asked = [watch.get("figure")] if watch.get("figure") else []
        yield from _undeclared(watch, "figure", asked, figures, "figure of this unit")
        if windows and watch.get("window") and watch.get("window") not in windows:
            words = quantities.duration_words(watch.get("window"))
            allowed = ", ".join(quantities.duration_words(window) for window in windows)
            yield Problem(
                watch.at("window"), f"{words} is not among the unit's windows", f"write one of {allowed}"
            )
        yield from _limits(watch)
    yield from _watch_names(draft)


def _limits(watch: Entry) -> Iterator[Problem]:
    """At least one limit, low below high, and a deadband smaller than the room between."""
    low, high, deadband = watch.get("low"), watch.get("high"), watch.get("deadband")
    if low is None and high is None:
        yield Problem(watch.place, "has neither low nor high", "write low = ... or high = ...")
    if low is None or high is None:
        return
    if low >= high:
        yield Problem(
            watch.at("low"), f"{low:g} is not below high = {high:g}", "write the lower limit as low"
        )
    elif deadband is not None and deadband >= high - low:
        what = f"{deadband:g} is not smaller than the band of {high - low:g}"
        yield Problem(watch.at("deadband"), what, "write a smaller deadband or wider limits")


def watch_name(watch: Entry) -> str | None:
    """Give the name of a watch: as written, else figure and window.

    Parameters
    ----------
    watch : Entry
        A watch.

    Returns
    -------
    str or None
        None when neither could be read.
    """
    if watch.get("name"):
        return str(watch.get("name"))
    if watch.get("figure") and watch.get("window"):
        return f"{watch.get('figure')} {quantities.duration_words(watch.get('window'))}"
    return None


def _watch_names(draft: Draft) -> Iterator[Problem]:
    """Names of watches are unique, those made from figure and window too."""
    seen: set[str] = set()
    for watch in draft.many["watch"]:
        name = watch_name(watch)
        if name in seen:
            yield Problem(
                watch.at("name"), f"'{name}' is the name of two watches", 'write name = "..." for one'
            )
        seen |= {name} if name else set()


RULES: tuple[Callable[[Draft], Iterator[Problem]], ...] = (
    time_fits,
    roles_are_declared,
    key_element_is_carried,
    names_are_unique,
    streams_hold_species,
    what_enters_can_leave,
    keys_go_with_the_kind,
    readings_come_from_somewhere,
    units_fit,
    instruments_name_what_is_there,
    compositions_state_their_basis,
    uncertainties_are_stated,
    shared_errors_have_members,
    load_limits_are_in_order,
    watches_can_be_judged,
)
