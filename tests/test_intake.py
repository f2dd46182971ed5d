"""Taking exports in: each content once, every reading in one place of one account, whatever happens."""

from __future__ import annotations

import gzip
import os
import signal
import subprocess
import sys
import tempfile
from dataclasses import replace
from datetime import timedelta
from itertools import permutations
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest import archive
from ingest.errors import ExportError, StoreError
from ingest.intake import IntakeResult, take_in
from ingest.ledger import Store
from ingest.readings import Readings, read_months
from ingest.unit import ExportRules, Unit
from tests.units_made import made_instrument, made_unit

ROOT = Path(__file__).resolve().parent.parent
NOW = timedelta(0)  # no waiting for files to settle
MINUTE = 60_000_000  # microseconds
MARCH = 1_772_323_200_000_000  # 2026-03-01T00:00Z by `date -u -d 2026-03-01 +%s`
TAGS = ("FI-1.PV", "FI-2.PV")


def unit_of(*names: str, key: str = "made", **rules: object) -> Unit:
    """A unit that asks for one tag per name, FI-1 -> FI-1.PV."""
    exports = replace(ExportRules("UTC", ("No Data",), None), **rules)
    return made_unit(*(made_instrument(name) for name in names), key=key, exports=exports)


BOTH = unit_of("FI-1", "FI-2")


def wide(path: Path, rows: dict[str, tuple[object, object]], tags: tuple[str, str] = TAGS) -> Path:
    """A wide export: time as text -> the readings of two tags."""
    lines = [f"time,{tags[0]},{tags[1]}", *(f"{time},{a},{b}" for time, (a, b) in rows.items())]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def parquet(path: Path, first_us: int, values: np.ndarray, tags: tuple[str, ...] = TAGS) -> Path:
    """A wide Parquet export: one row a minute, one column of `values` per tag."""
    time = pa.array(first_us + MINUTE * np.arange(len(values))).cast(pa.timestamp("us", "UTC"))
    pq.write_table(pa.table({"time": time, **{t: values[:, i] for i, t in enumerate(tags)}}), path)
    return path


def take(store: Store, *paths: Path, units: tuple[Unit, ...] = (BOTH,), **options: object) -> IntakeResult:
    """One pass."""
    with store.begin() as pass_:
        return take_in(pass_, units, paths, settle=NOW, **options)


def held(store: Store, *tags: str) -> Readings:
    """All readings of the archive."""
    paths = store.snapshot().paths("site", "readings")
    return read_months(paths, tags or TAGS, 0, 2 * MARCH)


def values(store: Store, tag: str) -> list[float]:
    return held(store, tag)[tag].value.tolist() if tag in held(store, tag) else []


def statuses(result: IntakeResult) -> dict[str, str]:
    return {outcome.name: outcome.status for outcome in result.outcomes}


def must_add_up(store: Store) -> None:
    """Every reading is in one place of its export's account, and the accepted ones are the archive."""
    accounts = [export.account for export in store.exports() if export.status == "taken"]
    for a in accounts:
        rejected = sum(count for _, count in a["rejections"])
        assert a["readings"] == a["accepted"] + a["superseded"] + a["duplicates"] + rejected + a["unasked"]
    parts = store.snapshot().parts.values()
    assert sum(a["accepted"] for a in accounts) == sum(p.rows for p in parts if p.stage == "readings")


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store(tmp_path / "store")


@pytest.fixture
def day(tmp_path: Path) -> Path:
    """Three rows over the end of February, one of them with a word for nothing."""
    rows = {
        "2026-02-28T23:50:00Z": (1.5, 2.5),
        "2026-03-01T00:00:00Z": ("No Data", 3.5),
        "2026-03-01T00:10:00Z": (1.7, 4.5),
    }
    return wide(tmp_path / "day.csv", rows)


# What is taken in


def test_readings_lie_in_the_month_of_their_time_utc(store, day):
    result = take(store, day)
    assert statuses(result) == {"day.csv": "taken"}
    assert store.snapshot().months("site", "readings") == ["2026-02", "2026-03"]
    series = held(store)["FI-1.PV"]
    np.testing.assert_array_equal(series.time, MARCH + np.array([-10, 0, 10]) * MINUTE)
    np.testing.assert_array_equal(series.value, [1.5, np.nan, 1.7])
    assert series.quality.tolist()[1] == 0  # bad
    assert series.row.tolist() == [2, 3, 4]
    assert set(series.source.tolist()) == {store.exports()[0].number}
    must_add_up(store)


def test_the_spans_that_changed_are_told_for_each_unit(store, tmp_path):
    rows = {"2026-03-01T00:00:00Z": (1, ""), "2026-03-01T00:10:00Z": (2, ""), "2026-03-05T12:00:00Z": (3, "")}
    file = wide(tmp_path / "a.csv", rows, tags=("FI-1.PV", "FI-9.PV"))
    units = (unit_of("FI-1", key="north"), unit_of("FI-2", key="south"))
    result = take(store, file, units=units)
    far = MARCH + 4 * 1440 * MINUTE + 720 * MINUTE
    assert result.touched == {"north": ((MARCH, MARCH + 10 * MINUTE + 1), (far, far + 1)), "south": ()}


def test_units_of_a_site_share_one_archive(store, day):
    take(store, day, units=(unit_of("FI-1", key="north"), unit_of("FI-2", key="south")))
    assert sorted(held(store)) == ["FI-1.PV", "FI-2.PV"]
    assert store.exports()[0].account["unasked"] == 0
    must_add_up(store)


def test_tags_nobody_asked_for_are_counted_and_not_kept(store, day):
    take(store, day, units=(unit_of("FI-1"),))
    account = store.exports()[0].account
    assert (account["readings"], account["accepted"], account["unasked"]) == (6, 3, 3)
    assert account["unasked_tags"] == [["FI-2.PV", 3]]
    assert list(held(store)) == ["FI-1.PV"]


def test_a_folder_means_its_exports(store, day, tmp_path):
    (tmp_path / "notes.md").write_text("not an export", encoding="utf-8")
    with gzip.open(tmp_path / "b.csv.gz", "wt") as file:
        file.write("time,FI-1.PV,FI-2.PV\n2026-03-02T00:00:00Z,1,2\n")
    assert statuses(take(store, tmp_path)) == {"b.csv.gz": "taken", "day.csv": "taken"}


def test_progress_ends_at_the_bytes_of_all_files(store, tmp_path):
    files = [wide(tmp_path / f"{n}.csv", {f"2026-03-0{n}T00:00:00Z": (n, n)}) for n in (1, 2)]
    told: list[tuple[int, int]] = []
    take(store, *files, progress=lambda done, total: told.append((done, total)))
    sizes = [file.stat().st_size for file in files]
    assert list(dict.fromkeys(told)) == [(done, sum(sizes)) for done in (0, sizes[0], sum(sizes))]


# The same again


def test_the_same_file_twice_changes_nothing(store, day):
    take(store, day)
    before = store.content_hash()
    result = take(store, day)
    assert statuses(result) == {"day.csv": "taken already"}
    assert result.outcomes[0].words.startswith("was taken in on 20")
    assert result.touched == {"made": ()}
    assert store.content_hash() == before


def test_the_same_content_under_another_name_changes_nothing(store, day, tmp_path):
    copy = tmp_path / "copy.csv"
    copy.write_bytes(day.read_bytes())
    result = take(store, day, copy)
    assert statuses(result) == {"copy.csv": "taken", "day.csv": "taken already"}
    assert result.outcomes[1].words == "has the same content as copy.csv"
    assert len(store.exports()) == 1


def test_readings_that_another_export_gave_already_are_duplicates(store, day, tmp_path):
    longer = tmp_path / "longer.csv"
    longer.write_text(day.read_text(encoding="utf-8") + "2026-03-01T00:20:00Z,1.8,5.5\n", encoding="utf-8")
    take(store, day)
    result = take(store, longer)
    first, second = (export.account for export in store.exports())
    assert (first["accepted"], first["superseded"]) == (6, 0)
    assert (second["accepted"], second["duplicates"]) == (2, 6)
    assert result.touched == {"made": ((MARCH + 20 * MINUTE, MARCH + 20 * MINUTE + 1),)}
    must_add_up(store)


def test_a_month_that_nothing_changed_in_keeps_its_file(store, day, tmp_path):
    take(store, day)
    before = store.snapshot().parts
    take(store, wide(tmp_path / "next.csv", {"2026-03-02T00:00:00Z": (1, 2)}))
    after = store.snapshot().parts
    changed = {key for key in after if after[key] != before.get(key)}
    assert changed == {("site", "readings", "2026-03")}


# Corrections


def test_a_correction_wins_and_the_loser_is_counted_where_it_came_from(store, day, tmp_path):
    take(store, day)
    fix = wide(tmp_path / "fix.csv", {"2026-03-01T00:00:00Z": (1.6, 3.5)})
    result = take(store, fix)
    assert values(store, "FI-1.PV") == [1.5, 1.6, 1.7]
    first, second = (export.account for export in store.exports())
    # FI-1 at midnight was 'No Data' and is now 1.6; FI-2 says the same again.
    assert (first["accepted"], first["superseded"]) == (5, 1)
    assert (second["accepted"], second["duplicates"], second["superseded"]) == (1, 1, 0)
    assert result.outcomes[0].account is not None
    assert result.outcomes[0].account.accepted == 1
    assert result.touched == {"made": ((MARCH, MARCH + 1),)}
    must_add_up(store)


def test_of_two_rows_at_one_time_in_one_file_the_later_wins(store, tmp_path):
    file = tmp_path / "twice.csv"
    lines = ["time,FI-1.PV,FI-2.PV", *(f"2026-03-01T00:00:00Z,{a},7" for a in (1, 2))]
    file.write_text("\n".join(lines), encoding="utf-8")
    take(store, file)
    assert values(store, "FI-1.PV") == [2.0]
    account = store.exports()[0].account
    assert (account["accepted"], account["superseded"], account["duplicates"]) == (2, 1, 1)
    must_add_up(store)


def test_within_a_pass_exports_follow_their_names_not_the_order_they_are_given_in(tmp_path):
    files = [wide(tmp_path / f"{n}.csv", {"2026-03-01T00:00:00Z": (n, n)}) for n in (1, 2, 3)]
    stores = []
    for place, order in enumerate(permutations(files)):
        stores.append(Store(tmp_path / f"store{place}"))
        take(stores[-1], *order)
        must_add_up(stores[-1])
    assert values(stores[0], "FI-1.PV") == [3.0]
    assert len({store.content_hash() for store in stores}) == 1


def test_without_conflicts_the_order_of_passes_does_not_matter(tmp_path):
    files = [wide(tmp_path / f"{n}.csv", {f"2026-03-01T00:0{n}:00Z": (n, n)}) for n in (1, 2, 3)]
    found = []
    for place, order in enumerate(permutations(files)):
        store = Store(tmp_path / f"store{place}")
        for file in order:
            take(store, file)
        names = {export.number: export.name for export in store.exports()}
        series = held(store)["FI-1.PV"]
        sources = [names[number] for number in series.source.tolist()]
        found.append((series.time.tolist(), series.value.tolist(), series.row.tolist(), sources))
    assert all(one == found[0] for one in found)


# Files that cannot be read, or not yet


def test_a_file_that_cannot_be_read_is_set_aside_and_the_others_go_on(store, day, tmp_path):
    bad = tmp_path / "bad.parquet"
    bad.write_bytes(b"PAR1 and nothing else")
    result = take(store, bad, day)
    assert statuses(result) == {"bad.parquet": "set aside", "day.csv": "taken"}
    entry = store.exports()[0]
    assert (entry.name, entry.status) == ("bad.parquet", "set aside")
    assert entry.error.startswith("bad.parquet: the Parquet file is damaged")
    assert len(entry.error.splitlines()) == 2
    must_add_up(store)


def test_what_was_set_aside_is_not_tried_again_unless_it_changed(store, tmp_path):
    file = tmp_path / "a.csv"
    file.write_bytes(b"")
    assert statuses(take(store, file)) == {"a.csv": "set aside"}
    before = store.content_hash()
    assert statuses(take(store, file)) == {"a.csv": "set aside"}
    assert store.content_hash() == before
    wide(file, {"2026-03-01T00:00:00Z": (1, 2)})
    assert statuses(take(store, file)) == {"a.csv": "taken"}
    assert [export.status for export in store.exports()] == ["set aside", "taken"]


def test_what_was_set_aside_is_tried_again_when_the_unit_file_was_mended(store, tmp_path):
    file = wide(tmp_path / "a.csv", {"2026-03-01 01:00:00": (1, 2), "2026-03-01 01:01:00": (1, 2)})
    unknown = unit_of("FI-1", "FI-2", time_zone="Nowhere/Atall")
    assert statuses(take(store, file, units=(unknown,))) == {"a.csv": "set aside"}
    mended = unit_of("FI-1", "FI-2", time_zone="Europe/Berlin")  # one hour ahead of UTC in winter
    assert statuses(take(store, file, units=(mended,))) == {"a.csv": "taken"}
    assert [export.status for export in store.exports()] == ["taken"]
    assert held(store)["FI-1.PV"].time[0] == MARCH


def broken_late(path: Path) -> Path:
    """A Parquet export of four months whose last block of values cannot be read."""
    table = pa.table(
        {"time": MARCH + MINUTE * np.arange(180_000), "x": np.random.default_rng(1).random(180_000)}
    )
    time = table["time"].cast(pa.timestamp("us", "UTC"))
    table = pa.table({"time": time, "FI-1.PV": table["x"], "FI-2.PV": table["x"]})
    pq.write_table(table, path, row_group_size=20_000)
    place = pq.read_metadata(path).row_group(8).column(2).data_page_offset
    raw = bytearray(path.read_bytes())
    raw[place : place + 64] = b"\xff" * 64
    path.write_bytes(raw)
    return path


@pytest.mark.parametrize("budget", [1, 100_000, 4_000_000])
def test_an_export_that_fails_late_leaves_no_reading_behind(store, day, tmp_path, monkeypatch, budget):
    # With a small budget its first months are parts on disk before the damage is met.
    monkeypatch.setattr(archive, "BUDGET", budget)
    late = wide(tmp_path / "late.csv", {"2026-03-01T00:00:00Z": (8, 9)})
    result = take(store, day, broken_late(tmp_path / "early.parquet"), late)
    expected = {"day.csv": "taken", "early.parquet": "set aside", "late.csv": "taken"}
    assert statuses(result) == expected
    assert values(store, "FI-2.PV") == [2.5, 9.0, 4.5]
    assert result.touched == {"made": ((MARCH - 10 * MINUTE, MARCH + 10 * MINUTE + 1),)}
    assert len(list(store.folder.glob("site/*"))) == len(store.snapshot().parts) == 2
    must_add_up(store)


def test_a_file_changed_a_moment_ago_is_left_for_the_next_pass(store, day):
    with store.begin() as pass_:
        result = take_in(pass_, [BOTH], [day], settle=timedelta(minutes=1))
    assert statuses(result) == {"day.csv": "left for the next pass"}
    assert store.exports() == []
    os.utime(day, (1_772_000_000, 1_772_000_000))
    with store.begin() as pass_:
        assert statuses(take_in(pass_, [BOTH], [day], settle=timedelta(minutes=1))) == {"day.csv": "taken"}


def test_a_file_that_grows_while_it_is_read_is_left_and_taken_in_whole_next_time(store, day, tmp_path):
    growing = wide(tmp_path / "a.csv", {"2026-03-04T00:00:00Z": (1, 2)})

    def grow(*_: int) -> None:  # told after day.csv: a.csv has been looked at and is the next to be read
        with growing.open("a", encoding="utf-8") as file:
            file.write("2026-03-04T00:01:00Z,3,4\n")

    first = day.rename(tmp_path / "0.csv")
    assert statuses(take(store, first, growing, progress=grow)) == {
        "0.csv": "taken",
        "a.csv": "left for the next pass",
    }
    assert values(store, "FI-1.PV")[3:] == []
    take(store, first, growing)
    assert values(store, "FI-1.PV")[3:] == [1.0, 3.0]
    must_add_up(store)


def test_a_name_that_does_not_exist_is_an_error_before_anything_is_read(store, day, tmp_path):
    with pytest.raises(ExportError, match=r"march\.csv: there is no such file or folder\n  Check the name"):
        take(store, day, tmp_path / "march.csv")
    assert store.exports() == []


# More tags than before


def test_tags_asked_for_later_are_taken_from_exports_that_are_still_there(store, day, tmp_path):
    take(store, day, units=(unit_of("FI-1"),))
    result = take(store, day, units=(BOTH,))
    assert statuses(result) == {"day.csv": "taken"}
    assert result.touched["made"][0][0] == MARCH - 10 * MINUTE
    at_once = Store(tmp_path / "at once")
    take(at_once, day)
    assert store.content_hash() == at_once.content_hash()


def test_tags_asked_for_later_end_up_as_if_they_had_always_been_asked_for(tmp_path):
    # Three exports disagree about one time; the first and the last are given again in the wrong order.
    files = [wide(tmp_path / f"{n}.csv", {"2026-03-01T00:00:00Z": (n, 10 * (n // 2))}) for n in (1, 2, 3)]
    always, later = Store(tmp_path / "always"), Store(tmp_path / "later")
    for file in files:
        take(always, file)
        take(later, file, units=(unit_of("FI-1"),))
    for file in (files[2], files[0], files[1]):
        take(later, file)
    for tag in TAGS:
        one, two = held(always)[tag], held(later)[tag]
        assert (one.value.tolist(), one.source.tolist()) == (two.value.tolist(), two.source.tolist())
    must_add_up(always)
    must_add_up(later)


def test_an_export_that_is_gone_and_holds_what_is_asked_for_now_is_named(store, day):
    take(store, day, units=(unit_of("FI-1"),))
    day.unlink()
    result = take(store, units=(BOTH,))
    assert result.notes == ("day.csv: holds tags asked for only since; give it to a pass again",)
    assert take(store, units=(unit_of("FI-1", "FI-7"),)).notes == ()


def test_other_rules_for_exports_than_those_an_export_was_read_by_are_told(store, day):
    take(store, day)
    result = take(store, day, units=(unit_of("FI-1", "FI-2", time_zone="Europe/Berlin"),))
    assert statuses(result) == {"day.csv": "taken already"}
    assert result.notes == (
        "day.csv: was read by other rules under [exports] than those stated now;"
        " to read all alike, take every export into a new store",
    )


def test_units_that_would_read_one_export_in_two_ways_are_refused(store, day):
    units = (unit_of("FI-1", key="north"), unit_of("FI-2", key="south", time_zone="Europe/Berlin"))
    says = r"exports\.time_zone is 'UTC' in north but 'Europe/Berlin' in south"
    with pytest.raises(StoreError, match=says):
        take(store, day, units=units)


def test_a_unit_cannot_take_the_archives_place(store, day):
    with pytest.raises(StoreError, match="unit site: the store keeps its archive by that name"):
        take(store, day, units=(unit_of("FI-1", key="site"),))


# Nothing depends on how much waits in memory, nor on being killed


@pytest.fixture
def months(tmp_path: Path) -> list[Path]:
    """Two exports of 40 days, minute by minute, that overlap by 10 days and disagree here and there."""
    first, second = np.random.default_rng(7).integers(0, 3, (2, 57_600, 2)).astype(float)
    second[:14_400] = first[-14_400:]
    second[:14_400:97] += 1.0
    return [
        parquet(tmp_path / "first.parquet", MARCH, first),
        parquet(tmp_path / "second.parquet", MARCH + 43_200 * MINUTE, second),
    ]


@pytest.mark.parametrize("budget", [1, 50_000, 150_000])
def test_the_store_does_not_depend_on_how_many_readings_wait_in_memory(tmp_path, months, monkeypatch, budget):
    roomy, narrow = Store(tmp_path / "roomy"), Store(tmp_path / "narrow")
    expected = take(roomy, *months)
    monkeypatch.setattr(archive, "BUDGET", budget)
    assert take(narrow, *months) == expected
    assert narrow.content_hash() == roomy.content_hash()
    assert len(list(narrow.folder.glob("site/*"))) == len(narrow.snapshot().parts)
    must_add_up(narrow)


def test_counts_of_an_overlap_agree_with_arithmetic(store, months):
    take(store, *months)
    first, second = (export.account for export in store.exports())
    # 14,400 rows overlap; each 97th differs: 149 rows x 2 tags win over the first export, the rest repeat it.
    assert (first["superseded"], first["accepted"]) == (298, 115_200 - 298)
    assert (second["duplicates"], second["accepted"]) == (28_800 - 298, 115_200 - 28_800 + 298)
    must_add_up(store)


EXPORTS = st.lists(
    st.lists(st.tuples(st.integers(0, 8), st.sampled_from([1.0, 2.0])), min_size=1, max_size=8),
    min_size=1,
    max_size=5,
)


@given(exports=EXPORTS, together=st.booleans())
@settings(max_examples=25, deadline=None)
def test_the_last_word_on_each_time_is_what_the_archive_holds(exports, together):
    # The law: reading all rows of all files one after the other, the last one on a time stays.
    with tempfile.TemporaryDirectory() as name:
        store, files = Store(Path(name) / "store"), []
        for number, rows in enumerate(exports):
            files.append(Path(name) / f"{number}.csv")
            lines = [f"2026-03-01T00:0{minute}:00Z,FI-1.PV,{value}" for minute, value in rows]
            comment = f"2026-03-02T00:00:{number:02}Z,FI-9.PV,0"  # no two files alike
            files[-1].write_text("\n".join(["time,tag,value", *lines, comment]), encoding="utf-8")
        for group in [files] if together else [[file] for file in files]:
            take(store, *group)
        expected = {MARCH + minute * MINUTE: value for rows in exports for minute, value in rows}
        series = held(store)["FI-1.PV"]
        assert dict(zip(series.time.tolist(), series.value.tolist(), strict=True)) == expected
        must_add_up(store)


DEATHS = {
    "while the first month is written": "_die_at('os.rename', 1)",
    "while the third month is written": "_die_at('os.rename', 3)",
    "with an export half read": "_die_after(archive.Archive, 'add')",
    "with all months written": "_die_after(archive.Archive, 'finish')",
    "inside the transaction": "_die_after(store_made.records, 'write_exports')",
    "after the commit": "_die_after(store_made.passes.Pass, '_commit')",
}


@pytest.mark.parametrize("death", DEATHS)
def test_an_intake_killed_and_run_again_equals_an_undisturbed_one(tmp_path, months, death):
    script = (
        "import sys; from pathlib import Path; from ingest import archive; from tests import store_made\n"
        "from tests.store_made import _die_after, _die_at; from tests.test_intake import Store, take\n"
        f"archive.BUDGET = 60_000\n{DEATHS[death]}\n"
        "take(Store(Path(sys.argv[1])), *map(Path, sys.argv[2:]))\n"
    )
    disturbed, calm = Store(tmp_path / "disturbed"), Store(tmp_path / "calm")
    command = [sys.executable, "-c", script, str(disturbed.folder), *map(str, months)]
    assert subprocess.run(command, cwd=ROOT, check=False).returncode == -signal.SIGKILL
    take(disturbed, *months)
    take(calm, *months)
    assert disturbed.content_hash() == calm.content_hash()
    assert len(list(disturbed.folder.glob("site/*"))) == len(calm.snapshot().parts)
    assert disturbed.verify() == []


def test_two_intakes_at_once_take_each_export_once(tmp_path, months):
    script = (
        "import sys; from pathlib import Path; from tests.test_intake import Store, take\n"
        "result = take(Store(Path(sys.argv[1])), *map(Path, sys.argv[2:]))\n"
        "print(*(outcome.status for outcome in result.outcomes), sep='; ')\n"
    )
    folder = tmp_path / "shared"
    command = [sys.executable, "-c", script, str(folder), *map(str, months)]
    children = [subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, text=True) for _ in range(2)]
    said = sorted(child.communicate(timeout=120)[0].strip() for child in children)
    assert said == ["taken already; taken already", "taken; taken"]
    take(Store(tmp_path / "alone"), *months)
    assert Store(folder).content_hash() == Store(tmp_path / "alone").content_hash()
