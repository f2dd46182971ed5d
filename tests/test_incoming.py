"""Deliveries in plant time: nothing counted twice, days of 23 and 25 hours, gaps that are seen."""

from __future__ import annotations

import json
from datetime import UTC, datetime, timedelta

import pandas as pd
import vl_convert

from monitor import deliveries, incoming
from monitor.axes import LIGHT

BERLIN = "Europe/Berlin"
HOUR, DAY = timedelta(hours=1), timedelta(days=1)


def frame(*times: str, status: str = deliveries.TAKEN, readings: int = 10) -> pd.DataFrame:
    """Exports taken in at some times, UTC."""
    return pd.DataFrame(
        {
            "taken_at": pd.to_datetime(list(times), utc=True).as_unit("us"),
            "status": [status] * len(times),
            "readings": [readings] * len(times),
        }
    )


def at(text: str) -> datetime:
    return datetime.fromisoformat(text).replace(tzinfo=UTC)


def test_days_are_those_of_the_plant_and_as_long_as_its_clocks_make_them():
    # Europe/Berlin: clocks go forward on 29 March 2026 at 01:00 UTC, back on 25 October 2026 at 01:00 UTC
    # (directive 2000/84/EC: last Sunday of the month).
    for month, day, hours in ((3, 29, 23), (10, 25, 25)):
        middle = datetime(2026, month, day, 12, tzinfo=UTC)
        bins = incoming.by_time(frame(), middle - DAY, middle + DAY, BERLIN, step=DAY)
        lengths = ((bins["end"] - bins["start"]) / HOUR).tolist()
        assert lengths == [24.0, hours, 24.0]
        assert bins["when"].tolist()[1] == f"{day} {middle:%b}"


def test_every_delivery_of_the_span_is_counted_once_and_none_outside_it():
    times = [f"2026-04-{day:02}T{hour:02}:00:00Z" for day in range(1, 11) for hour in (0, 5, 22, 23)]
    first, last = at("2026-04-03T12:00"), at("2026-04-08T12:00")
    for step in (HOUR, 6 * HOUR, DAY):
        bins = incoming.by_time(frame(*times), first, last, BERLIN, step=step)
        assert bins["start"].iloc[0] <= first < bins["end"].iloc[0]
        assert bins["start"].iloc[-1] <= last < bins["end"].iloc[-1]
        inside = [t for t in times if bins["start"].iloc[0] <= pd.Timestamp(t) < bins["end"].iloc[-1]]
        assert bins["exports"].sum() == len(inside)
        assert bins["readings"].sum() == 10 * len(inside)


def test_a_step_says_what_came_in_it():
    one = frame("2026-04-03T10:00:00Z", readings=4320)
    aside = frame("2026-04-03T10:30:00Z", status=deliveries.ASIDE, readings=0)
    bins = incoming.by_time(
        pd.concat([one, aside]), at("2026-04-03T09:00"), at("2026-04-03T11:00"), BERLIN, step=HOUR
    )
    # Berlin is two hours ahead of UTC in April.
    assert dict(zip(bins["when"], bins["what"], strict=True)) == {
        "3 Apr 11:00": "nothing",
        "3 Apr 12:00": "2 exports, 4\u202f320 readings, 1 set aside",
        "3 Apr 13:00": "nothing",
    }


def test_the_longest_gap_counts_the_time_since_the_last_delivery_too():
    taken = frame("2026-04-01T00:00:00Z", "2026-04-02T00:00:00Z", "2026-04-03T12:00:00Z")
    first = at("2026-03-01T00:00")
    assert incoming.longest_gap(taken, first, at("2026-04-04T00:00")) == (
        at("2026-04-02T00:00"), at("2026-04-03T12:00"),
    )  # fmt: skip
    assert incoming.longest_gap(taken, first, at("2026-04-05T12:00")) == (
        at("2026-04-03T12:00"), at("2026-04-05T12:00"),
    )  # fmt: skip


def test_a_gap_that_began_before_the_span_is_told_from_its_beginning():
    taken = frame("2026-04-01T00:00:00Z", "2026-04-09T00:00:00Z")
    gap = incoming.longest_gap(taken, at("2026-04-07T00:00"), at("2026-04-10T00:00"))
    assert gap == (at("2026-04-01T00:00"), at("2026-04-09T00:00"))


def test_without_a_delivery_there_is_no_gap_to_tell():
    assert incoming.longest_gap(frame(), at("2026-04-01T00:00"), at("2026-04-02T00:00")) is None


def test_the_scale_names_powers_of_ten_so_that_one_large_delivery_hides_no_small_one():
    taken = pd.concat(
        [frame("2026-04-03T10:00:00Z", readings=900_000), frame("2026-04-03T15:00:00Z", readings=12)]
    )
    aside = frame("2026-04-03T20:00:00Z", status=deliveries.ASIDE, readings=0)
    bins = incoming.by_time(
        pd.concat([taken, aside]), at("2026-04-03T00:00"), at("2026-04-04T00:00"), BERLIN, step=HOUR
    )
    drawn = incoming.chart(bins, BERLIN, LIGHT)
    rows = {
        name: json.loads(one.to_json(orient="records", date_format="iso")) for name, one in drawn.data.items()
    }
    spec = {key: value for key, value in drawn.spec.items() if key != "autosize"}
    svg = vl_convert.vegalite_to_svg(json.dumps(spec | {"datasets": rows, "width": 800}))
    for word in (
        "1\u202f000\u202f000",
        ">10<",
        ">100<",
        deliveries.SHAPES[deliveries.ASIDE],
        "plant time, CEST",
    ):
        assert word in svg
    assert "3 exports" in drawn.alt
    # By hand: 26 hours are drawn, from 02:00 plant time to the hour after the last; three have a delivery.
    assert f"{len(bins) - 3} of {len(bins)} steps without any" in drawn.alt
