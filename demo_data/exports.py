"""Writes the invented plant's exports in three dialects, and the truth behind them.

`python -m demo_data.exports FOLDER` makes both.
"""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq
from numpy.typing import NDArray

from demo_data import meters, plant, scenario, truth
from demo_data.meters import CALIBRATION, DECIMALS, GOOD, NO_NUMBER, NOT_STORED, Results
from demo_data.scenario import Scenario
from ingest.unit import Unit
from ingest.unitfile import load

UNIT_FILE = Path(__file__).parent.parent / "config" / "demo.toml"
STATUS_TAG = "AI-220.CAL"
WORDS = {CALIBRATION: "Calibration", NO_NUMBER: "Bad Input", NOT_STORED: "No Data"}
# OPC DA quality bytes: good, bad (out of service), bad (sensor failure).
OPC_DA = {GOOD: 192, CALIBRATION: 28, NO_NUMBER: 16}

Tags = dict[str, Results]


@dataclass(frozen=True, slots=True)
class Paths:
    """What `make` wrote: the exports in the order of their time, and the two files of the truth."""

    exports: tuple[Path, ...]
    truth_json: Path
    truth_parquet: Path


def make(
    folder: Path,
    *,
    days: int = 60,
    seed: int | None = None,
    unit_file: Path = UNIT_FILE,
    put_in: Scenario | None = None,
) -> Paths:
    """Make the demo data; the same arguments give the same bytes.

    Parameters
    ----------
    folder : Path
        Exports go here, the truth into its sub-folder `truth`. Made if it is not there.
    days : int
        Local days from the scenario's start; each third is written in another dialect.
    seed : int, optional
        The scenario's own when left out.
    unit_file : Path
        Instruments and their uncertainties.
    put_in : Scenario, optional
        What happens, and when; that of scenario.toml when left out.

    Returns
    -------
    Paths
        Whole files: each was written beside its place and then moved there.
    """
    put_in = put_in or scenario.load()
    seed = put_in.seed if seed is None else seed
    unit = load(unit_file)
    true = plant.simulate(days, seed, put_in.events, start=put_in.start)
    measured = meters.measure(true, unit, seed + 1, calibrations=put_in.calibrations)
    tags = measured.results | {STATUS_TAG: _status(true, unit, put_in)}
    exports = []
    for number, (first_day, end_day, write) in enumerate(_thirds(days, put_in.start), start=1):
        grid = scenario.minutes(first_day, (end_day - first_day).days)
        path = folder / f"larkmoor-{number}-{first_day}{_SUFFIX[write]}"
        with _whole(path) as draft:
            write(draft, tags, unit, grid)
        exports.append(path)
    return Paths(tuple(exports), *_write_truth(folder / "truth", true, measured.drawn, put_in))


def bench_year(path: Path, *, days: int = 365, seed: int = 1, unit_file: Path = UNIT_FILE) -> Path:
    """Write a reactor-year for measurements of speed: one row a minute, 24 tags, wide Parquet, UTC.

    Parameters
    ----------
    path : Path
        The file to write.
    days : int
        Local days.
    seed : int
        Of the plant and of its instruments.
    unit_file : Path
        Instruments; bed temperatures nobody asks for fill up to 24 tags.

    Returns
    -------
    Path
        `path`. No faults are put in, only calibration windows, whose readings are null.
    """
    put_in = scenario.load()
    unit = load(unit_file)
    true = plant.simulate(days, seed, start=put_in.start)
    measured = meters.measure(true, unit, seed + 1, calibrations=put_in.calibrations)
    tags = measured.results | {STATUS_TAG: _status(true, unit, put_in)}
    rng = np.random.default_rng(seed)
    for bed in range(1, 25 - len(tags)):
        degc = true.bath_degc + 3.0 * bed + plant.wander(rng, len(true.time), sd=0.5, minutes=60)
        tags[f"TI-206.{bed}"] = Results(true.time, np.round(degc, 2), np.zeros(len(degc), dtype=np.int8))
    columns = {"time": pa.array(true.time, pa.timestamp("us", "UTC"))}
    for tag, results in tags.items():
        shown = meters.held(results, true.time)
        columns[tag] = pa.array(np.where(shown.mark == GOOD, shown.value, np.nan), from_pandas=True)
    with _whole(path) as draft:
        pq.write_table(pa.table(columns), draft, compression="zstd")
    return path


def _write_truth(
    folder: Path, true: plant.Truth, drawn: dict[str, float], put_in: scenario.Scenario
) -> tuple[Path, Path]:
    """Write what was put in (JSON) and the true flows of each cell (Parquet)."""
    record_path, cells_path = folder / "truth.json", folder / "truth.parquet"
    with _whole(record_path) as draft:
        draft.write_text(
            json.dumps(truth.record(true, drawn, put_in.calibrations), indent=1) + "\n", encoding="utf-8"
        )
    with _whole(cells_path) as draft:
        pq.write_table(truth.table(true), draft, compression="zstd")
    return record_path, cells_path


def _status(true: plant.Truth, unit: Unit, put_in: scenario.Scenario) -> Results:
    """Status signal of the analyzer."""
    dead_time = max(i.dead_time for i in unit.instruments)
    return meters.status(true, put_in.calibrations, dead_time)


@contextmanager
def _whole(path: Path) -> Iterator[Path]:
    """Give a draft beside the file; it takes the file's place once written, and is removed on failure."""
    path.parent.mkdir(parents=True, exist_ok=True)
    draft = path.with_name(f".{path.name}.unfinished")
    try:
        yield draft
        with draft.open("rb+") as handle:
            os.fsync(handle.fileno())
        draft.replace(path)
    finally:
        draft.unlink(missing_ok=True)


def _thirds(days: int, start: date) -> Iterator[tuple[date, date, Callable[..., None]]]:
    """Cut the days in three, one for each dialect; a part without a day is left out."""
    edges = [start + timedelta(days=round(days * part / 3)) for part in range(4)]
    for (first, end), write in zip(pairwise(edges), _SUFFIX, strict=True):
        if end > first:
            yield first, end, write


def _wide_csv(path: Path, tags: Tags, unit: Unit, grid: NDArray[np.int64]) -> None:
    """Dialect 1: a row per minute, a column per tag, ISO time with offset, words where no number is."""
    columns = {"time": _local_text(grid, "%Y-%m-%dT%H:%M:%S%z")}
    columns["time"] = pc.replace_substring_regex(columns["time"], r"(\d\d)$", r":\1")
    for tag, results in tags.items():
        shown = meters.held(results, grid)
        columns[tag] = _text(shown, _decimals(unit, tag))
    options = pa_csv.WriteOptions(quoting_style="none", quoting_header="none")
    pa_csv.write_csv(pa.table(columns), path, options)


def _long_csv(path: Path, tags: Tags, unit: Unit, grid: NDArray[np.int64]) -> None:
    """Dialect 2: a row per stored result, semicolons, decimal comma, local time without an offset."""
    tag, rows = _stored(tags, grid)
    names = list(tags)
    text = [_text(_at(rows, tag == code), _decimals(unit, name)) for code, name in enumerate(names)]
    place = np.argsort(np.argsort(tag, kind="stable"), kind="stable")
    value = pa.concat_arrays(text).take(pa.array(place))
    table = pa.table(
        {
            "time": _local_text(rows.time, "%d.%m.%Y %H:%M:%S"),
            "tag": pa.array(names).take(pa.array(tag)),
            "value": pc.replace_substring(value, ".", ","),
            "quality": pa.array(["Good", "Bad"]).take(pa.array((rows.mark != GOOD).astype(np.int8))),
        },
    )
    options = pa_csv.WriteOptions(delimiter=";", quoting_style="none", quoting_header="none")
    pa_csv.write_csv(table, path, options)


def _long_parquet(path: Path, tags: Tags, unit: Unit, grid: NDArray[np.int64]) -> None:
    """Dialect 3: a row per stored result, UTC, OPC DA quality bytes; the value may stand though it is bad."""
    del unit  # numbers are stored as they are
    tag, rows = _stored(tags, grid)
    codes = np.array([OPC_DA.get(mark, 0) for mark in range(len(meters.MARKS))], dtype=np.int32)
    table = pa.table(
        {
            "time": pa.array(rows.time, pa.timestamp("us", "UTC")),
            "tag": pa.DictionaryArray.from_arrays(pa.array(tag, pa.int32()), pa.array(list(tags))),
            "value": pa.array(rows.value, from_pandas=True),
            "quality": pa.array(codes[rows.mark]),
        },
    )
    pq.write_table(table, path, compression="zstd")


_SUFFIX: dict[Callable[..., None], str] = {
    _wide_csv: ".csv",
    _long_csv: "-long.csv",
    _long_parquet: ".parquet",
}


def _stored(tags: Tags, grid: NDArray[np.int64]) -> tuple[NDArray[np.int64], Results]:
    """All stored results within the grid's span in the order of time; a status only when it changes."""
    codes, parts = [], []
    for code, (tag, results) in enumerate(tags.items()):
        kept = (results.time >= grid[0]) & (results.time < grid[-1] + scenario.MINUTE_US)
        rows = _at(results, kept & (results.mark != NOT_STORED))
        if tag == STATUS_TAG:
            rows = _at(rows, np.diff(rows.value, prepend=-1.0) != 0)
        parts.append(rows)
        codes.append(np.full(len(rows.time), code))
    every = Results(
        *(np.concatenate([getattr(p, name) for p in parts]) for name in ("time", "value", "mark"))
    )
    order = np.argsort(every.time, kind="stable")
    return np.concatenate(codes)[order], _at(every, order)


def _at(rows: Results, index: NDArray[np.int64] | NDArray[np.bool_]) -> Results:
    """Rows picked by index or flag."""
    return Results(rows.time[index], rows.value[index], rows.mark[index])


def _decimals(unit: Unit, tag: str) -> int:
    """Digits after the mark that the historian keeps for a tag."""
    return next((DECIMALS[i.unit] for i in unit.instruments if i.tag == tag and i.kind != "signal"), 0)


def _text(rows: Results, decimals: int) -> pa.Array:
    """Values with fixed digits, or the word that stands for why there is none."""
    number = pa.array(rows.value, from_pandas=True)
    text = pc.cast(pc.cast(number, pa.decimal128(14, decimals)), pa.string())
    for mark, word in WORDS.items():
        text = pc.if_else(pa.array(rows.mark == mark), pa.scalar(word), text)
    return text


def _local_text(time_us: NDArray[np.int64], form: str) -> pa.Array:
    """Times on the site's clock."""
    minutes, place = np.unique(time_us, return_inverse=True)
    local = pa.array(minutes, pa.timestamp("us", scenario.TIME_ZONE)).cast(
        pa.timestamp("s", scenario.TIME_ZONE)
    )
    return pc.strftime(local, format=form).take(pa.array(place))


if __name__ == "__main__":
    made = make(Path(sys.argv[1]))
    sys.stdout.write("".join(f"{path}\n" for path in (*made.exports, made.truth_json, made.truth_parquet)))
