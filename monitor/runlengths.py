"""How long a control chart runs before it alarms, and which threshold gives the run length wanted.

Charts see independent normal values of unit standard deviation and say when they moved by `shift`. Run
lengths are counted in values; the one that alarms is counted. Each is the solution of the integral equation
of the chart on Gauss-Legendre nodes (the limit of the Markov chain of Brook & Evans as its cells shrink).
Sources: Page 1954, Brook & Evans 1972, Crowder 1987, Champ & Woodall 1987, Siegmund 1985 (all from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import ndtr

Array = NDArray[np.float64]

ROOT_TWO_PI = math.sqrt(2 * math.pi)
BROWNIAN_EXCESS = 1.166  # twice the mean excess of a normal random walk over a far boundary (Siegmund 1985)
NODES_PER_SD = 5  # an integrand as smooth as a normal density is then exact to eight digits and more
LEAST_NODES = 40
WIDEST = 500.0  # no threshold is looked for beyond so many standard deviations
LEAST_TOTALS, LASTS, REACH_SD = 14, 14, 5.0  # nodes that keep run lengths of autocorrelated values within 2 %
LONGEST, TELLING = 1e5, 2e4  # the longest that can be told so, and one that is told well
ERRORS, MATCHES = 7, 3  # errors of an expectation looked at; rounds until the excess has settled
SPAN = 0.25  # share of the wanted interval in which charts are counted


@dataclass(frozen=True, slots=True)
class Rule:
    """An alarm once `count` of the last `among` values lie beyond `limit` standard deviations on one side."""

    count: int
    among: int
    limit: float


def cusum(reference: float, threshold: float, shift: float = 0.0, *, head_start: float = 0.0) -> float:
    """Average run length of a one-sided tabular CUSUM, S = max(0, S + x - reference), alarm at S > threshold.

    Parameters
    ----------
    reference : float
        What is taken off each value, half of the shift to find [sd].
    threshold : float
        Not negative [sd].
    shift : float
        Mean of the values [sd].
    head_start : float
        Where the sum starts [sd].

    Returns
    -------
    float
        [values]
    """
    node, weight = _nodes(0.0, threshold, sd=1.0)
    place = np.concatenate([[0.0], node])
    drop = reference - shift
    step = np.column_stack([ndtr(drop - place), weight * _density(node - place[:, None] + drop)])
    length = np.linalg.solve(np.eye(len(place)) - step, np.ones(len(place)))
    from_start = np.concatenate([[ndtr(drop - head_start)], weight * _density(node - head_start + drop)])
    return float(1.0 + from_start @ length)


def cusum_two_sided(
    reference: float, threshold: float, shift: float = 0.0, *, head_start: float = 0.0
) -> float:
    """Average run length of two tabular CUSUMs, one for rises and one for falls.

    Parameters
    ----------
    reference, threshold, shift : float
        As in `cusum`.
    head_start : float
        Where both sums start [sd].

    Returns
    -------
    float
        [values]

    Notes
    -----
    Kemp 1961 and Lucas & Crosier 1982: exact, since the two sums are never near their thresholds together.
    """
    up, down = (cusum(reference, threshold, one) for one in (shift, -shift))
    if head_start == 0.0:
        return up * down / (up + down)
    up_at, down_at = (cusum(reference, threshold, one, head_start=head_start) for one in (shift, -shift))
    return (up_at * down + up * down_at - up * down) / (up + down)


def ewma(weight: float, limit: float, shift: float = 0.0) -> float:
    """Average run length of an exponentially weighted moving average between two limits.

    Parameters
    ----------
    weight : float
        Of the newest value, above 0 and up to 1.
    limit : float
        Distance of both limits from the centre, in standard deviations of the average when it has settled.
    shift : float
        Mean of the values [sd].

    Returns
    -------
    float
        [values]
    """
    edge = limit * math.sqrt(weight / (2.0 - weight))
    node, share = _nodes(-edge, edge, sd=weight)
    place = np.concatenate([[0.0], node])
    step = share / weight * _density((node - (1.0 - weight) * place[:, None]) / weight - shift)
    length = np.linalg.solve(np.eye(len(node)) - step[1:], np.ones(len(node)))
    return float(1.0 + step[0] @ length)


def cusum_autocorrelated(reference: float, threshold: float, shift: float = 0.0, *, phi: float) -> float:
    """Average run length of a one-sided tabular CUSUM on values that depend on the one before.

    Parameters
    ----------
    reference, threshold, shift : float
        As in `cusum`; the standard deviation is that of the values.
    phi : float
        Correlation of a value with the one before it, of a first-order autoregression; 0 to below 1.

    Returns
    -------
    float
        [values], from a sum of zero and a value drawn from all values; infinite where it is beyond 1e5.

    Notes
    -----
    The integral equation of `cusum` with the last value as second variable, solved on Chebyshev nodes.
    """
    long_run, spread = math.sqrt((1 + phi) / (1 - phi)), math.sqrt(1.0 - phi**2)
    if _siegmund_at((shift - reference) / long_run, threshold / long_run) > LONGEST:
        return math.inf  # without the excess over the threshold already
    totals = _chebyshev(0.0, threshold, LEAST_TOTALS + int(threshold / 2.5))
    lasts = _chebyshev(-REACH_SD, REACH_SD, LASTS)
    total, last = (axis.ravel() for axis in np.meshgrid(totals, lasts, indexing="ij"))
    low, high = (np.clip(phi * last + side * REACH_SD * spread, -REACH_SD, REACH_SD) for side in (-1, 1))
    zero = np.clip(reference - shift - total, low, high)  # below it the sum is set back to zero
    alarm = np.clip(reference - shift - total + threshold, low, high)
    step = np.zeros((len(total), len(totals), len(lasts)))
    for first, end in ((low, zero), (zero, (zero + alarm) / 2), ((zero + alarm) / 2, alarm)):
        value, weight = _between(first, end)
        weight *= _density((value - phi * last[:, None]) / spread) / spread
        after = np.clip(total[:, None] + value - reference + shift, 0.0, threshold)
        step += (weight[..., None] * _basis(totals, after)).transpose(0, 2, 1) @ _basis(lasts, value)
    length = np.linalg.solve(np.eye(len(total)) - step.reshape(len(total), -1), np.ones(len(total)))
    value, weight = _nodes(-REACH_SD, REACH_SD, sd=1.0)
    found = float(weight * _density(value) @ _basis(lasts, value) @ length[: len(lasts)])
    return found if 1.0 <= found <= LONGEST else math.inf


def rules(which: Sequence[Rule], shift: float = 0.0) -> float:
    """Average run length of a chart with limits that values may cross so many times in so many.

    Parameters
    ----------
    which : sequence of Rule
        Any of them alarms.
    shift : float
        Mean of the values [sd].

    Returns
    -------
    float
        [values]
    """
    edges = sorted({rule.limit * side for rule in which for side in (-1.0, 1.0)})
    bounds = np.concatenate([[0.0], ndtr(np.array(edges) - shift), [1.0]])
    chance = np.diff(bounds)
    inside = np.convolve([-math.inf, *edges, math.inf], [0.5, 0.5], "valid")
    values = np.where(np.isinf(inside), np.sign(inside) * (max(edges) + 1.0), inside)
    states, moves = _histories(which, values.tolist())
    step = np.zeros((len(states), len(states)))
    for origin, target, zone in moves:
        step[origin, target] += chance[zone]
    return float(np.linalg.solve(np.eye(len(states)) - step, np.ones(len(states)))[0])


def siegmund(reference: float, threshold: float, shift: float = 0.0) -> float:
    """Siegmund's formula for the average run length of a one-sided tabular CUSUM.

    Parameters
    ----------
    reference, threshold, shift : float
        As in `cusum`.

    Returns
    -------
    float
        [values]; close where reference less shift is well below one standard deviation.
    """
    return _siegmund_at(shift - reference, threshold + BROWNIAN_EXCESS)


def cusum_threshold(reference: float, wanted: float) -> float:
    """Give the threshold at which a one-sided CUSUM runs so long while nothing moved.

    Parameters
    ----------
    reference : float
        As in `cusum` [sd].
    wanted : float
        Average run length without a shift, above one [values].

    Returns
    -------
    float
        [sd]; 0 where even single values beyond the reference are rarer than that.
    """
    return _matched(lambda threshold: cusum(reference, threshold), wanted)


def drift_threshold(reference: float, wanted: float, *, phi: float, unsure: float) -> float:
    """Give the threshold of a one-sided CUSUM on deviations from an expectation that may itself be off.

    Parameters
    ----------
    reference : float
        As in `cusum`, in standard deviations of the values.
    wanted : float
        Mean time between false alarms [values].
    phi : float
        As in `cusum_autocorrelated`.
    unsure : float
        Standard error of the expectation, at most half of the reference [sd].

    Returns
    -------
    float
        [sd]; at least the reference, so that no single value alarms that moved less than twice that.

    Notes
    -----
    The share of charts that alarm within a quarter of `wanted`, over all the errors that the expectation may
    have, is what it would be at that rate without any. Errors enter by Siegmund's formula with the long-run
    standard deviation; its excess over the threshold is that of the integral equation without errors.
    """
    long_run = math.sqrt((1 + phi) / (1 - phi))
    error, weight = np.polynomial.hermite_e.hermegauss(ERRORS)
    drifts = ((unsure * error - reference) / long_run).tolist()

    def alarms(height: float) -> float:
        rates = np.array([SPAN * wanted / _siegmund_at(drift, height) for drift in drifts])
        return float(weight @ -np.expm1(-rates)) / float(weight.sum())

    height = _falling(alarms, -math.expm1(-SPAN), 1.0)
    return max(reference, height * long_run - _excess(reference, min(wanted, TELLING), phi))


def _excess(reference: float, wanted: float, phi: float) -> float:
    """How much higher than a threshold the one of Siegmund's formula is at a run length [sd]."""
    long_run = math.sqrt((1 + phi) / (1 - phi))
    height = _height_of(reference / long_run, wanted) * long_run
    excess = BROWNIAN_EXCESS * long_run
    for _ in range(MATCHES):
        threshold = max(reference, height - excess)
        length = cusum_autocorrelated(reference, threshold, phi=phi)
        excess = _height_of(reference / long_run, min(length, LONGEST)) * long_run - threshold
    return excess


def ewma_limit(weight: float, wanted: float) -> float:
    """Give the limit at which a moving average runs so long while nothing moved.

    Parameters
    ----------
    weight : float
        As in `ewma`.
    wanted : float
        Average run length without a shift, above one [values].

    Returns
    -------
    float
        In standard deviations of the average when it has settled.
    """
    return _matched(lambda limit: ewma(weight, limit), wanted)


def brownian_delay(shift: float, variance_rate: float, wanted: float) -> float:
    """Mean delay of the best CUSUM on continuous noise, the yardstick that no chart on data can beat.

    Parameters
    ----------
    shift : float
        Size of the step, which the chart is made for [any unit].
    variance_rate : float
        Long-run variance of the noise [that unit squared times time].
    wanted : float
        Mean time between false alarms [time].

    Returns
    -------
    float
        [time]

    Notes
    -----
    With m = shift squared over variance rate, nu solves (2 / m)(exp(nu) - nu - 1) = wanted; the delay is
    (2 / m)(exp(-nu) + nu - 1). Lorden 1971, Moustakides 1986 (from memory).
    """
    scale = variance_rate / shift**2
    nu = brentq(lambda x: math.expm1(x) - x - wanted / (2 * scale), 1e-9, 700.0)
    return float(2 * scale * (math.expm1(-nu) + nu))


def _siegmund_at(drift: float, height: float) -> float:
    """Mean time for a Brownian motion kept above zero to reach a height, finite for any argument."""
    if abs(drift) * height < 1e-6:
        return height**2
    steep = min(-2 * drift * height, 600.0)
    return (math.exp(steep) + 2 * drift * height - 1) / (2 * drift**2)


def _height_of(reference: float, length: float) -> float:
    """Height at which Siegmund's formula gives a run length."""
    return float(brentq(lambda height: math.log(_siegmund_at(-reference, height) / length), 1e-6, WIDEST))


def _falling(share: Callable[[float], float], wanted: float, first: float) -> float:
    """Find the argument at which a falling function is what is wanted; the widest if it never is."""
    high = first
    while share(high) > wanted and high < WIDEST:
        high *= 1.5
    if share(high) > wanted:
        return high
    return float(brentq(lambda height: share(height) - wanted, first * 1e-3, high))


def _nodes(low: float, high: float, *, sd: float) -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights of an interval, close enough for a density of that spread."""
    node, weight = np.polynomial.legendre.leggauss(LEAST_NODES + math.ceil(NODES_PER_SD * (high - low) / sd))
    half = (high - low) / 2
    return low + half * (node + 1.0), half * weight


def _chebyshev(low: float, high: float, count: int) -> Array:
    """Chebyshev nodes of an interval, its ends among them, ascending."""
    return low + (high - low) * (1.0 - np.cos(np.pi * np.arange(count) / (count - 1))) / 2.0


def _basis(nodes: Array, at: Array) -> Array:
    """Weights of the values at Chebyshev nodes in the polynomial through them, one row for each place."""
    sign = (-1.0) ** np.arange(len(nodes))
    sign[[0, -1]] /= 2.0
    apart = at[..., None] - nodes
    met = apart == 0.0
    parts = sign / np.where(met, 1.0, apart)
    through = parts / parts.sum(axis=-1, keepdims=True)
    return np.asarray(np.where(met.any(axis=-1, keepdims=True), met, through), dtype=np.float64)


def _between(first: Array, end: Array) -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights of many intervals (intervals, nodes); some may be empty."""
    node, weight = np.polynomial.legendre.leggauss(16)
    half = (end - first)[:, None] / 2.0
    return first[:, None] + half * (node + 1.0), half * weight


def _density(value: Array) -> Array:
    """Normal density."""
    return np.asarray(np.exp(-0.5 * value**2) / ROOT_TWO_PI)


def _matched(length: Callable[[float], float], wanted: float) -> float:
    """Find the argument, not negative, at which a growing run length is what is wanted."""
    if not wanted > 1.0:
        msg = f"a run length of {wanted:g} values cannot be wanted; it has to be above one"
        raise ValueError(msg)

    def excess(argument: float) -> float:
        return math.log(length(argument) / wanted)

    if excess(0.0) >= 0.0:
        return 0.0
    high = 1.0
    while excess(high) < 0.0 and high < WIDEST:
        high *= 1.5
    return float(brentq(excess, 0.0, high, xtol=1e-10))


def _histories(
    which: Sequence[Rule], values: list[float]
) -> tuple[dict[Any, int], list[tuple[int, int, int]]]:
    """Give the histories that can be met without an alarm, and each move between them by zone."""
    sided = [(rule, side) for rule in which for side in (-1.0, 1.0)]
    start = tuple((False,) * (rule.among - 1) for rule, _ in sided)
    states, moves, waiting = {start: 0}, [], [start]
    while waiting:
        state = waiting.pop()
        for zone, value in enumerate(values):
            seen = [
                (side * value > rule.limit, *past) for (rule, side), past in zip(sided, state, strict=True)
            ]
            if any(sum(hits) >= rule.count for hits, (rule, _) in zip(seen, sided, strict=True)):
                continue
            after = tuple(_kept(hits, rule) for hits, (rule, _) in zip(seen, sided, strict=True))
            if after not in states:
                states[after] = len(states)
                waiting.append(after)
            moves.append((states[state], states[after], zone))
    return states, moves


def _kept(hits: tuple[bool, ...], rule: Rule) -> tuple[bool, ...]:
    """Drop the oldest value, and hits that can no longer be part of an alarm."""
    ahead = [rule.among - age for age in range(1, rule.among)]
    return tuple(
        hit and sum(hits[: place + 1]) + ahead[place] >= rule.count
        for place, hit in enumerate(hits[: rule.among - 1])
    )
