"""The register: an alert keeps its id whatever late data do to its episode, and never vanishes."""

from __future__ import annotations

from dataclasses import fields
from datetime import UTC, datetime, timedelta
from typing import Any

import pandas as pd

from monitor.alerts import Alert
from monitor.register import GONE_DATA, GONE_WATCH, registered
from monitor.verdict import Suspect, Verdict, as_text

START = pd.Timestamp("2026-03-01T00:00Z")
WATCHES = ("yield, shift", "closure")


def episode(begin_h: float, end_h: float | None, watch: str = "yield, shift", **other: Any) -> dict[str, Any]:
    raised = START + pd.Timedelta(hours=begin_h + 1)
    return {
        "watch": watch,
        "figure": "yield on feed",
        "window": pd.Timedelta(hours=8),
        "side": "low",
        "limit": 76.0,
        "priority": "high",
        "first_crossed": START + pd.Timedelta(hours=begin_h),
        "raised": raised,
        "cleared": pd.NaT if end_h is None else START + pd.Timedelta(hours=end_h),
        "suppressed": False,
        "verdict": "",
        **other,
    }


def passed(known: tuple[Alert, ...], *episodes: dict[str, Any], now_h: float = 100) -> tuple[Alert, ...]:
    """The register after one more pass, and what that pass changed."""
    newest = datetime(2026, 3, 1, tzinfo=UTC) + timedelta(hours=now_h)
    frame = pd.DataFrame(list(episodes), columns=list(episode(0, 1)))
    return registered("line3", known, frame, WATCHES, newest)


def after(known: tuple[Alert, ...], changed: tuple[Alert, ...]) -> tuple[Alert, ...]:
    return tuple({**{a.id: a for a in known}, **{a.id: a for a in changed}}.values())


def test_new_episodes_become_alerts_numbered_as_they_come():
    found = passed((), episode(10, 20), episode(90, None))
    assert [(one.id, one.active) for one in found] == [("line3-1", False), ("line3-2", True)]


def test_the_same_episodes_again_change_nothing():
    known = passed((), episode(10, 20), episode(90, None))
    assert passed(known, episode(10, 20), episode(90, None)) == ()


def test_an_episode_that_ends_is_the_same_alert():
    known = passed((), episode(90, None))
    (alert,) = passed(known, episode(90, 99))
    assert (alert.id, alert.active) == ("line3-1", False)


def test_late_data_that_move_an_episode_revise_its_alert():
    known = passed((), episode(90, None))
    (alert,) = passed(known, episode(86.5, None))
    assert alert.id == "line3-1"
    assert alert.first_crossed == START + pd.Timedelta(hours=86.5)


def test_an_episode_that_is_gone_withdraws_its_alert_and_one_that_is_there_again_brings_it_back():
    known = passed((), episode(90, None))
    (gone,) = passed(known)
    assert (gone.id, gone.withdrawn, gone.active) == ("line3-1", GONE_DATA, False)
    assert passed((gone,)) == ()
    (back,) = passed((gone,), episode(91, None))
    assert (back.id, back.withdrawn, back.active) == ("line3-1", "", True)


def test_a_watch_that_is_gone_says_so():
    known = passed((), episode(90, None, watch="old name"))
    (gone,) = passed(known)
    assert gone.withdrawn == GONE_WATCH


def test_an_episode_cut_in_two_keeps_the_id_where_it_shares_most_time():
    known = passed((), episode(50, 90))
    changed = passed(known, episode(50, 55), episode(60, 90))
    ids = {one.first_crossed.hour: one.id for one in after(known, changed)}
    assert len(after(known, changed)) == 2
    assert set(ids.values()) == {"line3-1", "line3-2"}


def test_two_episodes_that_become_one_keep_one_id_and_withdraw_the_other():
    known = passed((), episode(50, 55), episode(60, 90))
    changed = after(known, passed(known, episode(50, 90)))
    assert sorted((one.id, bool(one.withdrawn)) for one in changed) == [("line3-1", True), ("line3-2", False)]


def test_other_watches_and_sides_are_other_alerts():
    known = passed((), episode(90, None))
    found = passed(known, episode(90, None), episode(90, None, "closure"), episode(90, None, side="high"))
    assert [one.id for one in found] == ["line3-2", "line3-3"]


def test_what_was_over_a_day_ago_when_it_was_first_seen_is_past_and_stays_so():
    known = passed((), episode(10, 20), episode(70, 90), now_h=100)
    assert [one.past for one in known] == [True, False]
    later = after(known, passed(known, episode(10, 20), episode(70, 90), now_h=500))
    assert [one.past for one in later] == [True, False]


def verdict(*, is_provisional: bool) -> str:
    """A verdict with nothing in it but what people are told first."""
    nothing = {field.name: () for field in fields(Verdict)}
    numbers = dict.fromkeys(("balance_p", "reaction_p", "misfit_p"), 1.0)
    suspect = Suspect("AI-220 oxygen", "instrument", 0.97, 0.05, 0.01, "the oxygen channel")
    told = {"word": "instrument", "is_provisional": is_provisional, "suspects": (suspect,), "loss": None}
    return as_text(Verdict(**{**nothing, **numbers, **told, "onset_us": None}))


def test_the_verdict_that_was_told_is_part_of_the_alert():
    known = passed((), episode(90, None))
    assert passed(known, episode(90, None, verdict=verdict(is_provisional=True))) == ()
    (alert,) = passed(known, episode(90, None, verdict=verdict(is_provisional=False)))
    assert (alert.cause, alert.suspects) == ("instrument", ("AI-220 oxygen",))
