"""What people read of a verdict: the answer in a sentence, then what it rests on, line by line."""

from __future__ import annotations

import math
from collections.abc import Iterator

from ingest.unit import Unit
from monitor import wording
from monitor.verdict import CANNOT, INSTRUMENT, LEAD, NOTHING, REACTOR, Loss, Shift, Suspect, Verdict

# Word and shape, so that neither colour nor shape has to say it alone.
SHAPES = {REACTOR: "\u25b2", INSTRUMENT: "\u25c6", CANNOT: "?", NOTHING: "\u25cb"}
ANSWERS = {
    REACTOR: "The reactor moved",
    INSTRUMENT: "An instrument moved, not the reactor",
    CANNOT: "It cannot be told whether the reactor moved or an instrument",
    NOTHING: "Nothing moved beyond what it does while all is well",
}
# Where all that is suspected are stated values, no instrument is at fault.
STATED = "What is fed is not what the unit file states"
LEAST_P = 1e-4  # chances below that are told as below that


def headline(verdict: Verdict) -> str:
    """Give the answer in one sentence with the names that go with it.

    Parameters
    ----------
    verdict : Verdict
        Of one episode.
    """
    names = ", ".join(one.name for one in verdict.suspects[:3])
    more = f" and {len(verdict.suspects) - 3} more" if len(verdict.suspects) > 3 else ""
    told = f": {names}{more}" if names else ""
    why = f" ({verdict.reason})" if verdict.reason else ""
    early = "Provisional: " if verdict.is_provisional else ""
    stated = verdict.word == INSTRUMENT and all(one.sort == "declared" for one in verdict.suspects)
    return f"{SHAPES[verdict.word]} {early}{STATED if stated else ANSWERS[verdict.word]}{told}{why}."


def lines(verdict: Verdict, unit: Unit) -> Iterator[str]:
    """Tell a verdict with all that it rests on.

    Parameters
    ----------
    verdict : Verdict
        Of one episode.
    unit : Unit
        Its reactor.

    Yields
    ------
    str
        One line.
    """
    yield headline(verdict)
    yield from (f"  {line}" for line in _times(verdict, unit))
    if verdict.chances:
        told = ", ".join(f"{name} {percent(chance)}" for name, chance in verdict.chances)
        yield f"  chances: {told}"
        yield f"  balance residuals like these while all is well: {chance_words(verdict.balance_p)}"
        yield f"  outlet shares like these while all is well: {chance_words(verdict.reaction_p)}"
        yield f"  what the likeliest cause leaves unexplained: {chance_words(verdict.misfit_p)}"
    for number, one in enumerate(verdict.suspects, start=1):
        yield f"  ({number}) {_suspect(one)}"
    yield from _figures(verdict)
    yield from (f"  {line}" for line in _loss(verdict, unit))
    yield from _shifts("adjustments that changed most [standard uncertainties]", verdict.adjustments)
    yield from _shifts("run at", verdict.operating)
    if verdict.outside:
        yield f"  outside its healthy range: {', '.join(verdict.outside)}"
    for held in verdict.conditions:
        yield f"  {held.instrument}: {held.words} for {percent(held.share)} of the window"
    yield from (f"  would settle it: {one}" for one in verdict.settle)


def _times(verdict: Verdict, unit: Unit) -> Iterator[str]:
    """Tell which time was looked at, what it was held against, and since when it has been so."""
    first, last = (_local(one, unit) for one in (verdict.first_us, verdict.last_us))
    yield f"from {first} to {last}"
    if verdict.healthy_us:
        whose = (
            "the healthy time" if verdict.is_healthy_stated else "the time before (no healthy time is stated)"
        )
        yield f"held against {whose}, {' to '.join(_local(one, unit) for one in verdict.healthy_us)}"
    if verdict.onset_us is not None:
        far = verdict.first_us - verdict.onset_us >= 0.95 * LEAD.total_seconds() * 1e6
        yield f"since {_local(verdict.onset_us, unit)}{' or before' if far else ''}"
    if verdict.calibrated:
        yield f"{verdict.calibrated} was calibrated just then, which speaks for an instrument"


def _local(time_us: int, unit: Unit) -> str:
    return wording.local_time(wording.utc(time_us), unit.time_zone)


def percent(share: float) -> str:
    """Write a chance or share; nothing is told as sure.

    Parameters
    ----------
    share : float
        0 to 1.
    """
    if share < 0.001:
        return "under 0.1 %"
    if share > 0.999:
        return "over 99.9 %"
    return f"{wording.number(100 * share, 1)} %"


def chance_words(chance: float) -> str:
    """Write the chance of such a result while all is well.

    Parameters
    ----------
    chance : float
        0 to 1; NaN where there was nothing to test.
    """
    if math.isnan(chance):
        return "not tested"
    return (
        f"under 1 in {1 / LEAST_P:,.0f}".replace(",", "\u202f") if chance < LEAST_P else f"{percent(chance)}"
    )


def size_words(one: Suspect) -> str:
    """Tell which way a suspect moved and by how much; empty where there is no single size.

    Parameters
    ----------
    one : Suspect
        Of a verdict.
    """
    if not math.isfinite(one.size):
        return ""
    moved = "up" if one.size > 0 else "down"
    return f"moved {moved} by {wording.amount(100 * abs(one.size), 100 * one.half_width, '%')}"


def _suspect(one: Suspect) -> str:
    words = size_words(one)
    size = f", {words}" if words else ""
    return f"{one.name} ({one.kind}), {percent(one.chance)}{size}; check first: {one.check}"


def _figures(verdict: Verdict) -> Iterator[str]:
    """Tell the main figures before, now, and without each suspect."""
    if not verdict.closures:
        return
    names = list(dict.fromkeys(one.suspect for one in verdict.figures))
    heads = "".join(f"  without {name}" for name in names)
    yield f"  {'figure':<45} {'healthy':>9} {'shown':>9}{heads}"
    for shift in verdict.closures:
        held = {one.suspect: one.without for one in verdict.figures if one.name == shift.name}
        cells = "".join(f"  {value_words(held.get(name, math.nan)):>{len(name) + 8}}" for name in names)
        label = f"{shift.name}, {shift.unit}"
        yield f"  {label:<45} {value_words(shift.before):>9} {value_words(shift.now):>9}{cells}"


def value_words(value: float) -> str:
    """Write a value as it was or is.

    Parameters
    ----------
    value : float
        NaN where it cannot be seen.
    """
    return "not seen" if math.isnan(value) else wording.number(value, 2)


def _loss(verdict: Verdict, unit: Unit) -> Iterator[str]:
    """Tell what the outlet says was lost; of an instrument it is what the readings only seem to say."""
    loss = verdict.loss
    if loss is None or verdict.word == NOTHING:
        return
    seems = {REACTOR: "", INSTRUMENT: " as the outlet reads, which is doubtful here"}
    yield (
        f"yield {signed(loss.yield_points)} points{seems.get(verdict.word, ' if the outlet reads right')}: "
        f"conversion {signed(loss.by_conversion)}, selectivity {signed(loss.by_selectivity)}"
    )
    yield "where it went: " + ", ".join(f"{name} {signed(-points)}" for name, points in loss.by_product)
    if math.isfinite(loss.kg_h):
        yield made_less(loss, unit)


def made_less(loss: Loss, unit: Unit) -> str:
    """Tell how much less of the wanted product is made, and what that is worth.

    Parameters
    ----------
    loss : Loss
        With a known `kg_h`.
    unit : Unit
        Names the species.
    """
    told = f"{unit.wanted} {'lost' if loss.kg_h > 0 else 'gained'}: {wording.number(abs(loss.kg_h), 0)} kg/h"
    if not math.isfinite(loss.value_per_day):
        return told
    worth, more = (wording.number(abs(one), 0) for one in (loss.value_per_day, loss.make_up_per_day))
    made_up = f"{more} {loss.currency} of {unit.key_reactant} per day would make up for it"
    return f"{told}, worth {worth} {loss.currency} per day; {made_up}"


def signed(value: float) -> str:
    """Write a difference with its sign.

    Parameters
    ----------
    value : float
        Any unit.
    """
    return ("+" if value > 0 else "") + wording.number(value, 2)


def _shifts(title: str, shifts: tuple[Shift, ...]) -> Iterator[str]:
    if shifts:
        told = ", ".join(
            f"{one.name} {value_words(one.before)} to {value_words(one.now)} {one.unit}".rstrip()
            for one in shifts
        )
        yield f"  {title}: {told}"
