"""What instruments say about the truth: calibration errors, noise, dead time, and the faults put in.

The error of a reading is exactly what the unit file states: one draw of the systematic part for each
instrument and each shared error, one draw of the random part for each independent result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from demo_data import scenario
from demo_data.kinetics import GAS_CONSTANT_KJ_MOL_K, Floats
from demo_data.plant import STATE, Truth
from demo_data.scenario import Calibration, Event
from ingest.readings import Readings, Series
from ingest.unit import Instrument, Uncertainty, Unit

MARKS = ("good", "calibration", "no number", "not stored")
GOOD, CALIBRATION, NO_NUMBER, NOT_STORED = range(4)

LOST = {"reading lost": NO_NUMBER, "historian gap": NOT_STORED}

GAS_CONSTANT_KPA_M3_KMOL_K = GAS_CONSTANT_KJ_MOL_K * 1e3
# Auxiliary instruments see what the truth holds beside the flows.
AUXILIARY = {"PI-211": "outlet_kpa", "TI-212": "outlet_degc", "TI-205": "bath_degc"}
# Last digit that the historian keeps, by unit.
DECIMALS = {"kg/h": 1, "m3/h": 1, "kPa": 2, "degC": 2, "mol%": 4}
# Certificate of the calibration gas, dry mol% [invented].
CALIBRATION_GAS_PCT = {
    "isobutene": 1.0,
    "oxygen": 5.0,
    "methacrolein": 5.0,
    "methacrylic acid": 0.5,
    "acetic acid": 0.5,
    "acetone": 0.5,
    "carbon monoxide": 2.0,
    "carbon dioxide": 2.0,
    "nitrogen": 83.0,
    "isobutane": 0.5,
}


@dataclass(frozen=True, slots=True)
class Results:
    """Independent results of one tag: time stamp UTC [us], value in its own unit, index into `MARKS`."""

    time: NDArray[np.int64]
    value: Floats  # NaN where marked "no number" or "not stored"
    mark: NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class Measured:
    """All results by tag, and the standard systematic errors drawn (multiples of k = 1) by source."""

    results: dict[str, Results]
    drawn: dict[str, float]


def true_reading(instrument: Instrument, truth: Truth, unit: Unit) -> Floats:
    """What a perfect instrument would show at every minute, in its own unit.

    Parameters
    ----------
    instrument : Instrument
        One of the demo unit's.
    truth : Truth
        What truly happened.
    unit : Unit
        The demo unit, for molar masses.

    Returns
    -------
    array, shape (t,)
        In the instrument's own unit.
    """
    if instrument.stream is None:
        base = getattr(truth, AUXILIARY[instrument.name]) + (
            273.15 if instrument.kind == "temperature" else 0.0
        )
        return np.asarray(base / instrument.to_base - instrument.offset)
    flow = truth.flow_kmol_h[:, [stream == instrument.stream for stream, _ in STATE]]
    species = [name for stream, name in STATE if stream == instrument.stream]
    seen = np.array([name not in instrument.left_out for name in species])
    counted = np.array([name in instrument.species for name in species])
    if instrument.kind == "mass flow":
        mass = {s.name: s.molar_mass_kg_kmol for s in unit.species}
        base = flow @ np.array([mass[name] for name in species])
    elif instrument.kind == "mole fraction":
        base = flow[:, counted].sum(axis=1) / flow[:, seen].sum(axis=1)
    elif instrument.kind == "actual volume flow":
        volume = GAS_CONSTANT_KPA_M3_KMOL_K * (truth.outlet_degc + 273.15) / truth.outlet_kpa
        base = flow.sum(axis=1) * volume
    elif instrument.kind in ("volume flow", "molar flow"):
        base = flow.sum(axis=1)
    else:
        raise KeyError(instrument.kind)
    return np.asarray(base / instrument.to_base - instrument.offset)


def measure(
    truth: Truth,
    unit: Unit,
    seed: int,
    *,
    calibrations: tuple[Calibration, ...] = (),
    events: Sequence[Event] | None = None,
) -> Measured:
    """Read every instrument of the unit that has a tag; the same arguments give the same readings.

    Parameters
    ----------
    truth : Truth
        What `simulate` gave.
    unit : Unit
        Instruments and their stated uncertainties.
    seed : int
        Of all errors; another seed is another set of instruments.
    calibrations : tuple of Calibration
        When analyzers are off their sample.
    events : sequence of Event, optional
        Faults put in; those of the truth when left out.

    Returns
    -------
    Measured
        Results by tag. Values are rounded to what the historian keeps.
    """
    draws, *noise = np.random.default_rng(seed).spawn(1 + len(unit.instruments))
    names = [i.name for i in unit.instruments if i.tag and i.kind != "signal"] + [s.name for s in unit.shared]
    drawn = dict(zip(names, draws.standard_normal(len(names)).tolist(), strict=True))
    happened = truth.events if events is None else tuple(events)
    results = {}
    for instrument, rng in zip(unit.instruments, noise, strict=True):
        if instrument.tag and instrument.kind != "signal":
            perfect = _sampled(instrument, truth, unit, calibrations)
            shared = [s.relative * drawn[s.name] for s in unit.shared if instrument.name in s.instruments]
            value = perfect.value * (1 + sum(shared))
            value += drawn[instrument.name] * _size(instrument.systematic, perfect.value)
            value += rng.standard_normal(len(value)) * _size(instrument.random, perfect.value)
            results[instrument.tag] = _with_faults(
                instrument, replace(perfect, value=value), happened, truth.time[0]
            )
    return Measured(results, drawn)


def _size(uncertainty: Uncertainty, reading: Floats) -> Floats:
    """Standard uncertainty of readings, in their own unit."""
    return uncertainty.relative * np.abs(reading) + uncertainty.floor


def _us(duration: timedelta) -> int:
    """Give a duration in microseconds."""
    return duration // timedelta(microseconds=1)


def _sampled(
    instrument: Instrument, truth: Truth, unit: Unit, calibrations: tuple[Calibration, ...]
) -> Results:
    """Results without error: sampled once a cycle, stamped after the dead time, at times of the gas."""
    sampled = truth.time[:: max(1, _us(instrument.cycle) // scenario.MINUTE_US)]
    stamp = sampled + _us(instrument.dead_time)
    value = true_reading(instrument, truth, unit)[np.searchsorted(truth.time, sampled)]
    mark = np.full(len(stamp), GOOD, dtype=np.int8)
    if instrument.analyzer:
        off = scenario.calibrating(sampled, calibrations) | scenario.calibrating(stamp, calibrations)
        value = np.where(off, CALIBRATION_GAS_PCT[instrument.species[0]], value)
        mark[off] = CALIBRATION
    stored = stamp <= truth.time[-1]
    return Results(stamp[stored], value[stored], mark[stored])


def _with_faults(instrument: Instrument, healthy: Results, events: Sequence[Event], first_us: int) -> Results:
    """Put the faults of one instrument into its results."""
    value, mark = healthy.value.copy(), healthy.mark.copy()
    for event in events:
        inside = scenario.during(healthy.time, event, first_us)
        if event.tag not in (None, instrument.tag, instrument.analyzer) or not inside.any():
            continue
        if event.kind == "channel drift":
            start, end = scenario.span_us(event, first_us)
            grown = (healthy.time[inside] - start) / (end - start)
            value[inside] *= 1 + grown * event.size / 100
        elif event.kind == "analyzer stuck":
            last = max(int(np.argmax(inside)) - 1, 0)
            value[inside], mark[inside] = value[last], mark[last]
        elif event.kind in LOST:
            value[inside], mark[inside] = np.nan, LOST[event.kind]
    return Results(healthy.time, np.round(value, DECIMALS[instrument.unit]), mark)


def status(truth: Truth, calibrations: tuple[Calibration, ...], dead_time: timedelta) -> Results:
    """Status signal of an analyzer: 1 while its results are of the calibration gas, else 0.

    Parameters
    ----------
    truth : Truth
        For its minutes.
    calibrations : tuple of Calibration
        When the analyzer is off its sample.
    dead_time : timedelta
        Results are of the gas for this much longer.

    Returns
    -------
    Results
        One per minute, all good.
    """
    off = scenario.calibrating(truth.time, calibrations)
    off |= scenario.calibrating(truth.time - _us(dead_time), calibrations)
    return Results(truth.time, off.astype(float), np.zeros(len(off), dtype=np.int8))


def held(results: Results, time_us: NDArray[np.int64]) -> Results:
    """What the historian shows between results: the last one, for as long as it takes.

    Parameters
    ----------
    results : Results
        Independent results.
    time_us : array, shape (t,)
        Times asked for, ascending, UTC [us].

    Returns
    -------
    Results
        One row per time; before the first result NaN, "not stored".
    """
    last = np.searchsorted(results.time, time_us, side="right") - 1
    before = last < 0
    value = np.where(before, np.nan, results.value[last])
    mark = np.where(before, NOT_STORED, results.mark[last]).astype(np.int8)
    return Results(time_us, value, mark)


def as_readings(results: dict[str, Results]) -> Readings:
    """Hand results over as the archive would give them after a faultless intake.

    Parameters
    ----------
    results : dict of Results
        By tag.

    Returns
    -------
    dict of Series
        By tag; good or bad quality, NaN where bad, nothing where nothing was stored.
    """
    readings = {}
    for tag, rows in results.items():
        kept = rows.mark != NOT_STORED
        good = rows.mark[kept] == GOOD
        value = np.where(good, rows.value[kept], np.nan)
        number = np.arange(1, len(good) + 1, dtype=np.int64)
        quality = np.where(good, 2, 0).astype(np.int8)
        readings[tag] = Series(rows.time[kept], value, quality, np.zeros(len(good), dtype=np.int32), number)
    return readings
