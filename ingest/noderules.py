"""What has to hold between the nodes of a unit and its streams; each rule yields the faults it finds.

A rule looks only at values that passed the table of keys, so that one fault is told once. A unit without
nodes is one node that reacts, and its streams state a direction.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

from ingest.draft import Draft, direction_of, undeclared
from ingest.entries import Entry, missing
from ingest.errors import Problem
from ingest.keys import rows

ENDS = ("from", "to")
Joins = set[tuple[str, str]]  # (node, node that a stream goes on to)


def all_read(draft: Draft) -> bool:
    """Tell whether every stream's way and species could be read, so that absence means something.

    Parameters
    ----------
    draft : Draft
        The file.

    Returns
    -------
    bool
        False also where there is no stream, or one names no node that can be told apart from its other end.
    """
    streams, known = draft.many["stream"], (None, *draft.names("node"))
    return bool(streams) and all(
        direction_of(entry)
        and entry.get("species")
        and all(entry.get(end) in known for end in ENDS)
        and (entry.get("to") is None or entry.get("from") != entry.get("to"))
        for entry in streams
    )


def _streams_say_where_they_go(draft: Draft) -> Iterator[Problem]:
    """A stream names its nodes where the unit has some, else its direction."""
    for stream in draft.many["stream"]:
        if draft.many["node"]:
            yield from _names_its_nodes(stream, draft.names("node"))
        else:
            yield from _states_its_direction(stream)


def _states_its_direction(stream: Entry) -> Iterator[Problem]:
    """Without nodes a stream has a direction and nothing that goes with nodes."""
    ends = [end for end in ENDS if end in stream.values]
    for end in ends:
        remedy = f'write a section [[node]] with name = "{stream.get(end)}", or direction instead of {end}'
        yield Problem(stream.at(end), "names a node, and the file declares none", remedy)
    if stream.lacks("direction") and not ends:
        yield missing(rows("stream")["direction"], stream.at("direction"))
    if "role" in stream.values:
        yield Problem(stream.at("role"), "does not go without nodes", "remove it, or write sections [[node]]")


def _names_its_nodes(stream: Entry, nodes: list[str]) -> Iterator[Problem]:
    """With nodes a stream comes from one or goes to one, or joins two."""
    if "direction" in stream.values:
        remedy = "remove it; from and to say where the stream goes"
        yield Problem(stream.at("direction"), "does not go with nodes", remedy)
    if all(stream.lacks(end) for end in ENDS):
        remedy = f'write to = "{nodes[0]}" or from = "{nodes[0]}"' if nodes else "write from or to"
        yield Problem(stream.place, "has neither from nor to", remedy)
    for end in ENDS:
        yield from undeclared(stream, end, filter(None, [stream.get(end)]), nodes, "declared node")
    if stream.get("to") is not None and stream.get("from") == stream.get("to"):
        remedy = "name the other node, or leave out the end that lies outside"
        yield Problem(stream.at("to"), f"goes from '{stream.get('to')}' to itself", remedy)


def _nodes_are_joined(draft: Draft) -> Iterator[Problem]:
    """Something goes into each node and out of it, and all nodes hang together."""
    if not all_read(draft):
        return  # told by another rule
    nodes, joins = draft.names("node"), _joins(draft)
    both_ways = joins | {(there, here) for here, there in joins}
    for node in (entry for entry in draft.many["node"] if entry.get("name")):
        name = node.get("name")
        lacking = [end for end in ("to", "from") if not _at(draft, end, {name})]
        if lacking:
            what = "no stream names it" if len(lacking) == 2 else f"no stream goes {lacking[0]} it"
            remedy = " and ".join(f'{end} = "{name}"' for end in lacking)
            yield Problem(node.place, what, f"write {remedy} for a stream")
        elif name not in _ahead(both_ways, nodes[0]):
            remedy = "join them by a stream, or write a unit file for each"
            yield Problem(node.place, f"is not joined to '{nodes[0]}'", remedy)


def _some_node_reacts(draft: Draft) -> Iterator[Problem]:
    """One node at least is a reactor; it is what conversion per pass goes around."""
    nodes = draft.many["node"]
    if nodes and not any(node.get("reacts") for node in nodes) and all("reacts" in n.values for n in nodes):
        yield Problem("node", "none of them reacts", "write reacts = true for the reactor")


def _each_node_can_close(draft: Draft) -> Iterator[Problem]:
    """What enters a node can leave it and the other way round: elements where it reacts, else species."""
    if not all_read(draft) or None in draft.atoms.values():
        return
    known = draft.reacting()
    for node in draft.many["node"]:
        into, out = (_held(draft, end, {node.get("name")}) for end in ("to", "from"))
        if not into or not out or "reacts" not in node.values:
            continue  # told by another rule
        tied = (into | out) - (set(known) if node.get("reacts") else set())
        for name in sorted(tied & (into ^ out)):
            yield _one_way(node, f"'{name}'", "it", name in into)
        symbols = [{e for name in side & set(known) for e, _ in known[name]} for side in (into, out)]
        for symbol in sorted(symbols[0] ^ symbols[1]) if node.get("reacts") else ():
            yield _one_way(
                node, f"{symbol} of reacting species", f"a species with {symbol}", symbol in symbols[0]
            )


def _one_way(node: Entry, what: str, cure: str, enters: bool) -> Problem:
    """Say that something goes into a node and not out of it, or the other way round."""
    ways, end = (("into", "out of"), "from") if enters else (("out of", "into"), "to")
    remedy = f'add {cure} to the species of a stream with {end} = "{node.get("name")}"'
    return Problem(node.place, f"{what} goes {ways[0]} it and not {ways[1]} it", remedy)


def _the_reactor_has_its_reaction(draft: Draft) -> Iterator[Problem]:
    """The key reactant goes into a node that reacts and out of one, and the products come out of one."""
    reactors = {node.get("name") for node in draft.many["node"] if node.get("reacts")}
    sides = {end: _held(draft, end, reactors) for end in ("to", "from")}
    if not all_read(draft) or not all(sides.values()):
        return
    entry = draft.chemistry
    for key, end in (
        ("key_reactant", "to"),
        ("key_reactant", "from"),
        ("wanted", "from"),
        ("unwanted", "from"),
    ):
        value = entry.get(key) or ()
        for name in (value,) if isinstance(value, str) else value:
            if name in draft.atoms and name not in sides[end]:
                what = f"'{name}' is in no stream that goes {end} a node that reacts"
                yield Problem(entry.at(key), what, f"add it to the species of such a stream, or mend {key}")


def _roles_fit(draft: Draft) -> Iterator[Problem]:
    """Fresh feed comes from outside, a recycle leads back to a reactor, and one needs the other."""
    reactors = {node.get("name") for node in draft.many["node"] if node.get("reacts")}
    if not reactors or not all_read(draft):
        return
    stated = [stream for stream in draft.many["stream"] if stream.get("role")]
    for stream in stated:
        if stream.get("role") == "fresh feed" and direction_of(stream) != "in":
            yield Problem(stream.at("role"), "comes from a node", "name a stream without from as fresh feed")
        elif stream.get("role") == "recycle" and not _leads_back(draft, stream, reactors):
            what = "does not lead from behind a reactor to before it"
            yield Problem(stream.at("role"), what, "mend from and to, or remove role")
    roles = {stream.get("role") for stream in stated}
    for role, other in (("recycle", "fresh feed"), ("fresh feed", "recycle")):
        if role in roles and other not in roles and not any("role" in s.told for s in draft.many["stream"]):
            what = f"a stream is the {role} and none is the {other}"
            yield Problem("stream", what, f'write role = "{other}" for one, or remove role')


def _the_contents_are_those_of_the_outlet(draft: Draft) -> Iterator[Problem]:
    """Only a well-mixed reactor with one stream out of it has contents that its outlet tells."""
    stated, kind = draft.once["hold_up"], draft.once["unit"].get("reactor")
    if not stated.values and not stated.told:
        return
    if kind not in (None, "well-mixed"):
        what = f"a {kind} reactor does not hold what leaves it"
        yield Problem("hold_up", what, "remove the section, or mend reactor in [unit]")
    if not all_read(draft):
        return
    reactors = {node.get("name") for node in draft.many["node"] if node.get("reacts")}
    leaving = [one for one in _at(draft, "from", reactors) if one.get("to") not in reactors]
    if not draft.many["node"]:
        leaving = [one for one in draft.many["stream"] if direction_of(one) == "out"]
    if len(leaving) > 1 or len(reactors) > 1:
        what = "several streams leave what reacts, and which of them it holds is not told"
        yield Problem("hold_up", what, "remove the section, or describe the reactor alone")


def _leads_back(draft: Draft, stream: Entry, reactors: set[str]) -> bool:
    """Tell whether a stream closes a loop through a node that reacts."""
    joins, here, there = _joins(draft), stream.get("from"), stream.get("to")
    if here is None or there is None:
        return False
    return any(here in _ahead(joins, reactor) for reactor in _ahead(joins, there) & reactors)


def _at(draft: Draft, end: str, nodes: set[str]) -> list[Entry]:
    """Give the streams that have one of the nodes at one end."""
    return [entry for entry in draft.many["stream"] if entry.get(end) in nodes]


def _held(draft: Draft, end: str, nodes: set[str]) -> set[str]:
    """Give the species of the streams that have one of the nodes at one end and none at the other."""
    other = {"to": "from", "from": "to"}[end]
    streams = [entry for entry in _at(draft, end, nodes) if entry.get(other) not in nodes]
    return {name for entry in streams for name in entry.get("species") or ()}


def _joins(draft: Draft) -> Joins:
    """Give the pairs of nodes that a stream joins."""
    ends = {(entry.get("from"), entry.get("to")) for entry in draft.many["stream"]}
    return {(here, there) for here, there in ends if here is not None and there is not None}


def _ahead(joins: Joins, start: str) -> set[str]:
    """Give the nodes that can be reached from one, itself included."""
    found = {start}
    while more := {there for here, there in joins if here in found} - found:
        found |= more
    return found


RULES: tuple[Callable[[Draft], Iterator[Problem]], ...] = (
    _streams_say_where_they_go,
    _nodes_are_joined,
    _some_node_reacts,
    _each_node_can_close,
    _the_reactor_has_its_reaction,
    _roles_fit,
    _the_contents_are_those_of_the_outlet,
)
