"""The store: whole passes or nothing, one at a time, and what is read is what was written."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from ingest import database, journal, parts
from ingest.errors import GoneError, StoreError
from ingest.ledger import Store
from ingest.parts import by_month, month_edges, month_of, sha256_of
from ingest.passes import Pass
from ingest.records import PassEntry
from ingest.snapshot import Snapshot
from tests.store_made import (
    DEATHS,
    FEBRUARY,
    HOUR,
    JANUARY,
    ROOT,
    cells,
    episodes_made,
    export,
    killed,
    undisturbed,
)


def values(store: Store, **limits: int) -> list[float]:
    return store.read("north", "cells", columns=["value"], **limits)["value"].to_pylist()


def part_files(store: Store) -> list[Path]:
    return sorted(store.folder.glob("*/*"))


# What is read is what was written


def test_a_month_begins_at_midnight_utc():
    # 2026-02-01T00:00Z is 1769904000 s after 1970 by `date -u -d 2026-02-01 +%s`.
    assert month_edges("2026-02")[0] == FEBRUARY == 1_769_904_000_000_000
    assert [month_of(FEBRUARY - 1), month_of(FEBRUARY)] == ["2026-01", "2026-02"]


def test_rows_come_back_in_time_order_across_months(tmp_path):
    store = undisturbed(tmp_path)
    table = store.read("north", "cells")
    assert table.equals(cells(FEBRUARY - 2 * HOUR, [1.0, 2.0, 3.0, 4.0]))
    assert store.snapshot().months("north", "cells") == ["2026-01", "2026-02"]


def test_the_first_instant_is_read_and_the_last_is_not(tmp_path):
    store = undisturbed(tmp_path)
    assert values(store, first=FEBRUARY - HOUR, last=FEBRUARY + HOUR) == [2.0, 3.0]
    assert values(store, first=FEBRUARY, last=FEBRUARY) == []


def test_times_with_a_zone_are_limits_too(tmp_path):
    store = undisturbed(tmp_path)
    berlin = pd.Timestamp("2026-02-01T01:00", tz="Europe/Berlin")  # midnight UTC
    assert store.read("north", "cells", first=berlin)["value"].to_pylist() == [3.0, 4.0]


def test_only_the_columns_asked_for_come_in_that_order(tmp_path):
    table = undisturbed(tmp_path).read("north", "cells", first=FEBRUARY, columns=["condition", "value"])
    assert table.column_names == ["condition", "value"]


def test_a_column_that_a_month_lacks_is_null_there(tmp_path):
    store = undisturbed(tmp_path)
    wider = cells(FEBRUARY, [3.0, 4.0])
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", wider.append_column("added", pa.array([7.0, 8.0])))
    assert store.read("north", "cells", columns=["added"])["added"].to_pylist() == [None, None, 7.0, 8.0]


def test_a_stage_that_nobody_wrote_has_no_rows(tmp_path):
    assert undisturbed(tmp_path).read("north", "states").num_rows == 0


def test_a_splice_replaces_the_rows_within_its_limits_and_no_other(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        inside = (FEBRUARY - HOUR, FEBRUARY + HOUR)
        pass_.splice("north", "cells", cells(inside[0], [20.0]), first=inside[0], last=inside[1])
    assert values(store) == [1.0, 20.0, 4.0]


def test_pieces_spliced_one_by_one_give_the_same_bytes_as_one_write(tmp_path):
    whole, pieces = undisturbed(tmp_path / "whole"), Store(tmp_path / "pieces")
    for hour in (2, 0, 3, 1):
        first = FEBRUARY + (hour - 2) * HOUR
        with pieces.begin() as pass_:
            pass_.splice("north", "cells", cells(first, [hour + 1.0]), first=first, last=first + HOUR)
    digests = [{p.sha256 for k, p in s.snapshot().parts.items() if k[1] == "cells"} for s in (whole, pieces)]
    assert digests[0] == digests[1]


def test_a_month_without_rows_has_no_part(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.splice("north", "cells", cells(FEBRUARY, []), first=FEBRUARY)
    assert store.snapshot().months("north", "cells") == ["2026-01"]
    assert values(store) == [1.0, 2.0]


def test_rows_of_another_month_are_refused(tmp_path):
    said = r"rows of .*2026-02.* in the part of 2026-01"
    with pytest.raises(ValueError, match=said), Store(tmp_path).begin() as pass_:
        pass_.write("north", "cells", "2026-01", cells(FEBRUARY - HOUR, [1.0, 2.0]))


def test_rows_out_of_time_order_are_refused():
    with pytest.raises(ValueError, match="ascending time"):
        by_month(cells(FEBRUARY, [1.0, 2.0]).take([1, 0]))


def test_a_unit_cannot_name_a_folder_outside_the_store(tmp_path):
    said = r"unit '\.\./north': cannot name a folder"
    with pytest.raises(StoreError, match=said), Store(tmp_path / "store").begin() as pass_:
        pass_.write("../north", "cells", "2026-02", cells(FEBRUARY, [1.0]))
    assert list(tmp_path.iterdir()) == [tmp_path / "store"]


def test_floats_keep_their_width_and_are_stored_by_byte_planes(tmp_path):
    store = Store(tmp_path)
    narrow = cells(FEBRUARY, [1.0, np.nan]).append_column("share", pa.array([0.1, 1.0], pa.float32()))
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", narrow)
    (path,) = store.snapshot().paths("north", "cells")
    group = pq.read_metadata(path).row_group(0)
    chunks = {group.column(i).path_in_schema: group.column(i) for i in range(group.num_columns)}
    assert {chunks[name].compression for name in chunks} == {"ZSTD"}
    assert all("BYTE_STREAM_SPLIT" in chunks[name].encodings for name in ("value", "share"))
    assert "DELTA_BINARY_PACKED" in chunks["start"].encodings
    assert store.read("north", "cells").schema.field("share").type == pa.float32()


def test_episodes_come_back_as_they_went_in(tmp_path):
    given = episodes_made()
    store = undisturbed(tmp_path)
    pd.testing.assert_frame_equal(store.snapshot().episodes("north"), given)
    pd.testing.assert_frame_equal(given, episodes_made())
    assert store.snapshot().episodes("south").empty


def test_episodes_that_are_no_more_leave_an_empty_frame_with_the_same_columns(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.replace_episodes("north", episodes_made().iloc[:0])
    pd.testing.assert_frame_equal(store.snapshot().episodes("north"), episodes_made().iloc[:0])


def test_the_ledger_tells_exports_and_passes(tmp_path):
    store = undisturbed(tmp_path)
    assert store.exports() == [export(1, "a")]
    assert [(p.number, p.exports, p.rows) for p in store.passes()] == [(1, 1, 5)]
    assert isinstance(store.passes()[0], PassEntry)


def test_an_export_recorded_again_takes_the_place_of_its_entry(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.record_export(export(2, "a", account={"readings": 9}, made_by=2))
        assert [e.number for e in pass_.exports()] == [2]
    assert store.exports() == [export(2, "a", account={"readings": 9}, made_by=2)]


# Whole passes or nothing


def test_the_same_pass_twice_changes_nothing(tmp_path):
    store = undisturbed(tmp_path)
    before, files = store.content_hash(), part_files(store)
    undisturbed(tmp_path)
    assert store.content_hash() == before
    assert part_files(store) == files
    assert {p.made_by for p in store.snapshot().parts.values()} == {1}


def test_equal_passes_give_equal_stores(tmp_path):
    hashes = {undisturbed(tmp_path / name).content_hash() for name in ("one", "two")}
    assert len(hashes) == 1


def test_any_visible_change_changes_the_content_hash(tmp_path):
    store = undisturbed(tmp_path)
    seen = {store.content_hash()}
    with store.begin() as pass_:
        pass_.write("north", "figures-1h", "2026-02", cells(FEBRUARY, [5.5]))
    seen.add(store.content_hash())
    with store.begin() as pass_:
        pass_.record_export(export(2, "b", made_by=pass_.number))
    seen.add(store.content_hash())
    with store.begin() as pass_:
        pass_.replace_episodes("north", episodes_made().assign(worst=[70.0, np.nan]))
    seen.add(store.content_hash())
    assert len(seen) == 4


def test_a_failed_pass_leaves_what_was_there_and_no_files(tmp_path):
    store = undisturbed(tmp_path)
    before, files = store.content_hash(), part_files(store)
    with pytest.raises(ValueError, match="rows of"), store.begin() as pass_:
        _write_much_and_then_what_is_refused(pass_)
    assert store.content_hash() == before
    assert part_files(store) == files
    assert [p.number for p in store.passes()] == [1]


def _write_much_and_then_what_is_refused(pass_: Pass) -> None:
    pass_.splice("north", "cells", cells(JANUARY, [9.0]))
    pass_.replace_episodes("north", episodes_made().iloc[:1])
    pass_.write("north", "cells", "2026-03", cells(FEBRUARY, [1.0]))


def test_a_pass_reads_its_own_rows_and_a_reader_does_not(tmp_path):
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
        assert pass_.read("north", "cells")["value"].to_pylist() == [1.0, 2.0, 30.0]
        assert values(store) == [1.0, 2.0, 3.0, 4.0]
    assert values(store) == [1.0, 2.0, 30.0]


def test_a_reader_in_another_process_sees_the_old_generation_during_a_pass(tmp_path):
    store = undisturbed(tmp_path)
    script = (
        "import sys; from pathlib import Path; from ingest.ledger import Store\n"
        "s = Store(Path(sys.argv[1])); print(s.content_hash(), s.read('north', 'cells').num_rows, s.verify())"
    )
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
        before = store.content_hash()
        done = subprocess.run(
            [sys.executable, "-c", script, str(tmp_path)],
            cwd=ROOT,
            capture_output=True,
            text=True,
            check=True,
        )
    assert done.stdout.split() == [before, "4", "[]"]
    assert store.content_hash() != before


def test_a_snapshot_stays_as_it_was_until_the_pass_after_next_begins(tmp_path):
    store = undisturbed(tmp_path)
    snapshot = store.snapshot()
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
    assert snapshot.read("north", "cells")["value"].to_pylist() == [1.0, 2.0, 3.0, 4.0]
    with store.begin():
        pass
    with pytest.raises(GoneError, match=r"cells-2026-02-\w+\.parquet: is no longer there"):
        snapshot.read("north", "cells")


def test_a_question_is_asked_again_where_passes_swept_away_what_it_was_to_read(tmp_path):
    store = undisturbed(tmp_path)
    asked = []

    def question(view: Snapshot) -> list[float]:
        asked.append(view.generation)
        if len(asked) == 1:  # two passes come between the view and the reading
            for values in ([30.0], [31.0]):
                with store.begin() as pass_:
                    pass_.write("north", "cells", "2026-02", cells(FEBRUARY, values))
        return view.read("north", "cells")["value"].to_pylist()

    assert store.look(question) == [1.0, 2.0, 31.0]
    assert asked == [1, 3]


def test_a_part_that_was_lost_is_told_and_not_waited_for(tmp_path):
    store = undisturbed(tmp_path)
    store.snapshot().paths("north", "cells")[0].unlink()
    with pytest.raises(GoneError, match=r"cells-2026-01-\w+\.parquet: is no longer there"):
        store.read("north", "cells")


def test_going_back_within_a_pass_forgets_what_came_after(tmp_path):
    store = undisturbed(tmp_path)
    before, files = store.content_hash(), part_files(store)
    with store.begin() as pass_:
        view = pass_.view()
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
        pass_.go_back(view)
    assert store.content_hash() == before
    assert part_files(store) == files


@pytest.mark.parametrize("death", DEATHS)
def test_a_pass_killed_and_run_again_equals_an_undisturbed_one(tmp_path, death):
    expected = undisturbed(tmp_path / "undisturbed")
    assert killed(tmp_path / "killed", death) == -signal.SIGKILL
    store = undisturbed(tmp_path / "killed")
    assert store.content_hash() == expected.content_hash()
    assert [p.name for p in part_files(store)] == [p.name for p in part_files(expected)]
    assert store.verify() == []


@pytest.mark.parametrize(
    "death", [d for d in DEATHS if d not in ("before the ledger is made", "after the commit")]
)
def test_what_was_there_can_be_read_after_a_kill_and_the_rest_is_swept(tmp_path, death):
    store = Store(tmp_path)
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
    before = store.content_hash()
    assert killed(tmp_path, death) == -signal.SIGKILL
    assert store.content_hash() == before
    assert values(store) == [30.0]
    with store.begin():
        pass
    assert [p.name for p in part_files(store)] == [p.name for p in store.snapshot().paths("north", "cells")]


def test_the_sweep_leaves_files_that_are_not_ours(tmp_path):
    store = undisturbed(tmp_path)
    strange = [tmp_path / "north" / "notes.txt", tmp_path / "north" / "march.parquet"]
    for path in strange:
        path.write_text("not ours", encoding="utf-8")
    with store.begin():
        pass
    assert all(path.exists() for path in strange)


# One pass at a time


def test_a_second_pass_that_cannot_wait_is_told_who_runs_the_first(tmp_path):
    script = (
        "import sys; from pathlib import Path; from ingest.ledger import Store\n"
        "with Store(Path(sys.argv[1])).begin():\n    print('in', flush=True); sys.stdin.read()"
    )
    first = subprocess.Popen(
        [sys.executable, "-c", script, str(tmp_path)],
        cwd=ROOT,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    with first:
        assert first.stdout is not None
        assert first.stdout.readline() == "in\n"
        said = rf"another pass is running: process {first.pid} on \S+ since \S+ \(waited 0\.1 s\)\n  Wait"
        with pytest.raises(StoreError, match=said), Store(tmp_path).begin(wait_s=0.1):
            pass
    with Store(tmp_path).begin(wait_s=0.1) as pass_:
        assert pass_.number == 2


def test_passes_of_several_processes_follow_each_other(tmp_path):
    script = (
        "import sys; from pathlib import Path; from ingest.ledger import Store\n"
        "from tests.store_made import *\n"
        "with Store(Path(sys.argv[1])).begin() as pass_:\n"
        "    old = pass_.read('north', 'cells', columns=['value'])\n"
        "    before = old['value'].to_pylist() if old.num_columns else []\n"
        "    pass_.write('north', 'cells', '2026-02', cells(FEBRUARY, [*before, float(len(before))]))\n"
    )
    command = [sys.executable, "-c", script, str(tmp_path)]
    children = [subprocess.Popen(command, cwd=ROOT) for _ in range(4)]
    assert [child.wait(60) for child in children] == [0] * 4
    assert values(Store(tmp_path)) == [0.0, 1.0, 2.0, 3.0]
    assert [p.number for p in Store(tmp_path).passes()] == [1, 2, 3, 4]


def test_the_lock_falls_with_a_process_that_is_killed(tmp_path):
    assert killed(tmp_path, "with all parts on disk") == -signal.SIGKILL
    with Store(tmp_path).begin(wait_s=0.0) as pass_:
        assert pass_.number == 1


def test_a_pass_does_not_keep_people_from_writing_into_the_journal(tmp_path, monkeypatch):
    monkeypatch.setattr(database, "BUSY_S", 0.1)
    store = undisturbed(tmp_path)
    with store.begin() as pass_:
        pass_.write("north", "cells", "2026-02", cells(FEBRUARY, [30.0]))
        line = journal.write(tmp_path, who="A. Example", act="note", unit="north", subject="yield low")
    assert journal.lines(tmp_path) == (line,)


# Damage, strangers, later versions


def test_verify_finds_nothing_in_a_sound_store(tmp_path):
    assert undisturbed(tmp_path).verify() == []


def test_verify_is_not_misled_by_a_pass_that_sweeps_while_it_reads(tmp_path, monkeypatch):
    store = undisturbed(tmp_path)
    real, left = parts.sha256_of, [[30.0], [31.0]]

    def between(path: Path) -> str:
        coming, left[:] = left[:], []  # the passes hash what they write, too
        for values in coming:
            with store.begin() as pass_:
                pass_.write("north", "cells", "2026-02", cells(FEBRUARY, values))
        return real(path)

    monkeypatch.setattr(parts, "sha256_of", between)
    assert store.verify() == []
    assert left == []


@pytest.mark.parametrize(
    ("damage", "said"),
    [
        (lambda path: path.unlink(), "is missing"),
        (lambda path: path.write_bytes(path.read_bytes()[:-1]), "bytes where"),
        (
            lambda path: path.write_bytes(
                bytes([*path.read_bytes()[:40], path.read_bytes()[40] ^ 1]) + path.read_bytes()[41:]
            ),
            "holds other bytes than were written",
        ),
    ],
    ids=["missing", "cut short", "one bit turned"],
)
def test_verify_names_the_part_that_is_damaged(tmp_path, damage, said):
    store = undisturbed(tmp_path)
    path = store.snapshot().paths("north", "cells")[0]
    damage(path)
    (finding,) = store.verify()
    assert finding.file == f"north/{path.name}"
    assert said in finding.what
    assert finding.remedy


def test_the_ledger_names_the_hash_of_each_part(tmp_path):
    store = undisturbed(tmp_path)
    for part in store.snapshot().parts.values():
        assert sha256_of(tmp_path / part.file) == part.sha256
        assert part.file == f"{part.unit}/{part.stage}-{part.month}-{part.sha256[:12]}.parquet"


def test_reading_a_damaged_part_says_which_and_what_to_do(tmp_path):
    store = undisturbed(tmp_path)
    path = store.snapshot().paths("north", "cells")[0]
    path.write_bytes(b"PAR1 and nothing else")
    with pytest.raises(StoreError, match=rf"{path.name}: is damaged .*\n  Run 'outlet verify'"):
        store.read("north", "cells")


def test_a_folder_without_a_store_is_told_as_such(tmp_path):
    with pytest.raises(StoreError, match="there is no store here"):
        Store(tmp_path).snapshot()
    assert list(tmp_path.iterdir()) == []


def test_a_sqlite_file_of_another_program_is_refused_and_left_alone(tmp_path):
    ledger = sqlite3.connect(tmp_path / "ledger.sqlite")
    ledger.execute("CREATE TABLE theirs (x)")
    ledger.commit()
    ledger.close()
    before = (tmp_path / "ledger.sqlite").read_bytes()
    with pytest.raises(StoreError, match="is not a ledger of this program"):
        Store(tmp_path).snapshot()
    with pytest.raises(StoreError, match="is not a ledger of this program"), Store(tmp_path).begin():
        pass
    assert (tmp_path / "ledger.sqlite").read_bytes() == before


def test_a_file_that_is_no_sqlite_file_is_refused_and_left_alone(tmp_path):
    (tmp_path / "ledger.sqlite").write_text("tag;time;value\n" * 100, encoding="utf-8")
    with pytest.raises(StoreError, match="is not a ledger of this program"), Store(tmp_path).begin():
        pass
    assert (tmp_path / "ledger.sqlite").read_text(encoding="utf-8").startswith("tag;time")


def test_looking_at_a_store_needs_no_pandas():
    # pandas takes 0.35 s to import (measured), which a pass over exports need not spend.
    script = (
        "import sys, tempfile; from pathlib import Path; import numpy as np; import pyarrow as pa\n"
        "from ingest.ledger import Store\n"
        "raw = pa.py_buffer(np.array([0, 3600000000]))\n"
        "start = pa.Array.from_buffers(pa.timestamp('us', 'UTC'), 2, [None, raw])\n"
        "with tempfile.TemporaryDirectory() as name:\n"
        "    store = Store(Path(name))\n"
        "    with store.begin() as pass_:\n"
        "        pass_.splice('north', 'cells', pa.table({'start': start}), first=0)\n"
        "    assert store.read('north', 'cells', first=1).num_rows == 1\n"
        "    store.verify(), store.content_hash()\n"
        "print('pandas' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert done.stdout == "False\n"


def test_the_holder_of_the_lock_is_told_in_plain_text_beside_it(tmp_path):
    with Store(tmp_path).begin():
        told = json.loads((tmp_path / "pass.holder").read_text(encoding="utf-8"))
    assert told["pid"] == os.getpid()
    assert not (tmp_path / "pass.holder").exists()
