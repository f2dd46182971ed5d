"""What all units of a site together ask of an export: tags, how it is read, and in which units."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

from ingest import database
from ingest.archive import SITE
from ingest.errors import StoreError
from ingest.measures import Stated, stated_units
from ingest.records import Export
from ingest.unit import ExportRules, Unit


@dataclass(frozen=True, slots=True)
class Asked:
    """What all units of a site together ask of an export; the rules name the time zone."""

    tags: frozenset[str]
    rules: ExportRules
    units: Mapping[str, tuple[Stated, ...]]

    def entry(self, tags: Iterable[str]) -> dict[str, Any]:
        """Give what the ledger keeps of it: with another one an export that was set aside is tried again.

        Parameters
        ----------
        tags : iterable of str
            Those asked of the export.

        Returns
        -------
        dict
            What JSON knows.
        """
        rules = {**asdict(self.rules), "missing_words": list(self.rules.missing_words)}
        rules["state_words"] = [list(pair) for pair in self.rules.state_words]
        units = {tag: [one.unit for one in self.units.get(tag, ())] for tag in sorted(tags)}
        return {"tags": sorted(tags), "rules": rules, "units": units, "program": database.program_version()}

    def converted_otherwise(self, export: Export) -> bool:
        """Tell whether an export was converted to a unit that is not stated any more.

        Parameters
        ----------
        export : Export
            Taken in at some time.
        """
        converted = export.account.get("converted", ())
        return any(unit != one.unit for tag, _, unit in converted for one in self.units.get(tag, ()))


def asked_by(units: Sequence[Unit]) -> Asked:
    """Put together what the units of a site ask; an export can be read in one way only.

    Parameters
    ----------
    units : sequence of Unit
        All units of the site.

    Returns
    -------
    Asked

    Raises
    ------
    StoreError
        What they say under [exports] does not agree.
    """
    said = {
        unit.key: replace(unit.exports, time_zone=unit.exports.time_zone or unit.time_zone) for unit in units
    }
    first, *others = said
    for other in others:
        one, two = asdict(said[first]), asdict(said[other])
        for key in (key for key in one if one[key] != two[key]):
            raise StoreError(
                f"units {first} and {other}: exports.{key} is {_said(one[key])} in {first}"
                f" but {_said(two[key])} in {other}",
                remedy="One store reads an export one way: make them agree, or use two stores.",
            )
    if SITE in said:
        raise StoreError(
            f"unit {SITE}: the store keeps its archive by that name", remedy="Rename the unit file."
        )
    return Asked(frozenset().union(*(tags_of(unit) for unit in units)), said[first], stated_units(units))


def _said(value: str | tuple[str, ...] | None) -> str:
    """What a unit file says under a key, in words."""
    if not value:
        return "not stated"
    return repr(value) if isinstance(value, str) else ", ".join(map(repr, value))


def tags_of(unit: Unit) -> frozenset[str]:
    """Give the tags that a unit asks for.

    Parameters
    ----------
    unit : Unit

    Returns
    -------
    frozenset of str
    """
    return frozenset(instrument.tag for instrument in unit.instruments if instrument.tag is not None)
