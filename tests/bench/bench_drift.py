"""How soon is a loss of yield found, at how many false alerts? `python -m tests.bench.bench_drift [months]`.

Each month is 30 days of a plant of its own, right after its healthy period; every block is balanced by the
program. Delays run from the first hour of the loss to the end of the block that alerts; plants with an
episode open at that hour are left out. `--write` puts the table into DEVELOPERS.md.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ingest.unit import Unit, Watch
from monitor.departure import departures, learnt
from monitor.runlengths import brownian_delay
from tests.bench import marked
from tests.drift_made import FIGURES, HOUR_US, Plants, blocks_of, drift_watch, operated, plants, since
from tests.units_made import MIDNIGHT

MONTH_H = 720
LOSSES = {"0.5 % step": 0.005, "1 % step": 0.01, "2 % step": 0.02, "1 %/week ramp": None}
EDGES_H = (72, 480)  # between which a loss begins
PART = 50  # plants made at once
MUST = ("", "must", "at most 1", "", "30", "6", "3", "80")
HEAD = ("healthy", "watched", "false in 30 d", "variance [%2 h]", *(f"{name} [h]" for name in LOSSES))


@dataclass(frozen=True)
class Run:
    """Raises of one plant in hours after its healthy period, for each loss (none first), and its noise."""

    raised: list[np.ndarray]
    cleared: list[np.ndarray]
    variance: float


def lost(count: int, healthy_h: int, begins: np.ndarray, size: float | None) -> np.ndarray:
    """Share of the wanted reaction that burns, (plants, hours)."""
    since_h = np.arange(healthy_h + MONTH_H) - (healthy_h + begins)[:, None]
    return np.where(since_h >= 0, size, 0.0) if size is not None else np.clip(since_h, 0, None) / 168 * 0.01


def runs(healthy_h: int, watched: Sequence[str], months: int) -> tuple[list[Run], np.ndarray]:
    """Every plant with and without each loss, and when the losses began."""
    begins = np.random.default_rng(3).integers(*EDGES_H, months)
    unit, found = operated(healthy_h), []
    watches = [drift_watch(figure=name) for name in watched]
    for first in range(0, months, PART):
        begun = begins[first : first + PART]
        seed = 1000 + first
        losses = [0.0, *(lost(len(begun), healthy_h, begun, size) for size in LOSSES.values())]
        made = [plants(len(begun), healthy_h + MONTH_H, seed, loss=one) for one in losses]
        found += [run(unit, healthy_h, watches, made, place) for place in range(len(begun))]
    return found, begins


def run(unit: Unit, healthy_h: int, watches: Sequence[Watch], made: Sequence[Plants], place: int) -> Run:
    """Episodes of one plant; the expectation is learnt once, before anything was lost."""
    raised: list[list[np.ndarray]] = [[] for _ in made]
    cleared: list[list[np.ndarray]] = [[] for _ in made]
    origin = MIDNIGHT + healthy_h * HOUR_US
    variance = 0.0
    for watch in watches:
        blocks = [blocks_of(unit, one, place, watch.figure) for one in made]
        one = learnt(unit, unit.healthy, watch, blocks[0])  # type: ignore[arg-type]
        variance = variance or one.noise.long_run_sd**2
        for at, each in enumerate(blocks):
            told = departures(watch, since(each, healthy_h - 1), one, sides=("low",), charts=2 * len(watches))
            ends = told["cleared"].dt.tz_localize(None).to_numpy("datetime64[us]").astype(np.int64)
            ends = np.where(told["cleared"].isna(), 2**60, ends)
            begun = told["raised"].dt.tz_localize(None).to_numpy("datetime64[us]").astype(np.int64)
            raised[at].append((begun - origin) / HOUR_US)
            cleared[at].append((ends - origin) / HOUR_US)
    return Run([np.concatenate(one) for one in raised], [np.concatenate(one) for one in cleared], variance)


def delays(found: Sequence[Run], begins: np.ndarray, loss: int) -> np.ndarray:
    """Hours until the first raise; what is never raised counts as the rest of the month."""
    told = []
    for one, begun in zip(found, begins.tolist(), strict=True):
        raised, cleared = one.raised[loss], one.cleared[loss]
        if not ((raised <= begun) & (cleared > begun)).any():
            told.append(min(raised[raised > begun].min(initial=MONTH_H), MONTH_H) - begun)
    return np.array(told)


def row(days: int, watched: Sequence[str], months: int) -> tuple[list[str], float]:
    """One line of the table, and the mean long-run variance."""
    found, begins = runs(days * 24, watched, months)
    false = sum(len(one.raised[0]) for one in found) / months
    variance = float(np.mean([one.variance for one in found]))
    late = [delays(found, begins, at) for at in range(1, len(LOSSES) + 1)]
    cells = [f"{one.mean():.1f} ({np.median(one):.0f})" for one in late]
    return [f"{days} d", " + ".join(watched), f"{false:.2f}", f"{variance:.2f}", *cells], variance


def main() -> None:
    """Print the table."""
    told = [one for one in sys.argv[1:] if one.isdigit()]
    months = int(told[0]) if told else 200
    started, lines, variances = time.process_time(), [], []
    for days, watched in ((60, FIGURES[:1]), (60, FIGURES), (30, FIGURES[:1])):
        line, variance = row(days, watched, months)
        lines.append(line)
        variances.append(variance)
        sys.stderr.write(f"{line} after {time.process_time() - started:.0f} s\n")
    steps = [size * 100 for size in LOSSES.values() if size is not None]
    best = [f"{brownian_delay(step, variances[0], 60 * 24):.1f}" for step in steps]
    yardstick = ["", "yardstick on continuous noise", "0.50", f"{variances[0]:.2f}", *best, ""]
    marked.show("bench drift", marked.table(HEAD, [*lines, yardstick, MUST]))


if __name__ == "__main__":
    main()
