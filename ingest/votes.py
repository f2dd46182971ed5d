"""Do several signals say that the reactor is down, or that it runs? What most of them say, cell by cell.

One meter that dies, or rests on its last value, is outvoted; a signal that is not seen has no vote.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ingest.conditions import Flags
from ingest.unit import Operating, Vote


def voters(operating: Operating) -> tuple[Vote, ...]:
    """Give all that vote: the load first, then those stated beside it.

    Parameters
    ----------
    operating : Operating

    Returns
    -------
    tuple of Vote
        At least one.
    """
    load = Vote(operating.load, operating.down_below, operating.running_above)
    return (load, *operating.votes)


def majority(signals: NDArray[np.float64], votes: Sequence[Vote]) -> tuple[Flags, Flags, Flags]:
    """Tell where more than half of the signals that are seen say down, and where they say running.

    A signal between its two limits says neither but counts as seen, so that the others need more than half
    of all; one of few that could not outvote it decides nothing.

    Parameters
    ----------
    signals : array (k, t)
        Each in its own unit; NaN is not seen and casts no vote.
    votes : sequence of k Vote

    Returns
    -------
    tuple of three arrays (t,) of bool
        Down, running, and whether anything was seen. Neither down nor running: a tie.
    """
    down, running = np.array([(vote.down, vote.running) for vote in votes]).T[:, :, None]
    sense = np.sign(running - down)  # -1 where a high value says down
    seen = (~np.isnan(signals)).sum(axis=0)
    says_down = (sense * signals < sense * down).sum(axis=0)
    says_running = (sense * signals > sense * running).sum(axis=0)
    return 2 * says_down > seen, 2 * says_running > seen, seen > 0
