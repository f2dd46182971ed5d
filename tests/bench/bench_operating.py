"""Are shutdowns found, and only those? `python -m tests.bench.bench_operating [SECONDS]` of processor time.

Each plant is DAYS days of the demo with another seed; every five days hold an outage and a fault of the
meters that tell it. `votes`: the demo's unit file. `load alone`: the same without votes.
"""

from __future__ import annotations

import sys
import time
from collections import Counter
from dataclasses import replace

import numpy as np

from tests.operating_made import UNIT, Told, made, screens, told

DAYS = 30
NOTHING = Told(0, 0, 0, 0, (), ())


def line(name: str, days: int, one: Told) -> str:
    """One line of the table."""
    delay = np.array(one.delay_min)
    return (
        f"{name:10s} {days:6d} d  shutdowns {one.shutdowns:5d}  within 25 min "
        f"{100 * one.found_soon / one.shutdowns:6.2f} %  longest {delay.max():5.0f} min  median "
        f"{np.median(delay):4.0f} min  false shutdowns {one.false:4d}  cells beside {one.beside}  "
        f"missed {dict(Counter(one.missed))}"
    )


def main() -> None:
    """Simulate plants until the time is used up, then print the tables."""
    assert UNIT.operating is not None
    alone = replace(UNIT, operating=replace(UNIT.operating, votes=()))
    limit = float(sys.argv[1]) if len(sys.argv) > 1 else 60.0
    voting, single, counts, days, seed = NOTHING, NOTHING, Counter[str](), 0, 5000
    while time.process_time() < limit:
        one = made(seed, DAYS)
        voting, single = voting + told(one), single + told(one, alone)
        if seed % 5 == 0:
            counts += screens(made(seed, DAYS, faulty=False))
        days, seed = days + DAYS, seed + 3
    sys.stdout.write(f"{line('votes', days, voting)}\n{line('load alone', days, single)}\n")
    sys.stdout.write(
        f"good readings refused {100 * counts['good refused'] / counts['good']:.3f} % of {counts['good']}, "
        f"calibration windows found {100 * counts['windows found'] / counts['windows']:.2f} % "
        f"of {counts['windows']}\n"
    )


if __name__ == "__main__":
    main()
