"""Many small symmetric positive definite systems at once, kept as structure of arrays.

A matrix of size K for each of t cells is one array (K, K, t): every step of the elimination is then one
operation over all cells, several times quicker than a library call per cell.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

SMALLEST_PIVOT = 1e-13  # of the diagonal before elimination; below it the system tells nothing


def factor(matrix: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Give the lower Cholesky factors and which systems are sound.

    Parameters
    ----------
    matrix : array (K, K, t)
        Only the lower triangle is read.

    Returns
    -------
    factor : array (K, K, t)
        Zero above the diagonal. An unsound system gets a pivot of one and must not be used.
    sound : array (t,) of bool
    """
    lower = np.tril(matrix.transpose(2, 0, 1)).transpose(1, 2, 0).copy()
    size = len(lower)
    least = SMALLEST_PIVOT * lower[np.arange(size), np.arange(size)]
    sound = np.ones(lower.shape[2], dtype=bool)
    for j in range(size):
        good = lower[j, j] > np.maximum(least[j], 0)
        sound &= good
        lower[j, j] = np.sqrt(np.where(good, lower[j, j], 1.0))
        lower[j + 1 :, j] /= lower[j, j]
        for i in range(j + 1, size):
            lower[i, j + 1 : i + 1] -= lower[i, j] * lower[j + 1 : i + 1, j]
    return lower, sound


def solve(lower: Floats, right: Floats) -> Floats:
    """Give the solutions of `L L' x = right`, array (K, t).

    Parameters
    ----------
    lower : array (K, K, t)
        Cholesky factors.
    right : array (K, t)
        Right-hand sides.
    """
    x = right.copy()
    for j in range(len(x)):
        x[j] /= lower[j, j]
        x[j + 1 :] -= lower[j + 1 :, j] * x[j]
    for j in reversed(range(len(x))):
        x[j] /= lower[j, j]
        x[:j] -= lower[j, :j] * x[j]
    return x


def invert(lower: Floats) -> Floats:
    """Give the inverses of `L L'`, array (K, K, t).

    Parameters
    ----------
    lower : array (K, K, t)
        Cholesky factors.
    """
    size, _, count = lower.shape
    root = np.zeros_like(lower)  # the inverse of L, column by column
    for j in range(size):
        root[j, j] = 1.0 / lower[j, j]
        for i in range(j + 1, size):
            root[i, j] = -np.einsum("kt,kt->t", lower[i, j:i], root[j:i, j]) / lower[i, i]
    inverse = np.empty((size, size, count))
    for i in range(size):
        for j in range(i + 1):
            inverse[i, j] = inverse[j, i] = np.einsum("kt,kt->t", root[i:, i], root[i:, j])
    return inverse
