"""Conditions of an alert: episode and journal folded; one cause, one alert; how well alerts serve."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import pytest

from ingest.journal import Line
from monitor.alerthealth import health
from monitor.alerts import Alert, fold, from_body, grouped, worst_first

START = datetime(2026, 3, 1, 6, 0, tzinfo=UTC)
HOUR = timedelta(hours=1)
ALERT = Alert(
    id="line3-17", unit="line3", watch="yield, shift", figure="yield on feed", window_h=8.0, side="low",
    limit=76.0, priority="high", first_crossed=START, raised=START + HOUR, cleared=None, suppressed=False,
    past=False, cause="", suspects=(),
)  # fmt: skip
BACK = replace(ALERT, cleared=START + 9 * HOUR)


def line(act: str, number: int = 1, subject: str = ALERT.id, **detail: str) -> Line:
    at = START + number * HOUR
    return Line(number, at.isoformat(), "A. Moor", act, "line3", subject, "", detail)


def shelf(number: int, until: timedelta) -> Line:
    return line("shelve", number, until=(START + until).isoformat())


TAKEN, SHELF = line("acknowledge"), shelf(2, timedelta(hours=20))
# Conditions and ways between them: ANSI/ISA-18.2-2016 / IEC 62682:2014 as quoted in an open text on
# programming; the standards themselves were not seen. Alerts here do not latch.
TRANSITIONS = [
    ("condition present: unacknowledged", ALERT, [], "unacknowledged"),
    ("unacknowledged -> acknowledged: taken", ALERT, [TAKEN], "acknowledged"),
    ("unacknowledged -> returned: condition clears", BACK, [], "returned to normal unacknowledged"),
    ("acknowledged -> normal: condition clears", BACK, [TAKEN], "normal"),
    ("returned -> normal: taken", BACK, [line("acknowledge", 10)], "normal"),
    ("returned -> unacknowledged: present again", replace(BACK, cleared=None), [], "unacknowledged"),
    ("any -> shelved", ALERT, [shelf(2, 20 * HOUR)], "shelved"),
    ("acknowledged -> shelved", ALERT, [TAKEN, shelf(2, 20 * HOUR)], "shelved"),
    ("returned -> shelved", BACK, [shelf(2, 20 * HOUR)], "shelved"),
    ("shelved -> unacknowledged: its time is over", ALERT, [shelf(2, 8 * HOUR)], "unacknowledged"),
    ("shelved -> acknowledged: its time is over", ALERT, [TAKEN, shelf(2, 8 * HOUR)], "acknowledged"),
    ("shelved -> unacknowledged: unshelved", ALERT, [SHELF, line("unshelve", 3)], "unacknowledged"),
    ("shelved again after unshelving", ALERT, [line("unshelve", 3), shelf(4, 20 * HOUR)], "shelved"),
    ("any -> suppressed by design", replace(ALERT, suppressed=True), [], "suppressed by design"),
    ("suppressed -> normal: condition clears", replace(BACK, suppressed=True), [], "normal"),
    ("any -> out of service", ALERT, [line("out of service", 2, "watch yield, shift")], "out of service"),
    (
        "out of service goes before shelved",
        ALERT,
        [shelf(1, 20 * HOUR), line("out of service", 2, "watch yield, shift")],
        "out of service",
    ),
    (
        "out of service -> unacknowledged: back in service",
        ALERT,
        [line("out of service", 2, "watch yield, shift"), line("back in service", 3, "watch yield, shift")],
        "unacknowledged",
    ),
    ("closing one takes it", ALERT, [line("close", 2, cause="reactor")], "acknowledged"),
    ("closed and back: normal", BACK, [line("close", 2, cause="reactor")], "normal"),
    ("a note changes nothing", ALERT, [line("note", 2)], "unacknowledged"),
    ("a line about another changes nothing", ALERT, [line("acknowledge", 2, "line3-16")], "unacknowledged"),
    (
        "another watch out of service changes nothing",
        ALERT,
        [line("out of service", 2, "watch closure")],
        "unacknowledged",
    ),
    ("withdrawn: nobody has to act", replace(ALERT, withdrawn="late data"), [], "normal"),
    ("over before it was first seen: nobody has to act", replace(BACK, past=True), [], "normal"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("alert", "lines", "condition"), [row[1:] for row in TRANSITIONS], ids=[r[0] for r in TRANSITIONS]
)
def test_an_alert_stands_where_the_standard_puts_it(alert: Alert, lines: list[Line], condition: str):
    assert fold(alert, lines, START + 12 * HOUR).condition == condition


def test_a_state_says_who_until_when_and_what_the_cause_was():
    state = fold(ALERT, [shelf(2, 20 * HOUR), line("close", 3, cause="instrument")], START + 12 * HOUR)
    assert (state.who, state.until, state.closed_as) == ("A. Moor", START + 20 * HOUR, "instrument")
    assert [one.act for one in state.lines] == ["shelve", "close"]


def test_closing_again_corrects_the_cause():
    lines = [line("close", 2, cause="instrument"), line("close", 3, cause="reactor")]
    assert fold(BACK, lines, START + 12 * HOUR).closed_as == "reactor"


def test_an_alert_comes_back_from_the_store_as_it_went_in():
    for alert in (ALERT, BACK, replace(ALERT, suspects=("AI-220 oxygen", "FI-201"), cause="instrument")):
        assert from_body(alert.body()) == alert


def _found(*alerts: Alert):
    return [(one, fold(one, [], START + 12 * HOUR)) for one in alerts]


def _ids(*alerts: Alert) -> list[set[str]]:
    return [{one.id for one, _ in (g.head, *g.others)} for g in grouped(_found(*alerts))]


def test_alerts_of_one_sick_instrument_are_one_with_the_worst_at_the_head():
    sick = replace(ALERT, cause="instrument", suspects=("AI-220 methacrolein",))
    closure = replace(sick, id="line3-18", watch="closure", priority="low")
    other = replace(sick, id="line3-19", priority="medium", suspects=("FI-203",))
    groups = grouped(_found(closure, other, sick))
    assert [[one.id for one, _ in (g.head, *g.others)] for g in groups] == [
        ["line3-17", "line3-18"],
        ["line3-19"],
    ]


def test_alerts_of_the_reactor_are_one_while_they_overlap_or_begin_within_a_day():
    one = replace(BACK, cause="reactor", id="line3-1")
    near = replace(one, id="line3-2", first_crossed=START + 20 * HOUR, raised=START + 21 * HOUR, cleared=None)
    far = replace(one, id="line3-3", first_crossed=START + 80 * HOUR, raised=START + 81 * HOUR, cleared=None)
    ids = [
        {a.id for a, _ in (g.head, *g.others)} for g in grouped(_found(replace(one, cleared=None), near, far))
    ]
    assert ids == [{"line3-1", "line3-2", "line3-3"}]
    ids = _ids(near, replace(far, cleared=None))
    assert ids == [{"line3-2", "line3-3"}]  # the first still stands, so they overlap
    near = replace(near, cleared=START + 25 * HOUR)
    far = replace(far, cleared=START + 90 * HOUR)
    ids = _ids(near, far)
    assert ids == [{"line3-3"}, {"line3-2"}]


def test_what_cannot_be_told_is_not_put_together():
    doubt = replace(ALERT, cause="cannot tell", suspects=("FI-201", "FI-203"))
    assert len(grouped(_found(doubt, replace(doubt, id="line3-18")))) == 2


def test_the_worst_is_unacknowledged_then_of_high_priority_then_the_newest():
    older = replace(ALERT, id="line3-2", raised=START)
    low = replace(ALERT, id="line3-3", priority="low", raised=START + 2 * HOUR)
    taken = (replace(ALERT, id="line3-4"), fold(ALERT, [TAKEN], START + 12 * HOUR))
    found = [taken, *_found(low, older, ALERT)]
    ordered = sorted(found, key=lambda one: worst_first(*one))
    assert [one.id for one, _ in ordered] == ["line3-17", "line3-2", "line3-3", "line3-4"]


def test_health_counts_chattering_fleeting_stale_shelved_and_false_alerts_of_thirty_days():
    # Stale is more than 24 h (ANSI/ISA-18.2 / EEMUA 191, quoted); the other counts: by hand.
    def one(number: int, begin_h: int, length_h: float | None) -> Alert:
        raised = START + begin_h * HOUR
        cleared = None if length_h is None else raised + length_h * HOUR
        return replace(ALERT, id=f"line3-{number}", raised=raised, first_crossed=raised, cleared=cleared)

    alerts = [one(1, 0, 2), one(2, 10, 2), one(3, 20, 9), one(4, 300, 30), one(5, 600, None)]
    hidden = [replace(one(6, 601, 1), suppressed=True), replace(one(7, 602, 1), withdrawn="late data")]
    early = one(8, -24 * 40, 1)
    now = START + 630 * HOUR
    found = [(alert, fold(alert, [], now)) for alert in (*alerts, *hidden, early)]
    lines = [
        line("shelve", 1, "line3-4", until=START.isoformat()),
        line("close", 2, "line3-4", cause="false"),
    ]
    found[3] = (alerts[3], fold(alerts[3], lines, now))
    found[4] = (alerts[4], fold(alerts[4], [line("close", 1, "line3-5", cause="reactor")], now))
    told = health(found, now)
    assert (told.raised, told.chattering, told.fleeting, told.stale) == (5, 3, 2, 2)
    assert (told.shelved, told.closed, told.false_share) == (1, 2, 0.5)
    assert told.per_day == pytest.approx(5 / 30)
