from __future__ import annotations

from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import pytest

from ingest.cells import OPERATING
from monitor import board, witnesses
from monitor.amounts import amount_names
from monitor.figures import figures_of
from monitor.windows import FIELDS, MODES
from tests import page_made

UNIT = page_made.unit()
FIGURES = {figure.name: figure for figure in figures_of(UNIT, amount_names(UNIT))}
ENDS = pd.date_range("2026-04-14T00:00Z", periods=6, freq="10min", name="end")


def value(*numbers: float) -> pd.Series:
    return pd.Series(numbers, index=ENDS[: len(numbers)])


def test_the_six_key_figures_come_in_the_order_they_are_read():
    assert [figure.name for figure in board.key_figures(UNIT, tuple(FIGURES.values()))] == [
        "conversion",
        "overall selectivity to all unwanted",
        "selectivity on converted",
        "yield on feed",
        "carbon closure",
        "converted closure",
    ]


@pytest.mark.parametrize(
    ("numbers", "place"),
    [
        ((80, 80, 75, 75), 2),
        ((75, 80, 80, 80), 1),
        ((80, 75, 80, 75), 3),
        ((80, 80, np.nan, np.nan), 2),
        ((80, 80, 80, 80), None),
        ((75, 75, 75, 75), None),
    ],
)
def test_a_standing_begins_where_the_side_of_the_limit_last_changed(
    numbers: tuple[float, ...], place: int | None
):
    found = board.since(value(*numbers), low=76.0, high=90.0)
    assert found == (None if place is None else ENDS[place].to_pydatetime())


def test_without_a_limit_nothing_begins():
    assert board.since(value(80, 75), low=None, high=None) is None


def frame(number: float, reason: int) -> pd.DataFrame:
    parts = dict(zip(FIELDS, (number, 0.3, 0.97, reason), strict=True))
    columns = {("yield on feed", mode, field): [part] for mode in MODES for field, part in parts.items()}
    return pd.DataFrame(columns, index=ENDS[:1])


def test_a_row_judges_the_window_and_mode_that_the_watch_looks_at():
    eight, one = timedelta(hours=8), timedelta(hours=1)
    latest = {one: frame(90.0, 0), eight: frame(79.0, 0)}
    row = board.row(UNIT, FIGURES["yield on feed"], latest, pd.DataFrame({"value": value(85, 79)}))
    assert row.watch is not None
    assert row.standing.words == "below 81.0 %"
    assert row.since == ENDS[1].to_pydatetime()
    assert row.readings[one, "as operated"].value == 90.0


def test_a_missing_figure_carries_its_reason_and_is_not_judged():
    latest = {timedelta(hours=8): frame(np.nan, 4)}
    row = board.row(UNIT, FIGURES["yield on feed"], latest, pd.DataFrame({"value": value(np.nan)}))
    assert row.standing.kind == "missing"
    assert row.readings[timedelta(hours=8), "steady"].reason == "not running"


def test_operating_conditions_become_runs_in_order_of_time():
    codes = [OPERATING.index(word) for word in ("running", "running", "down", "down", "starting", "running")]
    cells = pd.DataFrame({"operating": codes}, index=ENDS.rename("start"))
    spans = board.operating_runs(cells, OPERATING, timedelta(minutes=10))
    assert spans["word"].tolist() == ["running", "down", "starting", "running"]
    assert spans["start"].tolist() == [ENDS[0], ENDS[2], ENDS[4], ENDS[5]]
    assert (spans["end"].iloc[:-1].to_numpy() == spans["start"].iloc[1:].to_numpy()).all()


def test_a_figure_as_operated_leaves_out_down_and_a_steady_one_all_but_running():
    words = ["running", "starting", "down", "turned down"]
    spans = pd.DataFrame({"start": ENDS[:4], "end": ENDS[1:5], "word": words})
    assert board.shaded(spans, steady=False, zone="Europe/Berlin")["word"].tolist() == ["down"]
    assert board.shaded(spans, steady=True, zone="Europe/Berlin")["word"].tolist() == words[1:]


def test_open_episodes_come_by_priority_then_by_depth_and_suppressed_ones_last():
    rows = [
        ("shallow", "medium", 82.0, 84.5, False, pd.NaT),
        ("ended", "high", 70.0, 81.0, False, ENDS[5]),
        ("suppressed", "high", 10.0, 81.0, True, pd.NaT),
        ("deep", "medium", 60.0, 84.5, False, pd.NaT),
        ("first", "high", 80.5, 81.0, False, pd.NaT),
    ]
    episodes = pd.DataFrame(rows, columns=["watch", "priority", "worst", "limit", "suppressed", "cleared"])
    ordered = board.worst_first(episodes.assign(raised=ENDS[0]))
    assert ordered["watch"].tolist() == ["first", "deep", "shallow", "suppressed"]


def test_an_open_episode_is_marked_to_the_end_of_what_is_known():
    start = page_made.clock(3, "2026-04-14T12:20Z")
    now = datetime(2026, 4, 14, 12, 20, tzinfo=UTC)
    marks = board.marked(page_made.episode_frame(start), FIGURES, now=now, zone="Europe/Berlin")
    assert marks["end"].iloc[0] == now
    assert marks["word"].tolist() == ["below 81.0", "above 103.0"]


def test_an_instrument_stands_out_beyond_twice_the_spread_it_should_have():
    # By hand: mean 1.5 against 2 x 0.7 = 1.4 stands out, against 2 x 0.8 = 1.6 it does not.
    adjustment = pd.DataFrame({"a": [1.4, 1.6], "b": [1.4, 1.6], "c": [0.0, 0.0], "d": [np.nan, np.nan]})
    spread = pd.DataFrame({"a": [0.7, 0.7], "b": [0.8, 0.8], "c": [0.0, 0.0], "d": [np.nan, np.nan]})
    table = witnesses.adjustments(adjustment, spread)
    assert table["word"].tolist() == ["stands out", "as expected", "not redundant", "no reading"]
    assert set(table["word"]) == set(witnesses.WORDS)


def test_the_share_of_cells_with_a_reading_is_counted():
    adjustment = pd.DataFrame({"a": [0.1, np.nan, np.nan, 0.2]})
    table = witnesses.adjustments(adjustment, pd.DataFrame({"a": [0.5] * 4}))
    assert table.loc["a", "share"] == 0.5
    assert table.loc["a", "mean"] == pytest.approx(0.15)


def test_the_bound_of_the_fit_is_chi_square_at_95_percent_per_degree_of_freedom():
    # NIST/SEMATECH e-Handbook, table 1.3.6.7.4, upper 5 %: 11.070 for 5, 18.307 for 10 degrees of freedom.
    frame = witnesses.fit(pd.Series([5.0, 25.0, 3.0]), pd.Series([5, 10, 0]))
    np.testing.assert_allclose(frame["bound"].iloc[:2], [11.070 / 5, 18.307 / 10], rtol=5e-5)
    assert frame["value"].iloc[:2].tolist() == [1.0, 2.5]
    assert frame[["value", "bound"]].iloc[2].isna().all()
    assert witnesses.judged(frame) == 0.5
