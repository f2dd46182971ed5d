"""Which reading is sick? Tests of the residuals, and what each possible cause would explain.

A cause that changes residuals z of covariance C by a per unit has the most likely size
(a' C^-1 z) / (a' C^-1 a) and the likelihood ratio T = (a' C^-1 z)^2 / (a' C^-1 a). The measurement test of
maximum power is sqrt(T) with the sign of the size. Causes that change the residuals alike cannot be told
apart by any data.

Sources, from memory: Almasy & Sztano 1975, Mah & Tamhane 1982, Tamhane & Mah 1985 (measurement test of
maximum power), Narasimhan & Mah 1987 (likelihood ratio and estimate), Ripps 1965 (serial elimination),
Bagajewicz 2000 (equivalent sets), Sidak 1967 (level of several tests).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, chdtri, chndtr, ndtri

from ingest.residuals import Residuals

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

NO_VARIANCE = 1e-12  # of the largest variance; a direction with less cannot be tested
STRENGTH = 10.0  # standard errors at which a cause is beyond doubt
RIVAL = 3.841458820694124  # chi-square, one degree of freedom, 95 %
STOPS = ("passes", "no freedom left", "no cause left that is seen")
PASSES, NO_FREEDOM, NO_CAUSE = range(len(STOPS))


@dataclass(frozen=True, slots=True)
class GlobalTest:
    """Do all readings agree within their uncertainties?

    Parameters
    ----------
    statistic : array (w,)
        Chi-square if nothing is wrong; NaN without a degree of freedom.
    freedom : array (w,)
        Degrees of freedom.
    p_value : array (w,)
        Chance of a statistic at least as large when nothing is wrong; NaN without a degree of freedom.
    """

    statistic: Floats
    freedom: NDArray[np.int64]
    p_value: Floats


@dataclass(frozen=True, slots=True)
class Biases:
    """What each cause alone would explain; NaN for a cause that leaves no trace in the residuals.

    Parameters
    ----------
    names : tuple of str
        The h causes.
    statistic : array (w, h)
        Measurement test of maximum power, standard normal if nothing is wrong; its square is the likelihood
        ratio; the sign is that of the size.
    size : array (w, h)
        Most likely size, in units of the cause.
    standard_error : array (w, h)
        Of the size; 1.96 of it on both sides make the 95 % interval.
    """

    names: tuple[str, ...]
    statistic: Floats
    size: Floats
    standard_error: Floats


@dataclass(frozen=True, slots=True)
class Step:
    """One step of the serial elimination.

    Parameters
    ----------
    suspects : tuple of str
        Causes that explain the most, in the order of the causes; more than one when they cannot be told
        apart.
    rivals : tuple of str
        Other causes whose likelihood ratio comes within `RIVAL` of theirs, most likely first.
    statistic : float
        Measurement test of the first of the suspects, given what was explained before.
    left : float
        Global statistic after this step.
    freedom : int
        Degrees of freedom after this step.
    p_value : float
        Of the global test after this step; NaN when no freedom is left.
    """

    suspects: tuple[str, ...]
    rivals: tuple[str, ...]
    statistic: float
    left: float
    freedom: int
    p_value: float


@dataclass(frozen=True, slots=True)
class Elimination:
    """Which causes, taken one set after the other, make the residuals pass the global test.

    Parameters
    ----------
    steps : tuple of Step
        In their order; empty when the test passes at once.
    stop : str
        One of `STOPS`: why it ended.
    """

    steps: tuple[Step, ...]
    stop: str


class _Weight(NamedTuple):
    """Inverse covariance of the pulls on the directions that residuals can take."""

    matrix: Floats  # (w, m, m)
    freedom: NDArray[np.int64]  # (w,)


def global_test(residuals: Residuals) -> GlobalTest:
    """Test whether anything at all is wrong.

    Parameters
    ----------
    residuals : Residuals
        Of w windows or cells.
    """
    return _tested(residuals, _weight(residuals))


def biases(residuals: Residuals) -> Biases:
    """Estimate each cause as if it were the only one.

    Parameters
    ----------
    residuals : Residuals
        Of w windows or cells.
    """
    return _estimated(residuals, _weight(residuals))


def sidak(level: float, tests: int) -> float:
    """Give the bound on each of several normal tests that together raise a false alarm at one level.

    Exact for independent tests, else on the safe side (Sidak 1967).

    Parameters
    ----------
    level : float
        Chance of any false alarm, 0 to 1.
    tests : int
        How many two-sided tests.
    """
    return float(-ndtri((1.0 - (1.0 - level) ** (1.0 / tests)) / 2.0))


def visible_sizes(standard_error: Floats, tests: int, *, level: float = 0.05, share: float = 0.9) -> Floats:
    """Give the size of each cause that its measurement test would show in the stated share of cases.

    Parameters
    ----------
    standard_error : array
        As `Biases` gives it; NaN stays NaN.
    tests : int
        How many tests are made together.
    level : float
        Chance of any false alarm.
    share : float
        Chance of seeing a cause of that size.
    """
    return standard_error * (sidak(level, tests) + float(ndtri(share)))


def power(size: Floats, standard_error: Floats, freedom: int, *, level: float = 0.05) -> Floats:
    """Give the chance that the global test shows a cause of that size (noncentral chi-square).

    Parameters
    ----------
    size, standard_error : array
        Of the cause, in the same unit.
    freedom : int
        Degrees of freedom.
    level : float
        Chance of a false alarm.
    """
    return np.asarray(1.0 - chndtr(chdtri(freedom, level), freedom, (size / standard_error) ** 2))


def likeness(residuals: Residuals) -> Floats:
    """Give how alike the causes are to the tests, array (w, h, h): 1 or -1 when nothing can tell them apart.

    It is the correlation of their measurement tests; NaN for a cause that leaves no trace.

    Parameters
    ----------
    residuals : Residuals
        Of w windows or cells.
    """
    return _alike(residuals, _weight(residuals).matrix)


def parallel_sets(residuals: Residuals, *, strength: float = STRENGTH) -> tuple[tuple[str, ...], ...]:
    """Give the sets of causes that cannot be told apart, all in the order of the causes; lone ones left out.

    Two causes are in one set when one of them, standing at `strength` standard errors, would leave the other
    behind by less than one in the likelihood ratio: 1 - likeness^2 < strength^-2. At the default that
    is a cause beyond doubt whose name is still open.

    Parameters
    ----------
    residuals : Residuals
        One window or cell.
    strength : float
        Size of the larger cause in standard errors.
    """
    close = _close(likeness(residuals)[0], strength)
    reach = np.linalg.matrix_power(close.astype(float), len(close)) > 0
    groups = sorted({tuple(np.flatnonzero(row)) for row in reach})
    return tuple(_named(residuals, group) for group in groups if len(group) > 1)


def eliminate(residuals: Residuals, *, level: float = 0.05) -> Elimination:
    """Explain the residuals by one set of suspects after the other until the global test passes.

    Every step frees the size of the most likely cause, which is the same as taking the reading out; a
    set of parallel causes is one step, since the data cannot tell which of them it is. What is all but
    explained with it, the other members of its set first of all, is not suspected again.

    Parameters
    ----------
    residuals : Residuals
        One window or cell.
    level : float
        Of the global test.
    """
    weight = _weight(residuals)
    whole = _told(residuals, weight)
    steps: list[Step] = []
    while True:
        test = _tested(residuals, weight)
        if weight.freedom[0] == 0:
            return Elimination(tuple(steps), STOPS[NO_FREEDOM])
        if not test.p_value[0] < level:
            return Elimination(tuple(steps), STOPS[PASSES])
        seen = _told(residuals, weight) > STRENGTH**-2 * whole
        ratio = np.where(seen, np.nan_to_num(_estimated(residuals, weight).statistic[0]) ** 2, 0.0)
        first = int(np.argmax(ratio))
        if not ratio[first] > 0:
            return Elimination(tuple(steps), STOPS[NO_CAUSE])
        close = _close(_alike(residuals, weight.matrix)[0], STRENGTH)[first] & seen
        weight = _explained(residuals, weight, first)
        steps.append(_step(residuals, weight, ratio, close))


def without(gain: Floats, cause: Floats, size: Floats) -> Floats:
    """Give the change of linear functions of the flows when each cause is explained away, array (p, h, t).

    For an instrument's own error that is the solution without its reading: exact in a linear balance, to
    the first order else. NaN for a cause that leaves no trace: without that reading nothing can be said.

    Parameters
    ----------
    gain : array (p, m, t)
        Change of each function per unit of each reading.
    cause : array (m, h, t)
        Change of each reading per unit of each cause.
    size : array (t, h)
        Most likely size of each cause.
    """
    return np.asarray(-np.einsum("pmt,mht->pht", gain, cause, optimize=True) * size.T)


def _weight(residuals: Residuals) -> _Weight:
    """Invert the covariance on the directions that residuals can take, as many as there is freedom."""
    count = residuals.slope.shape[1]
    _, axes = np.linalg.eigh(residuals.slope)
    axes = axes * (np.arange(count) >= count - residuals.freedom[:, None])[:, None, :]
    turned = axes.transpose(0, 2, 1)
    variance, inner = np.linalg.eigh(turned @ residuals.covariance @ axes)
    kept = variance > NO_VARIANCE * np.maximum(variance[:, -1:], 1e-300)
    whole = axes @ inner
    scale = np.where(kept, 1.0 / np.where(kept, variance, 1.0), 0.0)
    return _Weight((whole * scale[:, None, :]) @ whole.transpose(0, 2, 1), kept.sum(axis=1))


def _tested(residuals: Residuals, weight: _Weight) -> GlobalTest:
    statistic = np.einsum("wm,wmn,wn->w", residuals.pull, weight.matrix, residuals.pull)
    freedom = weight.freedom
    some = freedom > 0
    p_value = np.where(some, chdtrc(np.maximum(freedom, 1), np.maximum(statistic, 0.0)), np.nan)
    return GlobalTest(np.where(some, statistic, np.nan), freedom, p_value)


def _estimated(residuals: Residuals, weight: _Weight) -> Biases:
    score, told = _score(residuals, weight.matrix)
    return Biases(residuals.names, score / np.sqrt(told), score / told, 1.0 / np.sqrt(told))


def _score(residuals: Residuals, matrix: Floats) -> tuple[Floats, Floats]:
    """Give a' C^-1 z and a' C^-1 a of every cause, arrays (w, h); NaN where the cause leaves no trace."""
    lean = matrix @ residuals.response
    score = np.einsum("wmh,wm->wh", lean, residuals.pull)
    told = np.einsum("wmh,wmh->wh", lean, residuals.response)
    size = np.einsum("wmh,wmh->wh", residuals.response, residuals.response)
    most = size * np.trace(matrix, axis1=1, axis2=2)[:, None]
    return score, np.where(told > NO_VARIANCE * most, told, np.nan)


def _told(residuals: Residuals, weight: _Weight) -> Floats:
    """Give how much the residuals of the first window tell of each cause, array (h,); 0 without a trace."""
    return np.asarray(np.nan_to_num(_score(residuals, weight.matrix)[1][0]))


def _alike(residuals: Residuals, matrix: Floats) -> Floats:
    root = 1.0 / np.sqrt(_score(residuals, matrix)[1])
    both = residuals.response.transpose(0, 2, 1) @ matrix @ residuals.response
    return np.asarray(both * root[:, :, None] * root[:, None, :])


def _close(alike: Floats, strength: float) -> Flags:
    """Tell which causes are one to the tests, array (h, h); a cause without a trace only to itself."""
    return np.asarray((1.0 - alike**2 < strength**-2) | np.eye(len(alike), dtype=bool))


def _explained(residuals: Residuals, weight: _Weight, cause: int) -> _Weight:
    """Free the size of one cause: its direction no longer counts."""
    lean = weight.matrix @ residuals.response[:, :, cause, None]
    told = (residuals.response[:, None, :, cause] @ lean)[:, 0, 0]
    matrix = weight.matrix - lean @ lean.transpose(0, 2, 1) / told[:, None, None]
    return _Weight(matrix, weight.freedom - 1)


def _step(residuals: Residuals, weight: _Weight, ratio: Floats, close: Flags) -> Step:
    """Sum up one step, given the likelihood ratios before it and the weight after it."""
    after = _tested(residuals, weight)
    best = float(ratio.max())
    least = max(best - RIVAL, 0.0)  # a cause without a trace has a ratio of 0
    near = [i for i in np.argsort(-ratio, kind="stable") if ratio[i] > least and not close[i]]
    return Step(
        suspects=_named(residuals, np.flatnonzero(close)),
        rivals=_named(residuals, near),
        statistic=float(np.sqrt(best)),
        left=float(np.nan_to_num(after.statistic[0])),
        freedom=int(weight.freedom[0]),
        p_value=float(after.p_value[0]),
    )


def _named(residuals: Residuals, places: Iterable[np.intp]) -> tuple[str, ...]:
    return tuple(residuals.names[i] for i in places)
