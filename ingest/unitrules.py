"""What has to hold between the sections of a unit file; each rule yields the faults it finds.

A rule looks only at values that passed the table of keys, so that one fault is told once.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from datetime import timedelta

from ingest import analyzerrules, chemistry, instrumentrules, noderules, notifyrules, quantities, watchrules
from ingest.draft import Draft, direction_of, twice, undeclared
from ingest.entries import Entry, nearest
from ingest.errors import Problem
from ingest.unit import AUXILIARY_KINDS

HOUR = timedelta(hours=1)
DAY = timedelta(days=1)
LEAST_HEALTHY = timedelta(days=10)
VOTE_LIMITS = (("down_below", "running_above"), ("down_above", "running_below"))


def _names_are_unique(draft: Draft) -> Iterator[Problem]:
    """Names are unique in their section, and every tag belongs to one instrument."""
    for section in ("node", "stream", "instrument", "analyzer", "shared"):
        yield from twice(draft.many[section], "name", "give each its own name")
    yield from twice(draft.many["instrument"], "tag", "give each instrument its own tag")


def _time_fits(draft: Draft) -> Iterator[Problem]:
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
        return  # windows are judged by a cell that can stand
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


def _roles_are_declared(draft: Draft) -> Iterator[Problem]:
    """Key reactant, wanted, unwanted and inert are declared species, and each has one role."""
    entry = draft.chemistry
    roles: dict[str, str] = {}
    for key in ("key_reactant", "wanted", "unwanted", "inert"):
        value = entry.get(key) or ()
        names = (value,) if isinstance(value, str) else value
        yield from undeclared(entry, key, names, draft.atoms, "declared species")
        for name in names:
            if name in roles:
                yield Problem(entry.at(key), f"'{name}' is also {roles[name]}", "give each species one role")
            roles.setdefault(name, key)


def _key_element_is_carried(draft: Draft) -> Iterator[Problem]:
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


def _streams_hold_species(draft: Draft) -> Iterator[Problem]:
    """Streams hold declared species, some go in and some go out, and no species is left without a stream."""
    streams = draft.many["stream"]
    for entry in streams:
        yield from undeclared(entry, "species", entry.get("species") or (), draft.atoms, "declared species")
        if entry.get("species") == ():
            yield Problem(entry.at("species"), "holds no species", "name every species the stream may hold")
    remedies = {"in": 'write direction = "in" for one', "out": 'write direction = "out" for one'}
    if draft.many["node"]:
        remedies = {"in": "write to without from for one", "out": "write from without to for one"}
    for direction, remedy in remedies.items():
        if streams and not any(direction_of(entry) in (direction, None) for entry in streams):
            yield Problem("stream", f"no stream goes {direction}", remedy)
    held = {name for entry in streams for name in entry.get("species") or ()}
    for name in draft.atoms:
        if noderules.all_read(draft) and name not in held:
            yield Problem(f"chemistry.species.{name}", "is in no stream", "add it to a stream or remove it")


def _carried(draft: Draft, direction: str) -> set[str]:
    """Give the species that streams of one direction hold."""
    streams = [entry for entry in draft.many["stream"] if direction_of(entry) == direction]
    return {name for entry in streams for name in entry.get("species") or ()}


def _what_enters_can_leave(draft: Draft) -> Iterator[Problem]:
    """Products leave, the key reactant enters and leaves, inerts and every element do both.

    Behind a separator the key reactant may all be recycled; the reactor is then judged by itself.
    """
    sides = {"in": _carried(draft, "in"), "out": _carried(draft, "out")}
    if not noderules.all_read(draft) or not all(sides.values()):
        return  # told by another rule
    entry = draft.chemistry
    wants = [
        ("key_reactant", "in"),
        ("wanted", "out"),
        ("unwanted", "out"),
        ("inert", "in"),
        ("inert", "out"),
    ]
    wants += [] if draft.many["node"] else [("key_reactant", "out")]
    for key, side in wants:
        value = entry.get(key) or ()
        for name in (value,) if isinstance(value, str) else value:
            if name in draft.atoms and name not in sides[side]:
                what = f"'{name}' is in no stream that goes {side}"
                yield Problem(
                    entry.at(key), what, f"add it to the species of a stream that goes {side}, or mend {key}"
                )
    known = draft.reacting()
    elements = {side: {e for n in names if n in known for e, _ in known[n]} for side, names in sides.items()}
    for side, other in (("in", "out"), ("out", "in")) if None not in draft.atoms.values() else ():
        for symbol in sorted(elements[side] - elements[other]):
            what = f"reacting species hold {symbol} only in streams that go {side}"
            yield Problem("stream", what, f"add a species with {symbol} to a stream that goes {other}")


def _instruments_hold(draft: Draft) -> Iterator[Problem]:
    """Every rule about one instrument holds for each of them."""
    for entry in draft.many["instrument"]:
        for rule in instrumentrules.RULES:
            yield from rule(entry, draft)


def _shared_errors_have_members(draft: Draft) -> Iterator[Problem]:
    """A shared error names an analyzer or at least two instruments, each of which enters the balance."""
    balance = [e for e in draft.many["instrument"] if e.get("kind") not in (None, *AUXILIARY_KINDS)]
    members = [entry.values["name"] for entry in balance if entry.get("name")]
    for entry in draft.many["shared"]:
        names, analyzer = entry.get("instruments"), entry.get("analyzer")
        if entry.lacks("instruments") is entry.lacks("analyzer"):
            what = "needs either instruments or analyzer"
            yield Problem(entry.place, what, 'write instruments = ["...", "..."] or analyzer = "..."')
            continue
        noun = "instrument that enters the balance"
        yield from undeclared(entry, "instruments", names or (), members, noun)
        asked = [analyzer] if analyzer else []
        yield from undeclared(entry, "analyzer", asked, draft.names("analyzer"), "declared analyzer")
        if names is not None and len(names) < 2:
            what = "an error shared by fewer than two instruments"
            yield Problem(entry.at("instruments"), what, "name at least two, or put it under systematic")


def _load_limits_are_in_order(draft: Draft) -> Iterator[Problem]:
    """The load is read from a tag, and its limits leave room between down and back."""
    entry = draft.once["operating"]
    load, down = entry.get("load"), entry.get("down_below")
    known = [e.get("name") for e in draft.many["instrument"] if e.get("name") and e.get("value") is None]
    yield from undeclared(entry, "load", [load] if load else [], known, "instrument with a tag")
    if down is None:
        return
    above, turned = entry.get("running_above"), entry.get("turned_down_below")
    if above is not None and above <= down:
        what = f"{above:g} is not above down_below = {down:g}"
        yield Problem(entry.at("running_above"), what, "write a higher load")
    if turned is not None and turned <= down:
        what = f"{turned:g} is not above down_below = {down:g}"
        yield Problem(entry.at("turned_down_below"), what, "write a higher load, or leave it out")


def _votes_can_be_cast(draft: Draft) -> Iterator[Problem]:
    """A vote names an instrument with a tag, each another than the load, and has one pair of limits."""
    load = Entry("operating.load", {"instrument": draft.once["operating"].get("load")})
    known = [e.get("name") for e in draft.many["instrument"] if e.get("name") and e.get("value") is None]
    yield from twice(
        [load, *draft.votes], "instrument", "give each signal one vote; the load has one already"
    )
    for entry in draft.votes:
        asked = [entry.get("instrument")] if entry.get("instrument") else []
        yield from undeclared(entry, "instrument", asked, known, "instrument with a tag")
        yield from _vote_limits(entry)


def _vote_limits(vote: Entry) -> Iterator[Problem]:
    """One pair of limits, both of it, with room between down and running."""
    stated = [pair for pair in VOTE_LIMITS if not all(vote.lacks(key) for key in pair)]
    if len(stated) != 1:
        what = "has limits on both sides" if stated else "has no limits"
        remedy = "write down_below and running_above, or down_above and running_below"
        yield Problem(vote.place, what, remedy)
        return
    [pair] = stated
    for lacking, other in (pair, pair[::-1]):
        if vote.lacks(lacking):
            yield Problem(vote.at(lacking), f"missing beside {other}", f"write {lacking} = ... too")
    down, running = (vote.get(key) for key in pair)
    side = pair[1].removeprefix("running_")
    if None not in (down, running) and (running <= down if side == "above" else running >= down):
        what = f"{running:g} is not {side} {pair[0]} = {down:g}"
        yield Problem(vote.at(pair[1]), what, "leave room between the two, so that noise does not flip it")


def _healthy_can_be_fitted(draft: Draft) -> Iterator[Problem]:
    """The healthy period ends after it begins, and names instruments with a tag."""
    entry = draft.once["healthy"]
    known = [e.get("name") for e in draft.many["instrument"] if e.get("name") and e.get("value") is None]
    named = entry.get("operating_point") or ()
    yield from undeclared(entry, "operating_point", named, known, "instrument with a tag")
    first, last = entry.get("from"), entry.get("to")
    if None not in (first, last) and last <= first:
        yield Problem(entry.at("to"), f"{last.isoformat()} is not after from", "write a later moment")
    elif None not in (first, last) and last - first < LEAST_HEALTHY:
        words = f"{(last - first) / DAY:.1f} days are too few to learn from"
        yield Problem(entry.at("to"), words, "write at least 10 days; 30 are better, and 60 best")


def _events_name_instruments(draft: Draft) -> Iterator[Problem]:
    """Only a calibration names an instrument or an analyzer, one that is declared."""
    known = (*draft.names("instrument"), *draft.names("analyzer"))
    for entry in draft.many["event"]:
        named, kind = entry.get("instrument"), entry.get("kind")
        asked = [named] if named else []
        yield from undeclared(entry, "instrument", asked, known, "declared instrument or analyzer")
        if named and kind not in (None, "calibration"):
            what = f"a {kind} concerns no single instrument"
            yield Problem(entry.at("instrument"), what, 'write kind = "calibration", or leave it out')


def _targets_name_figures(draft: Draft) -> Iterator[Problem]:
    """Budget and guarantee name figures of the unit."""
    known = watchrules.figure_names(draft)
    for section in ("budget", "guarantee"):
        for name in draft.once[section].get("figure") or ():
            if name not in known:
                yield Problem(
                    f"{section}.{name}", f"'{name}' is no figure of this unit", nearest(name, known)
                )


RULES: tuple[Callable[[Draft], Iterator[Problem]], ...] = (
    _time_fits,
    _roles_are_declared,
    _key_element_is_carried,
    _names_are_unique,
    *noderules.RULES,
    _streams_hold_species,
    _what_enters_can_leave,
    _instruments_hold,
    analyzerrules.hold,
    analyzerrules.words_have_one_meaning,
    _shared_errors_have_members,
    _load_limits_are_in_order,
    _votes_can_be_cast,
    _healthy_can_be_fitted,
    _events_name_instruments,
    watchrules.hold,
    notifyrules.hold,
    _targets_name_figures,
)
