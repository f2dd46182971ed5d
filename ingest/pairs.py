"""Two causes at once: how much each pair explains, and by which sizes.

With the measurement tests t of two causes alone and the correlation r of these tests, the pair has the
likelihood ratio (t1^2 + t2^2 - 2 r t1 t2) / (1 - r^2), and the most likely size of the first, in its standard
errors alone, is (t1 - r t2) / (1 - r^2): generalised least squares with two columns (Narasimhan & Mah 1987,
from memory). Taking one cause after the other may find neither of two, since the first step mixes them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import chdtrc

from ingest.residuals import Residuals
from ingest.suspects import RIVAL, STRENGTH, biases, global_test, likeness


@dataclass(frozen=True, slots=True)
class Pair:
    """Two causes that together explain a window, with most likely sizes and their standard errors.

    `ratio` is the likelihood ratio of the pair, `p_value` that of the global test of what they leave.
    """

    names: tuple[str, str]
    size: tuple[float, float]
    standard_error: tuple[float, float]
    ratio: float
    p_value: float


def pairs(residuals: Residuals, *, level: float, largest: float) -> tuple[Pair, ...]:
    """Give the pairs that leave nothing to explain and come near the best of them, the best first.

    Pairs that cannot be told apart from one another are left out: they are one cause with two names.

    Parameters
    ----------
    residuals : Residuals
        One window or cell with at least three degrees of freedom, else there is no pair to test.
    level : float
        Of the global test that has to be passed.
    largest : float
        Largest size that is believed of a cause.
    """
    whole, alone = global_test(residuals), biases(residuals)
    freedom = int(whole.freedom[0]) - 2
    if freedom < 1:
        return ()
    test, error = np.nan_to_num(alone.statistic[0]), np.nan_to_num(alone.standard_error[0])
    alike = likeness(residuals)[0]
    room = np.where(1 - alike**2 >= STRENGTH**-2, 1 - alike**2, np.nan)
    ratio = (test[:, None] ** 2 + test**2 - 2 * alike * test[:, None] * test) / room
    size = error[:, None] * (test[:, None] - alike * test) / room
    p_value = chdtrc(freedom, np.maximum(whole.statistic[0] - ratio, 0.0))
    believed = np.abs(size) <= largest
    told = np.triu(believed & believed.T & (p_value >= level), 1)
    near = told & (ratio > np.max(ratio, initial=0.0, where=told) - RIVAL)
    spread = error[:, None] / np.sqrt(room)
    order = sorted(zip(*np.nonzero(near), strict=True), key=lambda at: -ratio[at])
    return tuple(
        Pair(
            names=(alone.names[i], alone.names[j]),
            size=(float(size[i, j]), float(size[j, i])),
            standard_error=(float(spread[i, j]), float(spread[j, i])),
            ratio=float(ratio[i, j]),
            p_value=float(p_value[i, j]),
        )
        for i, j in order
    )
