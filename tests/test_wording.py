from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta

import pytest

from ingest.cells import OPERATING
from ingest.unit import PRIORITIES
from monitor import wording
from monitor.windows import REASONS
from monitor.wording import Told

BERLIN = "Europe/Berlin"
NB = "\u00a0"
NOW = datetime(2026, 4, 14, 12, 20, tzinfo=UTC)


@pytest.mark.parametrize(
    ("value", "half_width", "written"),
    [
        # JCGM 100:2008, 7.2.4: m = (100.021 47 ± 0.000 79) g.
        (100.02147, 0.00079, "100.02147 ± 0.00079"),
        # JCGM 100:2008, 7.2.6: 10.057 62 ohm with 27 milliohm is rounded to 10.058 ohm.
        (10.05762, 0.027, "10.058 ± 0.027"),
        (75.1234, 0.6251, "75.12 ± 0.63"),
        (75.1234, 0.0996, "75.12 ± 0.10"),
        (12345.6, 123.0, "12\u202f350 ± 120"),
        (-0.004, 0.21, "0.00 ± 0.21"),
        (-34.97, 1.24, "\u221235.0 ± 1.2"),
    ],
)
def test_a_number_has_the_digits_that_two_of_its_half_width_support(
    value: float, half_width: float, written: str
):
    assert wording.amount(value, half_width, "%") == f"{written} %".replace(" ", NB)


def test_a_missing_number_is_a_dash_never_zero_or_nan():
    assert wording.amount(math.nan, 0.5, "%") == "\u2013"
    assert wording.amount(math.inf, 0.5, "%") == "\u2013"


def test_without_a_half_width_four_digits_are_shown():
    assert wording.amount(0.0123456, math.nan, "t/h") == f"0.01235{NB}t/h"
    assert wording.amount(0.0, math.nan, "") == "0.000"


def test_plant_time_is_right_on_both_sides_of_the_doubled_hour():
    # Directive 2000/84/EC: summer time ends at 01:00 UTC on the last Sunday of October (25 Oct 2026).
    before, after = (datetime(2026, 10, 25, hour, 30, tzinfo=UTC) for hour in (0, 1))
    assert wording.local_time(before, BERLIN, now=NOW) == "25 Oct 02:30 CEST"
    assert wording.local_time(after, BERLIN, now=NOW) == "25 Oct 02:30 CET"


def test_a_zone_without_letters_is_named_by_its_offset():
    # IANA time zone database: Asia/Dubai is +04 all year, Asia/Kathmandu +0545.
    assert wording.local_time(NOW, "Asia/Dubai", now=NOW) == "14 Apr 16:20 UTC+04:00"
    assert wording.zone_name(NOW, "Asia/Kathmandu") == "UTC+05:45"


def test_the_year_is_written_when_it_is_not_this_year():
    assert wording.local_time(NOW, BERLIN, now=NOW.replace(year=2027)) == "14 Apr 2026 14:20 CEST"
    assert wording.local_time(NOW, BERLIN) == "14 Apr 2026 14:20 CEST"


@pytest.mark.parametrize(
    ("minutes", "written"),
    [(0.5, "under a minute"), (12, "12 min"), (310, "5 h 10 min"), (300, "5 h"), (3130, "2 d 4 h")],
)
def test_a_duration_is_its_two_largest_parts(minutes: float, written: str):
    assert wording.duration(timedelta(minutes=minutes)) == written


@pytest.mark.parametrize(
    ("hours", "written"), [(1, "1 h"), (8, "8 h"), (24, "24 h"), (168, "7 d"), (0.5, "30 min")]
)
def test_windows_are_called_what_people_call_them(hours: float, written: str):
    assert wording.window(timedelta(hours=hours)) == written


@pytest.mark.parametrize(
    ("value", "kind", "words"),
    [
        (75.0, "below", "below 76.0 %"),
        (75.8, "below", "below 76.0 %, by less than its error bar"),
        (76.2, "near", "within; 76.0 % lies inside the error bar"),
        (77.0, "within", "within 76.0 to 90.0 %"),
        (91.0, "above", "above 90.0 %"),
        (math.nan, "missing", "not shown"),
    ],
)
def test_a_standing_says_when_the_limit_lies_inside_the_error_bar(value: float, kind: str, words: str):
    held = wording.standing(value, 0.6, low=76.0, high=90.0, unit="%")
    assert (held.kind, held.words) == (kind, words)


def test_no_two_standings_share_a_shape():
    # WCAG 2.2, 1.4.1: colour is not the only means of telling them apart.
    assert len(set(wording.SHAPES.values())) == len(wording.SHAPES)
    assert len(set(wording.OPERATING_SHAPES.values())) == len(wording.OPERATING_SHAPES)


def test_without_a_limit_nothing_is_judged():
    assert wording.standing(99.0, 0.6, low=None, high=None, unit="%").kind == "free"


YIELD = Told(
    figure="yield on feed",
    unit="%",
    side="low",
    limit=76.0,
    raised=datetime(2026, 4, 14, 7, 20, tzinfo=UTC),
    cleared=None,
    worst=74.86,
    worst_at=datetime(2026, 4, 14, 10, 30, tzinfo=UTC),
)


def test_an_open_episode_is_told_in_one_sentence():
    said = wording.episode(YIELD, value=75.1, half_width=0.61, now=NOW, zone=BERLIN)
    assert said.replace(NB, " ") == (
        "Yield on feed has been below 76.0 % since 14 Apr 09:20 CEST (5 h); now 75.10 ± 0.61 %, "
        "worst 74.86 % at 14 Apr 12:30 CEST."
    )


def test_an_episode_whose_figure_is_missing_now_says_so():
    said = wording.episode(YIELD, value=math.nan, half_width=math.nan, now=NOW, zone=BERLIN)
    assert "; not shown now, worst" in said
    assert "nan" not in said


def test_an_ended_episode_is_told_with_both_times():
    ended = wording.Told(
        **{name: getattr(YIELD, name) for name in YIELD.__slots__} | {"cleared": NOW, "worst_at": None}
    )
    said = wording.episode(ended, value=math.nan, half_width=math.nan, now=NOW, zone=BERLIN)
    assert said == "Yield on feed was below 76.0 % from 14 Apr 09:20 CEST to 14 Apr 14:20 CEST (5 h)."


def test_an_age_is_told_from_both_sides_of_the_clock():
    assert wording.age(None, now=NOW, zone=BERLIN) == "never"
    late = NOW - timedelta(minutes=12)
    assert wording.age(late, now=NOW, zone=BERLIN) == "14 Apr 14:08 CEST, 12 min ago"
    assert "20 min ahead of this computer's clock" in wording.age(
        NOW + timedelta(minutes=20), now=NOW, zone=BERLIN
    )


def test_every_reason_condition_and_priority_has_its_words():
    assert set(wording.MISSING) == set(REASONS)
    assert set(wording.OPERATING_SHAPES) == set(OPERATING)
    assert set(wording.PRIORITY_RANK) == set(PRIORITIES)
