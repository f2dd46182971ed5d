"""How a series wanders while nothing happens: its spread, how much of it the next value keeps, the long run.

Neighbours are values one block apart; over a gap nothing is a neighbour.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Times = NDArray[np.int64]

SLOWEST = 0.98  # a memory longer than fifty blocks cannot be told from drift within a healthy period
LAGS = 24  # blocks over which correlations are added up; a day of hours


@dataclass(frozen=True, slots=True)
class Noise:
    """Standard deviation of single values, and the correlation `phi` of a value with the one before it."""

    sd: float
    phi: float

    @property
    def long_run_sd(self) -> float:
        """Give the standard deviation that means of many values follow, times the root of their number."""
        return self.sd * math.sqrt((1 + self.phi) / (1 - self.phi))


def noise_of(end_us: Times, value: Array, block_us: int) -> Noise:
    """Say how a series wanders about its mean.

    Parameters
    ----------
    end_us : ndarray of int64, shape (n,)
        Ends of blocks, ascending [us UTC].
    value : ndarray, shape (n,)
        Finite, from a time in which nothing happened [any unit].
    block_us : int
        Length of a block [us].

    Returns
    -------
    Noise
        `phi` is the correlation of neighbours, or that of the first-order autoregression whose long run is
        what the correlations over a day of hours add up to (Bartlett's weights), whichever is larger: where
        a slow wander lies under white noise, neighbours alone would tell too little.
    """
    sd = float(value.std())
    if sd == 0.0:
        return Noise(0.0, 0.0)
    place = (end_us - end_us[0]) // block_us
    even = np.full(int(place[-1]) + 1, np.nan)
    even[place] = (value - value.mean()) / sd
    lags = range(1, min(LAGS, len(even) - 1) + 1)
    kept = [float(np.nan_to_num(np.nanmean(_product(even, lag)))) for lag in lags]
    whole = 1 + 2 * sum((1 - lag / (LAGS + 1)) * one for lag, one in zip(lags, kept, strict=True))
    by_sum = (whole - 1) / (whole + 1) if whole > 1 else 0.0
    return Noise(sd, min(max(kept[0] if kept else 0.0, by_sum, 0.0), SLOWEST))


def _product(even: Array, lag: int) -> Array:
    """Products of values so many blocks apart; one zero where there are none, so that the mean is told."""
    product = even[lag:] * even[:-lag]
    return product if np.isfinite(product).any() else np.zeros(1)
