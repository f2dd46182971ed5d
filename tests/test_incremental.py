"""What comes late or is corrected costs the days that it changes, and leaves what a rebuild would leave.

Each law here compares with a store into which the same readings went all at once: equal hashes of all parts.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ingest import parts
from ingest.ledger import Store
from ingest.readings import BAD, Series, join
from ingest.unit import HoldUp, Unit, Watch
from monitor.days import figure_step
from monitor.layout import figure_stage
from monitor.watched import BEGINNING, episodes_since
from tests.passes_made import FIRST, arrive, cut, derived, otherwise, readings_made, unit_made
from tests.units_made import DAY, HOUR, MINUTE

LENGTH = 24  # days from 20 January on, so that the end of a month lies inside
Readings = dict[str, Series]
EIGHT_H, THREE_DAYS = timedelta(hours=8), timedelta(days=3)


def watched(low: float) -> Watch:
    hour = timedelta(hours=1)
    return Watch("w", "conversion", EIGHT_H, low, None, "low", 0.01, hour, 2 * hour, steady=False)


def coarse() -> Unit:
    return unit_made(windows=(EIGHT_H, THREE_DAYS))


def held_up() -> Unit:
    return replace(coarse(), hold_up=HoldUp(5.0, 0.05))


def fine() -> Unit:
    """Two cells to a row of figures."""
    return unit_made(cell=timedelta(minutes=5), windows=(timedelta(hours=1), timedelta(hours=24)))


def put_over(held: Readings, new: Readings) -> Readings:
    """What the archive then holds: at one time the later export wins."""
    found = dict(held)
    for tag, series in new.items():
        old = held[tag]
        found[tag] = join([old.take(~np.isin(old.time, series.time)), series])[0]
    return found


def rebuilt(folder: Path, unit: Unit, readings: Readings) -> dict[tuple[str, str, str], str]:
    arrive(folder, unit, readings)
    return derived(folder)


def test_three_corrected_days_work_out_three_days_and_give_the_bits_of_a_rebuild(tmp_path: Path):
    unit = coarse()
    readings = readings_made(unit, LENGTH)
    arrive(tmp_path / "a", unit, readings)
    # From 1:00 on the third day before the month's end to 23:00 on the last: the cells before and after
    # those are reached by none of it, since a flow is read every five minutes and runs straight in between.
    first = FIRST + 9 * DAY + HOUR
    correction = otherwise(readings, first, first + 2 * DAY + 22 * HOUR)
    correction = {"FI-1.PV": correction["FI-1.PV"]}
    worked = arrive(tmp_path / "a", unit, correction)
    assert (worked.days, worked.cells, worked.since_us) == (3, 72, FIRST + 9 * DAY)
    assert worked.months == ("2026-01", "2026-02")  # windows of three days go on into February
    assert derived(tmp_path / "a") == rebuilt(tmp_path / "b", unit, put_over(readings, correction))


@pytest.mark.parametrize("made", [coarse, held_up, fine])
def test_one_more_day_works_out_that_day_and_the_one_whose_last_cell_it_completes(
    tmp_path: Path, made: Callable[[], Unit]
):
    unit = made()
    days = 13 if made is not fine else 4
    readings = readings_made(unit, days)
    arrive(tmp_path / "a", unit, cut(readings, FIRST, FIRST + (days - 1) * DAY))
    worked = arrive(tmp_path / "a", unit, cut(readings, FIRST + (days - 1) * DAY, FIRST + days * DAY))
    assert worked.days == 2
    assert derived(tmp_path / "a") == rebuilt(tmp_path / "b", unit, readings)


def test_readings_that_say_what_is_known_already_work_nothing_out(tmp_path: Path):
    unit = coarse()
    readings = readings_made(unit, LENGTH)
    arrive(tmp_path, unit, readings)
    before = derived(tmp_path)
    worked = arrive(tmp_path, unit, cut(readings, FIRST + 5 * DAY, FIRST + 9 * DAY))
    assert (worked.months, worked.days, worked.cells, worked.since_us) == ((), 0, 0, None)
    assert derived(tmp_path) == before


def corrected(readings: Readings, rng: np.random.Generator) -> Readings:
    """Some tags over some hours to days: other values, no values, or an outage."""
    first = FIRST + int(rng.integers(0, LENGTH * 24)) * HOUR + int(rng.integers(0, 60)) * MINUTE
    part = cut(readings, first, first + int(rng.integers(1, 100)) * HOUR)
    kind = rng.integers(3)
    found = {}
    for tag, series in part.items():
        value, quality = series.value.copy(), series.quality.copy()
        if kind == 0:
            value *= 1 + 0.01 * rng.standard_normal()
        elif kind == 1:
            quality[:] = BAD
        elif tag == "FI-1.PV":
            value[:] = 1.0
        if rng.random() < 0.7 and len(series):
            found[tag] = replace(series, value=value, quality=quality)
    return found


@pytest.mark.parametrize("made", [coarse, held_up])
@pytest.mark.parametrize("seed", [1, 2])
def test_any_corrections_one_after_the_other_give_the_bits_of_a_rebuild(
    tmp_path: Path, made: Callable[[], Unit], seed: int
):
    rng = np.random.default_rng(seed)
    unit = replace(made(), watches=(watched(49.0),))
    readings = readings_made(unit, LENGTH)
    arrive(tmp_path / "a", unit, readings)
    for _ in range(5):
        correction = corrected(readings, rng)
        if correction:
            arrive(tmp_path / "a", unit, correction)
            readings = put_over(readings, correction)
    assert derived(tmp_path / "a") == rebuilt(tmp_path / "b", unit, readings)
    stored, anew = (Store(tmp_path / one).snapshot().episodes(unit.key) for one in "ab")
    assert len(anew) > 0
    pd.testing.assert_frame_equal(stored, anew)


def test_episodes_found_from_where_figures_changed_are_those_of_the_whole_record(tmp_path: Path):
    # The law: whatever row is taken for the first that changed, nothing comes out otherwise.
    unit = unit_made(windows=(EIGHT_H,))
    arrive(tmp_path, unit, readings_made(unit, LENGTH))
    view = Store(tmp_path).snapshot()
    table = view.read(unit.key, figure_stage(EIGHT_H))
    value = table.column("conversion | as operated | value").to_numpy()
    low = float(np.nanmedian(value))
    watching = replace(
        unit, watches=(watched(low), replace(watched(low + 0.02), name="v", low=None, high=low))
    )
    whole = episodes_since(view, watching, pd.DataFrame(), BEGINNING)
    assert len(whole) > 10
    for hour in range(0, LENGTH * 24, 5):
        pd.testing.assert_frame_equal(episodes_since(view, watching, whole, FIRST + hour * HOUR), whole)


def test_another_limit_finds_all_episodes_anew_and_works_out_no_day(tmp_path: Path):
    unit = replace(unit_made(windows=(EIGHT_H,)), watches=(watched(40.0),))
    readings = readings_made(unit, LENGTH)
    arrive(tmp_path / "a", unit, readings)
    other = replace(unit, watches=(watched(49.0),))
    worked = arrive(tmp_path / "a", other, cut(readings, FIRST, FIRST + HOUR))
    assert worked.days == 0
    arrive(tmp_path / "b", other, readings)
    stored, anew = (Store(tmp_path / one).snapshot().episodes(unit.key) for one in "ab")
    assert len(anew) > 0
    pd.testing.assert_frame_equal(stored, anew)


@contextmanager
def opened(monkeypatch: pytest.MonkeyPatch) -> Iterator[list[str]]:
    """The names of all parts that are opened: the real reading goes on underneath."""
    names: list[str] = []
    real = parts.pq.ParquetFile

    def noted(source: object, *rest: object, **more: object) -> object:
        names.append(Path(str(source)).name)
        return real(source, *rest, **more)

    with monkeypatch.context() as changed:
        changed.setattr(parts.pq, "ParquetFile", noted)
        yield names


def test_one_more_day_opens_and_writes_as_many_parts_on_many_months_as_on_few(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    # A count in place of a time: what one more day costs does not grow with the months that are kept.
    unit = replace(
        unit_made(cell=timedelta(hours=6), windows=(timedelta(days=1),)),
        watches=(replace(watched(40.0), window=timedelta(days=1)),),
    )
    counts = []
    for days in (85, 146):  # up to the middle of April and of June
        folder = tmp_path / str(days)
        readings = readings_made(unit, days)
        arrive(folder, unit, cut(readings, FIRST, FIRST + (days - 1) * DAY))
        with opened(monkeypatch) as names:
            arrive(folder, unit, cut(readings, FIRST + (days - 1) * DAY, FIRST + days * DAY))
        snapshot = Store(folder).snapshot()
        written = [one for one in snapshot.parts.values() if one.made_by == snapshot.generation]
        counts.append((len(names), len(written)))
    assert counts[0] == counts[1]


def test_the_newest_row_of_figures_is_younger_than_a_step_and_its_window_ends_with_a_cell(tmp_path: Path):
    unit = fine()
    readings = cut(readings_made(unit, 2), FIRST, FIRST + DAY + 9 * HOUR + 16 * MINUTE)
    arrive(tmp_path, unit, readings)
    store = Store(tmp_path)
    starts = parts.times_us(store.read(unit.key, "cells", columns=["start"]))
    ends = parts.times_us(store.read(unit.key, figure_stage(unit.windows[0]), columns=["end"]))
    # The last reading is of 9:15: of the cells from 9:10 and 9:15 on the last row holds those up to 9:10.
    assert [(one - FIRST - DAY) // MINUTE for one in (starts[-1], ends[-1])] == [9 * 60 + 10, 9 * 60 + 10]
    assert (np.diff(ends) == 10 * MINUTE).all()


@pytest.mark.parametrize(
    ("cell", "windows", "step"),
    [
        (1, (60, 480), 10),  # ten minutes divide both windows
        (1, (5, 60), 5),  # ten do not divide five
        (4, (60, 480), 4),  # eight divide no hour
        (10, (60,), 10),
        (60, (480,), 60),  # cells longer than ten minutes
    ],
)
def test_figures_have_a_row_at_most_every_ten_minutes_and_each_window_is_a_number_of_steps(
    cell: int, windows: tuple[int, ...], step: int
):
    minute = timedelta(minutes=1)
    unit = unit_made(cell=cell * minute, windows=tuple(one * minute for one in windows))
    assert figure_step(unit) == step * minute
