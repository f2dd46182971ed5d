"""How often the lag of an analyzer is found, and how well: `python -m tests.bench.bench_lag [RUNS]`.

Each run is DAYS days of the demo plant with another seed. The dead time goes round through DEAD_MIN; the unit
file always declares 4 min. `true`: as simulated. `unrelated`: analyses of another plant. `unmoved`: feeds
stand still.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from tests.lags_made import UNIT, days, edges, judged, lags, unmoved, unrelated

DEAD_MIN = (0, 4, 8, 12, 2, 6, 10, 20)
DAYS = 21
MADE = {"true": days, "unrelated": unrelated, "unmoved": unmoved}


def row(kind: str, hours: int, runs: int) -> str:
    """One line of the table."""
    deads = [DEAD_MIN[run % len(DEAD_MIN)] for run in range(runs)]
    found = judged((MADE[kind](1000 + 7 * run, dead, DAYS) for run, dead in enumerate(deads)), hours)
    every = [(one, dead) for several, dead in zip(found, deads, strict=True) for one in several]
    told = [(one, dead) for one, dead in every if np.isfinite(one.estimate_min)]
    line = f"{kind:10s} {hours:3d} h {len(every):6d} spans  answered {100 * len(told) / len(every):6.2f} %"
    if kind != "true" or not told:
        return line
    error = np.array([one.estimate_min - dead for one, dead in told])
    held = np.mean([one.low_min <= dead <= one.high_min for one, dead in told])
    false = sum(one.answer == "differs" and abs(dead - one.declared_min) <= 1 for one, dead in told)
    return (
        f"{line}  within 3 min {100 * np.mean(np.abs(error) <= 3):6.2f} %  bias {error.mean():5.2f} "
        f"sd {error.std():4.2f} min  interval holds {100 * held:5.1f} %  false findings {false}"
    )


def main() -> None:
    """Print the table, then the time that one day takes."""
    runs = int(sys.argv[1]) if len(sys.argv) > 1 else 16
    for kind in MADE:
        for hours in (24, 8):
            sys.stdout.write(row(kind, hours, runs) + "\n")
            sys.stdout.flush()
    span, readings = days(1000, DEAD_MIN[0], DAYS)
    begin = time.perf_counter()
    found = lags(UNIT, readings, edges(span, 24))
    sys.stdout.write(f"{1e3 * (time.perf_counter() - begin) / len(found):.1f} ms a day, screening included\n")


if __name__ == "__main__":
    main()
