"""How right verdicts are on faults put in: `python -m tests.bench.bench_verdict [PLANTS] [--write]`.

Each plant has instruments of its own, a healthy month and eight days after it. Faults of every kind, 0.5 to 3
times as large as is visible (90 %), are put into windows of eight hours; what each cause looks like where it
cannot be told from another is in 'parallel' rows. `--write` puts the tables into DEVELOPERS.md.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from tests.bench.marked import show, table
from tests.verdicts_judged import PARALLEL, Judge, Result, Said, tried
from tests.verdicts_made import demo, propene, rows_of

WORDS = ("instrument", "reactor", "cannot tell", "nothing moved")
STATED = WORDS[:2]
EACH = 2  # faults of each instrument in one plant
LARGE = 1.5  # sizes, in those that are visible
LEAST_MOVE = 0.5  # points of the shown yield


def plants(count: int) -> dict[str, list[Judge]]:
    """As many of each chemistry."""
    with tempfile.TemporaryDirectory() as folder:
        return {
            "demo": [Judge(demo(500 + 10 * k)) for k in range(count)],
            "propene": [Judge(propene(Path(folder), 600 + 10 * k)) for k in range(count)],
        }


def share(told: Sequence[bool]) -> str:
    """A share in percent, or a dash."""
    return f"{100 * np.mean(told):.1f}" if told else "-"


def kind_row(name: str, kind: str, found: Sequence[Result]) -> list[str]:
    """One row of the confusion table."""
    words = [one.said.word for one in found]
    counts = [f"{words.count(word)}" for word in WORDS]
    named = [one for one in found if one.trial.name]
    holds = share([one.trial.name in one.said.names for one in named])
    size = np.mean([len(one.said.names) for one in found])
    return [name, kind, f"{len(found)}", *counts, holds, f"{size:.1f}"]


def wrong(one: Result) -> bool:
    """Whether reactor and instrument were swapped, or an instrument was named that it is not."""
    trial, said = one.trial, one.said
    if said.word not in STATED or trial.word == "cannot tell":
        return False
    return said.word != trial.word or bool(trial.name and trial.name not in said.names)


def musts(found: Sequence[Result], healthy: Sequence[Said]) -> list[list[str]]:
    """What has to hold, as it is."""
    single = [one for one in found if one.trial.word != "cannot tell"]
    two = [one for one in found if one.trial.word == "cannot tell"]
    moved = [one for one in single if abs(one.moved) >= LEAST_MOVE]
    clear = [one for one in moved if one.trial.kind not in PARALLEL]
    stated = [one for one in moved if one.said.word in STATED]
    own = [one for one in clear if one.trial.name]
    large = [one for one in single if one.trial.visible >= LARGE and one.trial.kind not in PARALLEL]
    return [
        must("class stated, faults that can be told", "90 %", [one in stated for one in clear]),
        must("class stated, parallel ones too", "", [one in stated for one in moved]),
        must("class right when stated", "99 %", [one.said.word == one.trial.word for one in stated]),
        must("class stated on healthy windows", "<= 1 %", [one.word in STATED for one in healthy]),
        must("instrument: likeliest name right", "95 %", [one.trial.name == one.said.top for one in own]),
        must("instrument: set holds it", "99 %", [one.trial.name in one.said.names for one in own]),
        [
            "instrument: mean size of the set",
            "1.2",
            f"{np.mean([len(one.said.names) for one in own]):.2f}",
            "",
        ],
        must("instrument 1.5 x visible: class stated", "", [one.said.word in STATED for one in large]),
        must("two at once called one clean cause", "<= 5 %", [one.said.word in STATED for one in two]),
        must("all sizes: wrong name, or classes swapped", "<= 3 %", [wrong(one) for one in single]),
    ]


def must(what: str, aim: str, told: Sequence[bool]) -> list[str]:
    """One row: what, how often it should hold, how often it does, of how many."""
    return [what, aim, share(told), f"{len(told)}"]


def main(count: int) -> None:
    """Print the tables."""
    head = ["plant", "fault", "n", *WORDS, "set holds it [%]", "names"]
    rows, found, healthy = [], [], []
    for name, judges in plants(count).items():
        own = [one for k, judge in enumerate(judges) for one in tried(judge, EACH, k)]
        healthy += [judge.say(rows_of(judge.made.cells, one)) for judge in judges for one in judge.windows]
        for kind in dict.fromkeys(one.trial.kind for one in own):
            rows.append(kind_row(name, kind, [one for one in own if one.trial.kind == kind]))
        found += own
    aims = table(
        ["faults that move the yield by 0.5 points, 8 h", "aim", "is [%]", "n"], musts(found, healthy)
    )
    show("bench verdict", f"{aims}\n\n{table(head, rows)}")


if __name__ == "__main__":
    numbers = [int(one) for one in sys.argv[1:] if one.isdigit()]
    main(numbers[0] if numbers else 12)
