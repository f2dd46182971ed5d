"""The archive: a later export wins, repeats are told apart, months are whole and read back as written."""

from __future__ import annotations

from copy import deepcopy
from dataclasses import fields
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.errors import GoneError, StoreError
from ingest.readings import (
    BAD,
    GOOD,
    Readings,
    Series,
    by_month,
    concatenated,
    empty,
    join,
    merge,
    read_months,
    replaced,
    write_month,
)
from tests.exports_made import micros

VALUES = (1.0, 2.0, float("nan"))
Row = tuple[int, int]  # time, place in VALUES


def series(rows: list[Row], source: int = 1, first_row: int = 2) -> Series:
    time = np.array([t for t, _ in rows], np.int64)
    value = np.array([VALUES[v] for _, v in rows], np.float64)
    quality = np.where(np.isnan(value), BAD, GOOD).astype(np.int8)
    row = np.arange(first_row, first_row + len(rows), dtype=np.int64)
    return Series(time, value, quality, np.full(len(rows), source, np.int32), row)


def assert_same(a: Series, b: Series) -> None:
    for part in fields(Series):
        left, right = getattr(a, part.name), getattr(b, part.name)
        np.testing.assert_array_equal(left, right)
        assert left.dtype == right.dtype


rows = st.lists(st.tuples(st.integers(0, 12), st.integers(0, 2)), max_size=20)


def by_hand(pairs: list[Row]) -> tuple[dict[int, int], int, int]:
    """The same with a dictionary: what stands at each time, superseded, duplicates."""
    held: dict[int, int] = {}
    superseded = duplicates = 0
    for time, value in pairs:
        if time in held:
            duplicates += held[time] == value
            superseded += held[time] != value
        held[time] = value
    return held, superseded, duplicates


@given(rows, st.integers(0, 20))
def test_joining_gives_each_time_its_last_row_and_counts_the_others(pairs: list[Row], cut: int):
    whole = series(pairs)
    pieces = [whole.take(slice(None, cut)), whole.take(slice(cut, None))]
    joined, superseded, duplicates = join(pieces)
    held, lost, same = by_hand(pairs)
    assert joined.time.tolist() == sorted(held)
    np.testing.assert_array_equal(joined.value, [VALUES[held[t]] for t in sorted(held)])
    assert (superseded, duplicates) == (lost, same)
    assert len(joined) + superseded + duplicates == len(pairs)


def test_pieces_that_come_out_of_order_are_joined_by_their_rows():
    late, early = series([(5, 1)], first_row=9), series([(5, 0)], first_row=3)
    joined, superseded, _ = join([late, early])
    assert joined.row.tolist() == [9]
    assert superseded == 1


@given(rows, rows)
def test_merging_lets_the_later_export_win_and_counts_what_it_replaces(first: list[Row], second: list[Row]):
    old, new = join([series(first, source=1)])[0], join([series(second, source=2)])[0]
    before = deepcopy((old, new))
    merged, superseded, duplicates = merge(old, new)
    for given_now, given_before in zip((old, new), before, strict=True):
        assert_same(given_now, given_before)
    held, coming = by_hand(first)[0], by_hand(second)[0]
    assert merged.time.tolist() == sorted(held | coming)
    np.testing.assert_array_equal(merged.value, [VALUES[(held | coming)[t]] for t in merged.time.tolist()])
    met = held.keys() & coming.keys()
    assert duplicates == sum(held[t] == coming[t] for t in met)
    assert superseded == len(met) - duplicates
    assert replaced(old, new) == ({1: superseded} if superseded else {})
    assert len(merged) == len(old) + len(new) - superseded - duplicates


def test_the_same_export_again_changes_nothing():
    old = series([(1, 0), (2, 1), (3, 2)])
    merged, superseded, duplicates = merge(old, series([(1, 0), (2, 1), (3, 2)], source=2))
    assert_same(merged, old)
    assert (superseded, duplicates) == (0, 3)


def test_the_same_value_with_another_quality_is_a_correction():
    old, new = series([(1, 0)]), series([(1, 0)], source=2)
    new = Series(new.time, new.value, np.array([1], np.int8), new.source, new.row)
    merged, superseded, duplicates = merge(old, new)
    assert merged.source.tolist() == [2]
    assert (superseded, duplicates) == (1, 0)


def test_new_days_are_put_behind_the_old_ones():
    old, new = series([(1, 0), (2, 1)]), series([(3, 0)], source=2)
    assert_same(merge(old, new)[0], concatenated([old, new]))
    assert_same(merge(empty(), new)[0], new)
    assert_same(merge(old, empty())[0], old)
    assert join([])[1:] == (0, 0)


def month_of(year: int, month: int, day: int = 1) -> int:
    return micros(datetime(year, month, day, tzinfo=UTC))


def test_months_begin_at_midnight_utc():
    edge = month_of(2026, 11)
    readings = {"A": series([(edge - 1, 0), (edge, 1)]), "B": series([(edge, 0)]), "C": empty()}
    split = by_month(readings)
    assert list(split) == ["2026-10", "2026-11"]
    assert {month: {tag: s.time.tolist() for tag, s in tags.items()} for month, tags in split.items()} == {
        "2026-10": {"A": [edge - 1]},
        "2026-11": {"A": [edge], "B": [edge]},
    }


def test_a_year_in_disorder_is_split_without_loss():
    times = np.random.default_rng(1).integers(month_of(2025, 12, 20), month_of(2027, 1, 9), 5000)
    whole = series([(int(t), 0) for t in times])
    split = by_month({"A": whole})
    assert len(split) == 14
    assert sum(len(tags["A"]) for tags in split.values()) == 5000
    for month, tags in split.items():
        assert {str(t)[:7] for t in tags["A"].time.astype("datetime64[us]")} == {month}


def made_month(tags: int = 3, count: int = 1000) -> Readings:
    rng = np.random.default_rng(3)
    time = month_of(2026, 10) + np.arange(count) * 60_000_000
    found = {}
    for k in range(tags):
        value = np.where(rng.random(count) < 0.01, np.nan, rng.normal(50, 1, count))
        quality = np.where(np.isnan(value), BAD, GOOD).astype(np.int8)
        source = np.broadcast_to(np.int32(k), count)
        found[f"TAG/{k} é"] = Series(time, value, quality, source, np.arange(2, count + 2))
    return found


def test_a_month_is_read_back_as_it_was_written(tmp_path: Path):
    written = made_month()
    write_month(tmp_path / "m.parquet", written)
    back = read_months([tmp_path / "m.parquet"], written, 0, 2**62)
    assert back.keys() == written.keys()
    for tag in written:
        assert_same(back[tag], written[tag])


def test_the_same_readings_give_the_same_bytes_in_whatever_order_the_tags_come(tmp_path: Path):
    month = made_month()
    write_month(tmp_path / "a.parquet", month)
    write_month(tmp_path / "b.parquet", dict(reversed(month.items())))
    assert (tmp_path / "a.parquet").read_bytes() == (tmp_path / "b.parquet").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.parquet", "b.parquet"]


def test_only_the_tags_and_the_span_asked_for_are_read(tmp_path: Path):
    month = made_month()
    write_month(tmp_path / "m.parquet", month)
    first, last = month_of(2026, 10) + 120_000_000, month_of(2026, 10) + 240_000_000
    back = read_months([tmp_path / "m.parquet"], ["TAG/1 é", "no such tag"], first, last)
    assert {tag: s.time.tolist() for tag, s in back.items()} == {"TAG/1 é": [first, first + 60_000_000]}
    assert read_months([tmp_path / "m.parquet"], month, 0, 1) == {}


def test_months_are_put_in_order_of_time(tmp_path: Path):
    edge = month_of(2026, 11)
    whole = series([(edge - 1, 0), (edge, 1)])
    paths = []
    for month, tags in by_month({"A": whole}).items():
        paths.append(tmp_path / f"{month}.parquet")
        write_month(paths[-1], tags)
    assert_same(read_months(reversed(paths), ["A"], 0, 2**62)["A"], whole)


@pytest.mark.parametrize("content", [b"", b"PAR1", b"nonsense" * 100])
def test_a_damaged_month_is_said_to_be_so(tmp_path: Path, content: bytes):
    (tmp_path / "m.parquet").write_bytes(content)
    with pytest.raises(StoreError, match=r"m\.parquet: not a whole month of readings"):
        read_months([tmp_path / "m.parquet"], ["A"], 0, 1)


def test_a_month_that_a_later_pass_replaced_is_told_apart_from_a_damaged_one(tmp_path):
    with pytest.raises(GoneError, match=r"m\.parquet: is no longer there\n  Look again"):
        read_months([tmp_path / "m.parquet"], ["FI-1.PV"], 0, 1)
