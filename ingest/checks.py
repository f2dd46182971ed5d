"""The one table of checks on readings: how each is run, where it cannot, and why it is there.

A check looks at all instruments of a unit at once, at the readings that the checks above it left.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ingest import calibration, samples
from ingest.channels import Places, common_axis, places_on, together
from ingest.conditions import (
    AIR_INGRESS,
    BAD_QUALITY,
    CALIBRATING,
    DILUTED,
    GOOD,
    LARGE_STEP,
    LARGEST,
    NOT_CHECKED,
    OUT_OF_RANGE,
    PASSED,
    REFUSED,
    SPIKE,
    STUCK,
    SUM_OUT_OF_BAND,
    SUSPECT,
    UNCERTAIN_QUALITY,
    Codes,
    Flags,
    takes_part,
)
from ingest.readings import BAD, UNCERTAIN, UNKNOWN, Readings, Series, empty
from ingest.steps import steps
from ingest.stuck import STUCK_CHANNELS, stuck, stuck_alone
from ingest.unit import Analyzer, Instrument, Unit

Answers = list[Codes | None]  # of one check, for each instrument; None where it did not run

# A 4 to 20 mA signal measures from 3.8 to 20.5 mA and fails beyond (NAMUR NE 43).
UNDER = (4.0 - 3.8) / 16.0
OVER = (20.5 - 20.0) / 16.0


@dataclass(frozen=True, slots=True)
class RangeRule:
    """How far a true reading can lie outside the stated range, as shares of the span, and why."""

    below: float
    above: float
    why: str


_TRANSMITTER = RangeRule(
    UNDER, OVER, "a meter at rest is noisy about zero, and the signal reaches past its ends"
)
_FRACTION = RangeRule(
    UNDER, 0.0, "noise about zero lies on both sides; above the calibrated range nobody checked"
)
RANGE_RULES = {
    "molar flow": _TRANSMITTER,
    "mass flow": _TRANSMITTER,
    "volume flow": _TRANSMITTER,
    "actual volume flow": _TRANSMITTER,
    "differential pressure flow": _TRANSMITTER,
    "mole fraction": _FRACTION,
    "mass fraction": _FRACTION,
    "species flow": _TRANSMITTER,
    "flow ratio": _TRANSMITTER,
    "pressure": _TRANSMITTER,
    "temperature": _TRANSMITTER,
    "signal": RangeRule(0.0, 0.0, "a position or a status word has the limits as they are written"),
}


def limits(instrument: Instrument) -> tuple[float, float]:
    """Give the lowest and the highest reading that is taken.

    Parameters
    ----------
    instrument : Instrument

    Returns
    -------
    tuple of two floats
        In the instrument's own unit; infinite on a side without a stated range. With one side stated there
        is no span, and that side holds as it is written.
    """
    span = instrument.high - instrument.low
    if not np.isfinite(span):
        return instrument.low, instrument.high
    rule = RANGE_RULES[instrument.kind]
    return instrument.low - rule.below * span, instrument.high + rule.above * span


@dataclass(frozen=True, slots=True)
class Sample:
    """The results of an analyzer side by side: k channels that have readings, n times.

    `at` are their places among the instruments, `on_axis` those of their readings among the n times; `whole`
    tells whether no channel lacks.
    """

    at: tuple[int, ...]
    members: tuple[Instrument, ...]
    time: NDArray[np.int64]  # (n,) us UTC
    values: NDArray[np.float64]  # (k, n) NaN where there is none
    on_axis: tuple[Places, ...]
    whole: bool

    def spread(self, told: Codes | Sequence[Codes], answers: Answers) -> None:
        """Give each channel the answers of the sample, one for all or one for each.

        Parameters
        ----------
        told : array (n,) or sequence of k such arrays
        answers : list of arrays
            For each instrument; filled in.
        """
        each = [told] * len(self.at) if isinstance(told, np.ndarray) else told
        for at, place, answer in zip(self.at, self.on_axis, each, strict=True):
            answers[at] = answer[place]


@dataclass(frozen=True, slots=True)
class Seen:
    """The readings of a unit while they are screened, and the condition of each as far as it is known."""

    unit: Unit
    series: tuple[Series, ...]
    codes: tuple[Codes, ...]

    @classmethod
    def first(cls, unit: Unit, readings: Readings) -> Seen:
        """Begin with everything good.

        Parameters
        ----------
        unit : Unit
        readings : Readings
            By tag; declared instruments and tags without readings have none.
        """
        none = empty()
        series = tuple(none if i.tag is None else readings.get(i.tag, none) for i in unit.instruments)
        return cls(unit, series, tuple(np.zeros(len(one), dtype=np.int8) for one in series))

    def usable(self, at: int) -> Flags:
        """Tell which readings of an instrument are numbers that no check has refused so far.

        Parameters
        ----------
        at : int
            Its place among the instruments.
        """
        return takes_part(self.codes[at]) & (np.abs(self.series[at].value) < LARGEST)

    def unanswered(self) -> Answers:
        """Give no answer for any instrument, to begin with."""
        return [None] * len(self.series)

    def channels(self, analyzer: Analyzer) -> list[int]:
        """Give the places of those channels of an analyzer that have readings.

        Parameters
        ----------
        analyzer : Analyzer
        """
        held = enumerate(self.unit.instruments)
        return [at for at, one in held if one.analyzer == analyzer.name and len(self.series[at])]

    def sample(self, analyzer: Analyzer) -> Sample | None:
        """Lay the usable results of an analyzer side by side; None where it has no readings.

        Parameters
        ----------
        analyzer : Analyzer
        """
        at = self.channels(analyzer)
        if not at:
            return None
        members = tuple(self.unit.instruments[place] for place in at)
        series = [self.series[place] for place in at]
        age = max(one.cycle for one in members)
        values, on_axis = together(series, [self.usable(place) for place in at], age)
        whole = len(at) == sum(one.analyzer == analyzer.name for one in self.unit.instruments)
        return Sample(tuple(at), members, common_axis(series), values, on_axis, whole)

    def fold(self, answers: Answers, check: Check) -> None:
        """Take the answers of a check in: the first that refuses a reading names its condition.

        Parameters
        ----------
        answers : list of arrays
            For each instrument.
        check : Check
        """
        for code, answer in zip(self.codes, answers, strict=True):
            if answer is not None and (answer >= SUSPECT).any():
                code[(answer == SUSPECT) & (code == GOOD)] = check.suspect
                code[(answer == REFUSED) & takes_part(code)] = check.bad


@dataclass(frozen=True, slots=True)
class Check:
    """One check: how it is run, what a reading is called that it doubts or refuses, and why there is one.

    `lacks` says why it cannot run on an instrument, in words; empty where it can.
    """

    run: Callable[[Seen], Answers]
    lacks: Callable[[Unit, Instrument], str]
    suspect: int
    bad: int
    why: str


def stated(unit: Unit, instrument: Instrument) -> Analyzer | None:
    """Give what is stated of the analyzer that an instrument is a channel of.

    Parameters
    ----------
    unit : Unit
    instrument : Instrument

    Returns
    -------
    Analyzer or None
        None for what is no channel, or one of an analyzer of which nothing is stated.
    """
    return next((one for one in unit.analyzers if one.name == instrument.analyzer), None)


def _quality(seen: Seen) -> Answers:
    """What the historian says of its readings; unknown quality was not checked."""
    answers: Answers = []
    for series in seen.series:
        answer = np.zeros(len(series), dtype=np.int8)
        answer[series.quality == UNKNOWN] = NOT_CHECKED
        answer[series.quality == UNCERTAIN] = SUSPECT
        # Written so that NaN, which compares false with everything, is bad too.
        answer[~(np.abs(series.value) < LARGEST) | (series.quality == BAD)] = REFUSED
        answers.append(answer)
    return answers


def _range(seen: Seen) -> Answers:
    answers: Answers = []
    for instrument, series in zip(seen.unit.instruments, seen.series, strict=True):
        low, high = limits(instrument)
        outside = (series.value < low) | (series.value > high)
        answers.append(np.where(outside, REFUSED, PASSED).astype(np.int8))
    return answers


def _calibration(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for analyzer in seen.unit.analyzers:
        ways = (_by_status(seen, analyzer), _by_certificate(seen, analyzer))
        for at, both in enumerate(zip(*ways, strict=True)):
            told = [answer for answer in both if answer is not None]
            if told:
                # Either way of knowing is enough, to refuse as well as to pass.
                worst, best = np.max(told, axis=0), np.min(told, axis=0)
                answers[at] = np.where(worst == REFUSED, REFUSED, best).astype(np.int8)
    return answers


def _by_status(seen: Seen, analyzer: Analyzer) -> Answers:
    """What the status of an analyzer says of the readings of its channels."""
    answers, instruments = seen.unanswered(), seen.unit.instruments
    there = seen.channels(analyzer)
    for signal in [at for at, one in enumerate(instruments) if one.name == analyzer.status] if there else ():
        axis = common_axis([seen.series[at] for at in there])
        told = calibration.by_status(axis, seen.series[signal], analyzer, instruments[signal].max_age)
        for at in there:
            series = seen.series[at]
            mine = told[places_on(axis, series.time)]
            answers[at] = calibration.repeated(series, mine, instruments[at].cycle)
    return answers


def _by_certificate(seen: Seen, analyzer: Analyzer) -> Answers:
    """What the certificate of the calibration gas says of the readings of an analyzer's channels."""
    answers = seen.unanswered()
    sample = seen.sample(analyzer) if analyzer.certificate else None
    if sample is not None:
        told = calibration.by_certificate(sample.values, sample.members, analyzer)
        sample.spread(calibration.settled(sample.time, told, analyzer.settle), answers)
    return answers


def _stuck(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for members in repeating(seen.unit).values():
        there = [at for at in members if len(seen.series[at])]
        if len(there) >= STUCK_CHANNELS:
            cycle = seen.unit.instruments[there[0]].cycle
            for at, flags in zip(there, stuck([seen.series[at] for at in there], cycle), strict=True):
                answers[at] = np.where(flags, REFUSED, PASSED).astype(np.int8)
    return answers


def _repeat(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for at, (one, series) in enumerate(zip(seen.unit.instruments, seen.series, strict=True)):
        if one.longest_repeat is not None:
            flags = stuck_alone(series, one.cycle, one.longest_repeat)
            answers[at] = np.where(flags, REFUSED, PASSED).astype(np.int8)
    return answers


def _step(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for at, one in enumerate(seen.unit.instruments):
        if one.largest_step is not None:
            answers[at] = steps(
                seen.series[at],
                seen.usable(at),
                largest=one.largest_step,
                cycle=one.cycle,
                greatest_gap=one.max_age,
            )
    return answers


def _air(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for analyzer in (one for one in seen.unit.analyzers if one.air):
        sample = seen.sample(analyzer)
        if sample is not None:
            sample.spread(samples.air_ingress(sample.values, sample.members, analyzer), answers)
    return answers


def _sum(seen: Seen) -> Answers:
    answers = seen.unanswered()
    for analyzer in (one for one in seen.unit.analyzers if one.sum_band):
        sample = seen.sample(analyzer)
        if sample is not None and sample.whole:  # what lacks a channel is no sum
            sample.spread(samples.raw_sum(sample.values, analyzer), answers)
    return answers


def repeating(unit: Unit) -> dict[str, list[int]]:
    """Give the places of the channels of each analyzer that can be told stuck, by its name.

    Parameters
    ----------
    unit : Unit

    Returns
    -------
    dict of str to list of int
        Channels that are held and have a tag, where there are STUCK_CHANNELS of them or more.
    """
    found: dict[str, list[int]] = {}
    for at, instrument in enumerate(unit.instruments):
        if instrument.analyzer is not None and instrument.tag is not None and instrument.sampling == "held":
            found.setdefault(instrument.analyzer, []).append(at)
    return {name: members for name, members in found.items() if len(members) >= STUCK_CHANNELS}


def _no_quality(_unit: Unit, _instrument: Instrument) -> str:
    return ""


def _no_range(_unit: Unit, instrument: Instrument) -> str:
    bare = not np.isfinite(instrument.low) and not np.isfinite(instrument.high)
    return "no range is stated" if bare else ""


def _no_stuck(unit: Unit, instrument: Instrument) -> str:
    able = [unit.instruments[at] for members in repeating(unit).values() for at in members]
    reason = "only an analyzer with two or more channels can be told from a steady process"
    return "" if instrument in able else reason


def _no_repeat(_unit: Unit, instrument: Instrument) -> str:
    return "no longest_repeat is stated" if instrument.longest_repeat is None else ""


def _no_step(_unit: Unit, instrument: Instrument) -> str:
    return "no largest_step is stated" if instrument.largest_step is None else ""


def _unless(states: Callable[[Analyzer], object], reason: str) -> Callable[[Unit, Instrument], str]:
    """Make the reason of a check that needs something stated of the analyzer."""

    def lacks(unit: Unit, instrument: Instrument) -> str:
        if instrument.analyzer is None:
            return "is no channel of an analyzer"
        analyzer = stated(unit, instrument)
        return "" if analyzer is not None and states(analyzer) else reason

    return lacks


# In the order in which they are run: the first that refuses a reading names its condition.
CHECKS: Mapping[str, Check] = {
    "calibration": Check(
        _calibration,
        _unless(lambda one: one.status or one.certificate, "neither status nor certificate is stated"),
        GOOD,
        CALIBRATING,
        "what an analyzer reads of its calibration gas is true, but not of the stream",
    ),
    "quality": Check(
        _quality, _no_quality, UNCERTAIN_QUALITY, BAD_QUALITY, "the historian knows where a value came from"
    ),
    "range": Check(
        _range,
        _no_range,
        GOOD,
        OUT_OF_RANGE,
        "beyond its span an instrument shows where it ends, not what is",
    ),
    "stuck": Check(
        _stuck, _no_stuck, GOOD, STUCK, "a result that is not renewed tells of a time that is over"
    ),
    "repeat": Check(
        _repeat,
        _no_repeat,
        GOOD,
        STUCK,
        "one channel repeats honestly, but not for longer than it ever did while it was healthy",
    ),
    "step": Check(
        _step,
        _no_step,
        LARGE_STEP,
        SPIKE,
        "a process has a size, and cannot change faster than it is flushed",
    ),
    "air ingress": Check(
        _air,
        _unless(lambda one: one.air, "no air_ingress is stated"),
        DILUTED,
        AIR_INGRESS,
        "air in the sample thins all channels, and ruins a balance that is tied to its nitrogen",
    ),
    "raw sum": Check(
        _sum,
        _unless(lambda one: one.sum_band, "no sum_band is stated"),
        SUM_OUT_OF_BAND,
        GOOD,
        "results that do not add up show a lost or a wrong channel, as long as nobody normalises them",
    ),
}
