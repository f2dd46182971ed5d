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
        Zero above the diagonal. An unsound system gets the unit matrix, which must not be used.
    sound : array (t,) of bool
    """
    lower = np.zeros_like(matrix)
    sound = np.ones(matrix.shape[2], dtype=bool)
    for j in range(len(matrix)):
        column = matrix[j:, j] - np.einsum("ikt,kt->it", lower[j:, :j], lower[j, :j])
        good = column[0] > np.maximum(SMALLEST_PIVOT * matrix[j, j], 0)
        sound &= good
        lower[j, j] = np.sqrt(np.where(good, column[0], 1.0))
        np.divide(column[1:], lower[j, j], out=lower[j + 1 :, j])
    if not sound.all():
        lower[..., ~sound] = np.eye(len(matrix))[..., None]
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
        x[j] -= np.einsum("kt,kt->t", lower[j, :j], x[:j])
        x[j] /= lower[j, j]
    for j in reversed(range(len(x))):
        x[j] -= np.einsum("kt,kt->t", lower[j + 1 :, j], x[j + 1 :])
        x[j] /= lower[j, j]
    return x


def invert(lower: Floats) -> Floats:
    """Give the inverses of `L L'`, array (K, K, t).

    Parameters
    ----------
    lower : array (K, K, t)
        Cholesky factors.
    """
    root = np.zeros_like(lower)  # the inverse of L, row by row
    for i in range(len(lower)):
        root[i, i] = 1.0 / lower[i, i]
        row = np.einsum("kt,kjt->jt", lower[i, :i], root[:i, :i])
        np.multiply(row, -root[i, i], out=root[i, :i])
    inverse = np.empty_like(lower)
    for i in range(len(lower)):
        np.einsum("kt,kjt->jt", root[i:, i], root[i:, : i + 1], out=inverse[i, : i + 1])
        inverse[:i, i] = inverse[i, :i]
    return inverse
