"""Broken files of every kind, each in a real pass beside a good one: nothing crashes, nothing is lost."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from ingest.intake import take_in
from ingest.ledger import Store
from tests.broken_made import BROKEN, GOOD_ROWS, SMALL, Broken, good_file, unit_made
from tests.source import ROOT

GIB = 1024  # MiB
Told = dict[str, dict[str, Any]]


@pytest.fixture(scope="module")
def told(tmp_path_factory: pytest.TempPathFactory) -> Told:
    """What one process told of its passes over all broken files."""
    folder = tmp_path_factory.mktemp("broken")
    done = subprocess.run(
        [sys.executable, "-m", "tests.broken_made", os.fspath(folder)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    lines = [json.loads(line) for line in done.stdout.splitlines()]
    names, found = [line["what"] for line in lines[::2]], lines[1::2]
    assert done.returncode == 0, f"died in the pass over: {names[-1]}\n{done.stderr[-2000:]}"
    return dict(zip(names, found, strict=True))


def of(told: Told, what: str) -> dict[str, Any]:
    """What became of the broken file."""
    if "crash" in told[what]:
        pytest.fail(told[what]["crash"])
    (outcome,) = (one for one in told[what]["outcomes"] if one["name"] != "good.csv")
    return outcome


def test_there_are_more_than_sixty_of_them():
    assert len(BROKEN) >= 60
    assert {case.becomes for case in BROKEN.values()} == {"taken", "set aside", "left for the next pass"}


@pytest.mark.parametrize("what", BROKEN)
def test_a_broken_file_is_told_or_counted_and_the_good_one_beside_it_is_taken_in(told: Told, what: str):
    case, outcome = BROKEN[what], of(told, what)
    assert outcome["status"] == case.becomes, outcome["words"]
    assert re.search(case.says, outcome["words"])
    assert len(outcome["words"].splitlines()) == (2 if case.refused() else 1)
    (good,) = (one for one in told[what]["outcomes"] if one["name"] == "good.csv")
    assert (good["status"], good["account"]["accepted"]) == ("taken", 2 * GOOD_ROWS)
    values = [[i + 0.5 for i in range(GOOD_ROWS)], [7.0] * GOOD_ROWS]
    assert list(told[what]["good"].values()) == values


@pytest.mark.parametrize("what", [what for what, case in BROKEN.items() if case.becomes == "taken"])
def test_what_is_taken_of_a_broken_file_is_accounted_for_to_the_last_reading(told: Told, what: str):
    outcome = of(told, what)
    assert outcome["adds_up"]
    account = outcome["account"]
    rejected = sum(count for _, count in account["rejections"])
    assert (account["accepted"], rejected) == (BROKEN[what].accepted, BROKEN[what].rejected)
    assert bool(account["evidence"]) == bool(rejected)


@pytest.mark.parametrize("what", [what for what, case in BROKEN.items() if case.refused()])
def test_what_is_set_aside_says_where_what_and_what_to_do_in_two_lines_that_print(told: Told, what: str):
    fault, remedy = of(told, what)["words"].splitlines()
    assert fault.startswith(of(told, what)["name"])
    assert re.match(r"  [A-Z].+\.$", remedy)
    assert (fault + remedy).isprintable()


def test_no_pass_makes_a_file_outside_its_store(told: Told):
    appeared = {what: one["appeared"] for what, one in told.items() if one["appeared"]}
    assert appeared == {}


def test_the_process_that_read_them_all_never_held_a_gibibyte(told: Told):
    peaks = {what: one["peak_mb"] for what, one in told.items()}
    assert max(peaks.values()) < GIB, max(peaks, key=lambda what: peaks[what])


def _take(folder: Path, case: Broken) -> list[tuple[str, str]]:
    """Status and words of each file of a pass over one broken file and a good one."""
    (folder / "in").mkdir()
    case.make(folder / "in" / case.name)
    with Store(folder / "store").begin() as pass_:
        result = take_in(pass_, [unit_made()], [good_file(folder), folder / "in"])
    return [(one.status, one.words) for one in result.outcomes]


def test_a_file_that_was_changed_a_moment_ago_waits_for_the_next_pass_good_or_broken(tmp_path: Path):
    outcomes = _take(tmp_path, BROKEN["NUL bytes among the rows"])
    assert [status for status, _ in outcomes] == ["left for the next pass"] * 2


@pytest.mark.skipif(os.geteuid() == 0, reason="root reads files whatever their permission bits")
def test_a_file_without_permission_to_read_is_set_aside_in_words(tmp_path: Path):
    case = Broken(
        "x.csv", lambda path: (path.write_text(SMALL), path.chmod(0), os.utime(path, (0, 0))), "", ""
    )
    assert (
        "set aside",
        "x.csv: cannot be read (Permission denied)\n  Check the file's permissions.",
    ) in _take(tmp_path, case)
