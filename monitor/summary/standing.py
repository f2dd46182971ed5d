"""How a summary, made anew from the store, stands against the revisions that were issued of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import pandas as pd

from monitor.summary.table import Summary, changes

NOT_ISSUED, AS_ISSUED, CHANGED = "not issued", "as issued", "changed since"


@dataclass(frozen=True, slots=True)
class Standing:
    """The summary as it is now, one of three words, the last revision, and what changed since it."""

    summary: Summary
    word: str
    last: int  # 0 where nothing was issued
    changes: pd.DataFrame


def standing(made: Summary, issued: Sequence[Summary]) -> Standing:
    """Hold a summary against its revisions; with equal results it is the last of them, word by word.

    Parameters
    ----------
    made : Summary
        A draft.
    issued : sequence of Summary
        All revisions of the same unit and span, in their order.

    Returns
    -------
    Standing
        No changes where nothing was issued yet.
    """
    if not issued:
        return Standing(made, NOT_ISSUED, 0, changes(made, made))
    last = issued[-1]
    if last.digest == made.digest:
        return Standing(last, AS_ISSUED, last.revision, changes(made, made))
    return Standing(made, CHANGED, last.revision, changes(last, made))
