"""Sums of amounts over windows and calendar spans: the linear part of every figure, with its errors.

A figure is made of two linear functionals of the amounts, its numerator and denominator. What is summed
per cell is therefore little: each distinct functional, its response to each systematic source, and the
random covariance of the pairs that stand in one ratio.

Rolling sums are built by doubling (lengths 1, 2, 4 ... and what a window needs of them), never as
differences of a running total: a sum holds nothing but the cells of its own window, so that one absurd
value cannot touch a window it is not in, and a rebuild in other chunks gives the same bits.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitor.amounts import Amounts
from monitor.figures import Figure, weights

Array = NDArray[np.float64]
Numbers = NDArray[Any]  # amounts or counts
Total = Callable[[Numbers], list[Numbers]]


@dataclass(frozen=True, slots=True)
class Functionals:
    """The distinct numerators and denominators of some figures, and which figure uses which."""

    weight: Array  # (k, p)
    top: NDArray[np.intp]  # (f,)
    bottom: NDArray[np.intp]  # (f,); -1 for a make
    pairs: tuple[tuple[int, int], ...]  # functionals whose covariance some figure needs
    needs: NDArray[np.bool_]  # (f, p)


@dataclass(frozen=True, slots=True)
class CellTerms:
    """What is summed, per cell: nothing in it is NaN; what was not seen is 0 and not in `seen`."""

    linear: Array  # (k, 1 + s, t): the functional, then its response to each systematic source [kmol]
    covariance: Array  # (pairs, c, t), random, for one independent result per cell [kmol2]
    seen: NDArray[np.bool_]  # (t, p)


def functionals(figures: Sequence[Figure]) -> Functionals:
    """Give the distinct linear functionals that some figures are made of.

    Parameters
    ----------
    figures : sequence of Figure
        On one amount axis.

    Returns
    -------
    Functionals
        Each numerator or denominator once, however many figures share it.
    """
    rows: dict[tuple[float, ...], int] = {}
    top, bottom = [], []
    pairs: dict[tuple[int, int], None] = {}
    for figure in figures:
        numerator, denominator = weights(figure)
        n = rows.setdefault(tuple(numerator), len(rows))
        d = -1 if denominator is None else rows.setdefault(tuple(denominator), len(rows))
        pairs.update(dict.fromkeys([(n, n)] if d < 0 else [(n, n), (n, d), (d, d)]))
        top.append(n)
        bottom.append(d)
    return Functionals(
        weight=np.array(list(rows)),
        top=np.array(top),
        bottom=np.array(bottom),
        pairs=tuple(pairs),
        needs=np.array([[name in figure.needs for name in figure.amounts] for figure in figures]),
    )


def cell_terms(plan: Functionals, amounts: Amounts, rows: slice) -> CellTerms:
    """Give per cell what windows sum: functionals, systematic responses, random covariances.

    Parameters
    ----------
    plan : Functionals
        What the figures are made of.
    amounts : Amounts
        Amounts per cell; an amount is seen where it and its errors are finite.
    rows : slice
        Cells to take.

    Returns
    -------
    CellTerms
        Over the cells of `rows`.
    """
    kmol, random = amounts.kmol[rows], amounts.random[rows]
    systematic = amounts.systematic[rows].transpose(1, 2, 0)  # (p, s, t)
    seen = np.isfinite(kmol) & np.isfinite(systematic).all(axis=1).T
    seen &= np.isfinite(np.diagonal(random, axis1=2, axis2=3)).all(axis=1)
    parts = np.concatenate([kmol.T[:, None], systematic], axis=1)
    for amount, there in zip(parts, seen.T, strict=True):
        if not there.all():
            amount[:, ~there] = 0.0
    linear = plan.weight @ parts.reshape(len(parts), -1)
    return CellTerms(
        linear=linear.reshape(len(linear), *parts.shape[1:]),
        covariance=_covariances(plan, random),
        seen=seen,
    )


def _covariances(plan: Functionals, random: Array) -> Array:
    """Random covariance of each pair of functionals, (pairs, c, t); reads only entries with a weight."""
    left, right = np.array(plan.pairs).T
    product = plan.weight[left][:, :, None] * plan.weight[right][:, None, :]  # (pairs, p, p)
    i, j = np.nonzero(product.any(axis=0))
    entries = random.transpose(2, 3, 1, 0)[i, j]  # (e, c, t)
    entries[~np.isfinite(entries)] = 0.0
    found: Array = product[:, i, j] @ entries.reshape(len(i), -1)
    return found.reshape(len(left), *entries.shape[1:])


def rolling(cells: Sequence[int], skip: int) -> Total:
    """Give the operator that sums the last so many cells at each cell.

    Parameters
    ----------
    cells : sequence of int
        Window lengths [cells].
    skip : int
        Cells at the front that only serve the windows of later ones; no sum ends in them.

    Returns
    -------
    callable
        Takes an array (..., t), gives per window length an array (..., t - skip). Cells before the
        first one count as 0.
    """

    def total(values: Numbers) -> list[Numbers]:
        count = values.shape[-1]
        sums = [np.zeros((*values.shape[:-1], count - skip), values.dtype) for _ in cells]
        power, spare = values, np.empty_like(values)
        for size in (1 << bit for bit in range(max(cells).bit_length())):
            if size > 1:
                power, spare = _doubled(power, size // 2, spare), power if size > 2 else np.empty_like(values)
            for length, out in zip(cells, sums, strict=True):
                if length & size:
                    _add_shifted(out, power, skip, shift=length & (size - 1))
        return sums

    return total


def _doubled(power: Numbers, size: int, out: Numbers) -> Numbers:
    """Give sums of 2 * size cells from sums of `size` cells."""
    out[..., :size] = power[..., :size]
    np.add(power[..., size:], power[..., :-size], out=out[..., size:])
    return out


def _add_shifted(out: Numbers, power: Numbers, skip: int, *, shift: int) -> None:
    """Add to each window the power sum that ends `shift` cells before its end."""
    first = max(0, shift - skip)
    if first < out.shape[-1]:
        out[..., first:] += power[..., skip + first - shift : power.shape[-1] - shift]


def between(bounds: NDArray[np.intp]) -> Total:
    """Give the operator that sums between given places.

    Parameters
    ----------
    bounds : ndarray of int, shape (n + 1,)
        Ascending places; span i holds the cells from bounds[i] up to but not including bounds[i + 1].

    Returns
    -------
    callable
        Takes an array (..., t), gives a list of one array (..., n); 0 for a span without cells.
    """
    filled = np.flatnonzero(np.diff(bounds) > 0)
    single = bool((np.diff(bounds) == 1).all())

    def total(values: Numbers) -> list[Numbers]:
        if single:
            return [values[..., bounds[0] : bounds[-1]]]
        sums = np.zeros((*values.shape[:-1], len(bounds) - 1), values.dtype)
        if len(filled):
            inside = values[..., : bounds[-1]]
            sums[..., filled] = np.add.reduceat(inside, bounds[filled], axis=-1)
        return [sums]

    return total
