"""What one more reading would settle, and what to check first where the reactor is suspected: words by kind.

Which readings settle what follows from the balance (common practice, no source): a meter is told from another
by what they do not share, a channel from the reaction by a second look at the same sample.
"""

from __future__ import annotations

from collections.abc import Sequence

from ingest.unit import FLOW_KINDS, Instrument, Unit
from monitor.coordinates import UNCONVERTED
from monitor.hypotheses import AIR, BOTH, REACTOR, UNSEEN

OXIDES = ("CO", "CO2", "O2")

REACTOR_CHECKS = {
    UNCONVERTED: "bath or bed temperatures, feed rate and distribution; pressure drop; age of the catalyst",
    BOTH: "bath or bed temperatures and hot spots, feed ratios and impurities, then the catalyst",
    UNSEEN: "a lab analysis of the outlet for species that no channel sees, condensate and deposits included",
}
PRODUCT_CHECK = "hot spots, residence time and feed ratios; a lab sample to see that the product is real"


def reactor_check(name: str) -> str:
    """Give what to check first where a change of the reaction is suspected.

    Parameters
    ----------
    name : str
        A hypothesis of the reaction.
    """
    return REACTOR_CHECKS.get(name, PRODUCT_CHECK)


def settling(unit: Unit, suspects: Sequence[tuple[str, str]]) -> tuple[str, ...]:
    """Give the readings that would tell the suspects apart; nothing where one is left.

    Parameters
    ----------
    unit : Unit
        The reactor.
    suspects : sequence of (str, str)
        Names of hypotheses and their kinds.
    """
    if len(suspects) < 2:
        return ()
    names = [name for name, _ in suspects]
    own = [one for one in unit.instruments if one.name in names]
    found = [*_meters(unit, own, names), *_channels(unit, own, suspects), *_declared(own)]
    if UNSEEN in names:
        found.append("a lab analysis of the outlet for species that no channel sees")
    return tuple(dict.fromkeys(found)) or ("a lab sample of the outlet of the same hour, all species",)


def _meters(unit: Unit, own: Sequence[Instrument], names: Sequence[str]) -> list[str]:
    """Meters of streams in and out meet in one sum where a species that both hold is not analysed."""
    meters = [one for one in own if one.kind in FLOW_KINDS]
    found = []
    if len({one.stream for one in meters}) > 1:
        hidden = _hidden(unit)
        found += [f"{name} measured in the outlet" for name in hidden]
        found += [] if hidden else ["a check of one of the meters against a tank, a pump or a second meter"]
    if meters and any(name.startswith(AIR) for name in names):
        found.append("a leak test of the sample line")
    return found


def _hidden(unit: Unit) -> list[str]:
    """Name the species of streams out that no channel sees because the sample has lost them."""
    return list(dict.fromkeys(name for one in unit.instruments for name in one.left_out))


def _channels(unit: Unit, own: Sequence[Instrument], suspects: Sequence[tuple[str, str]]) -> list[str]:
    formula = {one.name: one.formula for one in unit.species}
    channels = [one for one in own if one.analyzer]
    oxides = [one for one in channels if {formula.get(name) for name in one.species} & set(OXIDES)]
    found = []
    if len(oxides) > 1:
        found.append("a second analyzer for CO, CO2 and O2")
    if any(kind == REACTOR for _, kind in suspects):
        found += [f"a lab sample of the outlet for {', '.join(one.species)}" for one in channels]
    elif len(channels) > 1 or any(name not in {one.name for one in own} for name, _ in suspects):
        found += ["calibration gas on the analyzer, all channels and their sum"] if channels else []
    return found


def _declared(own: Sequence[Instrument]) -> list[str]:
    return [f"an analysis of {one.stream} for {', '.join(one.species)}" for one in own if one.tag is None]
