"""Drift watches through a whole pass on the demo plant, and what is found again after late data."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from demo_data.exports import UNIT_FILE, make
from ingest import documents
from ingest.ledger import Store
from ingest.unit import Event, Healthy
from ingest.unitfile import load
from monitor.days import plan_of
from monitor.drifting import KIND, blocks_of, drifted, in_force, shown
from monitor.expectation import DAY_US, from_document, variables
from monitor.run import run_pass
from monitor.store import episodes

STATED = load(UNIT_FILE)
YIELD = next(one for one in STATED.watches if one.test == "cusum")
UNIT = STATED
FIGURES = {one.name: one for one in plan_of(UNIT).figures}
HOUR_US = 3_600_000_000


@pytest.fixture(scope="module")
def plant(tmp_path_factory):
    """The store after one pass over the demo's exports, the truth behind them, and what the pass told."""
    folder = tmp_path_factory.mktemp("plant")
    made = make(folder)
    told = run_pass([UNIT], folder / "store", made.exports, progress=lambda *_: None, settle=timedelta(0))
    return folder / "store", json.loads(made.truth_json.read_text()), told


def again(store: Path, unit=UNIT, *, since_us: int = -(2**62), stored: pd.DataFrame | None = None):
    nothing = pd.DataFrame() if stored is None else stored
    view = Store(store).snapshot()
    return drifted(view, unit, YIELD, figures=FIGURES, stored=nothing, since_us=since_us)


def own(store: Path) -> pd.DataFrame:
    found = episodes(store, UNIT.key)
    kept = found[found["watch"] == YIELD.name].reset_index(drop=True)
    return kept[[name for name in kept if name != "verdict"]]


def test_the_selectivity_fall_is_told_within_half_a_day_and_no_healthy_day_is(plant):
    store, truth, _ = plant
    [fall] = (pd.Timestamp(one["start"]) for one in truth["events"] if one["kind"] == "selectivity loss")
    sick = [one for one in truth["events"] if not one["healthy"]]
    found = own(store)
    after = found[found["raised"] > fall]
    assert len(after) == 1
    assert after["raised"].iloc[0] - fall < pd.Timedelta(hours=12)
    assert abs(after["first_crossed"].iloc[0] - fall) < pd.Timedelta(hours=8)
    for raised in found["raised"]:
        assert any(
            pd.Timestamp(one["start"]) <= raised <= pd.Timestamp(one["end"] or truth["end"]) for one in sick
        )


def test_what_a_pass_found_is_found_again_from_any_time_on(plant):
    # late data may change figures from some hour on: what is found from there is what the whole record gives
    store, _, _ = plant
    whole = again(store).episodes
    pd.testing.assert_frame_equal(whole, own(store), check_dtype=False)
    starts = np.random.default_rng(1).integers(0, 33 * 24, 12).tolist()
    healthy_us = round(UNIT.healthy.last.timestamp() * 1e6)
    for hour in starts:
        since_us = healthy_us + hour * HOUR_US
        before = whole.copy()
        told = again(store, since_us=since_us, stored=whole).episodes
        pd.testing.assert_frame_equal(told, whole)
        pd.testing.assert_frame_equal(before, whole)  # what was given is not changed


def test_the_expectation_is_kept_as_a_document_of_the_store(plant):
    store, _, _ = plant
    [kept] = documents.revisions(store, UNIT.key, KIND)
    one = from_document(kept.body)
    assert (kept.key, one.figure, one.names) == (YIELD.name, "yield on feed", variables(UNIT))
    assert 10 < one.days < 25
    assert one.weight.tolist() == again(store).expectation.weight.tolist()


def test_a_person_is_shown_the_figure_as_expected_before_the_fall_and_below_its_band_after(plant):
    # the plant has hardly any noise of its own: before the fall each hour is within 0.3 % of its expectation
    store, truth, _ = plant
    one = in_force(store, UNIT.key, YIELD.name)
    assert one is not None
    assert in_force(store, UNIT.key, "no such watch") is None
    [fall] = (pd.Timestamp(each["start"]) for each in truth["events"] if each["kind"] == "selectivity loss")
    day = pd.Timedelta(days=1)
    view = Store(store).snapshot()
    told = {}
    for name, first, last in (("before", fall - 3 * day, fall), ("after", fall + 3 * day, fall + 8 * day)):
        span = (first.value // 1000, last.value // 1000)
        told[name] = shown(view, UNIT, YIELD, one, span).dropna(subset=["expected", "value"])
        assert len(told[name]) > 24
    before, after = told["before"], told["after"]
    assert (before["value"] / before["expected"] - 1).abs().max() < 0.003
    assert (after["value"] < after["low"]).mean() > 0.95


def test_a_pass_says_that_the_healthy_period_is_short(plant):
    _, _, told = plant
    assert any("healthy days; 30 are better" in note for note in told.notes)


def test_a_unit_that_runs_as_it_never_did_while_healthy_is_told_so_and_goes_on(plant):
    # the feed change of 18 March took the air per feed down by 5 %, which no healthy period before it saw
    store, _, _ = plant
    early = Healthy(UNIT.healthy.first, UNIT.healthy.first + timedelta(days=15), UNIT.healthy.operating_point)
    told = again(store, replace(UNIT, healthy=early))
    assert told.expectation is not None
    [air] = (note for note in told.notes if "FI-202" in note)
    assert "below what was seen while healthy" in air
    assert any("only changes above" in note for note in told.notes)
    sure = again(store).notes
    assert not any("FI-202" in note or "only changes above" in note for note in sure)


def test_a_healthy_period_without_data_gives_no_episodes_and_says_why(plant):
    store, _, _ = plant
    year = timedelta(days=365)
    empty = Healthy(UNIT.healthy.first - year, UNIT.healthy.last - year, UNIT.healthy.operating_point)
    told = again(store, replace(UNIT, healthy=empty))
    assert told.episodes.empty
    assert told.expectation is None
    assert "0.0 days of steady running" in told.notes[0]


def test_a_changed_catalyst_ends_the_expectation(plant):
    store, truth, _ = plant
    [fall] = (pd.Timestamp(one["start"]) for one in truth["events"] if one["kind"] == "selectivity loss")
    new = Event(fall.to_pydatetime(), "catalyst change", "new charge", None)
    found = again(store, replace(UNIT, events=(*UNIT.events, new))).episodes
    assert not (found["raised"] > fall).any()
    assert len(found) == len(own(store)) - 1


def test_blocks_hold_the_means_of_their_cells_and_say_when_the_unit_did_not_run(plant):
    store, truth, _ = plant
    view = Store(store).snapshot()
    [outage] = (one for one in truth["events"] if one["kind"] == "outage")
    begin, end = (round(pd.Timestamp(outage[edge]).timestamp() * 1e6) for edge in ("start", "end"))
    blocks = blocks_of(view, UNIT, YIELD, begin - DAY_US, end + DAY_US)
    assert (np.diff(blocks.end_us) == HOUR_US).all()
    down = (blocks.end_us > begin + 4 * HOUR_US) & (blocks.end_us <= end - 4 * HOUR_US)
    assert down.sum() >= 10
    assert not blocks.running[down].any()
    assert blocks.idle[down].all()
    table = view.read(UNIT.key, "cells", columns=["start", "value TI-205"]).to_pandas()
    at = int(blocks.end_us[5])
    inside = table[(table["start"] >= pd.Timestamp(at - HOUR_US, unit="us", tz="UTC"))]
    inside = inside[inside["start"] < pd.Timestamp(at, unit="us", tz="UTC")]
    assert len(inside) == 6
    assert blocks.point[5, 1] == pytest.approx(inside["value TI-205"].mean())
