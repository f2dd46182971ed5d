"""Checks on a sample as a whole, before any normalising: the raw sum of its channels, and air in it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ingest.channels import doubt
from ingest.chemistry import DRY_AIR
from ingest.conditions import NOT_CHECKED, PASSED, REFUSED, SUSPECT, Codes
from ingest.unit import Analyzer, Instrument, Unit

SURE = 1.96  # standard uncertainties that a reading has to lie outside what is expected: 95 %
TOO_QUIET = 0.05  # share of the spread that the stated random errors alone give to a sum nobody normalised
FEWEST = 20  # analyses before the spread of their sum tells anything

Floats = NDArray[np.float64]


def raw_sum(values: Floats, analyzer: Analyzer) -> Codes:
    """Doubt the analyses whose channels do not add up to what they should; they still take part.

    Parameters
    ----------
    values : array (k, n)
        Results side by side, NaN where there is none.
    analyzer : Analyzer
        With a band for the sum.

    Returns
    -------
    array (n,) of int8
        Places in conditions.ANSWERS; not checked where a channel has no result.
    """
    low, high = analyzer.sum_band or (-np.inf, np.inf)
    total = values.sum(axis=0)
    slack = 1e-9 * np.abs(total)  # of adding up in binary
    inside = (total >= low - slack) & (total <= high + slack)
    return np.select([np.isnan(total), inside], [NOT_CHECKED, PASSED], SUSPECT).astype(np.int8)


def sums(unit: Unit, value: Floats) -> dict[str, Floats]:
    """Add the channels of each analyzer up, as read, so that the sum can be followed over time.

    Parameters
    ----------
    unit : Unit
        m instruments.
    value : array (t, m)
        Cell means in the instruments' own units.

    Returns
    -------
    dict of str to array (t,)
        By the name of each analyzer that states a band for its sum, in the unit of its channels; NaN where a
        channel has no value.
    """
    named = [one.name for one in unit.analyzers if one.sum_band]
    return {name: value[:, [one.analyzer == name for one in unit.instruments]].sum(axis=1) for name in named}


def is_normalised(values: Floats, members: Sequence[Instrument]) -> bool:
    """Tell whether the sum is steadier than readings with the stated random errors can add up to.

    Such results were made to add up, and then their sum says nothing about them: a component that is not
    on the list is spread over the others.

    Parameters
    ----------
    values : array (k, n)
        Results side by side, NaN where there is none.
    members : sequence of k Instrument
        The channels, in the same order.

    Returns
    -------
    bool
        False where there are too few analyses to tell.
    """
    total = values.sum(axis=0)
    seen = np.flatnonzero(np.isfinite(total))
    if seen.size < FEWEST:
        return False
    level = np.abs(values[:, seen]).mean(axis=1)
    stated = [one.random.relative * y + one.random.floor for one, y in zip(members, level, strict=True)]
    return bool(total[seen].std() < TOO_QUIET * np.linalg.norm(stated))


def air_ingress(values: Floats, members: Sequence[Instrument], analyzer: Analyzer) -> tuple[Codes, ...]:
    """Find air in the sample: nitrogen and oxygen beyond what the stream holds, both by one share of air.

    A share f of air makes x into (1 - f) x + f a. What the stream can hold and what the reading can be
    off give each of the two gases a span of f; air is found where both spans lie above zero in part, that of
    nitrogen as a whole, and they meet. The two are then refused, so that no balance is tied to them;
    the other channels are thinned by f, and doubted.

    Parameters
    ----------
    values : array (k, n)
        Results side by side, NaN where there is none.
    members : sequence of k Instrument
        The channels, in the same order.
    analyzer : Analyzer
        With what the stream holds of nitrogen and of oxygen.

    Returns
    -------
    tuple of k arrays (n,) of int8
        Places in conditions.ANSWERS; not checked where one of the two has no result.
    """
    names = [one.name for one in members]
    held = [names.index(name) for name, _, _ in analyzer.air if name in names]
    if len(held) < len(DRY_AIR):
        return (np.full(values.shape[1], NOT_CHECKED, dtype=np.int8),) * len(members)
    spans = [
        _share(values[at], members[at], low, high, air)
        for at, (_, low, high), air in zip(held, analyzer.air, DRY_AIR.values(), strict=True)
    ]
    least, most = np.maximum(*(low for low, _ in spans)), np.minimum(*(high for _, high in spans))
    found = (spans[0][0] > 0) & (least <= most)
    known = np.isfinite(least) & np.isfinite(most)
    return tuple(
        np.select([found, known], [REFUSED if at in held else SUSPECT, PASSED], NOT_CHECKED).astype(np.int8)
        for at in range(len(members))
    )


def _share(seen: Floats, channel: Instrument, low: float, high: float, air: float) -> tuple[Floats, Floats]:
    """Give the least and the greatest share of air that one gas allows."""
    whole = air / channel.to_base
    off = SURE * doubt(channel, seen)
    return (seen - off - high) / (whole - high), (seen + off - low) / (whole - low)
