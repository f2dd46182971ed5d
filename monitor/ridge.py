"""Linear regression that few data and outliers do not upset: shrunk towards the mean, wild rows weighed less.

The penalty follows from the data, `p s^2 / (b' b)` with the variance s^2 that a mean over many rows goes by
(Hoerl, Kennard & Baldwin 1975): the coefficients are taken to be as large as those found, no larger along
directions in which the regressors hardly moved. So what is foretold far from them has the doubt that is due.

Sources, from memory: Hoerl & Kennard 1970 (ridge), Huber 1964 (weights), Holland & Welsch 1977 (reweighting).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

BEND = 1.345  # spreads beyond which a row weighs less; 95 % as sharp as least squares on normal data
ROUNDS = 8
SPREAD_PER_MEDIAN = 1.4826  # standard deviation of normal data over their median absolute deviation
MOST_PHI = 0.95  # autocorrelation from one row to the next that is believed
MOST_PENALTY = 1.0  # per row: coefficients are then halved


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
    covariance : array (q, 1 + p, 1 + p)
        Of mean and slope of each.
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
        """Give the variance of the fitted values, array (n, q).

        Parameters
        ----------
        point : array (n, p)
            Regressors; NaN gives NaN.
        """
        row = _rows(point, self.centre, self.scale)
        return np.asarray(np.einsum("np,qpr,nr->nq", row, self.covariance, row))


def fit(point: Floats, value: Floats) -> Ridge:
    """Fit q variables on p regressors, rows with a NaN left out.

    Parameters
    ----------
    point : array (n, p)
        Regressors in the order of time; one that does not vary gets no coefficient.
    value : array (n, q)
        What is to be told by them.
    """
    whole = np.isfinite(point).all(axis=1) & np.isfinite(value).all(axis=1)
    x, y = point[whole], value[whole]
    centre, scale = x.mean(axis=0), x.std(axis=0)
    scale = np.where(scale > 1e-9 * (1.0 + np.abs(centre)), scale, np.inf)
    row = _rows(x, centre, scale)
    fitted = [_robust(row, one) for one in y.T]
    found = np.array([one for one, _ in fitted]).reshape(y.shape[1], row.shape[1])
    return Ridge(
        centre=centre,
        scale=scale,
        least=x.min(axis=0),
        most=x.max(axis=0),
        mean=found[:, 0],
        slope=found[:, 1:],
        covariance=np.array([own for _, own in fitted]).reshape(*found.shape, row.shape[1]),
        rows=len(row),
    )


def _rows(point: Floats, centre: Floats, scale: Floats) -> Floats:
    return np.concatenate([np.ones((len(point), 1)), (point - centre) / scale], axis=1)


def _robust(row: Floats, value: Floats) -> tuple[Floats, Floats]:
    """Fit one variable: mean and slopes, array (1 + p,), and their covariance."""
    weight, penalty = np.ones(len(row)), 1e-3 * len(row)
    for _ in range(ROUNDS):
        inverse = _inverse(row, weight, penalty)
        found = inverse @ (row.T @ (weight * value))
        miss = value - row @ found
        spread = max(SPREAD_PER_MEDIAN * float(np.median(np.abs(miss))), 1e-12)
        weight = np.minimum(1.0, BEND * spread / np.maximum(np.abs(miss), 1e-12))
        # Huber 1981: the variance of what the weights leave, over the squared share of rows left whole
        whole = max(float(np.mean(weight == 1.0)), 0.1)
        variance = float(long_run((weight * miss)[:, None])[0]) * float(np.mean(weight)) / whole**2
        size = max(float(found[1:] @ found[1:]), 1e-300)
        penalty = min((row.shape[1] - 1) * variance / size, MOST_PENALTY * len(row))
    return found, variance * inverse


def _inverse(row: Floats, weight: Floats, penalty: float) -> Floats:
    """Invert the normal matrix with its penalty; the mean is not shrunk, and what never varied stays out."""
    still = ~row.any(axis=0)
    added = penalty * np.diag([0.0] + [1.0] * (row.shape[1] - 1)) + np.diag(np.where(still, 1.0, 0.0))
    return np.asarray(np.linalg.inv(row.T @ (weight[:, None] * row) + added + 1e-9 * np.eye(row.shape[1])))


def long_run(miss: Floats) -> Floats:
    """Give the variance that a mean over many rows goes by, autocorrelation counted in, array (q,).

    Parameters
    ----------
    miss : array (n, q)
        Deviations in the order of time, taken as first-order autoregressions.
    """
    if len(miss) < 3:
        return np.zeros(miss.shape[1])
    variance = (miss**2).mean(axis=0)
    lagged = (miss[1:] * miss[:-1]).mean(axis=0) / np.maximum(variance, 1e-300)
    phi = np.clip(lagged, 0.0, MOST_PHI)
    return np.asarray(variance * (1 + phi) / (1 - phi))
