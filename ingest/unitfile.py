"""A unit file (TOML) becomes a Unit, or one error that lists all its faults."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping
from datetime import timedelta
from pathlib import Path
from typing import Any

from ingest import (
    analyzerrules,
    chemistry,
    draft,
    instrumentrules,
    notifyrules,
    quantities,
    unitrules,
    watchrules,
)
from ingest import keys as table
from ingest.draft import Draft
from ingest.entries import Entry
from ingest.errors import Problem, UnitFileError
from ingest.keys import Key
from ingest.unit import (
    Analyzer,
    Event,
    ExportRules,
    Healthy,
    HoldUp,
    Instrument,
    Node,
    Operating,
    Prices,
    SharedError,
    Species,
    Stream,
    Uncertainty,
    Unit,
    Vote,
    Watch,
)

_STEM = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]*")


def load(path: Path | str) -> Unit:
    """Read and judge a unit file; what comes back can be relied on.

    Parameters
    ----------
    path : Path or str
        The TOML file; its stem becomes the key of the unit.

    Returns
    -------
    Unit
        Frozen; times as timedelta, relative uncertainties as fractions.

    Raises
    ------
    UnitFileError
        With every fault found, each with its key and what to write.
    """
    file = Path(path)
    document = parse(file)
    read, problems = draft.read(document)
    if not _STEM.fullmatch(file.stem):
        problems.insert(
            0, Problem("file name", f"'{file.stem}' cannot name a unit", "use letters, digits, - and _")
        )
    for rule in unitrules.RULES:
        problems += rule(read)
    if problems:
        raise UnitFileError(str(path), list(dict.fromkeys(problems)))
    return _build(read, file)


def keys() -> tuple[Key, ...]:
    """Give the table of keys: every key a unit file may hold, with its sentence.

    Returns
    -------
    tuple of Key
        In the order of the sections.
    """
    return table.TABLE


def parse(file: Path) -> dict[str, Any]:
    """Read the TOML text; an unreadable file is one fault of its own.

    Parameters
    ----------
    file : Path
        UTF-8, with or without a byte order mark.

    Returns
    -------
    dict
        What the file holds, not judged.

    Raises
    ------
    UnitFileError
        Not there, not UTF-8, or not TOML.
    """
    try:
        return tomllib.loads(file.read_bytes().decode("utf-8-sig"))
    except OSError as error:
        fault = Problem("file", f"cannot be read ({error.strerror})", "check its name and folder")
    except UnicodeDecodeError as error:
        fault = Problem("file", f"is not UTF-8 text (byte {error.start + 1})", "save it as UTF-8")
    except tomllib.TOMLDecodeError as error:
        fault = Problem("file", f"is not TOML: {error}", "mend that line; texts stand in quotes")
    raise UnitFileError(str(file), [fault])


def _build(read: Draft, file: Path) -> Unit:
    """Make the Unit from a draft without faults."""
    unit, chemical, exports = read.once["unit"], read.chemistry, read.once["exports"]
    return Unit(
        key=file.stem,
        name=unit.get("name"),
        time_zone=unit.get("time_zone"),
        cell=unit.get("cell"),
        reactor=unit.get("reactor"),
        species=tuple(_species(name, read) for name in read.atoms),
        key_reactant=chemical.get("key_reactant"),
        wanted=chemical.get("wanted"),
        unwanted=chemical.get("unwanted"),
        key_element=chemical.get("key_element"),
        streams=tuple(
            Stream(
                e.get("name"),
                draft.direction_of(e) or "",
                e.get("species"),
                source=e.get("from"),
                target=e.get("to"),
                role=e.get("role"),
            )
            for e in read.many["stream"]
        ),
        instruments=tuple(_instrument(entry, read) for entry in read.many["instrument"]),
        shared=tuple(_shared(entry, read) for entry in read.many["shared"]),
        analyzers=tuple(_analyzer(entry, read) for entry in read.many["analyzer"]),
        operating=_operating(read),
        catalyst_charged=read.once["catalyst"].get("charged"),
        watches=tuple(_watch(entry) for entry in read.many["watch"]),
        windows=tuple(sorted(unit.get("windows"))),
        least_coverage=unit.get("least_coverage"),
        shift_starts=unit.get("shift_starts"),
        exports=ExportRules(
            time_zone=exports.get("time_zone"),
            missing_words=exports.get("missing_words") or (),
            state_words=tuple((exports.get("state_words") or {}).items()),
            quality=exports.get("quality"),
            date_order=exports.get("date_order"),
            decimal=exports.get("decimal"),
            day_numbers=exports.get("day_numbers"),
        ),
        hold_up=_hold_up(read.once["hold_up"]),
        healthy=_healthy(read.once["healthy"]),
        prices=_prices(read.once["prices"]),
        budget=tuple((read.once["budget"].get("figure") or {}).items()),
        guarantee=tuple((read.once["guarantee"].get("figure") or {}).items()),
        events=tuple(sorted((_event(entry) for entry in read.many["event"]), key=lambda event: event.at)),
        nodes=tuple(Node(e.get("name"), e.get("reacts")) for e in read.many["node"]),
        targets=tuple(notifyrules.target(entry, file.parent) for entry in read.many["notify"]),
    )


def _species(name: str, read: Draft) -> Species:
    """Make one species with its atoms and molar mass."""
    atoms = read.atoms[name] or ()
    formula = read.chemistry.get("species")[name]
    inert = name in read.chemistry.get("inert")
    return Species(name, formula, atoms, chemistry.molar_mass_kg_kmol(atoms), inert)


def _instrument(entry: Entry, read: Draft) -> Instrument:
    """Make one instrument; a declared value takes the cell as its timing, since it has none of its own."""
    scale = instrumentrules.scale_of(entry, read)
    cell = read.once["unit"].get("cell")
    low, high = entry.get("range") or (-math.inf, math.inf)
    return Instrument(
        name=entry.get("name"),
        kind=instrumentrules.base_kind(entry.get("kind")),
        tag=entry.get("tag"),
        value=entry.get("value"),
        unit=entry.get("unit"),
        to_base=scale.to_base,
        offset=scale.offset,
        stream=entry.get("stream"),
        per_stream=entry.get("per_stream"),
        species=entry.get("species") or (),
        left_out=instrumentrules.left_out(entry, read),
        random=_uncertainty(entry.get("random")),
        systematic=_uncertainty(entry.get("systematic")),
        low=low,
        high=high,
        cycle=entry.get("cycle") or cell,
        dead_time=entry.get("dead_time") or timedelta(0),
        max_age=entry.get("max_age") or cell,
        sampling=entry.get("sampling") or "held",
        analyzer=entry.get("analyzer"),
        pressure=entry.get("pressure"),
        temperature=entry.get("temperature"),
        largest_step=entry.get("largest_step"),
        longest_repeat=entry.get("longest_repeat"),
        design_molar_mass_kg_kmol=entry.get("design_molar_mass"),
        design_kmol_m3=quantities.design_kmol_m3(design) if (design := entry.get("design")) else None,
    )


def _uncertainty(stated: Mapping[str, float] | None) -> Uncertainty:
    """Turn percent into a fraction; only auxiliaries outside the balance may state nothing."""
    part = stated or {}
    return Uncertainty(part.get("relative_pct", 0.0) / 100.0, part.get("floor", 0.0))


def _analyzer(entry: Entry, read: Draft) -> Analyzer:
    """Make what is stated of an analyzer as a whole; its channels go by the names of their instruments."""
    name, status = entry.get("name"), entry.get("status") or {}
    certificate = dict(entry.get("certificate") or {})
    tolerance = certificate.pop("tolerance_pct", 0.0) / 100.0
    bands = entry.get("air_ingress") or {}
    return Analyzer(
        name=name,
        status=f"{name} status" if status else None,
        calibrating=tuple(
            analyzerrules.number_of(state, read) or 0.0 for state in status.get("calibrating", ())
        ),
        settle=status.get("settle", timedelta(0)),
        certificate=tuple((f"{name} {channel}", reading) for channel, reading in certificate.items()),
        tolerance=tolerance,
        sum_band=entry.get("sum_band"),
        air=tuple((f"{name} {gas}", *bands[gas]) for gas in analyzerrules.gases_of_air(entry, read)),
    )


def _shared(entry: Entry, read: Draft) -> SharedError:
    """Make one shared error; an analyzer stands for all its channels."""
    channels = [e.get("name") for e in read.many["instrument"] if e.get("analyzer") == entry.get("analyzer")]
    members = entry.get("instruments") or tuple(channels)
    return SharedError(entry.get("name"), members, entry.get("relative_pct") / 100.0)


def _operating(read: Draft) -> Operating | None:
    """Make the operating rules, or None when the section is not there."""
    entry = read.once["operating"]
    if not entry.values:
        return None
    down, turned = entry.get("down_below"), entry.get("turned_down_below")
    return Operating(
        load=entry.get("load"),
        down_below=down,
        running_above=entry.get("running_above"),
        turned_down_below=down if turned is None else turned,
        starting_for=entry.get("starting_for"),
        votes=tuple(_vote(vote) for vote in read.votes),
    )


def _vote(entry: Entry) -> Vote:
    """Make one vote by the pair of limits it states."""
    [pair] = (pair for pair in unitrules.VOTE_LIMITS if not entry.lacks(pair[0]))
    return Vote(entry.get("instrument"), *(entry.get(key) for key in pair))


def _hold_up(entry: Entry) -> HoldUp | None:
    """Make the hold-up, or None when the section is not there."""
    if not entry.values:
        return None
    return HoldUp(entry.get("total_kmol"), entry.get("relative_pct") / 100.0)


def _healthy(entry: Entry) -> Healthy | None:
    """Make the healthy period, or None when the section is not there."""
    if entry.get("from") is None:
        return None
    return Healthy(entry.get("from"), entry.get("to"), entry.get("operating_point"))


def _prices(entry: Entry) -> Prices | None:
    """Make the prices, or None when the section is not there."""
    if not entry.values:
        return None
    return Prices(**{key: entry.get(key) for key in table.rows("prices")})


def _event(entry: Entry) -> Event:
    """Make one event."""
    return Event(**{key: entry.get(key) for key in ("at", "kind", "name", "instrument")})


def _watch(entry: Entry) -> Watch:
    """Make one watch under its own or its made name."""
    values = {key: entry.get(key) for key in table.rows("watch")}
    counted = {key: round(values[key]) for key in ("count", "among")}
    return Watch(**{**values, **counted, "name": watchrules.watch_name(entry) or ""})
