"""A unit file as read but not yet judged: its sections as entries, with analyzers opened into instruments."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import timedelta
from typing import Any

from ingest import chemistry
from ingest.chemistry import Atoms
from ingest.entries import Entry, missing, nearest, read_table
from ingest.errors import OutletError, Problem
from ingest.keys import rows

ONCE: tuple[str, ...] = ("unit", "chemistry", "operating", "catalyst", "healthy", "hold_up")
ONCE += ("budget", "guarantee", "prices", "exports")
MANY = ("node", "stream", "instrument", "analyzer", "shared", "event", "watch", "notify")
# Sums are called so; a species of that name could not be told from them.
RESERVED = ("all unwanted", "unseen")
# What is said of an analyzer as a whole, not of each of its channels.
OF_ANALYZER = ("name", "channel", "status", "certificate", "sum_band", "air_ingress")
_NEEDED = ("unit", "chemistry", "stream")
_BY_FIGURE = ("budget", "guarantee")  # their keys are names of figures


@dataclass(slots=True)
class Draft:
    """The sections of one unit file; one that is not there is an entry without values, or an empty list.

    `atoms` holds the composition of each declared species, None where its formula was refused; `votes` what
    stands beside the load in the operating section.
    """

    once: dict[str, Entry]
    many: dict[str, list[Entry]]
    atoms: dict[str, Atoms | None] = field(default_factory=dict)
    votes: list[Entry] = field(default_factory=list)

    @property
    def chemistry(self) -> Entry:
        """Give the chemistry section."""
        return self.once["chemistry"]

    def names(self, section: str) -> list[str]:
        """List the stated names of a repeated section.

        Parameters
        ----------
        section : str
            One of `MANY`.
        """
        return [entry.values["name"] for entry in self.many[section] if entry.get("name")]

    def find(self, section: str, name: object) -> Entry | None:
        """Give the first entry of that name, or None.

        Parameters
        ----------
        section : str
            One of `MANY`.
        name : object
            What was written where a name belongs; None finds nothing.
        """
        return next((entry for entry in self.many[section] if name and entry.get("name") == name), None)

    def waters(self, species: Sequence[str]) -> tuple[str, ...]:
        """Give those of the species whose formula is that of water.

        Parameters
        ----------
        species : sequence of str
            Names of species.
        """
        water = chemistry.atoms("H2O")
        return tuple(name for name in species if self.atoms.get(name) == water)

    def reacting(self) -> dict[str, Atoms]:
        """Give the composition of every species that is not inert and whose formula could be read."""
        inert = self.chemistry.get("inert") or ()
        return {name: atoms for name, atoms in self.atoms.items() if atoms and name not in inert}


def read(document: Mapping[str, Any]) -> tuple[Draft, list[Problem]]:
    """Read every section of a parsed unit file.

    Parameters
    ----------
    document : mapping
        What the TOML parser gave.

    Returns
    -------
    Draft
        Only what passed the table of keys.
    list of Problem
        What did not.
    """
    sections = (*ONCE, *MANY)
    problems = [
        Problem(key, "unknown section", nearest(key, sections)) for key in document if key not in sections
    ]
    problems += [
        Problem(section, "missing", f"write a section {_heading(section)}")
        for section in _NEEDED
        if section not in document
    ]
    draft = Draft({section: Entry(section) for section in ONCE}, {section: [] for section in MANY})
    for section in (section for section in sections if section in document):
        problems += _read_section(section, document[section], draft)
    if not draft.many["instrument"] and not problems:
        problems.append(Problem("instrument", "missing", "write a section [[instrument]] or [[analyzer]]"))
    return draft, problems + _read_formulas(draft)


def _heading(section: str) -> str:
    """Write the heading as TOML wants it."""
    return f"[[{section}]]" if section in MANY else f"[{section}]"


def _read_section(section: str, content: object, draft: Draft) -> list[Problem]:
    """Read one section into the draft; a repeated one entry by entry, named where it has a name."""
    if isinstance(content, list) is not (section in MANY):
        return [Problem(section, "wrong kind of heading", f"write {_heading(section)}")]
    if section in _BY_FIGURE:
        return _read_figures(section, content, draft)
    if not isinstance(content, list):
        draft.once[section], problems = read_table(section, content, section)
        return problems + (_open_votes(draft) if section == "operating" else [])
    problems = []
    for number, table in enumerate(content, start=1):
        name = table.get("name") if isinstance(table, Mapping) else None
        place = f"{section}[{name if isinstance(name, str) and name else number}]"
        entry, faults = read_table(section, table, place)
        draft.many[section].append(entry)
        problems += faults
        if section == "analyzer":
            problems += _open_channels(entry, draft)
    return problems


def _read_figures(section: str, content: object, draft: Draft) -> list[Problem]:
    """Read a section whose keys are names of figures, as one table of numbers."""
    draft.once[section], problems = read_table(section, {"figure": content}, section)
    remedy = 'write for example "yield on feed" = 82.0'
    return [replace(problem, where=section, remedy=remedy) for problem in problems]


def _open_channels(analyzer: Entry, draft: Draft) -> list[Problem]:
    """Make an instrument of each channel: the analyzer's keys, overridden by the channel's own."""
    problems = []
    for species, content in (analyzer.get("channel") or {}).items():
        place = f"{analyzer.place}.channel.{species}"
        table = {"tag": content} if isinstance(content, str) else content
        own, faults = read_table("analyzer.channel", table, place)
        channel = _channel(analyzer, own, species)
        draft.many["instrument"].append(channel)
        if channel.lacks("unit"):
            faults.append(missing(rows("analyzer")["unit"], channel.at("unit")))
        problems += faults
    if analyzer.get("status"):
        draft.many["instrument"].append(_status(analyzer))
    return problems


def _open_votes(draft: Draft) -> list[Problem]:
    """Read each vote of the operating section, named by its instrument where it states one."""
    section, problems = "operating.vote", []
    for number, table in enumerate(draft.once["operating"].get("vote") or (), start=1):
        name = table.get("instrument") if isinstance(table, Mapping) else None
        place = f"{section}[{name if isinstance(name, str) and name else number}]"
        entry, faults = read_table(section, table, place)
        draft.votes += [entry] if isinstance(table, Mapping) else []
        problems += faults
    return problems


def _status(analyzer: Entry) -> Entry:
    """Make a signal of the status of an analyzer, so that its tag is read and screened like any other."""
    stated = analyzer.get("status")
    values = {"kind": "signal", "unit": "-", "sampling": "held", "tag": stated["tag"]}
    # It holds from its stamp on: a cycle would move it, and a status has none.
    values |= {"max_age": stated["max_age"], "cycle": timedelta(seconds=1)}
    if name := analyzer.get("name"):
        values["name"] = f"{name} status"
    return Entry(f"{analyzer.place}.status", values)


def _channel(analyzer: Entry, own: Entry, species: str) -> Entry:
    """Join what an analyzer says of all its channels and what one channel says of itself."""
    inherited = {key: value for key, value in analyzer.values.items() if key not in OF_ANALYZER}
    values = {"dead_time": timedelta(0), "species": (species,), **inherited, **own.values}
    if name := analyzer.get("name"):
        values |= {"name": f"{name} {species}", "analyzer": name}
    stated = own.values.keys() | own.told
    places = {key: analyzer.at(key) for key in rows("analyzer") if key not in stated | {*OF_ANALYZER}}
    return Entry(own.place, values, places, (analyzer.told - own.values.keys()) | own.told)


def _read_formulas(draft: Draft) -> list[Problem]:
    """Read the formula of every species."""
    problems = []
    for name, formula in (draft.chemistry.get("species") or {}).items():
        place = f"chemistry.species.{name}"
        draft.atoms[name] = None
        if name in RESERVED:
            problems.append(Problem(place, "is what the program calls a sum", "choose another name"))
        if not isinstance(formula, str):
            problems.append(
                Problem(place, f"{formula!r} is not a formula in quotes", 'write it as water = "H2O"')
            )
            continue
        try:
            draft.atoms[name] = chemistry.atoms(formula)
        except OutletError as error:
            problems.append(Problem(place, error.what, error.remedy))
    return problems


def direction_of(stream: Entry) -> str | None:
    """Give where a stream goes, seen from the envelope.

    Parameters
    ----------
    stream : Entry
        A stream.

    Returns
    -------
    str or None
        'in', 'out' or 'inner' by its nodes, else as stated; None where that could not be read.
    """
    if stream.told & {"from", "to"}:
        return None
    joins = stream.get("from") is not None, stream.get("to") is not None
    by_nodes: dict[tuple[bool, bool], str] = {
        (False, True): "in",
        (True, False): "out",
        (True, True): "inner",
    }
    stated: str | None = stream.get("direction")
    return by_nodes.get(joins, stated)


def undeclared(
    entry: Entry, key: str, names: Iterable[str], allowed: Iterable[str], noun: str
) -> Iterator[Problem]:
    """Yield a fault for each name that is not among the declared ones.

    Parameters
    ----------
    entry : Entry
        Where the names are written.
    key : str
        Under which key.
    names : iterable of str
        What is written there.
    allowed : iterable of str
        What is declared.
    noun : str
        What the names should be, for the message.
    """
    known = list(allowed)
    for name in names:
        if name not in known:
            yield Problem(entry.at(key), f"'{name}' is no {noun}", nearest(name, known))


def twice(entries: Iterable[Entry], key: str, remedy: str) -> Iterator[Problem]:
    """Yield a fault for each value of a key that more than one entry has.

    Parameters
    ----------
    entries : iterable of Entry
        One section, or several.
    key : str
        The key that has to differ.
    remedy : str
        What to write instead.
    """
    stated = [(entry.get(key), entry) for entry in entries if entry.get(key) is not None]
    first: dict[str, Entry] = {}
    for value, entry in stated:
        if value in first:
            yield Problem(entry.at(key), f"'{value}' already belongs to {first[value].place}", remedy)
        first.setdefault(value, entry)
