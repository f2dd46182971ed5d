"""How the tests of the residuals do on two plants: `python -m tests.bench.bench_suspects [RECORDS]`.

Markdown. False alarms of the global test at 5 % on healthy records, alone and as changes from 12 h before
with every calibration drifted by what is allowed for. Then for each cause its visible size (90 %, Sidak over
all causes), by itself in 1 h and as a change in 8 h; how often it is seen at 1 / 1.3, 1 and 1.3 times that
size, how often the global test fails at that size, and how often at twice that size it or its set is told
first. With the 1,000 records taken by default binomial standard errors are 0.7 % of false alarms, 1.5 % of 62
and 0.9 % of 90. `OMP_NUM_THREADS=1` keeps it quick on a busy machine.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from ingest.residuals import windowed
from ingest.suspects import biases, eliminate, global_test, visible_sizes
from tests.bench.marked import table
from tests.records_made import pyrolysis
from tests.suspects_made import (
    CELL,
    HOUR,
    LEVEL,
    SHIFT,
    Records,
    after,
    baselines,
    cell_by_cell,
    changed,
    demo_plants,
    drifted,
    pieces,
    seen,
    sick,
    windows,
)

EACH = 50  # records in one go
TOLD = 4  # groups of records for the names told first
FACTORS = (1 / 1.3, 1.0, 1.3)
LENGTHS = {"cell": CELL, "1 h": HOUR, "8 h": SHIFT}


def alarms(groups: Sequence[Records], kind: str, length: int) -> tuple[float, float, float, float]:
    """Share of false alarms and its standard error between records; mean and variance of the statistic."""
    found = []
    for number, one in enumerate(groups):
        if kind == "alone":
            cells = cell_by_cell(one, one.after)
            judged = windowed(cells, np.arange(0, len(cells.pull), length), length)
        else:
            value = drifted(one, one.after, length, 66_000 + number)
            judged = changed(one, baselines(one), windows(one, value, length))
        test = global_test(judged)
        found.append(np.stack([test.p_value < LEVEL, test.statistic]).reshape(2, len(one.after), -1))
    alarm, statistic = np.concatenate(found, axis=1)
    error = alarm.mean(axis=1).std() / np.sqrt(len(alarm))
    return alarm.mean(), error, statistic.mean(), statistic.var()


def told(groups: Sequence[Records], kind: str, length: int) -> list[float]:
    """How often each cause, at twice its visible size, is among what serial elimination tells first."""
    named = []
    for number, one in enumerate(groups):
        value, judge = after(number, one, kind, length)
        well = biases(judge(value))
        visible = visible_sizes(well.standard_error, len(well.names))
        for h, name in enumerate(well.names):
            ill = judge(sick(one, value, name, 2 * visible[:, h]))
            steps = [eliminate(ill.take(slice(w, w + 1))).steps for w in range(len(value))]
            named.append(np.mean([bool(own) and name in own[0].suspects for own in steps]))
    return np.mean(np.reshape(named, (len(groups), -1)), axis=0).tolist()


def alarm_rows(plant: str, groups: Sequence[Records]) -> list[list[str]]:
    """One row per kind and length of window."""
    rows = []
    for kind in ("alone", "change"):
        for name, length in LENGTHS.items():
            share, error, mean, variance = alarms(groups, kind, length)
            rows.append([plant, kind, name, f"{100 * share:.1f} +- {100 * error:.1f}", f"{mean:.2f}"])
            rows[-1].append(f"{variance:.1f}")
    return rows


def cause_rows(plant: str, groups: Sequence[Records], kind: str, length: int) -> list[list[str]]:
    """One row per cause."""
    found = seen(groups, kind, length, FACTORS)
    rows = []
    for h, named in enumerate(told(groups[:TOLD], kind, length)):
        shares = [f"{100 * share:.0f}" for share in (*found.single[h], found.whole[h, 1], named)]
        rows.append([plant, found.names[h], f"{100 * found.size[h]:.2g}", *shares, f"{found.told[h, 1]:.3f}"])
    return rows


def tell(text: str) -> None:
    """Write a line as soon as it is known."""
    sys.stdout.write(text + "\n\n")
    sys.stdout.flush()


def main(count: int) -> None:
    """Print the tables."""
    with tempfile.TemporaryDirectory() as folder:
        stirred = pyrolysis(Path(folder), 3600, 12, temperature_k=1150.0)
    plants = {
        "demo": demo_plants(count // EACH, EACH, 71_000),
        "pyrolysis": pieces(stirred, count, EACH, 72_000),
    }
    head = ["plant", "windows", "length", "false alarms [%]", "mean of chi-square", "variance"]
    tell(table(head, [row for plant, groups in plants.items() for row in alarm_rows(plant, groups)]))
    head = [
        "plant",
        "cause",
        "visible [%]",
        "at 1/1.3 [%]",
        "at 1 [%]",
        "at 1.3 [%]",
        "global [%]",
        "told [%]",
    ]
    for kind, length, share in (("alone", HOUR, 1), ("change", SHIFT, 4)):
        rows = [
            row
            for plant, groups in plants.items()
            for row in cause_rows(plant, groups[: max(1, len(groups) // share)], kind, length)
        ]
        tell(f"{kind}, {length / HOUR:g} h\n\n{table([*head, 'estimate / true'], rows)}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
