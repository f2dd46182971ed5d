"""Exports made from a known truth, in every dialect, and the reading of them back."""

from __future__ import annotations

import gzip
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.account import Account
from ingest.batches import Batches
from ingest.exports import NO_UNITS, open_export
from ingest.measures import Stated
from ingest.readings import BAD, UNKNOWN, Readings, Series, join
from ingest.unit import ExportRules

TAGS = ("FI-1.PV", "AI-2.C4H8", "TI-3.PV")
START = datetime(2026, 3, 11, 6, tzinfo=UTC)  # the 12th and 13th follow within the truth
NO_RULES = ExportRules(None, (), None)
Write = Callable[[datetime], str]


@dataclass(frozen=True)
class Truth:
    """Times (t,), values (t, m) of TAGS with two decimals; NaN where the reading is bad."""

    times: list[datetime]
    values: np.ndarray


def made_truth(count: int = 300, step: timedelta = timedelta(minutes=17), start: datetime = START) -> Truth:
    """Values below and above 1 and below 0; every 50th reading of the last tag is bad."""
    rng = np.random.default_rng(20260311)
    values = (rng.normal([5000.0, 0.3, -20.0], [300.0, 0.2, 5.0], (count, 3)) * 100).round() / 100
    values[::50, 2] = np.nan
    return Truth([start + i * step for i in range(count)], values)


def iso_z(time: datetime) -> str:
    return time.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def number(value: float, *, decimal: str = ".", missing: str = "") -> str:
    return missing if np.isnan(value) else f"{value:.2f}".replace(".", decimal)


def wide_text(
    truth: Truth, *, write: Write = iso_z, separator: str = ",", decimal: str = ".", missing: str = "Bad"
) -> str:
    rows = [separator.join(["time", *TAGS])]
    for time, values in zip(truth.times, truth.values, strict=True):
        cells = [number(v, decimal=decimal, missing=missing) for v in values]
        rows.append(separator.join([write(time), *cells]))
    return "\n".join(rows) + "\n"


def long_text(
    truth: Truth,
    *,
    write: Write = iso_z,
    separator: str = ",",
    decimal: str = ".",
    qualities: Sequence[str] = ("Good", "Bad"),
) -> str:
    """Sorted by time; `qualities` are the words for a good and a bad reading."""
    rows = [separator.join(["time", "tag", "value", "quality"])]
    for time, values in zip(truth.times, truth.values, strict=True):
        for tag, v in zip(TAGS, values, strict=True):
            quality = qualities[int(np.isnan(v))]
            rows.append(separator.join([write(time), tag, number(v, decimal=decimal, missing="0"), quality]))
    return "\n".join(rows) + "\n"


def wide_parquet(path: Path, truth: Truth, *, unit: str = "us", zone: str | None = "UTC") -> None:
    times = pa.array([t.replace(tzinfo=None) for t in truth.times], pa.timestamp(unit)).cast(
        pa.timestamp(unit, zone)
    )
    columns = {tag: pa.array(truth.values[:, i]) for i, tag in enumerate(TAGS)}  # NaN, not null
    pq.write_table(pa.table({"time": times, **columns}), path)


def long_parquet(
    path: Path, truth: Truth, values: Callable[[np.ndarray], pa.Array], qualities: pa.Array
) -> None:
    times = [t for t in truth.times for _ in TAGS]
    pq.write_table(
        pa.table(
            {
                "timestamp": pa.array(times, pa.timestamp("ns", "UTC")),
                "tag": pa.array(list(TAGS) * len(truth.times)).dictionary_encode(),
                "value": values(truth.values.ravel()),
                "quality": qualities,
            }
        ),
        path,
    )


def micros(time: datetime) -> int:
    return (time - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1)


def saved(folder: Path, text: str | bytes, name: str = "export.csv", encoding: str = "utf-8") -> Path:
    """A file of this text; names ending in .gz or .zst are compressed."""
    raw = text if isinstance(text, bytes) else text.encode(encoding)
    packed = {".gz": gzip.compress, ".zst": zst}.get(Path(name).suffix, bytes)
    path = folder / name
    path.write_bytes(packed(raw))
    return path


def zst(raw: bytes) -> bytes:
    """One Zstandard frame (RFC 8878)."""
    sink = pa.BufferOutputStream()
    with pa.CompressedOutputStream(sink, "zstd") as packer:
        packer.write(raw)
    return sink.getvalue().to_pybytes()


def opened(
    path: Path,
    *,
    zone: str | None = None,
    rules: ExportRules = NO_RULES,
    wanted: Sequence[str] | None = TAGS,
    number: int = 7,
    units: Mapping[str, tuple[Stated, ...]] = NO_UNITS,
) -> Batches:
    asked = None if wanted is None else frozenset(wanted)
    return open_export(path, number=number, rules=rules, wanted=asked, time_zone=zone, units=units)


def read(path: Path, **how) -> tuple[Readings, Account]:
    """All readings of a file joined, and the account settled with what `join` found."""
    batches = opened(path, **how)
    pieces: dict[str, list[Series]] = {}
    for readings in batches:
        for tag, series in readings.items():
            pieces.setdefault(tag, []).append(series)
    joined = {tag: join(parts) for tag, parts in pieces.items()}
    account = batches.account().settled(
        superseded=sum(lost for _, lost, _ in joined.values()),
        duplicates=sum(same for _, _, same in joined.values()),
    )
    assert account.adds_up
    assert account.accepted == sum(len(series) for series, _, _ in joined.values())
    return {tag: series for tag, (series, _, _) in joined.items() if len(series)}, account


def assert_true(readings: Readings, truth: Truth, *, quality: int = UNKNOWN) -> None:
    """Every reading of the truth, nothing else, to the two decimals written."""
    assert sorted(readings) == sorted(TAGS)
    times = np.array([micros(t) for t in truth.times])
    for column, tag in enumerate(TAGS):
        series = readings[tag]
        np.testing.assert_array_equal(series.time, times)
        np.testing.assert_array_equal(series.value, truth.values[:, column])
        np.testing.assert_array_equal(series.quality, np.where(np.isnan(series.value), BAD, quality))
        assert set(series.source.tolist()) == {7}
