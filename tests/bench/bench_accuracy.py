"""How honest the half-widths are, as a table: `python -m tests.bench.bench_accuracy [records]`.

For each conversion, any window and windows whose last hour holds a load move: share of 95 % intervals that
hold the truth, and the scatter of the estimate over the stated standard error; by figure, 1 h and 8 h. With
the 4,000 records taken by default their standard errors are 0.35 and 1.1 %.
"""

from __future__ import annotations

import sys
import tempfile
from pathlib import Path

from tests.records_made import FIGURES, HOURS, Told, begins, demo_records, judged, moving, pyrolysis

PICKS = {"any window": begins, "load moves": moving}
BATHS_K = (-103.0, -80.0, -60.0, -30.0, 0.0, 10.0, 17.0)  # conversion 10, 25, 40, 75, 95, 98.5, 99.5 %
TEMPERATURES_K = (1050.0, 1150.0, 1250.0)  # conversion 28, 76, 94 %


def line(name: str, told: Told) -> str:
    """One line per window: coverage and spread of each figure."""
    lines = []
    for h, hours in enumerate(HOURS):
        cells = [f"{100 * c:5.1f} {s:5.3f}" for c, s in zip(told.coverage[h], told.spread[h], strict=True)]
        lines.append(f"{name:38s} {hours} h  " + "  ".join(cells))
    return "\n".join(lines)


def tell(text: str) -> None:
    """Write a line as soon as it is known."""
    sys.stdout.write(text + "\n")
    sys.stdout.flush()


def main(count: int) -> None:
    """Print the table."""
    tell(f"coverage [%] and spread of: {', '.join(FIGURES)}")
    for bath_k in BATHS_K:
        for name, pick in PICKS.items():
            told = demo_records(count, 20_000, pick, bath_k=bath_k)
            tell(line(f"demo plant, bath {bath_k:+.0f} K, {name}", told))
    with tempfile.TemporaryDirectory() as folder:
        for temperature_k in TEMPERATURES_K:
            made = pyrolysis(Path(folder), 3600, 1, temperature_k=temperature_k)
            for name, pick in PICKS.items():
                told = judged(made, pick(made, count, 2), 777)
                tell(line(f"pyrolysis, {temperature_k:.0f} K, {name}", told))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 4000)
