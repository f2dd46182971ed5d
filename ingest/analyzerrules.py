"""What has to hold for what a unit file says of an analyzer as a whole: certificate, sum, air."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from ingest.chemistry import DRY_AIR, atoms
from ingest.draft import Draft, undeclared
from ingest.entries import Entry
from ingest.errors import Problem
from ingest.instrumentrules import is_fraction, scale_of
from ingest.keys import rows

TOLERANCES_PCT = (0.01, 50.0)  # closer nothing reads, and wider everything is the calibration gas


def gases_of_air(analyzer: Entry, draft: Draft) -> tuple[str, ...]:
    """Give the channels under air_ingress that read nitrogen and oxygen, in this order.

    Parameters
    ----------
    analyzer : Entry
        An analyzer.
    draft : Draft
        The file, for the formulas of its species.

    Returns
    -------
    tuple of str
        One name for each of the two that is there; more where one stands twice.
    """
    stated = analyzer.get("air_ingress") or {}
    wanted = [atoms(formula) for formula in DRY_AIR]
    read = {name: [draft.atoms.get(one) for one in _species(analyzer, name)] for name in stated}
    return tuple(name for gas in wanted for name in stated if read[name] == [gas])


def _species(analyzer: Entry, channel: str) -> tuple[str, ...]:
    """The species that a channel counts: those it names, else the one it is called by."""
    content = (analyzer.get("channel") or {}).get(channel)
    named = content.get("species") if isinstance(content, dict) else None
    return tuple(named) if isinstance(named, list) else (channel,)


def _channels(analyzer: Entry, draft: Draft) -> list[Entry]:
    """The channels of an analyzer, as the instruments they became."""
    name = analyzer.get("name")
    return [one for one in draft.many["instrument"] if name and one.get("analyzer") == name]


def _named_are_channels(analyzer: Entry, key: str) -> Iterator[Problem]:
    """Yield a fault for each name under a key that is no channel of its analyzer."""
    names = [name for name in analyzer.get(key) or {} if name != "tolerance_pct"]
    channels = analyzer.get("channel") or {}
    yield from undeclared(analyzer, key, names if channels else (), channels, f"channel of {analyzer.place}")


def _a_certificate_can_be_told(analyzer: Entry, _draft: Draft) -> Iterator[Problem]:
    """A certificate names two channels or more, and how closely they read it."""
    certificate = analyzer.get("certificate")
    if certificate is None:
        return
    yield from _named_are_channels(analyzer, "certificate")
    place = f"{analyzer.at('certificate')}.tolerance_pct"
    low, high = TOLERANCES_PCT
    tolerance = certificate.get("tolerance_pct")
    if tolerance is None:
        what = "missing (how closely the channels read the certificate, in percent of it)"
        yield Problem(place, what, "write for example tolerance_pct = 2")
    elif not low <= tolerance <= high:
        what = f"must be {low:g} to {high:g}, got {tolerance:g}"
        yield Problem(place, what, "write for example tolerance_pct = 2")
    if len(certificate.keys() - {"tolerance_pct"}) < 2:
        what = "one channel alone may read so by chance"
        yield Problem(analyzer.at("certificate"), what, "name two channels or more")


def _a_sum_adds_like_to_like(analyzer: Entry, draft: Draft) -> Iterator[Problem]:
    """The channels that are added up are two fractions or more, in one unit."""
    if analyzer.get("sum_band") is None:
        return
    channels = _channels(analyzer, draft)
    units = sorted({one.get("unit") for one in channels if one.get("unit")})
    if analyzer.get("kind") is not None and not is_fraction(analyzer):
        what = f"channels of kind '{analyzer.get('kind')}' do not add up to anything known"
        yield Problem(analyzer.at("sum_band"), what, "remove it, or mend kind")
    elif len(units) > 1:
        what = f"adds up channels in {' and '.join(units)}"
        yield Problem(analyzer.at("sum_band"), what, "give all channels one unit")
    elif len(channels) == 1:
        yield Problem(analyzer.at("sum_band"), "one channel is no sum", "write it as the channel's range")


def _air_can_be_told(analyzer: Entry, draft: Draft) -> Iterator[Problem]:
    """The two gases of air are named, and air holds more of them than the stream does."""
    stated = analyzer.get("air_ingress")
    if stated is None:
        return
    strangers = list(_named_are_channels(analyzer, "air_ingress"))
    yield from strangers
    gases = gases_of_air(analyzer, draft)
    if not strangers and (len(gases) != len(DRY_AIR) or len(stated) != len(DRY_AIR)):
        what = "needs the channel of nitrogen (N2) and that of oxygen (O2), each alone, and no other"
        row = rows("analyzer")["air_ingress"]
        yield Problem(analyzer.at("air_ingress"), what, f"write air_ingress = {row.example}")
        return
    by_name = {one.get("name"): one for one in _channels(analyzer, draft)}
    for gas, fraction in zip(gases, DRY_AIR.values(), strict=False):
        channel = by_name.get(f"{analyzer.get('name')} {gas}")
        if channel is None or not is_fraction(channel) or not channel.get("unit"):
            continue  # told by another rule
        held, high = fraction / scale_of(channel, draft).to_base, stated[gas][1]
        if high >= held:
            what = f"air holds {held:.4g} {channel.get('unit')} {gas}, no more than the stream with {high:g}"
            remedy = "remove air_ingress: in such a stream air does not show"
            yield Problem(f"{analyzer.at('air_ingress')}.{gas}", what, remedy)


def number_of(state: float | str, draft: Draft) -> float | None:
    """Give the number that a value of a status stands for.

    Parameters
    ----------
    state : float or str
        As stated: a number, or a word.
    draft : Draft
        The file, for its state_words.

    Returns
    -------
    float or None
        None for a word that is not among them.
    """
    if not isinstance(state, str):
        return state
    words = draft.once["exports"].get("state_words") or {}
    return {_plain(word): number for word, number in words.items()}.get(_plain(state))


def _plain(word: str) -> str:
    """A word as exports are searched for it."""
    return word.strip().casefold()


def _a_status_has_known_values(analyzer: Entry, draft: Draft) -> Iterator[Problem]:
    """A word among the values of a status is one of those that stand for a number."""
    for state in (analyzer.get("status") or {}).get("calibrating", ()):
        if number_of(state, draft) is None:
            what = f"'{state}' is no number and no word of exports.state_words"
            remedy = f"write state_words = {{ {state} = 1 }} under [exports]"
            yield Problem(f"{analyzer.at('status')}.calibrating", what, remedy)


def words_have_one_meaning(draft: Draft) -> Iterator[Problem]:
    """Yield a fault for each word of an export that means two things.

    Parameters
    ----------
    draft : Draft
        The file.
    """
    exports = draft.once["exports"]
    missing, seen = {_plain(word) for word in exports.get("missing_words") or ()}, set()
    for word in exports.get("state_words") or {}:
        if _plain(word) in missing:
            what, remedy = "also stands for no reading", "take it out of missing_words or of state_words"
            yield Problem(exports.at("state_words"), f"'{word}' {what}", remedy)
        if _plain(word) in seen:
            what = f"'{word}' stands twice, but for its capitals"
            yield Problem(exports.at("state_words"), what, "name each word once")
        seen.add(_plain(word))


_EACH: tuple[Callable[[Entry, Draft], Iterator[Problem]], ...] = (
    _a_status_has_known_values,
    _a_certificate_can_be_told,
    _a_sum_adds_like_to_like,
    _air_can_be_told,
)


def hold(draft: Draft) -> Iterator[Problem]:
    """Yield what is wrong with what is said of each analyzer as a whole.

    Parameters
    ----------
    draft : Draft
        The file.
    """
    for analyzer in draft.many["analyzer"]:
        for rule in _EACH:
            yield from rule(analyzer, draft)
