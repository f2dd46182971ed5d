"""Half-widths to expect of each figure at the usual readings, and which added instrument narrows them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.balance import problem_of
from ingest.instruments import balance_instruments
from ingest.unit import FLOW_KINDS, FRACTION_KINDS, Instrument, Uncertainty, Unit
from monitor.amounts import Amounts, amounts_of, at_rest
from monitor.figures import Figure, figures_of
from monitor.typical import as_cells, shown
from monitor.windows import MODES, judged_windows

Floats = NDArray[np.float64]

LENGTHS = (timedelta(hours=8), timedelta(hours=24))  # windows besides one cell
JUDGED_BY = 1  # place of the window by which added instruments are compared
WORTH = 0.01  # of the half-width; an instrument that narrows it by less is not worth naming
ROUNDING = 1e-6  # in a figure's unit; a half-width below it is rounding: the balance itself fixes the figure


@dataclass(frozen=True, slots=True)
class Addition:
    """An instrument that the unit could have besides: its name in words, and how good it is taken to be."""

    name: str
    quality: str
    instrument: Instrument


@dataclass(frozen=True, slots=True)
class Expectation:
    """One figure at the usual readings.

    `half_width` holds 95 % half-widths over one cell and over `LENGTHS`, in the figure's unit; NaN where the
    readings do not tell, 0 where the balance alone fixes the figure. `narrowed_by` names the addition that
    narrows it most over 8 h, `narrowed` is the 8 h half-width with it; empty and NaN where none narrows it
    by `WORTH`.
    """

    figure: str
    unit: str
    value: float
    half_width: tuple[float, ...]
    narrowed_by: str
    narrowed: float


def lengths_of(unit: Unit) -> tuple[timedelta, ...]:
    """Give the windows that half-widths are told for: one cell, 8 h, 24 h.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return (unit.cell, *LENGTHS)


def expectations(unit: Unit, value: Floats, offered: Sequence[Addition]) -> tuple[Expectation, ...]:
    """Tell what to expect of every figure of a unit while it reads so.

    Parameters
    ----------
    unit : Unit
        The reactor.
    value : array (m,)
        Readings of all instruments, own units; NaN where missing.
    offered : sequence of Addition
        Instruments that it could have besides.
    """
    problem = problem_of(unit)
    states, amounts = amounts_of(unit, problem, as_cells(unit, value[None]))
    amounts = at_rest(unit, amounts)
    figures = figures_of(unit, amounts.names)
    told, wide = _half_widths(unit, amounts, figures)
    narrow = np.array([_with(unit, value, states.flow_kmol_h[0], one, figures) for one in offered])
    return tuple(
        Expectation(
            one.name, one.unit, float(told[f]), tuple(wide[f].tolist()), *_best(offered, narrow, wide, f)
        )
        for f, one in enumerate(figures)
    )


def _best(offered: Sequence[Addition], narrow: Floats, wide: Floats, figure: int) -> tuple[str, float]:
    """Give the addition that narrows a figure most, and what it leaves of the half-width."""
    if len(offered) and np.isfinite(narrow[:, figure]).any():
        best = int(np.nanargmin(narrow[:, figure]))
        left = float(narrow[best, figure])
        if left < (1 - WORTH) * wide[figure, JUDGED_BY]:
            return offered[best].name, left
    return "", float("nan")


def _with(unit: Unit, value: Floats, flow: Floats, addition: Addition, figures: Sequence[Figure]) -> Floats:
    """Give the half-width of each figure, array (f,), with one more instrument that agrees with all."""
    more = replace(unit, instruments=(*unit.instruments, addition.instrument))
    problem = problem_of(more)
    read = np.append(value, shown(more, problem, flow, np.append(value, np.nan))[-1])
    amounts = at_rest(more, amounts_of(more, problem, as_cells(more, read[None]))[1])
    names = [one.name for one in figures]
    own = {one.name: one for one in figures_of(more, amounts.names)}
    return _half_widths(more, amounts, [own[name] for name in names])[1][:, JUDGED_BY]


def _half_widths(unit: Unit, amounts: Amounts, figures: Sequence[Figure]) -> tuple[Floats, Floats]:
    """Give value (f,) and half-width (f, windows) of figures in windows whose cells are all like one."""
    lengths = lengths_of(unit)
    count = max(round(one / unit.cell) for one in lengths)
    cell_us = unit.cell // timedelta(microseconds=1)
    start = np.arange(count, dtype=np.int64) * cell_us
    record = replace(
        amounts,
        start=start,
        kmol=np.repeat(amounts.kmol, count, axis=0),
        random=np.repeat(amounts.random, count, axis=0),
        systematic=np.repeat(amounts.systematic, count, axis=0),
        operating=np.repeat(amounts.operating, count),
    )
    _, judged = judged_windows(replace(unit, windows=lengths), record, figures, since_us=int(start[-1]))
    mode = MODES.index("as operated")
    wide = np.array([judged[one]["half_width"][:, mode, 0] for one in lengths]).T
    return judged[lengths[-1]]["value"][:, mode, 0], np.where(wide < ROUNDING, 0.0, wide)


def additions(unit: Unit, value: Floats) -> tuple[Addition, ...]:
    """Give the instruments that a unit could have besides, each as good as its own comparable ones.

    A channel on every species of a stream of several that no instrument reads by itself, and a flow meter on
    every stream without one. Nothing is offered of a sort of which the unit has none to compare with.

    Parameters
    ----------
    unit : Unit
        The reactor.
    value : array (m,)
        Usual readings of all instruments, own units.
    """
    seen = [(one, float(read)) for one, read in zip(unit.instruments, value, strict=True) if one.tag]
    channels = [one for one, _ in seen if one.kind == "mole fraction"]
    meters = [(one, read) for one, read in seen if one.kind in FLOW_KINDS and np.isfinite(read) and read]
    found = []
    if channels:
        found += [_channel(unit, stream, name, channels) for stream, name in _unread(unit)]
    if meters:
        metered = {one.stream for one in balance_instruments(unit) if one.kind in FLOW_KINDS}
        found += [_meter(one.name, meters) for one in unit.streams if one.name not in metered]
    return tuple(found)


def _unread(unit: Unit) -> list[tuple[str, str]]:
    """Give every species of a stream of several that no instrument reads by itself."""
    kinds = (*FRACTION_KINDS, "species flow")
    read = {(one.stream, one.species) for one in balance_instruments(unit) if one.kind in kinds}
    return [
        (stream.name, name)
        for stream in unit.streams
        for name in stream.species
        if len(stream.species) > 1 and (stream.name, (name,)) not in read
    ]


def _channel(unit: Unit, stream: str, species: str, like: Sequence[Instrument]) -> Addition:
    """Offer a channel as good as the median one; dry where the others of its stream are, and it can be."""
    random, systematic = (
        Uncertainty(_median(one.relative for one in each), _median(one.floor for one in each))
        for each in (
            [_in_base(one.random, one) for one in like],
            [_in_base(one.systematic, one) for one in like],
        )
    )
    dried = [one.left_out for one in balance_instruments(unit) if one.stream == stream and one.left_out]
    made = replace(
        _made(f"channel on {species} in {stream}", like, stream),
        kind="mole fraction",
        species=(species,),
        left_out=dried[0] if dried and species not in dried[0] else (),
        random=random,
        systematic=systematic,
    )
    parts = ((random, "random"), (systematic, "systematic"))
    words = " and ".join(
        f"{100 * one.relative:.3g} % + {100 * one.floor:.3g} mol% {part}" for one, part in parts
    )
    return Addition(made.name, f"as good as the median channel of this unit, {words}", made)


def _in_base(own: Uncertainty, instrument: Instrument) -> Uncertainty:
    """Give an uncertainty with its floor in base units."""
    return Uncertainty(own.relative, own.floor * instrument.to_base)


def _meter(stream: str, like: Sequence[tuple[Instrument, float]]) -> Addition:
    """Offer a flow meter as good as the median one at its usual reading."""
    random = _median(one.random.relative + one.random.floor / abs(read) for one, read in like)
    systematic = _median(one.systematic.relative + one.systematic.floor / abs(read) for one, read in like)
    made = replace(
        _made(f"flow meter on {stream}", [one for one, _ in like], stream),
        kind="molar flow",
        random=Uncertainty(random, 0.0),
        systematic=Uncertainty(systematic, 0.0),
    )
    words = f"{100 * random:.2g} % random and {100 * systematic:.2g} % systematic"
    return Addition(made.name, f"as good as the median flow meter of this unit, {words}", made)


def _median(numbers: Iterable[float]) -> float:
    return float(np.median(list(numbers)))


def _made(name: str, like: Sequence[Instrument], stream: str) -> Instrument:
    """Give an instrument in base units on a stream, as often read as the median of others."""
    return replace(
        like[0],
        name=name,
        unit="base",
        to_base=1.0,
        offset=0.0,
        stream=stream,
        per_stream=None,
        species=(),
        left_out=(),
        cycle=timedelta(seconds=_median(one.cycle.total_seconds() for one in like)),
        analyzer=None,
        pressure=None,
        temperature=None,
        design_molar_mass_kg_kmol=None,
        design_kmol_m3=None,
    )
