"""Text from outside is shown on one line that prints, whatever stands in it."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.account import TIME, Evidence
from ingest.errors import ExportError
from ingest.shown import shown


@given(st.text(), st.integers(2, 50))
def test_what_is_shown_prints_and_is_no_longer_than_asked_for_but_for_its_escapes(text: str, longest: int):
    told = shown(text, longest)
    assert told.isprintable()
    assert len(told) <= 10 * (longest + 5)  # \U0001f600 has ten characters, ` ... ` five
    if text.isprintable() and len(text) <= longest:
        assert told == text


def test_line_breaks_and_the_codes_that_steer_a_terminal_become_their_escapes():
    # ECMA-48: ESC [ 2 J clears the screen; U+202E turns the direction of writing (Unicode Annex 9).
    assert shown("a\nb\x1b[2J\u202e\udce4") == r"a\nb\x1b[2J\u202e\udce4"


def test_of_what_is_too_long_both_ends_are_left_so_that_place_and_fault_stay():
    assert (
        shown("march.csv:7: " + "x" * 1000 + " is not a time", 40)
        == "march.csv:7: xxxxxxx ... xxxxxx is not a time"
    )


def test_an_error_has_two_lines_whatever_the_file_is_called():
    with pytest.raises(ExportError, match=r"a\\nb\.csv: is empty") as caught:
        raise ExportError("a\nb.csv: is empty", remedy="Export it\nagain.")
    assert str(caught.value).splitlines() == [r"a\nb.csv: is empty", r"  Export it\nagain."]


def test_evidence_is_one_line_whatever_the_tag():
    assert (
        Evidence(4, "two\nlines", "x\ny", TIME).describe("a.csv")
        == r"a.csv:4 [two\nlines]: 'x\ny' is not a time"
    )
