"""Processor seconds and peak memory of reading one reactor-year in each format, and of a pass over some.

`python -m tests.bench.bench_exports [share of a year, default 1.0]` reads each format in its own process;
with `--pass` it takes the year in as long CSV and as wide CSV into a new store; `--write` keeps that table.
"""

from __future__ import annotations

import resource
import shutil
import subprocess
import sys
import tempfile
import time
from datetime import timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pcsv
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from ingest.exports import open_export
from ingest.intake import take_in
from ingest.ledger import Store
from ingest.parts import sha256_of
from ingest.readings import Series, by_month, join, write_month
from ingest.unit import ExportRules
from tests.bench.marked import show, table
from tests.units_made import made_instrument, made_unit

TAGS = [f"AI-{i:03}.PV" for i in range(24)]
ROWS = 525_600
BLOCK = 20_000


def made(first: int, count: int) -> pa.Table:
    """One-minute rows from the first on."""
    rng = np.random.default_rng(first)
    times = np.datetime64("2026-01-01T00:00:00", "s") + np.arange(first, first + count) * np.timedelta64(
        60, "s"
    )
    values = rng.normal(50, 1, (count, len(TAGS))).round(3)
    stamps = pa.array(times).cast(pa.timestamp("s", "UTC"))
    return pa.table({"time": stamps, **{tag: values[:, i] for i, tag in enumerate(TAGS)}})


def melted(wide: pa.Table) -> pa.Table:
    """The same readings in long form, sorted by time."""
    values = np.column_stack([wide[tag].to_numpy() for tag in TAGS]).ravel()
    codes = np.tile(np.arange(len(TAGS), dtype=np.int32), len(wide))
    return pa.table(
        {
            "time": pa.array(np.repeat(wide["time"].to_numpy(), len(TAGS))).cast(pa.timestamp("s", "UTC")),
            "tag": pa.DictionaryArray.from_arrays(codes, TAGS),
            "value": values,
            "quality": pa.repeat(pa.scalar("Good"), len(values)),
        }
    )


def spoilt(wide: pa.Table) -> pa.Table:
    """One cell in each block that is no number."""
    text = wide[TAGS[0]].cast(pa.string()).to_pylist()
    text[len(text) // 2] = "12,3x"
    return wide.set_column(1, TAGS[0], pa.array(text))


def joined(wide: pa.Table) -> pa.Table:
    """Half of the tags have a reading each 6 min only; their other cells are blank."""
    blank = pa.array(np.arange(len(wide)) % 6 != 0)
    for tag in TAGS[::2]:
        column = pa.compute.if_else(blank, pa.scalar(None, pa.float64()), wide[tag])
        wide = wide.set_column(wide.column_names.index(tag), tag, column)
    return wide


def worded(wide: pa.Table) -> pa.Table:
    """One cell in each block holds a word for no value."""
    text = wide[TAGS[0]].cast(pa.string()).to_pylist()
    text[len(text) // 2] = "Bad"
    return wide.set_column(1, TAGS[0], pa.array(text))


def as_local(wide: pa.Table) -> pa.Table:
    """Times without offset, day first."""
    text = pa.compute.strftime(wide["time"].cast(pa.timestamp("s")), format="%d.%m.%Y %H:%M")
    return wide.set_column(0, "time", text)


FORMATS = {
    "wide.parquet": lambda wide: wide,
    "long.parquet": melted,
    "wide.csv": lambda wide: wide,
    "joined.parquet": joined,
    "joined.csv": joined,
    "worded.csv": worded,
    "spoilt.csv": spoilt,
    "local.csv": as_local,
    "long.csv": melted,
}


def write(folder: Path, name: str, rows: int) -> Path:
    """The whole year in one format, written block by block."""
    path = folder / name
    writer = None
    for first in range(0, rows, BLOCK):
        table = FORMATS[name](made(first, min(BLOCK, rows - first)))
        if writer is None:
            kind = pq.ParquetWriter if name.endswith("parquet") else pcsv.CSVWriter
            writer = kind(path, table.schema)
        writer.write_table(table)
    assert writer is not None
    writer.close()
    return path


def read(path: Path) -> str:
    """Read, join and write by month; what it took."""
    begin = time.process_time()
    rules = ExportRules("UTC", (), None)
    batches = open_export(path, number=1, rules=rules, wanted=frozenset(TAGS), time_zone=None)
    pieces: dict[str, dict[str, list[Series]]] = {}
    for readings in batches:
        for month, tags in by_month(readings).items():
            for tag, series in tags.items():
                pieces.setdefault(month, {}).setdefault(tag, []).append(series)
    reading = time.process_time() - begin
    for month in list(pieces):
        joined = {tag: join(parts)[0] for tag, parts in pieces.pop(month).items()}
        write_month(path.with_name(f"{month}.month"), joined)
    whole = time.process_time() - begin
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    hashed = time.process_time()
    sha256_of(path)
    hashed = time.process_time() - hashed
    account = batches.account()
    size = path.stat().st_size / 1e6
    return (
        f"{path.name:13} {size:4.0f} MB: read {reading:.2f} s, with months written {whole:.2f} s,"
        f" hash {hashed:.2f} s, peak {peak:.0f} MB, {account.accepted} accepted, {account.rejected} rejected"
    )


def passed(path: Path) -> str:
    """Take one export into a new store; what it took, as cells of a table."""
    unit = made_unit(*(made_instrument(tag, tag=tag) for tag in TAGS), exports=ExportRules("UTC", (), None))
    told: list[int] = []
    begin, used = time.perf_counter(), time.process_time()
    with Store(path.with_name("store")).begin() as pass_:
        result = take_in(
            pass_, [unit], [path], settle=timedelta(0), progress=lambda done, _: told.append(done)
        )
    wall, used = time.perf_counter() - begin, time.process_time() - used
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    (account,) = (one.account for one in result.outcomes)
    assert account is not None
    rows, size = f"{account.rows:,}", f"{path.stat().st_size / 1e6:.0f}"
    return "|".join((path.name, rows, size, f"{used:.1f}", f"{wall:.1f}", f"{peak:.0f}", f"{len(told):,}"))


def passes(share: float) -> None:
    """Write the table of passes."""
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        for name in ("long.csv", "wide.csv"):
            path = write(Path(folder), name, int(ROWS * share))
            command = [sys.executable, "-m", "tests.bench.bench_exports", "--took", str(path)]
            done = subprocess.run(command, check=True, capture_output=True, text=True)
            rows.append(done.stdout.strip().split("|"))
            path.unlink()
            shutil.rmtree(path.with_name("store"))
    head = ("export", "rows", "size [MB]", "processor [s]", "wall [s]", "peak [MB]", "steps of progress")
    show("bench exports", table(head, rows))


def main() -> None:
    """Make the files in a temporary folder and read each in a new process."""
    numbers = [word for word in sys.argv[1:] if not word.startswith("--")]
    share = float(numbers[0]) if numbers else 1.0
    if "--pass" in sys.argv:
        passes(share)
        return
    with tempfile.TemporaryDirectory() as folder:
        for name in FORMATS:
            path = write(Path(folder), name, int(ROWS * share))
            subprocess.run([sys.executable, __file__, "--read", str(path)], check=True)
            path.unlink()


if __name__ == "__main__":
    if sys.argv[1:2] == ["--read"]:
        sys.stdout.write(read(Path(sys.argv[2])) + "\n")
    elif sys.argv[1:2] == ["--took"]:
        sys.stdout.write(passed(Path(sys.argv[2])) + "\n")
    else:
        main()
