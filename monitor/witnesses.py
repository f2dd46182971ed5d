"""What the balance says about its instruments: adjustments in their uncertainties, and the whole fit."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy.special import chdtri

# An adjustment beyond twice the spread it should have is rarer than 1 in 20 (normal errors).
STANDS_OUT = 2.0
# Below this spread the reading cannot be checked by the others: it fits whatever it says.
NOT_REDUNDANT = 1e-6
WORDS = {
    "stands out": "\u25b2 stands out",
    "as expected": "\u25cf as expected",
    "not redundant": "\u25cb not redundant: nothing checks it",
    "no reading": "\u25c7 no reading took part",
}


def adjustments(adjustment: pd.DataFrame, spread: pd.DataFrame) -> pd.DataFrame:
    """Sum up how far each instrument was adjusted, against how far it should be.

    Parameters
    ----------
    adjustment : DataFrame, shape (t, m)
        One column per instrument, (prediction - reading) / its standard uncertainty; NaN where no reading
        took part.
    spread : DataFrame, shape (t, m)
        Standard deviation that the adjustment should have; 0 where the instrument is not redundant.

    Returns
    -------
    DataFrame, shape (m, 6)
        Index instrument, in the order of the columns; columns mean, low and high (5th and 95th percentile
        of cells), expected (twice the mean spread), share (of cells with a reading, 0..1), word (key of
        WORDS). NaN where no reading took part.
    """
    there = adjustment.notna()
    expected = STANDS_OUT * spread.where(there).mean()
    mean = adjustment.mean()
    redundant = expected > STANDS_OUT * NOT_REDUNDANT
    word = np.select(
        [~there.any(), ~redundant, mean.abs() > expected],
        ["no reading", "not redundant", "stands out"],
        "as expected",
    )
    return pd.DataFrame(
        {
            "mean": mean, "low": adjustment.quantile(0.05), "high": adjustment.quantile(0.95),
            "expected": expected, "share": there.mean(), "word": word,
        }
    )  # fmt: skip


def fit(objective: pd.Series[float], freedom: pd.Series[int]) -> pd.DataFrame:
    """Give the objective over its degrees of freedom, and what chi-square allows 19 times in 20.

    Parameters
    ----------
    objective : Series, shape (t,)
        Sum of squared adjustments of each cell.
    freedom : Series, shape (t,)
        Degrees of freedom.

    Returns
    -------
    DataFrame, shape (t, 3)
        value, half_width (NaN: it has none) and bound, all per degree of freedom; NaN where the cell has
        no degree of freedom left.
    """
    left = freedom.where(freedom > 0).astype(float)
    bound = pd.Series(chdtri(left.to_numpy(), 0.05), index=freedom.index) / left
    return pd.DataFrame({"value": objective / left, "half_width": np.nan, "bound": bound})


def judged(value: pd.DataFrame) -> float:
    """Give the share of cells whose objective lies above the bound; 0.05 is what chance gives.

    Parameters
    ----------
    value : DataFrame
        As `fit` gives it.

    Returns
    -------
    float
        0..1; NaN where no cell can be judged.
    """
    known = value.dropna(subset=["value", "bound"])
    return float((known["value"] > known["bound"]).mean()) if len(known) else float("nan")
