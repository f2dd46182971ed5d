"""What can be said of a reading: its condition, and the answer that the condition stands for.

Stored codes are places in these lists, so new words go to the end.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Codes = NDArray[np.int8]
Flags = NDArray[np.bool_]

ANSWERS = ("good", "not checked", "suspect", "bad")  # of a check; the worst of several counts
PASSED, NOT_CHECKED, SUSPECT, REFUSED = range(4)

CONDITIONS = (
    "good",
    "missing",
    "stale",
    "bad quality",
    "out of range",
    "stuck",
    "calibrating",
    "spike",
    "air ingress",
    "uncertain quality",
    "large step",
    "sum out of band",
    "diluted by air",
)
GOOD, MISSING, STALE, BAD_QUALITY, OUT_OF_RANGE, STUCK, CALIBRATING = range(7)
SPIKE, AIR_INGRESS, UNCERTAIN_QUALITY, LARGE_STEP, SUM_OUT_OF_BAND, DILUTED = range(7, 13)

# A reading in one of these is doubted but takes part: nothing tells that it is wrong.
SUSPECTS = (UNCERTAIN_QUALITY, LARGE_STEP, SUM_OUT_OF_BAND, DILUTED)

_TAKEN = np.isin(np.arange(len(CONDITIONS)), (GOOD, *SUSPECTS))

LARGEST = 3.4e38  # largest IEEE 754 single: historians fill with it or more, no instrument measures it


def takes_part(codes: Codes) -> Flags:
    """Tell which readings or cells take part in averages and balances.

    Parameters
    ----------
    codes : array of int8
        Places in CONDITIONS.

    Returns
    -------
    array of bool
        True where good or suspect.
    """
    taken: Flags = _TAKEN[codes]
    return taken
