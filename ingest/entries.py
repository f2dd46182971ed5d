"""How a TOML table is read against the rows of the table of keys: values that passed, and every fault."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from datetime import datetime, time, timedelta
from difflib import get_close_matches
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError, available_timezones

from ingest import quantities
from ingest.errors import OutletError, Problem
from ingest.keys import NESTED, Key, rows

_CLOCK = re.compile(r"(?:[01]\d|2[0-3]):[0-5]\d")


@dataclass(slots=True)
class Entry:
    """One table of the file after reading: only values that passed, and the place each was written at."""

    place: str
    values: dict[str, Any] = field(default_factory=dict)
    places: dict[str, str] = field(default_factory=dict)  # where it is not place.key
    told: frozenset[str] = frozenset()  # keys that are refused or missing, and were told so

    def get(self, key: str) -> Any:
        """Give a value, or None when it is absent or was refused.

        Parameters
        ----------
        key : str
            Key of this table.
        """
        return self.values.get(key)

    def at(self, key: str) -> str:
        """Give the dotted place of a key.

        Parameters
        ----------
        key : str
            Key of this table, written or not.
        """
        return self.places.get(key, f"{self.place}.{key}")

    def lacks(self, key: str) -> bool:
        """Tell whether a key is absent and nobody was told, so that one fault is told once.

        Parameters
        ----------
        key : str
            Key of this table.
        """
        return key not in self.values and key not in self.told


def nearest(word: str, allowed: Iterable[str]) -> str:
    """Say which allowed word was meant, or list them all.

    Parameters
    ----------
    word : str
        What was written.
    allowed : iterable of str
        What may be written.

    Returns
    -------
    str
        "did you mean 'x'?", or "write one of ...".
    """
    known = list(allowed)
    within = [name for name in known if word.lower() in name.lower()] if word else []
    close = get_close_matches(word, known, n=1) or within
    if close:
        return f"did you mean '{close[0]}'?"
    return f"write one of {', '.join(repr(name) for name in known)}" if known else "none is declared"


def read_table(section: str, table: object, place: str) -> tuple[Entry, list[Problem]]:
    """Read one TOML table against the rows of its section.

    Parameters
    ----------
    section : str
        Section of the table of keys.
    table : object
        What the TOML parser gave.
    place : str
        Dotted place of the table, for messages.

    Returns
    -------
    Entry
        Values that passed, defaults included; refused and absent ones are left out.
    list of Problem
        Unknown, missing, mistyped and out-of-range keys.
    """
    entry = Entry(place)
    if not isinstance(table, Mapping):
        return entry, [
            Problem(place, f"{_show(table)} is no table", f"write it under [{section}] or in braces")
        ]
    known = rows(section)
    problems = [
        Problem(f"{place}.{key}", "unknown key", nearest(key, known)) for key in table if key not in known
    ]
    for row in known.values():
        if row.key in table or row.default is not None:
            faults = _read_value(row, table.get(row.key, row.default), entry)
        else:
            faults = [missing(row, f"{place}.{row.key}")] if row.needed == "always" else []
        entry.told |= {row.key} if faults else set()
        problems += faults
    return entry, problems


def missing(row: Key, place: str) -> Problem:
    """Say that a key is missing and what to write.

    Parameters
    ----------
    row : Key
        The key.
    place : str
        Where it should stand.

    Returns
    -------
    Problem
        With the sentence and the example of the key.
    """
    return Problem(place, f"missing ({row.sentence})", f"write {row.key} = {row.example}")


def _read_value(row: Key, value: object, entry: Entry) -> list[Problem]:
    """Read the value of one row into the entry; a refused one stays out."""
    place = f"{entry.place}.{row.key}"
    if row.form in NESTED:
        inner, problems = read_table(row.form, value, place)
        entry.values |= {} if problems else {row.key: inner.values}
        return problems
    try:
        entry.values[row.key] = FORMS[row.form](value, row)
    except OutletError as error:
        return [Problem(place, error.what, error.remedy)]
    return []


def _show(value: object) -> str:
    """Show a value the way TOML writes it, shortened."""
    text = str(value).lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _misfit(value: object, row: Key, form: str) -> OutletError:
    """Say that a value has not the form of its row, and show one that has."""
    return OutletError(f"{_show(value)} is not {form}", remedy=f"write {row.key} = {row.example}")


def _text(value: object, row: Key) -> str:
    if not isinstance(value, str) or not value.strip() or not value.isprintable():
        raise _misfit(value, row, "a text in quotes")
    return value


def _texts(value: object, row: Key) -> tuple[str, ...]:
    if not isinstance(value, list):
        raise _misfit(value, row, "a list of texts")
    texts = tuple(_text(item, row) for item in value)
    twice = [text for position, text in enumerate(texts) if text in texts[:position]]
    if twice:
        raise OutletError(f"'{twice[0]}' stands twice", remedy="name each once")
    return texts


def _choice(value: object, row: Key) -> str:
    if not isinstance(value, str) or value not in row.choices:
        raise OutletError(f"{_show(value)} is not one of its words", remedy=nearest(str(value), row.choices))
    return value


def _number(value: object, row: Key) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise _misfit(value, row, "a number")
    if not row.low <= value <= row.high:
        bounds = f"{row.low:g} to {row.high:g}" if math.isfinite(row.high) else f"at least {row.low:g}"
        raise OutletError(
            f"must be {bounds}, got {value:g}", remedy=f"write for example {row.key} = {row.example}"
        )
    return float(value)


def _pair(value: object, row: Key) -> tuple[float, float]:
    if not isinstance(value, list) or len(value) != 2:
        raise _misfit(value, row, "a pair of numbers")
    low, high = (_number(item, row) for item in value)
    if low >= high:
        raise OutletError(f"low {low:g} is not below high {high:g}", remedy="write the lower number first")
    return low, high


def _duration(value: object, row: Key) -> Any:
    if not isinstance(value, str):
        raise _misfit(value, row, "a time span in quotes")
    span = quantities.duration(value)
    if not row.low <= span.total_seconds() <= row.high:
        raise OutletError(
            f"must be {span_words(row.low)} to {span_words(row.high)}, got {quantities.duration_words(span)}",
            remedy=f"write for example {row.key} = {row.example}",
        )
    return span


def span_words(seconds: float) -> str:
    """Say the bound of a time span.

    Parameters
    ----------
    seconds : float
        As in the table [s].

    Returns
    -------
    str
        For example '30 d'.
    """
    return quantities.duration_words(timedelta(seconds=seconds))


def _listed(value: object, row: Key, form: str) -> list[Any]:
    if not isinstance(value, list) or not value:
        raise _misfit(value, row, form)
    return value


def _durations(value: object, row: Key) -> tuple[Any, ...]:
    return tuple(_duration(item, row) for item in _listed(value, row, "a list of time spans"))


def _moment(value: object, row: Key) -> datetime:
    if not isinstance(value, datetime) or value.tzinfo is None:
        raise _misfit(value, row, "a date and time with its offset")
    return value


def _time_of_day(value: object, row: Key) -> time:
    if not isinstance(value, str) or _CLOCK.fullmatch(value) is None:
        raise _misfit(value, row, "a time of day in quotes")
    return time.fromisoformat(value)


def _clocks(value: object, row: Key) -> tuple[time, ...]:
    if not isinstance(value, list) or not value:
        raise _misfit(value, row, "a list of times of day")
    return tuple(sorted(_time_of_day(text, row) for text in _texts(value, row)))


def _zone(value: object, row: Key) -> str:
    name = _text(value, row)
    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        close = get_close_matches(name, available_timezones(), n=1)
        example = f"'{close[0]}'" if close else row.example
        raise OutletError(f"'{name}' is no time zone", remedy=f"did you mean {example}?") from None
    return name


def _yes_no(value: object, row: Key) -> bool:
    if not isinstance(value, bool):
        raise _misfit(value, row, "true or false")
    return value


def _named(value: object, row: Key) -> dict[str, Any]:
    if not isinstance(value, Mapping) or not value:
        raise _misfit(value, row, "a table with at least one entry")
    return dict(value)


def _tables(value: object, row: Key) -> list[Any]:
    return _listed(value, row, "a list of tables")


def _numbers(value: object, row: Key) -> dict[str, float]:
    return {name: _number(item, row) for name, item in _named(value, row).items()}


def _bands(value: object, row: Key) -> dict[str, tuple[float, float]]:
    return {name: _pair(item, row) for name, item in _named(value, row).items()}


def _states(value: object, row: Key) -> tuple[float | str, ...]:
    items = _listed(value, row, "a list of numbers or words")
    return tuple(_text(item, row) if isinstance(item, str) else _number(item, row) for item in items)


FORMS: dict[str, Callable[[object, Key], Any]] = {
    "text": _text,
    "texts": _texts,
    "choice": _choice,
    "number": _number,
    "pair": _pair,
    "duration": _duration,
    "durations": _durations,
    "moment": _moment,
    "clocks": _clocks,
    "time of day": _time_of_day,
    "zone": _zone,
    "yes or no": _yes_no,
    "formulas": _named,
    "numbers": _numbers,
    "bands": _bands,
    "states": _states,
    "channels": _named,
    "votes": _tables,
}
