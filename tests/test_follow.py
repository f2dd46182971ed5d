"""Following folders, with the real process: nothing half, nothing twice, whatever comes between."""

from __future__ import annotations

import json
import os
import resource
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path

import pytest

from demo_data import exports
from ingest import passes
from ingest.ledger import Store
from ingest.unitfile import load
from monitor.follow import Arrivals, listing
from monitor.run import run_pass
from tests.source import ROOT
from tests.test_cli import ENVIRONMENT, UNIT_FILE

NOW = timedelta(0)


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """Exports of ten days, in three dialects."""
    return list(exports.make(tmp_path_factory.mktemp("plant"), days=10).exports)


@dataclass
class Running:
    """A follower in a process of its own; what it said so far is in two files."""

    process: subprocess.Popen[bytes]
    folder: Path

    @property
    def passes(self) -> list[dict[str, object]]:
        return [json.loads(line) for line in (self.folder / "out").read_text().splitlines()]

    @property
    def warnings(self) -> str:
        return (self.folder / "err").read_text()

    def until(self, holds: Callable[[], object], seconds: float = 60) -> None:
        end = time.monotonic() + seconds
        while not holds():
            assert self.process.poll() is None, self.warnings
            assert time.monotonic() < end, self.warnings
            time.sleep(0.02)

    def stop(self, how: signal.Signals = signal.SIGTERM) -> tuple[int, float]:
        """Exit code, and how long the end took [s]."""
        begun = time.monotonic()
        self.process.send_signal(how)
        return self.process.wait(timeout=20), time.monotonic() - begun


@contextmanager
def following(folder: Path, *words: str | Path) -> Iterator[Running]:
    """`outlet follow` with a short rest, into `store`, from `in` unless told otherwise."""
    command = [sys.executable, "-m", "monitor", "follow", "--store", "store", "--every", "0.1"]
    command += ["--settle", "0.5", "--json", *map(str, words or ("--unit", UNIT_FILE, "in"))]
    with (folder / "out").open("wb") as out, (folder / "err").open("wb") as err:
        process = subprocess.Popen(command, cwd=folder, env=ENVIRONMENT, stdout=out, stderr=err)
        try:
            yield Running(process, folder)
        finally:
            process.kill()
            process.wait()


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "in").mkdir()
    return tmp_path


def test_a_file_is_new_when_it_was_the_same_at_every_look_for_so_long():
    place, path = Arrivals(10.0), Path("march.csv")
    for now_s, size in ((0.0, 1), (6.0, 2), (12.0, 3), (21.9, 3)):  # at rest since 12 s
        place.see({path: (size, 0, 0)}, now_s)
        assert place.new(now_s) == []
    place.see({path: (3, 0, 0)}, 22.0)
    assert place.new(22.0) == [path]
    place.settle([path], set(), 22.0)
    assert place.new(99.0) == []
    place.see({path: (3, 1, 0)}, 100.0)  # written again with as many bytes
    assert place.new(109.9) == []
    assert place.new(110.0) == [path]


def test_a_file_that_a_pass_left_is_tried_again_later_and_later():
    place, path = Arrivals(10.0), Path("march.csv")
    place.see({path: (1, 0, 0)}, 0.0)
    tried = []
    for now_s in range(1000):
        if place.new(float(now_s)):
            tried.append(now_s)
            place.settle([path], {"march.csv"}, float(now_s))
    # by hand: pauses of 10, 20, 40, 80, 160 and then of 300 s at most
    assert tried == [10, 20, 40, 80, 160, 320, 620, 920]


def test_only_exports_are_listed_and_none_is_opened(folder: Path):
    for name in ("b.CSV", "a.parquet", "note.md", ".hidden"):
        (folder / "in" / name).write_bytes(b"")
    os.mkfifo(folder / "in" / "pipe.csv")  # to open it would block
    (folder / "in" / "folder.csv").mkdir()
    assert [path.name for path in listing(folder / "in")] == ["a.parquet", "b.CSV", "pipe.csv"]


def test_a_file_that_is_being_written_is_not_taken_half(folder: Path, plant: list[Path]):
    whole = plant[0].read_bytes()
    with following(folder) as running, (folder / "in" / plant[0].name).open("wb") as file:
        for begin in range(0, len(whole), len(whole) // 6 + 1):
            file.write(whole[begin : begin + len(whole) // 6 + 1])
            file.flush()
            time.sleep(0.3)
        running.until(lambda: running.passes and running.passes[-1]["exports"])
        (taken,) = running.passes[-1]["exports"]
        # law: a pass over the whole file takes in as much
        units = [load(UNIT_FILE)]
        at_once = run_pass(units, folder / "whole", plant[:1], progress=lambda *_: None, settle=NOW)
        assert taken["account"]["accepted"] == at_once.exports[0].account.accepted
        assert len(Store(folder / "store").exports()) == 1
        assert running.warnings == ""


def parts_on_disk(store: Path) -> set[str]:
    return {path.relative_to(store).as_posix() for path in store.rglob("*") if path.suffix == ".parquet"}


def test_a_pass_that_is_stopped_in_its_middle_leaves_nothing_and_the_next_one_all(folder: Path):
    # Thirty days, so that more than a second of the pass is left once its readings are written.
    plant = exports.make(folder / "plant", days=30).exports
    for path in plant:
        shutil.copy2(path, folder / "in")
    store = folder / "store"
    for begun in ("site", "site/readings-*.parquet"):  # the archive is being written; is written
        with following(folder) as running:
            running.until(lambda begun=begun: any(store.glob(begun)))
            code, took_s = running.stop()
            assert (code, took_s < 2) == (0, True)
            assert running.warnings == "Stopped. The store holds the last pass that was finished.\n"
            assert running.passes == []
        assert Store(store).exports() == []
        assert parts_on_disk(store) == set()
    with following(folder) as running:
        running.until(lambda: running.passes)
        running.stop()
    run_pass([load(UNIT_FILE)], folder / "undisturbed", plant, progress=lambda *_: None, settle=NOW)
    assert Store(store).content_hash() == Store(folder / "undisturbed").content_hash()
    assert Store(store).verify() == []


def test_ctrl_c_ends_it_as_it_ends_every_command(folder: Path):
    with following(folder) as running:
        running.until(lambda: running.passes)
        code, took_s = running.stop(signal.SIGINT)
        assert (code, took_s < 2) == (130, True)
        assert running.warnings.strip() == "Stopped. The store holds the last pass that was finished."


def test_whatever_comes_between_is_told_once_and_then_it_goes_on(folder: Path, plant: list[Path]):
    unit_file = folder / "demo.toml"
    shutil.copy(UNIT_FILE, unit_file)
    arriving, away = folder / "in", folder / "away"
    with following(folder, "--unit", unit_file, "in") as running:
        running.until(lambda: running.passes)

        # a file that is no export
        (arriving / "broken.csv").write_text("no time here\n1\n", encoding="utf-8")
        running.until(lambda: "broken.csv" in running.warnings)

        # the share goes away and comes back
        arriving.rename(away)
        running.until(lambda: "in: No such file or directory" in running.warnings)
        time.sleep(0.5)
        away.rename(arriving)
        running.until(lambda: "in: is there again" in running.warnings)

        # no room: no file may grow beyond 150 kB
        before = len(running.passes)
        resource.prlimit(running.process.pid, resource.RLIMIT_FSIZE, (150_000, resource.RLIM_INFINITY))
        shutil.copy(plant[0], arriving)
        running.until(lambda: "nothing was taken in: File too large" in running.warnings)
        assert len(running.passes) == before
        resource.prlimit(
            running.process.pid, resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY)
        )
        running.until(lambda: len(running.passes) > before)
        assert [one["status"] for one in running.passes[-1]["exports"]] == ["taken"]

        # another pass holds the store
        before = len(running.passes)
        with Store(folder / "store").begin():
            shutil.copy(plant[0], arriving / "again.csv")
            time.sleep(1.5)
            assert len(running.passes) == before
        running.until(lambda: len(running.passes) > before)
        assert [one["status"] for one in running.passes[-1]["exports"]] == ["taken already"]

        # a unit file is spoilt and mended; meanwhile the unit is used as it was
        good = unit_file.read_text(encoding="utf-8")
        unit_file.write_text(good.replace("deadband", "deadbnd", 1), encoding="utf-8")
        running.until(lambda: "the unit is used as it was last read" in running.warnings)
        before = len(running.passes)
        shutil.copy(plant[1], arriving)
        running.until(lambda: len(running.passes) > before)
        unit_file.write_text(good.replace('cell = "10min"', 'cell = "20min"'), encoding="utf-8")
        running.until(lambda: len(running.passes) > before + 1)
        # all of the record is worked out anew: half the cells of ten days that two exports reach
        assert running.passes[-1]["units"][0]["cells"] > 72 * 3
        time.sleep(1)
        assert len(running.passes) == before + 2
        assert running.stop()[0] == 0
        told = running.warnings
        # The broken file is told when it comes, and when the unit file asks for it anew.
        for words, count in (("broken.csv", 2), ("in: No such", 1), ("too large", 1), ("deadbnd", 1)):
            assert told.count(words) == count, told
    assert {e.name for e in Store(folder / "store").exports()} == {
        "broken.csv", plant[0].name, plant[1].name,
    }  # fmt: skip


def test_a_restart_takes_nothing_in_twice(folder: Path, plant: list[Path]):
    shutil.copy(plant[0], folder / "in")
    store, hashes = Store(folder / "store"), []
    for _ in range(2):
        with following(folder) as running:
            running.until(lambda: running.passes)
            assert running.stop()[0] == 0
        hashes.append(store.content_hash())
    assert hashes[0] == hashes[1]
    assert running.passes[0]["exports"][0]["status"] == "taken already"


def test_a_unit_file_that_is_faulty_at_the_start_is_told_in_full_and_ends_it(folder: Path):
    (folder / "bad.toml").write_text("[unit]\nname = 3\n", encoding="utf-8")
    with following(folder, "--unit", "bad.toml", "in") as running:
        assert running.process.wait(timeout=20) == 2
        assert "bad.toml" in running.warnings
        assert "Traceback" not in running.warnings


def test_an_interrupt_right_after_the_commit_loses_no_part(folder: Path, plant: list[Path], monkeypatch):
    real = passes.Pass._commit

    def interrupted(self: passes.Pass) -> None:
        real(self)
        raise KeyboardInterrupt

    monkeypatch.setattr(passes.Pass, "_commit", interrupted)
    with pytest.raises(KeyboardInterrupt, match=r"^$"):
        run_pass([load(UNIT_FILE)], folder / "store", plant[:1], progress=lambda *_: None, settle=NOW)
    monkeypatch.undo()
    store = Store(folder / "store")
    assert [one.name for one in store.exports()] == [plant[0].name]
    assert store.verify() == []


MEMORY = """
import gc, sys
from datetime import timedelta
from pathlib import Path
from monitor.follow import Follower

folder = Path(sys.argv[1])
told = []
follower = Follower([folder / "unit.toml"], folder / "store", [folder / "in"], settle=timedelta(0),
                    tell=lambda result, zone: told.append(result.number), warn=print)
head, *rows = Path(sys.argv[2]).read_text().splitlines()[:300]
for number in range(60):
    # the same hours told again, each time a little otherwise, so that the record stays as long as it is
    columns = (row.split(",", 2) for row in rows[120:])
    told_again = [f"{time},{5600 + number},{others}" for time, _, others in columns]
    (folder / "in" / "again.csv").write_text("\\n".join([head, *told_again]) + "\\n")
    follower.look(float(number))
    if number in (9, 59):
        gc.collect()
        pages = int(Path("/proc/self/statm").read_text().split()[1])
        print(len(told), pages * 4096)
"""


def test_memory_does_not_grow_with_the_passes(folder: Path, plant: list[Path]):
    shutil.copy(UNIT_FILE, folder / "unit.toml")
    done = subprocess.run(
        [sys.executable, "-c", MEMORY, folder, plant[0]],
        cwd=ROOT, env=ENVIRONMENT, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.stderr == ""
    (first, early), (last, late) = (map(int, line.split()) for line in done.stdout.splitlines())
    assert (first, last) == (10, 60)
    assert late - early < 10e6, f"{(late - early) / 1e6:.1f} MB in 50 passes"
