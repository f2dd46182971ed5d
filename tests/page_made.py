"""A store for the page, made in seconds: the demo plant's unit with invented figures a test needs."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import timedelta
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa

from ingest.cells import OPERATING, Cells, cells_frame
from ingest.instruments import balance_instruments
from ingest.ledger import Store
from ingest.unit import Unit
from ingest.unitfile import load
from monitor import desk
from monitor.amounts import amount_names
from monitor.figures import figures_of
from monitor.layout import BAR, figure_stage
from monitor.register import registered
from monitor.verdict import INSTRUMENT, Loss, Shift, Suspect, Verdict, Without, as_text
from monitor.windows import FIELDS, MODES, REASONS

DEMO = Path(__file__).parents[1] / "config" / "demo.toml"
RUNNING, DOWN = OPERATING.index("running"), OPERATING.index("down")
LEVELS = {
    "conversion": (95.5, 0.1), "selectivity on converted": (86.5, 0.25), "yield on feed": (82.6, 0.28),
    "overall selectivity to all unwanted": (1.43, 0.023), "carbon closure": (99.6, 1.1),
    "hydrogen closure": (100.4, 1.6), "oxygen closure": (98.9, 2.2), "converted closure": (98.7, 2.4),
}  # fmt: skip


def unit() -> Unit:
    """The demo plant's unit."""
    return load(DEMO)


def clock(days: float, end: str) -> pd.DatetimeIndex:
    """Cell starts of so many days; the last cell ends at `end`."""
    last = pd.Timestamp(end).tz_convert("UTC").as_unit("us")
    return pd.date_range(last - pd.Timedelta(days=days), last, freq="10min", inclusive="left", name="start")


def down(start: pd.DatetimeIndex, hours: Sequence[tuple[float, float]]) -> np.ndarray:
    """Which cells are down: from and to in hours before the end."""
    before = np.asarray((start[-1] - start) / pd.Timedelta(hours=1))
    return (
        np.any([(before <= a) & (before > b) for a, b in hours], axis=0)
        if hours
        else np.zeros(len(start), bool)
    )


def figure_frame(
    of: Unit, start: pd.DatetimeIndex, off: np.ndarray, window: timedelta, drop: float
) -> pd.DataFrame:
    """Invented figures: a level, a slow wander, and a fall of `drop` in yield and selectivity at the end."""
    rng = np.random.default_rng(round(window.total_seconds()))
    smooth = max(round(window / of.cell), 1)
    fall = drop * np.clip((np.arange(len(start)) - len(start) + 60) / 40, 0, 1)
    columns = {}
    for figure in figures_of(of, amount_names(of)):
        level, half = LEVELS.get(figure.name, (5.0, 0.2))
        noise = np.convolve(rng.normal(0, 1, len(start) + smooth), np.ones(smooth) / smooth, "same")[
            : len(start)
        ]
        moved = fall if figure.name in ("yield on feed", "selectivity on converted") else 0.0
        value = np.where(off, np.nan, level + half * noise * 1.5 - moved)
        parts = (
            value,
            np.where(off, np.nan, half),
            np.where(off, 0.0, 0.97),
            np.where(off, REASONS.index("not running"), 0),
        )
        for mode in MODES:
            columns |= {(figure.name, mode, field): part for field, part in zip(FIELDS, parts, strict=True)}
    frame = pd.DataFrame(columns, index=(start + of.cell).rename("end"))
    frame.columns = pd.MultiIndex.from_tuples(frame.columns, names=["figure", "mode", "field"])
    return frame


def states_frame(of: Unit, start: pd.DatetimeIndex, off: np.ndarray) -> pd.DataFrame:
    """Invented adjustments: one instrument stands out, one is not redundant, one gives no reading."""
    rng = np.random.default_rng(7)
    names = [one.name for one in balance_instruments(of)]
    columns = {}
    for place, name in enumerate(names):
        spread = 0.0 if place == 2 else 0.5 + 0.03 * place
        value = rng.normal(2.4 if place == 5 else 0.0, max(spread, 0.01), len(start))
        missing = off | (place == len(names) - 1)
        columns[f"adjustment {name}"] = np.where(missing, np.nan, value).astype(np.float32)
        columns[f"adjustment_sd {name}"] = np.where(missing, np.nan, spread).astype(np.float32)
    freedom = np.where(off, 0, 5).astype(np.int16)
    objective = np.where(off, np.nan, rng.chisquare(5, len(start))).astype(np.float32)
    return pd.DataFrame({**columns, "objective": objective, "freedom": freedom}, index=start)


def made_cells(of: Unit, start: pd.DatetimeIndex, off: np.ndarray) -> pd.DataFrame:
    """Cells that only tell the operating condition."""
    shape = (len(start), len(of.instruments))
    return cells_frame(
        of,
        Cells(
            start=start.asi8, value=np.full(shape, np.nan), share=np.ones(shape, np.float32),
            condition=np.zeros(shape, np.int8), operating=np.where(off, DOWN, RUNNING).astype(np.int8),
        ),
    )  # fmt: skip


def verdict(last: pd.Timestamp) -> Verdict:
    """An invented verdict: a channel reads low, the reactor is as it was."""
    last_us = int(last.value // 1000)
    name, hour_us = "AI-220 methacrolein", 3_600_000_000
    return Verdict(
        word=INSTRUMENT, reason="", is_provisional=False, first_us=last_us - 8 * hour_us, last_us=last_us,
        healthy_us=(last_us - 900 * hour_us, last_us - 200 * hour_us), is_healthy_stated=True,
        onset_us=last_us - 6 * hour_us, calibrated="AI-220",
        chances=(("nothing", 0.0), ("instrument", 0.98), ("reactor", 0.02), ("several", 0.0)),
        suspects=(Suspect(name, "instrument", 0.97, -0.031, 0.004, "the span gas of AI-220 methacrolein"),),
        balance_p=1e-6, reaction_p=0.02, misfit_p=0.4,
        closures=(Shift("yield on feed", "%", 82.7, 79.9), Shift("carbon closure", "%", 99.7, 98.1)),
        adjustments=(Shift(name, "", 0.2, 3.4),), operating=(Shift("FI-201", "kg/h", 5300.0, 5310.0),),
        outside=(), conditions=(), figures=(Without("yield on feed", "%", 79.9, name, 82.4),),
        loss=Loss(-2.8, -0.1, -2.7, (("carbon dioxide", -1.4), ("acetone", 0.1)), 210.0, np.nan, np.nan, ""),
        settle=("a laboratory sample of the outlet",), mark="made",
    )  # fmt: skip


def episode_frame(start: pd.DatetimeIndex) -> pd.DataFrame:
    """One open episode on yield, one that ended a day before the end on carbon closure."""
    last = start[-1]
    hours = [pd.Timedelta(hours=h) for h in (5, 30, 24, 2, 27)]
    on = pd.Timedelta(hours=1)
    return pd.DataFrame(
        {
            "watch": ["yield on feed 8 h", "carbon closure 8 h"],
            "figure": ["yield on feed", "carbon closure"],
            "window": [pd.Timedelta(hours=8)] * 2, "side": ["low", "high"], "limit": [81.0, 103.0],
            "priority": ["high", "low"], "first_crossed": [last - hours[0] - on, last - hours[1] - on],
            "raised": [last - hours[0], last - hours[1]],
            "cleared": pd.to_datetime([pd.NaT, last - hours[2]], utc=True),
            "suppressed": [False, False], "worst": [79.9, 104.2],
            "worst_at": [last - hours[3], last - hours[4]], "verdict": [as_text(verdict(last)), None],
        }
    )  # fmt: skip


def fill(
    folder: Path, of: Unit, *, days: float, end: str, off: Sequence[tuple[float, float]], drop: float
) -> None:
    """Write everything that the page reads in one pass."""
    start = clock(days, end)
    idle = down(start, off)
    frames = {"cells": made_cells(of, start, idle), "states": states_frame(of, start, idle)}
    for window in of.windows:
        figures = figure_frame(of, start, idle, window, drop)
        frames[figure_stage(window)] = figures.set_axis([BAR.join(name) for name in figures.columns], axis=1)
    with Store(folder).begin() as pass_:
        for stage, frame in frames.items():
            pass_.splice(
                of.key, stage, pa.Table.from_pandas(frame.copy().reset_index(), preserve_index=False)
            )
        episodes = episode_frame(start) if drop else episode_frame(start).iloc[1:]
        pass_.replace_episodes(of.key, episodes)
        newest = (start[-1] + of.cell).to_pydatetime()
        names = [watch.name for watch in of.watches]
        pass_.at_commit(partial(desk.put, alerts=registered(of.key, (), episodes, names, newest)))
