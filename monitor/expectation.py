"""What a figure should be at an operating point: learnt from a time that a person called healthy.

The logarithm of the figure is a quadratic of load and operating point and a straight line of catalyst age,
fitted robustly with a penalty (ridge) that stands for how much each may plausibly matter. This makes the fit
a posterior: its covariance says how sure the expectation is, at any point, so it widens by itself outside
of what was seen. Deviations are in percent of the figure (100 times the natural logarithm).
Sources: Hoerl & Kennard 1970 (ridge), Huber 1964 (weights), JCGM 100:2008 (interval); all from memory.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.errors import OutletError
from ingest.unit import FLOW_KINDS, Healthy, Unit
from monitor.noise import Noise, noise_of

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Times = NDArray[np.int64]

DAY_US = 86_400_000_000
LEAST_DAYS, GOOD_DAYS = 10.0, 30.0  # of blocks in a healthy period: refused below, doubtful below
ROUNDS = 6  # of reweighting; weights settle to a part in a thousand in four
HUBER, FAR = 1.5, 3.0  # standard deviations from which on a block counts less, and is no more as noise
MARGIN = 0.5  # standard deviations past the least and most that was seen that are not yet outside
# How much a figure may plausibly change, as standard deviations [%]: with one standard deviation of a
# variable as it moved while healthy, with the square or product of two such, with 30 days of catalyst age.
BY_VARIABLE, BY_PRODUCT, BY_AGE, BY_LEVEL = 1.0, 0.3, 0.5, 100.0
AGE_D = 30.0
NOT_KNOWN = "the operating point is not known"
TWO_SIDED_95 = 1.959963984540054


@dataclass(frozen=True, slots=True)
class Expectation:
    """What was learnt of one figure; v variables, p terms. Made by `fit`, never changed after."""

    figure: str
    first_us: int  # healthy period, from and to before
    last_us: int
    blocks: int  # of them used
    block_us: int
    names: tuple[str, ...]  # (v,)
    centre: Array  # (v,)
    spread: Array  # (v,)
    low: Array  # (v,) least and most that was seen
    high: Array  # (v,)
    weight: Array  # (p,) [%]
    covariance: Array  # (p, p) [%2]
    noise: Noise  # of what is left [%]

    @property
    def days(self) -> float:
        """Give how much healthy running time was used [d]."""
        return self.blocks * self.block_us / DAY_US


@dataclass(frozen=True, slots=True)
class Expected:
    """The expectation at some blocks: logarithm and its standard error [%], and where it lies outside.

    `outside` is the place of the variable that lies furthest outside of what was seen while healthy, in its
    standard deviations, -1 where none does; `beyond` is how far, in the variable's own measure.
    """

    value: Array  # (n,)
    error: Array  # (n,)
    outside: NDArray[np.int64]  # (n,)
    beyond: Array  # (n,)


def variables(unit: Unit) -> tuple[str, ...]:
    """Name what the expectation of a unit depends on, beside catalyst age.

    Parameters
    ----------
    unit : Unit
        Gives load and operating point.

    Returns
    -------
    tuple of str
        Instruments, the load first.
    """
    load = () if unit.operating is None else (unit.operating.load,)
    named = () if unit.healthy is None else unit.healthy.operating_point
    return (*load, *(name for name in named if name not in load))


def points(unit: Unit, readings: Mapping[str, Array]) -> Array:
    """Turn readings of the operating point into the variables of the fit.

    Parameters
    ----------
    unit : Unit
        Gives the kinds of the instruments.
    readings : mapping of str to ndarray, shape (n,)
        Block means by instrument, in its own unit; those of `variables` are taken.

    Returns
    -------
    ndarray, shape (n, v)
        The logarithm of the load, of another flow that of its ratio to the load; all else as it is. NaN where
        a reading is missing, or a flow is not above zero.
    """
    kinds = {one.name: one.kind for one in unit.instruments}
    load = unit.operating.load if unit.operating is not None else None
    columns = []
    for name in variables(unit):
        flows = kinds[name] in FLOW_KINDS
        parts = [_logarithm(readings[name])] if flows else [readings[name]]
        parts += [-_logarithm(readings[load])] if flows and load not in (None, name) else []
        columns.append(np.sum(parts, axis=0))
    return np.column_stack(columns) if columns else np.zeros((len(next(iter(readings.values()), ())), 0))


def logarithm_pct(value: Array) -> Array:
    """Give 100 times the natural logarithm, in which differences are percent of the figure.

    Parameters
    ----------
    value : ndarray, shape (n,)
        In the figure's unit.

    Returns
    -------
    ndarray, shape (n,)
        NaN where the figure is not above zero.
    """
    return np.asarray(100.0 * _logarithm(value))


def fit(
    figure: str,
    healthy: Healthy,
    end_us: Times,
    point: Array,
    value: Array,
    *,
    names: Sequence[str],
    block_us: int,
    usable: Mask,
) -> Expectation:
    """Learn what a figure is at an operating point from its healthy period.

    Parameters
    ----------
    figure : str
        Its name.
    healthy : Healthy
        Gives the period; blocks outside of it are not looked at.
    end_us : ndarray of int64, shape (n,)
        Ends of blocks that do not overlap, ascending [us UTC].
    point : ndarray, shape (n, v)
        As `points` gives it.
    value : ndarray, shape (n,)
        As `logarithm_pct` gives it [%].
    names : sequence of str
        The v variables.
    block_us : int
        Length of a block [us].
    usable : ndarray of bool, shape (n,)
        Blocks that tell of steady running.

    Returns
    -------
    Expectation

    Raises
    ------
    OutletError
        The period holds too little.
    """
    first_us, last_us = (round(moment.timestamp() * 1e6) for moment in (healthy.first, healthy.last))
    inside = usable & (end_us > first_us) & (end_us <= last_us)
    inside &= np.isfinite(value) & np.isfinite(point).all(axis=1)
    days = float(inside.sum()) * block_us / DAY_US
    if days < LEAST_DAYS:
        raise OutletError(
            f"healthy: {days:.1f} days of steady running with '{figure}' from {healthy.first:%F} to "
            f"{healthy.last:%F}; an expectation needs {LEAST_DAYS:g}",
            remedy="Take in the exports of that time, or write a longer healthy period.",
        )
    seen = point[inside]
    spread = seen.std(axis=0)
    spread = np.where(spread > 0.0, spread, 1.0)
    centre = seen.mean(axis=0)
    terms = _terms((seen - centre) / spread, _age(end_us[inside], first_us, last_us))
    weight, covariance, noise = _robust(terms, value[inside], end_us[inside], block_us)
    return Expectation(
        figure=figure,
        first_us=first_us,
        last_us=last_us,
        blocks=int(inside.sum()),
        block_us=block_us,
        names=tuple(names),
        centre=centre,
        spread=spread,
        low=seen.min(axis=0),
        high=seen.max(axis=0),
        weight=weight,
        covariance=covariance,
        noise=noise,
    )


def expected(one: Expectation, end_us: Times, point: Array) -> Expected:
    """Say what a figure should be, how sure that is, and where it was never seen so while healthy.

    Parameters
    ----------
    one : Expectation
        Of the figure.
    end_us : ndarray of int64, shape (n,)
        Ends of blocks [us UTC].
    point : ndarray, shape (n, v)
        As `points` gives it.

    Returns
    -------
    Expected
        NaN where the operating point is not known. Outside of what was seen there is a value all the same,
        with the error that it has there.
    """
    terms = _terms((point - one.centre) / one.spread, _age(end_us, one.first_us, one.last_us))
    error = np.sqrt(np.einsum("np,pq,nq->n", terms, one.covariance, terms, optimize=True))
    outside, beyond = _outside(one, point)
    return Expected(np.asarray(terms @ one.weight), error, outside, beyond)


def band(one: Expectation, end_us: Times, point: Array) -> pd.DataFrame:
    """Give what a person is shown: what was to be expected of each block, or why nothing can be said.

    Parameters
    ----------
    one : Expectation
        Of the figure.
    end_us : ndarray of int64, shape (n,)
        Ends of blocks [us UTC].
    point : ndarray, shape (n, v)
        As `points` gives it.

    Returns
    -------
    DataFrame
        Index `end` (UTC); expected, low and high in the figure's unit, the 95 % prediction interval of a
        block; NaN where `reason` says which variable lies outside of what was seen, or that the point is not
        known. `beyond` says by how much, measured as in `points`.
    """
    told = expected(one, end_us, point)
    refused = (told.outside >= 0) | ~np.isfinite(told.value)
    half = TWO_SIDED_95 * np.hypot(told.error, one.noise.sd)
    bounds = {"expected": told.value, "low": told.value - half, "high": told.value + half}
    shown = {name: np.exp(np.where(refused, np.nan, value) / 100.0) for name, value in bounds.items()}
    words = np.array(
        ["", *(f"{name} lies outside of what was seen while healthy" for name in one.names), NOT_KNOWN]
    )
    place = np.where(np.isfinite(told.value), told.outside + 1, len(words) - 1)
    index = pd.DatetimeIndex(end_us.astype("datetime64[us]"), name="end").tz_localize("UTC")
    return pd.DataFrame({**shown, "reason": words[place], "beyond": told.beyond}, index=index)


def at_usual_point(one: Expectation, point: Array, value: Array) -> Array:
    """Give a figure as it would be at the mean operating point of the healthy period, ageing left in.

    Parameters
    ----------
    one : Expectation
        Of the figure.
    point : ndarray, shape (n, v)
        As `points` gives it.
    value : ndarray, shape (n,)
        As `logarithm_pct` gives it [%].

    Returns
    -------
    ndarray, shape (n,)
        [%]; NaN where either is.
    """
    none = np.zeros(len(point))
    usual = _terms(np.zeros((1, point.shape[1])), none[:1]) @ one.weight
    return np.asarray(value - _terms((point - one.centre) / one.spread, none) @ one.weight + usual)


def document(one: Expectation) -> dict[str, Any]:
    """Give an expectation as what JSON knows, to be kept as a revision.

    Parameters
    ----------
    one : Expectation

    Returns
    -------
    dict
        `from_document` makes the same of it, bit by bit.
    """
    plain = {
        name: (kept.tolist() if isinstance(kept := getattr(one, name), np.ndarray) else kept)
        for name in Expectation.__slots__
        if name != "noise"
    }
    return {**plain, "names": list(one.names), "noise": [one.noise.sd, one.noise.phi]}


def from_document(body: Mapping[str, Any]) -> Expectation:
    """Make an expectation of what `document` gave.

    Parameters
    ----------
    body : mapping
        As it was kept.

    Returns
    -------
    Expectation
    """
    arrays = ("centre", "spread", "low", "high", "weight", "covariance")
    typed = {name: np.array(body[name], dtype=np.float64) for name in arrays}
    return Expectation(**{**body, **typed, "names": tuple(body["names"]), "noise": Noise(*body["noise"])})


def _outside(one: Expectation, point: Array) -> tuple[NDArray[np.int64], Array]:
    """Give the variable that lies furthest outside of what was seen, -1 for none, and how far."""
    beyond = np.maximum(point - one.high, 0.0) + np.minimum(point - one.low, 0.0)
    far = np.concatenate(
        [np.full((len(point), 1), MARGIN), np.nan_to_num(np.abs(beyond) / one.spread)], axis=1
    )
    place = far.argmax(axis=1)
    padded = np.concatenate([np.zeros((len(point), 1)), np.nan_to_num(beyond)], axis=1)
    return place - 1, np.take_along_axis(padded, place[:, None], axis=1)[:, 0]


def _robust(terms: Array, value: Array, end_us: Times, block_us: int) -> tuple[Array, Array, Noise]:
    """Fit with weights that fall for blocks far off; noise and penalty settle together."""
    prior = np.diag(_allowed(terms.shape[1]) ** -2.0)
    share, noise = np.ones(len(value)), Noise(1.0, 0.0)
    for _ in range(ROUNDS):
        weighed = terms * share[:, None]
        covariance = np.linalg.inv(weighed.T @ terms / noise.long_run_sd**2 + prior)
        weight = covariance @ (weighed.T @ value) / noise.long_run_sd**2
        left = value - terms @ weight
        typical = max(1.4826 * float(np.median(np.abs(left - np.median(left)))), 1e-12)
        share = np.minimum(1.0, HUBER * typical / np.maximum(np.abs(left), 1e-12))
        noise = noise_of(end_us, np.clip(left, -FAR * typical, FAR * typical), block_us)
    return np.asarray(weight), np.asarray(covariance, dtype=np.float64), noise


def _terms(scaled: Array, age: Array) -> Array:
    """Terms of the fit: level, age, each variable, each product of two."""
    left, right = np.triu_indices(scaled.shape[1])
    products = scaled[:, left] * scaled[:, right] - (left == right)
    return np.column_stack([np.ones(len(scaled)), age, scaled, products])


def _allowed(count: int) -> Array:
    """How much each term may plausibly matter, as standard deviations [%]; v (v + 3) / 2 + 2 terms."""
    v = round((math.sqrt(8 * count - 7) - 3) / 2)
    return np.array([BY_LEVEL, BY_AGE, *[BY_VARIABLE] * v, *[BY_PRODUCT] * (v * (v + 1) // 2)])


def _age(end_us: Times, first_us: int, last_us: int) -> Array:
    """Catalyst age from that in the middle of the healthy period, in units of 30 days."""
    return np.asarray((end_us - (first_us + last_us) / 2) / (AGE_D * DAY_US))


def _logarithm(value: Array) -> Array:
    """Natural logarithm; NaN where there is none."""
    return np.log(np.where(value > 0.0, value, np.nan))
