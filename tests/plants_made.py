"""Small plants for end-to-end checks: a unit file and an export on disk, taken in, worked out to figures."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd

from ingest.archive import SITE, STAGE
from ingest.balance import problem_of
from ingest.cells import make_cells
from ingest.ledger import Store
from ingest.readings import read_months
from ingest.unit import Unit
from ingest.unitfile import load
from monitor.amounts import amounts_of
from monitor.figures import figures_of
from monitor.layout import figure_stage
from monitor.run import run_pass
from monitor.windows import window_figures

START = pd.Timestamp("2026-03-02T00:00Z")
MINUTES = 130
ERROR = "{ relative_pct = 0.5, floor = 1e-9 }"


@dataclass(frozen=True)
class Seen:
    """One reading of the made plant: what an instrument of some kind on some stream shows all the time."""

    kind: str
    stream: str
    value: float
    unit: str
    species: str | None = None
    extra: str = ""


def unit_text(
    species: Mapping[str, str],
    streams: Mapping[str, tuple[str, Sequence[str]]],
    seen: Sequence[Seen],
    chemistry: str,
    nodes: str = "",
) -> str:
    """A unit file with one held instrument per reading, 0.5 % each; tags T0, T1 ...

    A stream says 'in' or 'out', or where the text of `nodes` has some, 'from > to' and any role: '> mixer'.
    """
    parts = [
        '[unit]\nname = "made"\ntime_zone = "UTC"\ncell = "10min"\nreactor = "well-mixed"\n',
        f"[chemistry]\n{chemistry}\n[chemistry.species]",
        *(f'"{name}" = "{formula}"' for name, formula in species.items()),
        nodes,
    ]
    for name, (way, held) in streams.items():
        lines = _joins(way) if ">" in way else f'direction = "{way}"'
        parts.append(f'[[stream]]\nname = "{name}"\n{lines}\nspecies = {json.dumps(list(held))}')
    for number, one in enumerate(seen):
        counted = f'species = ["{one.species}"]\nbasis = "wet"\n' if one.species else ""
        counted = counted.replace('basis = "wet"\n', "") if one.kind == "species flow" else counted
        parts.append(
            f'[[instrument]]\nname = "I{number}"\ntag = "T{number}"\nkind = "{one.kind}"\n'
            f'stream = "{one.stream}"\nunit = "{one.unit}"\n{counted}{one.extra}'
            f"random = {ERROR}\nsystematic = {ERROR}\n"
            'cycle = "10min"\nmax_age = "30min"\nsampling = "held"'
        )
    return "\n".join(parts) + "\n"


def _joins(way: str) -> str:
    """The keys of 'from > to, role'."""
    ends, _, role = way.partition(",")
    values = zip(("from", "to", "role"), (*ends.split(">"), role), strict=True)
    return "\n".join(f'{key} = "{value.strip()}"' for key, value in values if value.strip())


def export_text(values: Sequence[float]) -> str:
    """A wide CSV with one row a minute, each number with all its digits."""
    header = ",".join(["time", *(f"T{i}" for i in range(len(values)))])
    stamps = pd.date_range(START - pd.Timedelta(minutes=5), periods=MINUTES, freq="min")
    row = ",".join(repr(float(value)) for value in values)
    return "\n".join([header, *(f"{stamp:%Y-%m-%dT%H:%M:%S}Z,{row}" for stamp in stamps)]) + "\n"


def work_out(folder: Path, text: str, values: Sequence[float]) -> tuple[Unit, pd.Series]:
    """Take the export in and give the unit with the judged figures of the last full hour, all digits kept."""
    unit_path, export_path = folder / "made.toml", folder / "export.csv"
    unit_path.write_text(text)
    export_path.write_text(export_text(values))
    unit = load(unit_path)
    result = run_pass([unit], folder / "store", [export_path], progress=lambda *_: None, settle=timedelta(0))
    assert not result.set_aside
    tags = [one.tag for one in unit.instruments if one.tag]
    paths = Store(folder / "store").snapshot().paths(SITE, STAGE)
    first = START.value // 1000
    readings = read_months(paths, tags, first - 3_600_000_000, first + 3 * 3_600_000_000)
    cells = make_cells(unit, readings, first, first + 2 * 3_600_000_000)
    _, amounts = amounts_of(unit, problem_of(unit), cells)
    judged = window_figures(unit, amounts, figures_of(unit, amounts.names))[unit.windows[0]]
    told = judged.xs("as operated", axis=1, level=1).iloc[-1].unstack()  # noqa: PD010  of a series
    table = Store(folder / "store").read(unit.key, figure_stage(unit.windows[0]))
    stored = table.to_pandas(ignore_metadata=True)
    for name, value in told["value"].items():
        column = f"{name} | as operated | value"
        same = np.isclose(stored[column].iloc[11], value, rtol=1e-6, equal_nan=True)
        assert same, f"the store holds {stored[column].iloc[11]} for {name}, worked out {value}"
    return unit, told
