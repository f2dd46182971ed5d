"""Is a reading fit to take part? Every reading gets a condition before any averaging, every check a tally.

A check has four answers, good, not checked, suspect and bad; the worst counts. Bad readings take no part;
suspect ones do, and are shown as such. Missing and stale are questions about time and are answered in
`cells`. A check that cannot run on an instrument is named by `not_checked`, never passed in silence.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import timedelta

import numpy as np

from ingest import samples
from ingest.checks import CHECKS, Seen, stated
from ingest.conditions import ANSWERS, NOT_CHECKED, Codes, takes_part
from ingest.readings import Readings
from ingest.steps import STEP_LOOKS_AHEAD, STEP_LOOKS_BACK
from ingest.stuck import STUCK_GAP, STUCK_LOOKS_AHEAD, STUCK_LOOKS_BACK, repeats
from ingest.unit import Instrument, Unit

# Why the raw sum of an analyzer says nothing although its band is stated.
NORMALISED = "the sum is constant to rounding: the results are normalised, and their sum cannot test them"


@dataclass(frozen=True, slots=True)
class Finding:
    """What one check says of the readings of one instrument: how many got each of ANSWERS.

    `reason` says why it did not look at them; empty where it did.
    """

    instrument: str
    check: str
    counts: tuple[int, ...]
    reason: str

    @property
    def answer(self) -> int:
        """Give the worst answer that any reading got, a place in ANSWERS."""
        return max((at for at, count in enumerate(self.counts) if count), default=NOT_CHECKED)


def screened(unit: Unit, readings: Readings) -> tuple[Codes, ...]:
    """Give the condition of every reading of every instrument.

    Parameters
    ----------
    unit : Unit
        m instruments.
    readings : Readings

    Returns
    -------
    tuple of m arrays of int8
        Index into CONDITIONS, one for each reading of the instrument's tag; empty for a declared instrument
        and for a tag without readings.
    """
    seen = Seen.first(unit, readings)
    for check in CHECKS.values():
        seen.fold(check.run(seen), check)
    return tuple(seen.codes)


def tally(unit: Unit, readings: Readings) -> tuple[Finding, ...]:
    """Count what every check says of every instrument.

    Parameters
    ----------
    unit : Unit
    readings : Readings

    Returns
    -------
    tuple of Finding
        For each instrument with a tag and each check, in their order. A reading that an earlier check
        refused is not checked by a later one.
    """
    seen = Seen.first(unit, readings)
    found: list[list[Finding]] = [[] for _ in unit.instruments]
    for name, check in CHECKS.items():
        answers, quiet = check.run(seen), _normalised(seen) if name == "raw sum" else set()
        for at, (one, answer) in enumerate(zip(unit.instruments, answers, strict=True)):
            reason = check.lacks(unit, one) or (NORMALISED if at in quiet else "")
            told = np.int8(NOT_CHECKED) if reason or answer is None else answer
            counted = np.where(takes_part(seen.codes[at]), told, NOT_CHECKED)
            counts = tuple(np.bincount(counted, minlength=len(ANSWERS)).tolist())
            found[at].append(Finding(one.name, name, counts, reason))
        seen.fold(answers, check)
    pairs = zip(unit.instruments, found, strict=True)
    return tuple(finding for one, mine in pairs if one.tag is not None for finding in mine)


def _normalised(seen: Seen) -> set[int]:
    """Where the channels stand whose analyzer gives results that were made to add up."""
    taken = [seen.sample(one) for one in seen.unit.analyzers if one.sum_band]
    return {
        at
        for one in taken
        if one is not None and one.whole and samples.is_normalised(one.values, one.members)
        for at in one.at
    }


def not_checked(unit: Unit, instrument: Instrument) -> dict[str, str]:
    """Name the checks that cannot run on an instrument, with the reason.

    Parameters
    ----------
    unit : Unit
    instrument : Instrument
        One of the unit's.

    Returns
    -------
    dict of str to str
        Check to reason; empty when every check runs.
    """
    if instrument.tag is None:
        return dict.fromkeys(CHECKS, "declared, not measured")
    reasons = {name: check.lacks(unit, instrument) for name, check in CHECKS.items()}
    return {name: reason for name, reason in reasons.items() if reason}


def looks_back(unit: Unit, instrument: Instrument) -> timedelta:
    """Give how long before a reading its condition can depend on other readings.

    Parameters
    ----------
    unit : Unit
    instrument : Instrument
        One of the unit's.

    Returns
    -------
    timedelta
        What each check that runs needs, one on top of the other, since each sees what the former left.
    """
    analyzer = stated(unit, instrument)
    if analyzer is None:
        return _own_back(instrument)
    members = [one for one in unit.instruments if one.analyzer == analyzer.name]
    status = [one.max_age for one in unit.instruments if one.name == analyzer.status]
    # A result may stand beside those of other channels for one more cycle.
    beside = max(one.cycle for one in members)
    return max(map(_own_back, members)) + sum(status, analyzer.settle) + 2 * beside


def looks_ahead(unit: Unit, instrument: Instrument) -> timedelta:
    """Give how long after a reading its condition can depend on other readings.

    Parameters
    ----------
    unit : Unit
    instrument : Instrument
        One of the unit's.

    Returns
    -------
    timedelta
        What being sure of a stuck analyzer or channel and of a spike needs; for a channel, the most that any
        of its analyzer does, since it is judged beside the others.
    """
    if stated(unit, instrument) is None:
        return _own_ahead(instrument)
    return max(_own_ahead(one) for one in unit.instruments if one.analyzer == instrument.analyzer)


def _own_ahead(instrument: Instrument) -> timedelta:
    """What being stuck and stepping need to look ahead on one channel."""
    cycles = STUCK_LOOKS_AHEAD if instrument.analyzer is not None else 0
    if instrument.longest_repeat is not None:
        cycles = max(cycles, repeats(instrument.longest_repeat) + 1)
    return (cycles + (STEP_LOOKS_AHEAD if instrument.largest_step is not None else 0)) * instrument.cycle


def _own_back(instrument: Instrument) -> timedelta:
    """What being stuck and stepping need to look back on one channel."""
    cycles = STUCK_LOOKS_BACK if instrument.analyzer is not None else 0
    if instrument.longest_repeat is not None:
        cycles = max(cycles, repeats(instrument.longest_repeat) + STUCK_GAP)
    back = cycles * instrument.cycle
    if instrument.largest_step is not None:
        back += STEP_LOOKS_BACK * instrument.cycle + instrument.max_age
    return back
