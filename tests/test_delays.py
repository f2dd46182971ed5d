"""What is said about the lags of analyzers: one sentence for each stretch of days, with what to do."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta

import pytest

from ingest.lag import Lag
from monitor.delays import Analyzer, Delays
from monitor.telling import delayed

FIRST = datetime(2026, 4, 9, 22, tzinfo=UTC)  # midnight of the 10th in Berlin


def span(first: int, last: int, estimate: float, answer: str) -> Lag:
    """From one day after FIRST to another, with half a minute to either side."""
    begin, end = (round((FIRST + timedelta(days=day)).timestamp()) * 1_000_000 for day in (first, last))
    told = Lag("AI-2", begin, end, 4.0, 2.5, 236, answer)
    return replace(told, estimate_min=estimate, low_min=estimate - 0.5, high_min=estimate + 0.5)


def sentences(days: list[Lag], stretches: list[Lag]) -> list[str]:
    analyzer = Analyzer("AI-2", 4.0, tuple(days), tuple(stretches))
    return list(delayed(Delays("line3", "Line 3", "Europe/Berlin", (analyzer,))))


def test_a_lag_that_jumped_is_told_with_both_stretches_and_what_to_do():
    days = [span(0, 1, 4, "as declared"), span(1, 2, 4, "as declared"), span(2, 3, 9, "differs")]
    days += [replace(span(3, 4, float("nan"), "cannot tell"), reason="too little movement")]
    told = sentences(days, [span(0, 2, 4, "as declared"), span(2, 3, 9, "differs")])
    assert told == [
        "Line 3 [line3]: from a movement of the feeds to the analysis that shows it",
        "AI-2: declared 4 min",
        "  10 Apr 2026  4 ± 1 min, as declared (236 analyses)",
        "  11 Apr 2026  4 ± 1 min, as declared (236 analyses)",
        "  12 Apr 2026  9 ± 1 min, differs (236 analyses)",
        "  13 Apr 2026  cannot tell: too little movement",
        "AI-2: 4 ± 1 min from 10 Apr 2026 or before to 11 Apr 2026, as declared",
        "AI-2: declared 4 min, the data say 9 ± 1 min since 12 Apr 2026: check the sample line flow, or set"
        ' dead_time = "9min"',
        "Nothing was changed: figures are worked out with the declared dead time.",
    ]


def test_results_that_stand_before_their_cause_point_at_the_clocks():
    told = sentences([span(0, 1, -6, "differs")], [span(0, 1, -6, "differs")])
    assert told[-2].endswith(
        "the data say \u22126 ± 1 min since 10 Apr 2026 or before: results stand before their cause; check"
        " the clocks of analyzer and flow meters"
    )


def test_where_no_day_has_an_answer_nothing_is_suggested():
    day = replace(span(0, 1, float("nan"), "not checked"), reason="too short")
    assert sentences([day], [])[2:4] == [
        "  10 Apr 2026  not checked: too short",
        "AI-2: its lag could not be told on any of these days",
    ]


@pytest.mark.parametrize(
    ("answers", "contradicted"),
    [(["as declared", "differs"], True), (["differs", "as declared"], False), ([], False)],
)
def test_only_the_last_stretch_counts_for_what_is_to_be_done_now(answers: list[str], contradicted: bool):
    stretches = tuple(span(at, at + 1, 4, answer) for at, answer in enumerate(answers))
    assert Analyzer("AI-2", 4.0, stretches, stretches).is_contradicted == contradicted
