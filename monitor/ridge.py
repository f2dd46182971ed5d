"""Linear regression that few data and outliers do not upset: shrunk towards the mean, wild rows weighed less.

Sources, from memory: Hoerl & Kennard 1970 (ridge), Huber 1964 (weights), Holland & Welsch 1977 (reweighting).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

PENALTY = 0.003  # of the rows: coefficients of a regressor that varies by itself are shrunk by so much
BEND = 1.345  # spreads beyond which a row weighs less; 95 % as sharp as least squares on normal data
ROUNDS = 8
SPREAD_PER_MEDIAN = 1.4826  # standard deviation of normal data over their median absolute deviation


@dataclass(frozen=True, slots=True)
class Ridge:
    """A fitted regression of q variables on p.

    Parameters
    ----------
    centre, scale : array (p,)
        Mean and spread of the regressors.
    least, most : array (p,)
        Range of the regressors that it was fitted on.
    mean : array (q,)
        Fitted value at the centre.
    slope : array (q, p)
        Change per scaled regressor.
    covariance : array (1 + p, 1 + p)
        Of mean and slope, per unit of variance of a row; as if the rows were independent.
    rows : int
        How many there were.
    """

    centre: Floats
    scale: Floats
    least: Floats
    most: Floats
    mean: Floats
    slope: Floats
    covariance: Floats
    rows: int

    def at(self, point: Floats) -> Floats:
        """Give the fitted values, array (n, q).

        Parameters
        ----------
        point : array (n, p)
            Regressors; NaN gives NaN.
        """
        return np.asarray(self.mean + (point - self.centre) / self.scale @ self.slope.T)

    def doubt(self, point: Floats) -> Floats:
        """Give the variance of the fitted values, array (n,), per unit of variance of a row.

        Parameters
        ----------
        point : array (n, p)
            Regressors; NaN gives NaN.
        """
        row = np.concatenate([np.ones((len(point), 1)), (point - self.centre) / self.scale], axis=1)
        return np.asarray(np.einsum("np,pr,nr->n", row, self.covariance, row))


def fit(point: Floats, value: Floats) -> Ridge:
    """Fit q variables on p regressors, rows with a NaN left out.

    Parameters
    ----------
    point : array (n, p)
        Regressors; one that does not vary gets no coefficient.
    value : array (n, q)
        What is to be told by them.
    """
    whole = np.isfinite(point).all(axis=1) & np.isfinite(value).all(axis=1)
    x, y = point[whole], value[whole]
    centre, scale = x.mean(axis=0), x.std(axis=0)
    scale = np.where(scale > 1e-9 * (1.0 + np.abs(centre)), scale, np.inf)
    row = np.concatenate([np.ones((len(x), 1)), (x - centre) / scale], axis=1)
    found = np.array([_robust(row, one) for one in y.T])
    return Ridge(
        centre=centre,
        scale=scale,
        least=x.min(axis=0),
        most=x.max(axis=0),
        mean=found[:, 0],
        slope=found[:, 1:],
        covariance=_inverse(row, np.ones(len(row))),
        rows=len(row),
    )


def _robust(row: Floats, value: Floats) -> Floats:
    """Fit one variable, array (1 + p,)."""
    weight = np.ones(len(row))
    found = np.zeros(row.shape[1])
    for _ in range(ROUNDS):
        found = _inverse(row, weight) @ (row.T @ (weight * value))
        miss = np.abs(value - row @ found)
        spread = max(SPREAD_PER_MEDIAN * float(np.median(miss)), 1e-12)
        weight = np.minimum(1.0, BEND * spread / np.maximum(miss, 1e-12))
    return found


def _inverse(row: Floats, weight: Floats) -> Floats:
    """Invert the normal matrix with its penalty; the mean is not shrunk."""
    penalty = PENALTY * len(row) * np.diag([0.0] + [1.0] * (row.shape[1] - 1))
    return np.asarray(np.linalg.inv(row.T @ (weight[:, None] * row) + penalty))
