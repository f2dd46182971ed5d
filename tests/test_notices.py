"""What a pass tells people: one notice per raise, clear, withdrawal and verdict; when, and in which words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, time
from pathlib import Path

import pytest

from ingest.outbox import Notice
from monitor import desk
from monitor.alerts import Alert, State
from monitor.notices import Turn, digest, end_of_quiet, event_of, letters, next_turn
from monitor.noticetext import Change, Shown
from tests.notices_made import HOOK, HOUR, NOW, START, WATCH, export, passed, unit_with, waiting

ALERT = Alert(
    id="made-1", unit="made", watch=WATCH.name, figure=WATCH.figure, window_h=8.0, side="low", limit=48.0,
    priority="high", first_crossed=START, raised=START + HOUR, cleared=None, suppressed=False, past=False,
)  # fmt: skip
STATE = State("unacknowledged", "", None, "", ())
SHOWN = Shown(45.214, 0.63, "%", START + 9 * HOUR)
CLEARED = replace(ALERT, cleared=START + 9 * HOUR)
REACTOR = replace(ALERT, cause="reactor")


def change(alert: Alert = ALERT, event: str = "raised", condition: str = "unacknowledged") -> Change:
    return Change(alert, event, replace(STATE, condition=condition), SHOWN, None)


@pytest.mark.parametrize(
    ("before", "after", "told"),
    [
        (None, ALERT, "raised"),
        (ALERT, CLEARED, "cleared"),
        (None, CLEARED, "raised"),  # both between two passes: people hear of it once
        (ALERT, REACTOR, "verdict"),
        (REACTOR, replace(REACTOR, suspects=("AI-2",)), "verdict"),
        (REACTOR, replace(REACTOR, cleared=START + 9 * HOUR), "cleared"),
        (CLEARED, replace(CLEARED, cause="reactor"), ""),
        (ALERT, replace(ALERT, withdrawn="gone"), "withdrawn"),
        (ALERT, replace(ALERT, suppressed=True), "withdrawn"),
        (replace(ALERT, suppressed=True), ALERT, "raised"),
        (replace(ALERT, withdrawn="gone"), ALERT, "raised"),
        (CLEARED, ALERT, "raised"),
        (ALERT, replace(ALERT, raised=START), ""),  # late data moved it: it is the same alert
        (None, replace(ALERT, suppressed=True), ""),
        (None, replace(CLEARED, past=True), ""),
        (None, replace(ALERT, withdrawn="gone"), ""),
    ],
)
def test_people_hear_of_a_raise_a_clear_a_verdict_and_a_withdrawal_and_of_nothing_else(before, after, told):
    # common practice, no source: whoever was told of a beginning is told of its end
    assert event_of(before, after) == told


def test_each_target_is_told_what_its_priorities_ask_for_under_an_id_of_its_own():
    unit = unit_with(HOOK, replace(HOOK, name="office", priorities=("low",)), replace(HOOK, name="two"))
    found = letters(unit, [change()], {"made-1": 1}, NOW)
    assert [one.target for one in found] == ["made/desk", "made/two"]
    assert len({one.notice for one in found}) == 2
    again = letters(unit, [change()], {"made-1": 1}, NOW + HOUR)
    assert [one.notice for one in again] == [one.notice for one in found]
    later = letters(unit, [change(CLEARED, "cleared")], {"made-1": 2}, NOW + HOUR)
    assert not {one.notice for one in later} & {one.notice for one in found}


@pytest.mark.parametrize("condition", ["shelved", "out of service"])
def test_nobody_is_told_of_what_is_shelved_or_out_of_service(condition: str):
    assert letters(unit_with(HOOK), [change(condition=condition)], {"made-1": 1}, NOW) == ()


def test_alerts_of_one_cause_are_one_notice_that_names_each():
    sick = replace(ALERT, cause="instrument", suspects=("AI-2 isobutane",))
    others = [replace(sick, id=f"made-{n}", figure=f"figure {n}", priority="low") for n in (2, 3)]
    alone = replace(ALERT, id="made-4", figure="figure 4")
    changes = [change(one, "verdict") for one in (*others, sick)] + [change(alone)]
    found = letters(unit_with(HOOK), changes, {f"made-{n}": 1 for n in (1, 2, 3, 4)}, NOW)
    assert [len(one.body["alerts"]) for one in found] == [3, 1]
    assert found[0].body["subject"].endswith("and 2 more")
    assert all(f"made-{n}" in found[0].body["text"] for n in (1, 2, 3))


def test_a_notice_says_what_a_shift_needs_at_three_in_the_morning():
    unit = unit_with(replace(HOOK, page="https://outlet.plant.example/"), time_zone="Europe/Berlin")
    [one] = letters(unit, [change()], {"made-1": 1}, NOW)
    text = one.body["text"]
    # START is 2026-03-02T00:00Z, in Berlin an hour later; two digits of the half-width: JCGM 100, 7.2.6
    assert one.body["subject"] == (
        f"{unit.name} high raised: yield on feed, 8 h below 48.0 % since 2 Mar 2026 02:00 CET"
    )
    assert "Since: 2 Mar 02:00 CET (first crossed 2 Mar 01:00 CET)" in text
    assert "Now: 45.21\u00a0±\u00a00.63\u00a0% (95 %), 8 h to 2 Mar 10:00 CET" in text
    assert "Verdict: not yet told" in text
    assert "Look: outlet alerts show made-1\n      https://outlet.plant.example/?unit=made" in text
    assert "no safety function, no protective alarm, no basis for interlock or trip settings" in text
    without = letters(unit_with(HOOK), [change()], {"made-1": 1}, NOW)[0].body["text"]
    assert "http" not in without


BERLIN = "Europe/Berlin"
NIGHT = (time(22), time(6))
LONG = (48, 90)  # hours in which the yield is low


@pytest.mark.parametrize(
    ("quiet", "at", "until"),
    [
        (None, "2026-03-05T23:00+01:00", "2026-03-05T23:00+01:00"),
        (NIGHT, "2026-03-05T21:59+01:00", "2026-03-05T21:59+01:00"),
        (NIGHT, "2026-03-05T22:00+01:00", "2026-03-06T06:00+01:00"),
        (NIGHT, "2026-03-06T05:59+01:00", "2026-03-06T06:00+01:00"),
        (NIGHT, "2026-03-06T06:00+01:00", "2026-03-06T06:00+01:00"),
        ((time(12), time(13)), "2026-03-06T12:30+01:00", "2026-03-06T13:00+01:00"),
        # the night in which clocks are put forward has seven hours of quiet, the other one nine
        (NIGHT, "2026-03-28T22:00+01:00", "2026-03-29T06:00+02:00"),
        (NIGHT, "2026-10-24T22:00+02:00", "2026-10-25T06:00+01:00"),
        # 02:30 comes twice: quiet until it comes the first time, and again from the second 02:00 on
        ((time(22), time(2, 30)), "2026-10-25T02:10+02:00", "2026-10-25T02:30+02:00"),
        ((time(22), time(2, 30)), "2026-10-25T02:10+01:00", "2026-10-25T02:30+01:00"),
        # and 02:30 that does not come at all: an hour after 01:30
        ((time(22), time(2, 30)), "2026-03-29T01:50+01:00", "2026-03-29T03:30+02:00"),
    ],
)  # fmt: skip
def test_quiet_hours_end_by_the_plants_clock(quiet, at, until):
    moment = datetime.fromisoformat(at)
    assert end_of_quiet(quiet, BERLIN, moment) == datetime.fromisoformat(until)


def test_quiet_hours_hold_all_but_what_is_exempt():
    unit = unit_with(replace(HOOK, quiet=NIGHT), time_zone=BERLIN)
    night = datetime(2026, 3, 5, 23, tzinfo=UTC)
    low = change(replace(ALERT, id="made-2", priority="low"))
    high, held = letters(unit, [change(), low], {"made-1": 1, "made-2": 1}, night)
    assert high.not_before == night
    assert held.not_before == datetime(2026, 3, 6, 5, tzinfo=UTC)


def notice(name: str, *, urgent: bool = False, tries: int = 0, kind: str = "raised") -> Notice:
    body = {"urgent": urgent, "priority": "low", "unit": "made", "name": "Unit", "subject": name,
            "text": f"{name}\n", "alerts": []}  # fmt: skip
    return Notice(name, NOW, kind, "made/desk", body, "waiting", tries, NOW, "", None, "")


def sent_in_an_hour(due: Sequence[Notice], per_hour: int) -> list[list[str]]:
    """What arrives within one hour, digests as the names in them, if every sending succeeds."""
    left, arrived = list(due), []
    while (turn := next_turn(left, len(arrived), per_hour)) != Turn():
        if turn.send is not None:
            arrived.append(str(turn.send.body.get("names", turn.send.id)).split("+"))
            left.remove(turn.send)
        else:
            joined = notice("+".join(one.id for one in turn.join), urgent=turn.join[0].body["urgent"],
                            kind="digest")  # fmt: skip
            left = [one for one in left if one not in turn.join] + [joined]
    return arrived


def test_no_hour_has_more_than_it_may_and_nothing_is_lost():
    names = [f"n{n:02d}" for n in range(20)]
    arrived = sent_in_an_hour([notice(name) for name in names], 5)
    # the fifth place is kept for what is urgent, so that the fourth is the digest
    assert arrived == [["n00"], ["n01"], ["n02"], names[3:]]


def test_what_fits_is_not_joined():
    assert sent_in_an_hour([notice("a"), notice("b")], 3) == [["a"], ["b"]]


def test_what_is_urgent_goes_first_and_has_a_place_when_the_hour_is_full():
    assert sent_in_an_hour([notice("a"), notice("b", urgent=True)], 3) == [["b"], ["a"]]
    assert next_turn([notice("a")], 4, 5) == Turn()
    assert next_turn([notice("a", urgent=True)], 4, 5).send == notice("a", urgent=True)
    assert next_turn([notice("a", urgent=True)], 5, 5) == Turn()


def test_what_was_tried_may_have_arrived_and_never_goes_under_another_id():
    due = [notice("c"), notice("d"), notice("e"), notice("a", tries=1), notice("b", tries=2)]
    assert sent_in_an_hour(due, 4) == [["a"], ["b"], ["c", "d", "e"]]


def test_a_digest_has_an_id_that_follows_from_what_is_in_it():
    three = [notice(name) for name in "abc"]
    one, same = digest(three, NOW), digest(three[::-1], NOW + HOUR)
    assert one.notice == same.notice != digest(three[:2], NOW).notice
    assert all(f"\n{name}\n" in one.body["text"] for name in "abc")


def test_a_fall_of_the_yield_becomes_one_notice_for_its_raise_one_for_its_verdict_and_one_for_its_end(
    tmp_path: Path,
):
    store, unit = tmp_path / "store", unit_with(HOOK)
    passed(store, unit, [export(tmp_path, "first.csv", (0, 54), LONG)])
    [raised] = waiting(store)
    assert raised.kind == "raised"
    [alert] = raised.body["alerts"]
    assert (alert["id"], alert["revision"], alert["event"]) == ("made-1", 1, "raised")
    assert alert["value"] < alert["limit"] == 48.0
    passed(store, unit, [export(tmp_path, "first.csv", (0, 54), LONG)])
    assert waiting(store) == (raised,)
    told = []
    for number, hours in enumerate([(54, 62), (62, 74), (74, 110)]):
        passed(store, unit, [export(tmp_path, f"{number}.csv", hours, LONG)])
        told.append([one.kind for one in waiting(store)])
    # eight hours after the onset the verdict stands (monitor/verdict.py), which is told once
    assert told == [["raised", "verdict"], ["raised", "verdict"], ["raised", "verdict", "cleared"]]
    passed(store, unit, [export(tmp_path, "late.csv", (44, 94), None)])
    assert [one.kind for one in waiting(store)] == [*told[-1], "withdrawn"]
    assert len({one.id for one in waiting(store)}) == 4


def test_a_watch_out_of_service_tells_nobody(tmp_path: Path):
    store, unit = tmp_path / "store", unit_with(HOOK)
    passed(store, unit, [export(tmp_path, "first.csv", (0, 40))])
    desk.rest(store, "made", WATCH.name, "A. Moor", reason="recalibrated")
    passed(store, unit, [export(tmp_path, "second.csv", (40, 60))])
    assert [one.id for one in desk.known(store, "made")] == ["made-1"]
    assert waiting(store) == ()
