"""One pass from exports to episodes: nothing depends on months, order of arrival or number of passes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from demo_data import exports as demo
from ingest.archive import SITE
from ingest.cells import DOWN, STARTING, cells_from_frame
from ingest.errors import UnitFileError
from ingest.ledger import Store
from ingest.unit import Unit, Watch
from ingest.unitfile import load
from monitor.amounts import amounts_of
from monitor.days import plan_of
from monitor.drift import unit_episodes
from monitor.layout import figure_stage, unflat
from monitor.run import PassResult, run_pass
from monitor.windows import MODES, window_figures
from tests.passes_made import (
    DAYS,
    FIRST,
    MONTH_END,
    arrive,
    cut,
    derived,
    otherwise,
    readings_made,
    told_nobody,
    unit_made,
)
from tests.units_made import DAY, HOUR


def stored_figures(folder: Path, unit: Unit, window: timedelta) -> pd.DataFrame:
    table = Store(folder).read(unit.key, figure_stage(window))
    return unflat(table.to_pandas(ignore_metadata=True).set_index("end"))


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("whole")
    arrive(folder, unit_made(), readings_made(unit_made()))
    return folder


@pytest.mark.parametrize(
    "days",
    [
        [(0, 30), (30, 31), (31, 75)],
        [(60, 75), (0, 20), (20, 45), (45, 60)],
        [(39, 41), (0, 11), (41, 75), (12, 39), (11, 12)],
    ],
    ids=["in order", "late months", "late days"],
)
def test_readings_in_any_order_give_the_same_bits_as_all_at_once(
    whole: Path, tmp_path: Path, days: Sequence[tuple[int, int]]
):
    unit = unit_made()
    readings = readings_made(unit)
    for first, last in days:
        arrive(tmp_path, unit, cut(readings, FIRST + first * DAY, FIRST + last * DAY))
    assert derived(tmp_path) == derived(whole)


def test_a_gap_of_months_that_is_filled_later_leaves_no_trace(whole: Path, tmp_path: Path):
    unit = unit_made()
    readings = readings_made(unit)
    february, april = (int(pd.Timestamp(m, tz="UTC").timestamp()) * 1_000_000 for m in ("2026-02", "2026-04"))
    arrive(tmp_path, unit, cut(readings, april, FIRST + DAYS * DAY))
    arrive(tmp_path, unit, cut(readings, FIRST, february))
    assert Store(tmp_path).snapshot().months(unit.key, "cells") == ["2026-01", "2026-04"]
    arrive(tmp_path, unit, cut(readings, february, april))
    assert derived(tmp_path) == derived(whole)


def test_one_late_reading_recomputes_its_month_and_no_other(whole: Path, tmp_path: Path):
    unit = unit_made()
    readings = readings_made(unit)
    late = FIRST + 60 * DAY + 3 * HOUR  # 21 March: its 7 d window ends in March
    arrive(tmp_path, unit, readings)
    assert arrive(tmp_path, unit, otherwise(readings, late, late + HOUR)).months == ("2026-03",)
    worked = arrive(tmp_path, unit, cut(readings, late, late + HOUR))
    assert (worked.months, worked.days, worked.cells) == (("2026-03",), 1, 24)
    assert derived(tmp_path) == derived(whole)


def test_a_late_reading_at_the_end_of_a_month_reaches_the_windows_of_the_next(tmp_path: Path):
    unit = unit_made()
    readings = readings_made(unit)
    arrive(tmp_path, unit, readings)
    worked = arrive(tmp_path, unit, otherwise(readings, MONTH_END - 69 * HOUR, MONTH_END - 68 * HOUR))
    assert (worked.months, worked.days) == (("2026-02", "2026-03"), 1)


def test_months_do_not_show_in_the_figures(whole: Path):
    # The law: windows over the whole record in one go say the same; stored as float32 (24 bits).
    unit = unit_made()
    plan = plan_of(unit)
    frame = Store(whole).read(unit.key, "cells").to_pandas(ignore_metadata=True).set_index("start")
    cells = cells_from_frame(unit, frame)
    _, amounts = amounts_of(unit, plan.problem, cells)
    for window, direct in window_figures(unit, amounts, plan.figures).items():
        stored = stored_figures(whole, unit, window)
        assert (stored.index == direct.index).all()
        np.testing.assert_allclose(
            stored.to_numpy(float), direct[stored.columns].to_numpy(float), rtol=2**-22, atol=1e-9
        )


def test_each_cell_has_one_state_and_one_row_of_each_window(whole: Path):
    unit, store = unit_made(), Store(whole)
    starts = store.read(unit.key, "cells", columns=["start"]).column("start").to_pandas()
    assert len(starts) == DAYS * 24
    assert (starts.diff()[1:] == unit.cell).all()
    assert store.read(unit.key, "states").num_rows == DAYS * 24
    for window in unit.windows:
        ends = stored_figures(whole, unit, window).index
        assert (ends == pd.DatetimeIndex(starts) + unit.cell).all()


def test_a_start_late_in_a_month_goes_on_in_the_next(whole: Path):
    # Made so: down from 20:30 to 02:30 over the month's end; the unit file says starting for 2 h.
    unit = unit_made()
    table = Store(whole).read(unit.key, "cells", first=MONTH_END, last=MONTH_END + 8 * HOUR)
    assert STARTING in table.column("operating").to_pylist()


def test_a_month_that_ends_otherwise_than_before_makes_the_next_one_due(tmp_path: Path):
    # down_below 10, running_above 20: a load of 15 leaves the condition as it was, here from 19 February to
    # 21 March. A late outage on 24 February turns all that follows to down, in March too.
    unit = unit_made(windows=(timedelta(hours=8),))
    readings = readings_made(unit)
    flow = readings["FI-1.PV"]
    before, after = flow.time < MONTH_END - 10 * DAY, flow.time >= MONTH_END + 20 * DAY
    between = replace(flow, value=np.where(before | after, 100.0, 15.0))
    arrive(tmp_path, unit, {**readings, "FI-1.PV": between})
    late = MONTH_END - 5 * DAY
    place = np.searchsorted(flow.time, [late, late + 2 * HOUR])
    down = replace(between, value=np.full(len(flow), 1.0)).take(slice(*place))
    worked = arrive(tmp_path, unit, {"FI-1.PV": down})
    assert worked.months == ("2026-02", "2026-03")
    march = Store(tmp_path).read(unit.key, "cells", first=MONTH_END, last=MONTH_END + 8 * HOUR)
    assert march.column("operating").to_pylist() == [DOWN] * 8


def test_another_unit_file_makes_every_month_due_and_other_limits_none(tmp_path: Path):
    unit = unit_made()
    readings = readings_made(unit)
    arrive(tmp_path, unit, readings)
    again = otherwise(readings, FIRST + 60 * DAY, FIRST + 60 * DAY + HOUR)
    watch = Watch(
        "w", "conversion", timedelta(hours=8), 1.0, None, "low", 0.0, timedelta(0), timedelta(0), True
    )
    assert len(arrive(tmp_path, replace(unit, watches=(watch,)), again).months) == 1
    assert len(arrive(tmp_path, replace(unit, least_coverage=0.5), again).months) == 4


def test_a_window_taken_out_of_the_unit_file_leaves_the_store(tmp_path: Path):
    unit = unit_made()
    readings = cut(readings_made(unit), FIRST, FIRST + 20 * DAY)
    arrive(tmp_path, unit, readings)
    arrive(tmp_path, replace(unit, windows=(timedelta(hours=8),)), readings)
    stages = {stage for owner, stage, _ in Store(tmp_path).snapshot().parts if owner == unit.key}
    assert stages == {"cells", "states", "figures-8h", "plan", "watches"}


def test_a_watch_on_a_figure_that_is_not_there_is_told_before_any_work():
    watch = Watch("w", "yeild", timedelta(hours=8), 1.0, None, "low", 0.0, timedelta(0), timedelta(0), True)
    with pytest.raises(UnitFileError, match=r"watch\[1\]\.figure: the unit has no figure 'yeild'"):
        plan_of(unit_made(watches=(watch,)))


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> tuple[Unit, tuple[Path, ...]]:
    folder = tmp_path_factory.mktemp("plant")
    return load(demo.UNIT_FILE), demo.make(folder, days=24).exports


def go(unit: Unit, store: Path, exports: Sequence[Path]) -> PassResult:
    return run_pass([unit], store, exports, progress=told_nobody, settle=timedelta(0))


@pytest.fixture(scope="module")
def taken(
    plant: tuple[Unit, tuple[Path, ...]], tmp_path_factory: pytest.TempPathFactory
) -> tuple[Path, PassResult]:
    store = tmp_path_factory.mktemp("store")
    return store, go(plant[0], store, plant[1])


def test_every_reading_of_the_demo_plant_is_accounted_for_and_every_cell_solved_but_when_down(
    taken: tuple[Path, PassResult],
):
    _, result = taken
    assert [one.status for one in result.exports] == ["taken"] * 3
    assert all(one.account is not None and one.account.adds_up for one in result.exports)
    (unit,) = result.units
    assert unit.cells == 24 * 144  # days of ten-minute cells, none of them with a clock change
    assert unit.solved > 0.95 * unit.cells


def test_the_same_exports_twice_change_nothing(
    plant: tuple[Unit, tuple[Path, ...]], taken: tuple[Path, PassResult]
):
    store, _ = taken
    before = Store(store).content_hash()
    again = go(plant[0], store, plant[1])
    assert [one.status for one in again.exports] == ["taken already"] * 3
    assert again.units[0].months == ()
    assert Store(store).content_hash() == before


def test_exports_that_come_late_give_what_all_at_once_gives(
    plant: tuple[Unit, tuple[Path, ...]], taken: tuple[Path, PassResult], tmp_path: Path
):
    unit, (first, second, third) = plant
    for export in (third, first, second):
        go(unit, tmp_path, [export])
    assert derived(tmp_path) == derived(taken[0])
    late, at_once = (Store(store).snapshot().episodes(unit.key) for store in (tmp_path, taken[0]))
    pd.testing.assert_frame_equal(late, at_once)


def test_the_stored_episodes_are_those_of_the_stored_figures(
    plant: tuple[Unit, tuple[Path, ...]], taken: tuple[Path, PassResult]
):
    # A limit in the middle of what the plant does, so that there is something to find.
    unit, store = plant[0], taken[0]
    figures = stored_figures(store, unit, timedelta(hours=8))
    middle = float(figures["conversion", MODES[1], "value"].median())
    watch = replace(unit.watches[0], figure="conversion", low=middle, high=None, steady=True)
    watched = replace(unit, watches=(watch,))
    result = go(watched, store, plant[1])
    codes = Store(store).read(unit.key, "cells", columns=["operating"]).column("operating").to_numpy()
    direct = unit_episodes(watched, {timedelta(hours=8): figures}, codes.astype(np.int8))
    assert len(direct) > 0
    assert len(result.units[0].episodes) == len(direct)
    stored = Store(store).snapshot().episodes(unit.key).drop(columns="verdict")
    pd.testing.assert_frame_equal(stored, direct)
    go(unit, store, plant[1])


def test_an_export_that_cannot_be_read_does_not_stop_the_others(
    plant: tuple[Unit, tuple[Path, ...]], tmp_path: Path
):
    broken = tmp_path / "broken.csv"
    broken.write_text("no time here\n1\n", encoding="utf-8")
    result = go(plant[0], tmp_path / "store", [broken, plant[1][0]])
    assert {one.name: one.status for one in result.exports} == {
        "broken.csv": "set aside",
        plant[1][0].name: "taken",
    }
    assert result.units[0].cells > 0


def test_two_units_of_one_site_share_the_archive_and_keep_their_figures_apart(
    plant: tuple[Unit, tuple[Path, ...]], tmp_path: Path
):
    unit, exports = plant
    other = replace(unit, key="other", least_coverage=0.5)
    result = run_pass([unit, other], tmp_path, exports[:1], progress=told_nobody, settle=timedelta(0))
    assert [one.cells for one in result.units] == [result.units[0].cells] * 2
    owners = {owner for owner, _, _ in Store(tmp_path).snapshot().parts}
    assert owners == {SITE, "demo", "other"}
