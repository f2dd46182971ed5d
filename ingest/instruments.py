"""How each kind of instrument sees the state.

Every instrument of a balance is linear-fractional in the molar flows n [kmol/h]: it predicts
`numerator . n` (a flow) or `(numerator . n) / (denominator . n)` (a fraction, a ratio of flows). Two
constant rows are therefore all that the solver has to know about an instrument; its gradient follows.
A new kind is a new row in `KINDS` and nothing else changes.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import timedelta

import numpy as np
from numpy.typing import NDArray

from ingest.unit import BALANCE_KINDS, Instrument, Uncertainty, Unit

Floats = NDArray[np.float64]
Row = tuple[dict[tuple[str, str], float], dict[tuple[str, str], float]]

GAS_CONSTANT_KPA_M3_PER_KMOL_K = 8.31446261815324  # CODATA 2018/2022, exact


@dataclass(frozen=True, slots=True)
class Measured:
    """The readings of all balance instruments in base units, with their standard uncertainties (k = 1).

    Parameters
    ----------
    reading : array (m, t)
        Base values; NaN where no reading takes part.
    random : array (m, t)
        Standard uncertainty of one independent result, widened for cells seen only in part.
    systematic : array (m, t)
        Standard uncertainty of the calibration.
    loading : array (m, s, t)
        Change of each reading per one standard deviation of each shared error.
    averaged : array (m, t)
        Factor on the random variance for the mean over one cell (below 1 when a cell holds several results).
    """

    reading: Floats
    random: Floats
    systematic: Floats
    loading: Floats
    averaged: Floats

    @property
    def variance(self) -> Floats:
        """Give the variance of each reading without its shared part, array (m, t)."""
        return self.random**2 * self.averaged + self.systematic**2

    def take(self, place: NDArray[np.intp]) -> Measured:
        """Give the readings of some cells only.

        Parameters
        ----------
        place : array (t',)
            Which cells.
        """
        return Measured(
            reading=self.reading[:, place],
            random=self.random[:, place],
            systematic=self.systematic[:, place],
            loading=self.loading[:, :, place],
            averaged=self.averaged[:, place],
        )


def balance_instruments(unit: Unit) -> tuple[Instrument, ...]:
    """Give the instruments that take part in the balance, in the unit's order.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return tuple(one for one in unit.instruments if one.kind in BALANCE_KINDS)


def balance_columns(unit: Unit) -> NDArray[np.intp]:
    """Give where the balance instruments stand on the unit's instrument axis.

    Parameters
    ----------
    unit : Unit
        The reactor.
    """
    return np.flatnonzero([one.kind in BALANCE_KINDS for one in unit.instruments])


def rows(unit: Unit, state: tuple[tuple[str, str], ...]) -> tuple[Floats, Floats]:
    """Give numerator and denominator rows of every balance instrument; a denominator of zeros means none.

    Parameters
    ----------
    unit : Unit
        The reactor.
    state : tuple of (stream, species)
        The state axis, length N.

    Returns
    -------
    numerator, denominator : arrays (m, N)
        Weights on molar flows [1 or kg/kmol].
    """
    place = {name: index for index, name in enumerate(state)}
    seen = balance_instruments(unit)
    numerator, denominator = np.zeros((2, len(seen), len(state)))
    for i, instrument in enumerate(seen):
        upper, lower = KINDS[instrument.kind](instrument, _Chemistry.of(unit))
        for name, weight in upper.items():
            numerator[i, place[name]] = weight
        for name, weight in lower.items():
            denominator[i, place[name]] = weight
    return numerator, denominator


@dataclass(frozen=True, slots=True)
class _Chemistry:
    """What a row needs of the unit: species of each stream and their molar masses."""

    species_of: Mapping[str, tuple[str, ...]]
    mass: Mapping[str, float]

    @classmethod
    def of(cls, unit: Unit) -> _Chemistry:
        return cls(
            {stream.name: stream.species for stream in unit.streams},
            {one.name: one.molar_mass_kg_kmol for one in unit.species},
        )

    def moles(self, stream: str | None, kept: tuple[str, ...] | None = None) -> dict[tuple[str, str], float]:
        assert stream is not None  # noqa: S101  the unit file has checked it
        names = self.species_of[stream] if kept is None else kept
        return {(stream, name): 1.0 for name in names}

    def masses(self, stream: str | None, kept: tuple[str, ...] | None = None) -> dict[tuple[str, str], float]:
        return {name: self.mass[name[1]] for name in self.moles(stream, kept)}

    def sample(self, instrument: Instrument) -> tuple[str, ...]:
        assert instrument.stream is not None  # noqa: S101  the unit file has checked it
        present = self.species_of[instrument.stream]
        return tuple(name for name in present if name not in instrument.left_out)


def _moles(instrument: Instrument, chemistry: _Chemistry) -> Row:
    return chemistry.moles(instrument.stream), {}


def _mass(instrument: Instrument, chemistry: _Chemistry) -> Row:
    return chemistry.masses(instrument.stream), {}


def _species_moles(instrument: Instrument, chemistry: _Chemistry) -> Row:
    return chemistry.moles(instrument.stream, instrument.species), {}


def _mole_fraction(instrument: Instrument, chemistry: _Chemistry) -> Row:
    sample = chemistry.sample(instrument)
    return chemistry.moles(instrument.stream, instrument.species), chemistry.moles(instrument.stream, sample)


def _mass_fraction(instrument: Instrument, chemistry: _Chemistry) -> Row:
    sample = chemistry.sample(instrument)
    return chemistry.masses(instrument.stream, instrument.species), chemistry.masses(
        instrument.stream, sample
    )


def _ratio(instrument: Instrument, chemistry: _Chemistry) -> Row:
    return chemistry.moles(instrument.stream), chemistry.moles(instrument.per_stream)


def _differential_pressure(instrument: Instrument, chemistry: _Chemistry) -> Row:
    """What a differential pressure stands for: the root of mass flow times molar flow, as their mean.

    A meter that is read with the design molar mass M shows sqrt((mass / M) moles) in kmol/h. The mean of
    mass / M and moles, which is a row, is the same but for (ln r)^2 / 8, r the true molar mass over M:
    0.1 % at 10 % off the design, 0.4 % at 20 %.
    """
    design = instrument.design_molar_mass_kg_kmol
    assert design is not None  # noqa: S101  the unit file has checked it
    masses = chemistry.masses(instrument.stream)
    return {name: (mass / design + 1.0) / 2.0 for name, mass in masses.items()}, {}


# A volume flow is a molar flow once its reference conditions (or its P and T readings) are taken in.
KINDS: Mapping[str, Callable[[Instrument, _Chemistry], Row]] = {
    "molar flow": _moles,
    "mass flow": _mass,
    "volume flow": _moles,
    "actual volume flow": _moles,
    "differential pressure flow": _differential_pressure,
    "species flow": _species_moles,
    "mole fraction": _mole_fraction,
    "mass fraction": _mass_fraction,
    "flow ratio": _ratio,
}


def measured(unit: Unit, value: Floats, share: NDArray[np.float32]) -> Measured:
    """Give the readings of the balance instruments in base units with their uncertainties.

    Parameters
    ----------
    unit : Unit
        The reactor.
    value : array (t, m_all)
        Cell means of all instruments, each in its own unit; NaN where none is valid.
    share : array (t, m_all)
        Valid share of each cell, 0 to 1.

    Returns
    -------
    Measured
        A reading whose stated uncertainty is zero at that reading (no floor, value 0) takes no part.
        A flow that needs a pressure and a temperature reading takes no part without them.
    """
    seen = balance_instruments(unit)
    columns = balance_columns(unit)
    own = value[:, columns].T
    part = np.clip(share[:, columns].T.astype(np.float64), 1e-3, 1.0)
    slope = _slope(unit, value)
    scale = np.array([one.to_base for one in seen])[:, None] * slope
    offset = np.array([one.offset for one in seen])[:, None]
    reading = (own + offset) * scale
    random = _own([one.random for one in seen], own) * scale / np.sqrt(part)
    systematic = _own([one.systematic for one in seen], own) * scale
    random, systematic = _with_state_of_gas(unit, value, reading, random, systematic)
    cell = unit.cell / timedelta(hours=1)
    cycle = np.array([one.cycle / timedelta(hours=1) for one in seen])[:, None]
    blind = ~(random**2 + systematic**2 > 0)
    return Measured(
        reading=np.where(blind, np.nan, reading),
        random=random,
        systematic=systematic,
        loading=_loading(unit, reading),
        averaged=np.broadcast_to(np.minimum(1.0, cycle / cell), reading.shape),
    )


def _own(uncertainties: list[Uncertainty], own: Floats) -> Floats:
    relative = np.array([one.relative for one in uncertainties])[:, None]
    floor = np.array([one.floor for one in uncertainties])[:, None]
    return np.asarray(relative * np.abs(own) + floor)


def _loading(unit: Unit, reading: Floats) -> Floats:
    names = [one.name for one in balance_instruments(unit)]
    loading = np.zeros((len(names), len(unit.shared), reading.shape[1]))
    for s, shared in enumerate(unit.shared):
        for name in shared.instruments:
            i = names.index(name)
            loading[i, s] = shared.relative * np.abs(np.nan_to_num(reading[i]))
    return loading


def _slope(unit: Unit, value: Floats) -> Floats:
    """Give what turns each base value into kmol/h: the density of the gas at the meter, 1 without one."""
    slope = np.ones((len(balance_instruments(unit)), len(value)))
    for i, instrument in enumerate(balance_instruments(unit)):
        if instrument.pressure is not None:
            pressure, temperature = (reading for reading, _, _ in _gas(unit, instrument, value))
            kmol_m3 = pressure / (GAS_CONSTANT_KPA_M3_PER_KMOL_K * temperature)
            slope[i] = (kmol_m3 / (instrument.design_kmol_m3 or 1.0)) ** _power(instrument)
    return slope


def _power(instrument: Instrument) -> float:
    """Give the power in which a flow goes with the density of its gas (orifice: ISO 5167-2, from memory)."""
    return 0.5 if instrument.kind == "differential pressure flow" else 1.0


def _gas(unit: Unit, instrument: Instrument, value: Floats) -> list[tuple[Floats, Floats, Floats]]:
    """Give (reading, random, systematic) in kPa and in K of the gas at a meter."""
    names = [one.name for one in unit.instruments]
    found = []
    for name in (instrument.pressure, instrument.temperature):
        assert name is not None  # noqa: S101  the unit file has checked it
        at = names.index(name)
        helper, own = unit.instruments[at], value[:, at]
        parts = (_own([one], own[None])[0] * helper.to_base for one in (helper.random, helper.systematic))
        state = (own + helper.offset) * helper.to_base
        # A gas at no pressure or at 0 K is a meter out of order.
        found.append((np.where(state > 0, state, np.nan), *parts))
    return found


def _with_state_of_gas(
    unit: Unit, value: Floats, reading: Floats, random: Floats, systematic: Floats
) -> tuple[Floats, Floats]:
    """Widen flows by the errors of the pressure and temperature they are read with (JCGM 100, 5.1.6)."""
    random, systematic = random.copy(), systematic.copy()
    for i, instrument in enumerate(balance_instruments(unit)):
        if instrument.pressure is not None:
            for state, u_random, u_systematic in _gas(unit, instrument, value):
                share = _power(instrument) * reading[i] / state
                random[i] = np.hypot(random[i], share * u_random)
                systematic[i] = np.hypot(systematic[i], share * u_systematic)
    return random, systematic
