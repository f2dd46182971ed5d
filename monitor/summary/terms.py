"""What the words of a summary mean: its own terms, then every figure as the table of figures defines it."""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd

from monitor.figures import Figure
from monitor.summary.results import LEAST_COVERAGE, LEAST_DAYS

BETTER = {True: "higher is better", False: "lower is better", None: ""}


def definitions(figures: Sequence[Figure], decimals: int) -> pd.DataFrame:
    """Define every term and figure of a summary.

    Parameters
    ----------
    figures : sequence of Figure
        Those that it shows.
    decimals : int
        Of tonnes.

    Returns
    -------
    DataFrame
        Columns term, unit, meaning, direction.
    """
    rows = [(term, "", meaning, "") for term, meaning in _terms(decimals).items()]
    rows += [(one.name, one.unit, one.definition, BETTER[one.higher_is_better]) for one in figures]
    return pd.DataFrame(rows, columns=["term", "unit", "meaning", "direction"])


def _terms(decimals: int) -> dict[str, str]:
    """Define the words that are no figures."""
    return {
        "figure": "A ratio of sums over the whole span, never a mean of ratios of days or hours.",
        "as operated": "All time but down.",
        "steady": "Running time alone: start-up, turn-down, time of unknown condition and what people left "
        "out are not in it.",
        "±": "Half-width of the 95 % interval, 1.96 standard uncertainties (JCGM 100:2008); "
        "calibration errors included, as the unit file states them.",
        "coverage": "Share of the running time that has a valid balance. Below the least coverage of the "
        "unit file a figure is missing, with the reason.",
        "not representative": f"Coverage below {100 * LEAST_COVERAGE:.0f} %, or no more than "
        f"{LEAST_DAYS:.0f} days of time that counts: the figure is that of the time seen, not of the span.",
        "spread": "Standard deviation of the figures of the days, each a ratio of sums over its day.",
        "best, worst": "Of the days; where neither direction is good, the greatest and the least.",
        "tonnes": "Made is out minus in, consumed is in minus out, in the time that was seen. Each day is "
        f"rounded to {decimals} decimals once; what is longer is the sum of the days as printed, "
        "so that they add to the last digit. Tonnes are never left out: start-up and turn-down "
        "are in them.",
        "at the mean rate": "Tonnes if the running time not seen made as much per hour as what was seen.",
        "no data": "Time of the span for which the store holds no cell.",
        "difference": "This span minus the other. Its first half-width takes all calibrations as set anew "
        "between the two, the second takes them as left alone, so that their errors cancel. "
        "Errors that come and go count in both.",
        "the charge so far": "From the day of the catalyst charge, as far as the store goes back, to the end "
        "of the span; half-widths from days spread evenly over it.",
        "expected": "What the figure should have been at the load, operating point and catalyst age of every "
        "steady hour, learnt from the healthy period of the unit file, with the calibrations of that time.",
        "outside": "Share of these hours whose operating point was never seen while healthy: there the "
        "expectation is a continuation.",
        "lost": "Wanted product that was not made in these hours because the yield was not as expected.",
        "alert": "Raised and cleared as the limits of the unit file say; confirmed or false by the cause "
        "with which a person closed it, open where nobody did.",
        "5 % below, 5 % above": "Percentiles of the cells while the unit was not down.",
        "adjustment": "Reconciled prediction minus reading, in standard uncertainties of the reading; it "
        "should stay within the number beside it.",
        "above bound": "Share of cells whose weighted sum of squares lies above what chi-square "
        "allows 19 times in 20: 5 % is what chance gives.",
    }
