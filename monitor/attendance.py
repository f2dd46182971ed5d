"""How each instrument served over a span: the share of time that it took part, what kept it out, and when."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.cells import DOWN, Cells
from ingest.conditions import CALIBRATING, CONDITIONS, SUSPECTS, takes_part
from ingest.unit import Unit
from ingest.votes import majority, voters
from monitor.series import runs

GOOD, DOUBTED, CALIBRATED, ABSENT, REFUSED = KINDS = (
    "good",
    "doubted",
    "calibrating",
    "nothing there",
    "refused",
)
# What each condition comes to, from the least to the greatest trouble.
KIND_OF = {
    "good": GOOD,
    "uncertain quality": DOUBTED,
    "large step": DOUBTED,
    "sum out of band": DOUBTED,
    "diluted by air": DOUBTED,
    "calibrating": CALIBRATED,
    "missing": ABSENT,
    "stale": ABSENT,
    "spike": REFUSED,
    "air ingress": REFUSED,
    "bad quality": REFUSED,
    "out of range": REFUSED,
    "stuck": REFUSED,
}
SHAPES = {GOOD: "\u25cf", DOUBTED: "\u25d0", CALIBRATED: "\u25c6", ABSENT: "\u25c7", REFUSED: "\u25b2"}
_RANK = np.array([list(KIND_OF).index(one) for one in CONDITIONS], dtype=np.int8)
_CODE = np.argsort(_RANK).astype(np.int8)


def attendance(unit: Unit, cells: Cells) -> pd.DataFrame:
    """Sum up how each instrument with a tag served while the unit was not down.

    Parameters
    ----------
    unit : Unit
        One reactor.
    cells : Cells
        Of the span; at least one.

    Returns
    -------
    DataFrame
        Index instrument; available, good and doubted (shares 0..1, NaN where the unit was down throughout),
        trouble (the commonest condition that kept it out, empty where none did), now (condition of the last
        cell) and since (start of the cells at the end that take no part, NaT where the last does).
    """
    at = [place for place, one in enumerate(unit.instruments) if one.tag is not None]
    condition = cells.condition[:, at]
    counted = condition[cells.operating != DOWN]
    whole = len(counted) or np.nan
    out = ~takes_part(condition)
    counts = np.array([(counted == code).sum(axis=0) for code in range(len(CONDITIONS))])
    kept_out = np.where(takes_part(np.arange(len(CONDITIONS), dtype=np.int8))[:, None], 0, counts)
    return pd.DataFrame(
        {
            "available": (len(counted) - kept_out.sum(axis=0)) / whole,
            "good": counts[0] / whole,
            "doubted": counts[list(SUSPECTS)].sum(axis=0) / whole,
            "trouble": np.where(kept_out.any(axis=0), np.array(CONDITIONS)[kept_out.argmax(axis=0)], ""),
            "now": np.array(CONDITIONS)[condition[-1]],
            "since": _since(cells.start, out),
        },
        index=pd.Index([unit.instruments[place].name for place in at], name="instrument"),
    )


def _since(start_us: NDArray[np.int64], out: NDArray[np.bool_]) -> pd.DatetimeIndex:
    """Start of the run of cells at the end in which each instrument was out."""
    held = np.where(out.all(axis=0), len(out), out[::-1].argmin(axis=0))
    begun = np.where(held > 0, start_us[np.maximum(len(out) - held, 0) % len(out)], np.iinfo(np.int64).min)
    return pd.DatetimeIndex(begun.astype("datetime64[us]")).tz_localize("UTC")


def condition_runs(unit: Unit, cells: Cells, *, most: int) -> pd.DataFrame:
    """Join neighbouring cells of one condition into runs, instrument by instrument.

    Parameters
    ----------
    unit : Unit
        One reactor.
    cells : Cells
        Of the span, on a regular grid or with holes; at least one.
    most : int
        Greatest number of steps along time; where there are more cells, several are looked at as one,
        which then has the worst condition of them.

    Returns
    -------
    DataFrame
        Columns instrument, start, end (UTC), condition, kind (of `KINDS`); for instruments with a tag.
    """
    at = [place for place, one in enumerate(unit.instruments) if one.tag is not None]
    several = step_of(cells, most)
    first = np.arange(0, len(cells.start), several)
    worst = np.maximum.reduceat(_RANK[cells.condition[:, at]], first, axis=0)
    start = cells.start[first]
    cell_us = int(unit.cell.total_seconds() * 1e6)
    end = np.append(start[1:], cells.start[-1] + cell_us)
    # A hole in the grid is no time of any condition.
    end = np.minimum(end, cells.start[np.append(first[1:], len(cells.start)) - 1] + cell_us)
    apart = np.append(True, start[1:] > end[:-1])[:, None]
    begins = apart | np.vstack([np.ones((1, len(at)), bool), worst[1:] != worst[:-1]])
    place, column = np.nonzero(begins.T)[::-1]
    last = np.append(place[1:], 0) - 1
    last = np.where(np.append(column[1:], -1) == column, last, len(start) - 1)
    words = np.array(CONDITIONS)[_CODE[worst[place, column]]]
    return pd.DataFrame(
        {
            "instrument": np.array([unit.instruments[one].name for one in at], dtype=object)[column],
            "start": _utc(start[place]),
            "end": _utc(end[last]),
            "condition": words,
            "kind": [KIND_OF[word] for word in words],
        }
    )


def step_of(cells: Cells, most: int) -> int:
    """Give how many cells are looked at as one.

    Parameters
    ----------
    cells : Cells
    most : int
        Greatest number of steps wanted.

    Returns
    -------
    int
        At least 1.
    """
    return max(1, -(-len(cells.start) // most))


def calibrations(unit: Unit, cells: Cells) -> pd.DataFrame:
    """List the calibrations of each analyzer.

    Parameters
    ----------
    unit : Unit
        One reactor.
    cells : Cells
        Of the span.

    Returns
    -------
    DataFrame
        Index analyzer; windows (how many), hours, start and end of the last one (UTC, NaT without any).
        A window is as long as the cells that have no result for it.
    """
    names = list(dict.fromkeys(one.analyzer for one in unit.instruments if one.analyzer))
    cell_us = int(unit.cell.total_seconds() * 1e6)
    found = []
    for name in names:
        channels = [one.analyzer == name for one in unit.instruments]
        begun, ended = runs(
            cells.start, (cells.condition[:, channels] == CALIBRATING).any(axis=1), step_us=cell_us
        )
        last = (_utc(begun)[-1], _utc(ended)[-1]) if len(begun) else (pd.NaT, pd.NaT)
        found.append((len(begun), float((ended - begun).sum() / 3.6e9), *last))
    frame = pd.DataFrame(found, columns=["windows", "hours", "start", "end"], index=pd.Index(names))
    return frame.rename_axis("analyzer")


def outvoted(unit: Unit, cells: Cells) -> pd.Series[float]:
    """Tell how often each signal that votes on the operating condition contradicted what most said.

    Parameters
    ----------
    unit : Unit
        One reactor.
    cells : Cells
        Of the span.

    Returns
    -------
    Series
        Index instrument: share of the cells in which it was seen (0..1); empty where fewer than three vote.
    """
    votes = voters(unit.operating) if unit.operating else ()
    if len(votes) < 3:
        return pd.Series(dtype=float)
    names = [one.name for one in unit.instruments]
    signals = cells.value[:, [names.index(vote.instrument) for vote in votes]].T
    down, running, _ = majority(signals, votes)
    limits = np.array([(vote.down, vote.running) for vote in votes]).T[:, :, None]
    sense = np.sign(limits[1] - limits[0])
    says_down, says_running = sense * signals < sense * limits[0], sense * signals > sense * limits[1]
    against = (says_down & running) | (says_running & down)
    seen = np.isfinite(signals).sum(axis=1)
    share = against.sum(axis=1) / np.where(seen > 0, seen, np.nan)
    return pd.Series(share, index=pd.Index([vote.instrument for vote in votes], name="instrument"))


def _utc(us: NDArray[np.int64]) -> pd.DatetimeIndex:
    return pd.DatetimeIndex(us.astype("datetime64[us]")).tz_localize("UTC")
