"""Did the reactor move, or an instrument, or can it not be told: one answer with all that it rests on.

A verdict is plain data. It is kept with its episode as a line of JSON and read back from there.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from datetime import timedelta
from types import GenericAlias
from typing import Any, get_args, get_type_hints

REACTOR, INSTRUMENT, CANNOT, NOTHING = WORDS = ("reactor", "instrument", "cannot tell", "nothing moved")
COLUMN = "verdict"  # of the frame of episodes
DIGITS = 6  # kept of every number
LEAD = timedelta(hours=48)  # before the window, in which the onset is looked for


@dataclass(frozen=True, slots=True)
class Suspect:
    """Something that may have moved: its chance (0 to 1), likely size and 95 % half-width, what to check.

    `kind` is 'instrument' or 'reactor', `sort` what sort of instrument: a key of `suspicion.CHECKS`, or ''.
    A size is a fraction of the reading, or of the share of a product; NaN where there is no single one.
    """

    name: str
    kind: str
    chance: float
    size: float
    half_width: float
    check: str
    sort: str = ""


@dataclass(frozen=True, slots=True)
class Shift:
    """A number in the healthy time and now, in its unit; NaN where it cannot be seen."""

    name: str
    unit: str
    before: float
    now: float


@dataclass(frozen=True, slots=True)
class Without:
    """A main figure as shown, and its value when a suspect is left out or put right."""

    name: str
    unit: str
    shown: float
    suspect: str
    without: float


@dataclass(frozen=True, slots=True)
class Condition:
    """Readings of one instrument that were not good: the condition, and its share of the window (0 to 1)."""

    instrument: str
    words: str
    share: float


@dataclass(frozen=True, slots=True)
class Loss:
    """What the outlet says about the yield, against what the operating point leads to expect.

    Parts in percent points of the key element fed, below zero where something was lost. `kg_h` is the wanted
    product that is made less, `value_per_day` what it is worth, `make_up_per_day` the key reactant that would
    make up for it; NaN without prices.
    """

    yield_points: float
    by_conversion: float
    by_selectivity: float
    by_product: tuple[tuple[str, float], ...]
    kg_h: float
    value_per_day: float
    make_up_per_day: float
    currency: str


@dataclass(frozen=True, slots=True)
class Verdict:
    """The answer for one episode.

    Parameters
    ----------
    word : str
        One of `WORDS`.
    reason : str
        Why it cannot be told; empty where it can.
    is_provisional : bool
        Whether less than eight hours after the onset are there yet.
    first_us, last_us : int
        The time that it rests on [us UTC].
    healthy_us : tuple of int
        The time that it is held against [us UTC]; empty without one.
    is_healthy_stated : bool
        Whether a person named that time; else it is what came before the episode.
    onset_us : int or None
        Since when, as far as the evidence tells [us UTC].
    calibrated : str
        The analyzer or instrument that was calibrated within a cycle of the onset, or empty.
    chances : tuple of (str, float)
        Of nothing, an instrument, the reactor, several causes; they add up to one.
    suspects : tuple of Suspect
        Names that together hold 95 % of the chance, with all that cannot be told from the likeliest.
    balance_p, reaction_p, misfit_p : float
        Chance of such residuals of the balance, of such coordinates of the reaction, while all is well; of
        what the likeliest cause leaves. NaN where there is nothing to test.
    closures, adjustments, operating : tuple of Shift
        How they were and are; adjustments in standard uncertainties, largest change first.
    outside : tuple of str
        What the unit is run at beyond its healthy range.
    conditions : tuple of Condition
        Readings of the window that were not good.
    figures : tuple of Without
        Main figures without each instrument that is suspected.
    loss : Loss or None
        None where the outlet's shares cannot be told.
    settle : tuple of str
        Readings that would settle what is open.
    mark : str
        Of the unit file, method and time that it was made with.
    """

    word: str
    reason: str
    is_provisional: bool
    first_us: int
    last_us: int
    healthy_us: tuple[int, ...]
    is_healthy_stated: bool
    onset_us: int | None
    calibrated: str
    chances: tuple[tuple[str, float], ...]
    suspects: tuple[Suspect, ...]
    balance_p: float
    reaction_p: float
    misfit_p: float
    closures: tuple[Shift, ...]
    adjustments: tuple[Shift, ...]
    operating: tuple[Shift, ...]
    outside: tuple[str, ...]
    conditions: tuple[Condition, ...]
    figures: tuple[Without, ...]
    loss: Loss | None
    settle: tuple[str, ...]
    mark: str


def as_text(verdict: Verdict) -> str:
    """Write a verdict as one line of JSON; a number that is not known becomes null.

    Parameters
    ----------
    verdict : Verdict
        Any.
    """
    return json.dumps(_plain(asdict(verdict)), ensure_ascii=False, allow_nan=False)


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if isinstance(value, float):
        return float(f"{value:.{DIGITS}g}") if math.isfinite(value) else None
    return value


def is_marked(text: str, mark: str) -> bool:
    """Tell whether a line of text is a verdict of some mark, without reading all of it.

    Parameters
    ----------
    text : str
        As `as_text` gives it.
    mark : str
        Of a verdict.
    """
    return text.endswith(f'"mark": {json.dumps(mark)}}}')


def read(row: Mapping[str, Any]) -> Verdict | None:
    """Read the verdict of an episode.

    Parameters
    ----------
    row : mapping
        One row of the frame of episodes, as a mapping by column.

    Returns
    -------
    Verdict or None
        None where there is none: the episode is too young, or the store older than verdicts.
    """
    text = row.get(COLUMN)
    return None if not isinstance(text, str) or not text else _made(Verdict, json.loads(text))


def _made(kind: Any, value: Any) -> Any:
    """Give a value of JSON the type that it had."""
    hints = get_type_hints(kind)
    held = [one.name for one in fields(kind) if one.name in value]
    return kind(**{name: _typed(hints[name], value[name]) for name in held})


def _typed(kind: Any, value: Any) -> Any:
    if kind is float:
        return math.nan if value is None else float(value)
    if value is None or kind in (str, int, bool):
        return value
    if isinstance(kind, GenericAlias):
        inner = get_args(kind)
        kinds = [inner[0]] * len(value) if inner[-1] is ... else inner
        return tuple(_typed(one, part) for one, part in zip(kinds, value, strict=True))
    own = next((one for one in get_args(kind) or (kind,) if one is not type(None)), kind)
    return _made(own, value) if hasattr(own, "__dataclass_fields__") else own(value)
