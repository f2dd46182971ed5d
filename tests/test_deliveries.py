"""Exports as people see them: counts that add up, words beside shapes, and the same on the command line."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ingest.account import Account
from ingest.errors import StoreError
from ingest.exports import describe
from ingest.ledger import Store
from monitor import deliveries, tellexports
from tests.test_cli import outlet
from tests.test_intake import BOTH, TAGS, take, unit_of, wide

BAD_ROWS = {
    "2026-03-01T00:00:00Z": (1.0, 2.0),
    "2026-03-01T00:10:00Z": ("1.5 kg", 2.0),
    "not a time": (1.0, 2.0),
    "2026-03-01T00:20:00Z": (1.0, ""),
}


@pytest.fixture
def store(tmp_path: Path) -> Store:
    """A good export, one that corrects a reading of it, one with bad rows, and one that is no export."""
    made = Store(tmp_path / "store")
    first = wide(
        tmp_path / "first.csv", {"2026-03-02T00:00:00Z": (1.0, 2.0), "2026-03-02T00:10:00Z": (3.0, 4.0)}
    )
    take(made, first)
    second = wide(tmp_path / "second.csv", {"2026-03-02T00:00:00Z": (1.5, 2.0)})
    bad = wide(tmp_path / "third.csv", BAD_ROWS)
    (tmp_path / "broken.csv").write_text("no time here\n1\n", encoding="utf-8")
    take(made, second, bad, tmp_path / "broken.csv")
    return made


def test_the_counts_of_every_export_add_up_to_its_readings(store: Store):
    frame = deliveries.table(store.exports())
    assert (frame[list(deliveries.PLACES)].sum(axis=1) == frame["readings"]).all()
    rows = frame.set_index("name")
    # By hand: one of two readings of second.csv is new, the other said again; it replaces one of first.csv.
    assert rows.loc["first.csv", ["readings", "accepted", "superseded"]].tolist() == [4, 3, 1]
    assert rows.loc["second.csv", ["readings", "accepted", "duplicates"]].tolist() == [2, 1, 1]
    # Four rows of two readings: one cell is no number, one row of two has no time, one cell is blank.
    assert rows.loc["third.csv", ["readings", "accepted", "rejected", "empty"]].tolist() == [8, 4, 3, 1]
    assert rows.loc["broken.csv", ["rows", "readings", "accepted"]].tolist() == [0, 0, 0]


def test_exports_stand_newest_first_with_a_word_and_a_shape_each(store: Store):
    frame = deliveries.table(store.exports())
    assert frame["taken_at"].is_monotonic_decreasing
    assert frame["name"].iloc[-1] == "first.csv"
    assert dict(zip(frame["name"], frame["status"], strict=True)) == {
        "first.csv": "taken", "second.csv": "taken", "third.csv": "taken, some rejected",
        "broken.csv": "set aside",
    }  # fmt: skip
    assert len(set(deliveries.SHAPES.values())) == len(deliveries.SHAPES) == 3


def test_an_account_comes_back_from_the_ledger_as_it_was(store: Store, tmp_path: Path):
    read = describe(tmp_path / "third.csv", rules=BOTH.exports, wanted=frozenset(TAGS), time_zone=None)
    (export,) = deliveries.named(store.exports(), "third.csv")
    # All is new in this file, so that nothing was settled with other exports.
    assert deliveries.account_of(export) == read.account
    assert tuple(export.account["dialect"]) == read.dialect


def test_what_an_older_ledger_did_not_count_is_nought():
    account = Account.from_stored({"export": "old.csv", "readings": 3, "accepted": 3})
    assert account.adds_up
    assert (account.rows, account.evidence, account.rejections) == (0, (), ())


def test_an_export_is_found_by_number_and_by_name_and_one_that_is_not_there_is_told(store: Store):
    entries = store.exports()
    assert deliveries.named(entries, str(entries[0].number)) == deliveries.named(entries, entries[0].name)
    with pytest.raises(StoreError, match=r"third\.cvs: no export .* did you mean third\.csv\?"):
        deliveries.named(entries, "third.cvs")


def test_two_contents_of_one_name_are_both_told(store: Store, tmp_path: Path):
    take(store, wide(tmp_path / "first.csv", {"2026-03-05T00:00:00Z": (1.0, 2.0)}))
    assert [one.number for one in deliveries.named(store.exports(), "first.csv")] == [1, 5]


def test_the_filter_takes_words_as_they_are_written(store: Store):
    frame = deliveries.table(store.exports())
    assert deliveries.matching(frame, "FIRST")["name"].tolist() == ["first.csv"]
    assert deliveries.matching(frame, ".*").empty  # no pattern
    pd.testing.assert_frame_equal(deliveries.matching(frame, " "), frame)


def test_the_account_tells_each_fault_with_place_text_reason_and_remedy(store: Store):
    (export,) = deliveries.named(store.exports(), "third.csv")
    told = "\n".join(tellexports.told(export, {}))
    assert "4 rows; 8 readings = 4 accepted + 3 rejected + 1 left blank" in told
    assert "third.csv:3 [FI-1.PV]: '1.5 kg' is not a number" in told
    assert "third.csv:4 [FI-2.PV]: 'not a time' is not a time" in told
    assert "add it to missing_words" in told
    assert "separated by comma" in told


def test_the_command_tells_what_the_ledger_holds(store: Store, tmp_path: Path):
    done = outlet("exports", "--store", store.folder, "--json", folder=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    said = {one["name"]: one for one in json.loads(done.stdout)["exports"]}
    for export in store.exports():
        assert said[export.name]["taken_at"] == export.taken_at
        assert said[export.name]["accepted"] == export.account.get("accepted", 0)
    table = outlet("exports", "--store", store.folder, "--name", "third", folder=tmp_path).stdout.splitlines()
    assert len(table) == 2
    assert table[1].split() == [
        *("4", *table[1].split()[1:6], "taken,", "some", "rejected"),
        *("4", "8", "4", "0", "0", "3", "0", "1", "third.csv"),
    ]


def test_the_command_tells_one_export_that_was_set_aside_with_its_two_lines(store: Store, tmp_path: Path):
    done = outlet("exports", "broken.csv", "--store", store.folder, folder=tmp_path)
    assert done.returncode == 0
    (export,) = deliveries.named(store.exports(), "broken.csv")
    assert [line.strip() for line in done.stdout.splitlines()[1:]] == [
        line.strip() for line in export.error.splitlines()
    ]
    words = ("exports", "third.csv", "--store", store.folder, "--json")
    (said,) = json.loads(outlet(*words, folder=tmp_path).stdout)["exports"]
    assert [one["rows"][0] for one in said["rejected"]] == [
        "third.csv:4 [FI-1.PV]: 'not a time' is not a time",
        "third.csv:3 [FI-1.PV]: '1.5 kg' is not a number",
    ]


def test_an_empty_store_lists_no_export(tmp_path: Path):
    made = Store(tmp_path / "store")
    take(made)
    assert outlet("exports", "--store", made.folder, folder=tmp_path).stdout == "no export\n"
    assert json.loads(outlet("exports", "--store", made.folder, "--json", folder=tmp_path).stdout) == {
        "exports": []
    }


def test_lines_that_hold_no_readings_are_told_with_their_account(tmp_path: Path):
    made = Store(tmp_path / "store")
    (tmp_path / "units.csv").write_text(
        "time,FI-1.PV,FI-2.PV\n,kg/h,kg/h\n2026-03-01T00:00:00Z,1,2\n2026-03-01T00:10:00Z,3,4\n",
        encoding="utf-8",
    )
    take(made, tmp_path / "units.csv")
    (export,) = made.exports()
    account = deliveries.account_of(export)
    assert account.asides == (("units", 1),)
    told = "\n".join(tellexports.told(export, {}))
    assert "2 rows; 4 readings = 4 accepted" in told
    assert "Lines that hold no readings: 1 of units." in told
    assert "units.csv:2: ',kg/h,kg/h' is of units" in told


def test_an_export_is_found_by_a_path_to_it(store: Store, tmp_path: Path):
    assert [one.name for one in deliveries.named(store.exports(), str(tmp_path / "third.csv"))] == [
        "third.csv"
    ]


def test_an_account_tells_which_exports_replaced_its_readings(store: Store, tmp_path: Path):
    # the same minute once more: the second row counts, and then a third file says it otherwise
    lines = ["time,FI-1.PV,FI-2.PV", *(f"2026-03-07T00:00:00Z,{value},7" for value in (1, 2))]
    (tmp_path / "twice.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    take(store, tmp_path / "twice.csv")
    take(store, wide(tmp_path / "later.csv", {"2026-03-07T00:00:00Z": (3.0, 7.0)}))
    names = {one.number: one.name for one in store.exports()}
    (twice,) = deliveries.named(store.exports(), "twice.csv")
    account = deliveries.account_of(twice)
    assert sum(count for _, count in account.superseded_by) == account.superseded == 2
    later = next(number for number, name in names.items() if name == "later.csv")
    assert list(deliveries.winners(account, twice.number, names)) == [
        "1 superseded by later rows of itself", f"1 superseded by later.csv (export {later})",
    ]  # fmt: skip
    assert f"  1 superseded by later.csv (export {later})" in list(tellexports.told(twice, names))


def test_who_replaced_what_adds_up_in_whatever_order_exports_are_taken_in(tmp_path: Path):
    # law: an export taken in again with a lower number than others keeps what those said
    rng = np.random.default_rng(5)
    store, one = Store(tmp_path / "store"), unit_of("FI-1")
    for number in range(6):
        minutes = sorted(rng.choice(12, size=6, replace=False).tolist())
        rows = {
            f"2026-03-01T00:{5 * m:02}:00Z": (int(rng.integers(3)), int(rng.integers(3))) for m in minutes
        }
        take(store, wide(tmp_path / f"{number}.csv", rows), units=(one,) if number % 2 else (BOTH,))
    take(store, *sorted(tmp_path.glob("*.csv")), units=(BOTH,))  # the tags not asked for before
    accounts = {e.number: deliveries.account_of(e) for e in store.exports()}
    assert sum(account.superseded for account in accounts.values()) > 10
    for number, account in accounts.items():
        assert account.adds_up
        assert sum(count for _, count in account.superseded_by) == account.superseded
        assert all(winner >= number for winner, _ in account.superseded_by)


@pytest.mark.parametrize(("which", "what"), [("thrid.csv", "thrid.csv: no export"), ("99", "99: no export")])
def test_an_export_that_is_not_there_is_told_in_two_lines(
    store: Store, tmp_path: Path, which: str, what: str
):
    done = outlet("exports", which, "--store", store.folder, folder=tmp_path)
    assert done.returncode == 2
    assert done.stderr.startswith(what)
    assert done.stderr.splitlines()[1:] == ["  See 'outlet exports' for all numbers and names."]
