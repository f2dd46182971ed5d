"""A pass can end at any moment: killed, let down by the disk, at every step by which it changes the disk.

Afterwards readers see what one pass left, whole; run again the store equals the one of an undisturbed pass.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.store_made import ROOT

FORKS = pytest.mark.skipif(sys.platform != "linux", reason="forks, and counts the calls into Linux's libc")


@pytest.fixture
def work() -> Iterator[Path]:
    """A folder in memory where there is one: what dies is a process, so that a disk would only be slow."""
    memory = Path("/dev/shm")  # noqa: S108 - a folder of this test's own in it
    with tempfile.TemporaryDirectory(dir=memory if os.access(memory, os.W_OK) else None) as folder:
        yield Path(folder)


@pytest.fixture(scope="module")
def disksteps(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The library that counts steps, made by the machine's C compiler."""
    compiler = shutil.which("cc")
    if compiler is None:
        reason = "no C compiler found: install Debian's packages gcc and libc6-dev"
        if os.environ.get("CI", "").lower() in ("1", "true"):
            pytest.fail(reason)
        pytest.skip(reason)
    made = tmp_path_factory.mktemp("disksteps") / "disksteps.so"
    source = ROOT / "tests" / "disksteps.c"
    subprocess.run([compiler, "-shared", "-fPIC", "-O1", "-o", made, source, "-ldl"], check=True)
    return made


def told(module: str, *args: object, **environment: str) -> dict[str, Any]:
    """What a module of the tests writes when it is run as a process of its own."""
    done = subprocess.run(
        [sys.executable, "-m", module, *map(str, args)],
        cwd=ROOT,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1", **environment},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    answer: dict[str, Any] = json.loads(done.stdout)
    return answer


def steps_tried(disksteps: Path, work: Path, kind: str, mode: str, which: str) -> dict[str, Any]:
    return told("tests.steps_made", work, kind, mode, which, LD_PRELOAD=str(disksteps))


@FORKS
@pytest.mark.parametrize("kind", ["first pass", "next pass"])
def test_a_pass_killed_at_any_step_leaves_one_whole_state_and_run_again_the_undisturbed_one(
    disksteps, work, kind
):
    answer = steps_tried(disksteps, work, kind, "kill", "few")
    assert answer["wrong"] == []
    assert answer["after"]["missing"] == answer["after"]["findings"] == []
    assert len(answer["after"]["left"]) == (2 if kind == "next pass" else 0)  # months written anew, emptied
    # What the steps are is seen, not supposed: else a pass that escapes the counting would pass.
    steps = {step.split(" /")[0] for step in answer["steps"]}
    assert {"make", "write", "sync", "rename", "remove", "sql BEGIN IMMEDIATE", "sql COMMIT"} <= steps
    assert answer["tried"] > 80


@FORKS
def test_a_disk_that_is_full_from_any_step_on_leaves_a_store_that_can_be_read(disksteps, work):
    # The store is read while the disk is still full; no file can then be made or grow.
    assert steps_tried(disksteps, work, "next pass", "full", "few")["wrong"] == []


@FORKS
@pytest.mark.long
@pytest.mark.parametrize("kind", ["first pass", "next pass"])
@pytest.mark.parametrize("mode", ["kill", "tear", "full", "fault"])
def test_no_step_of_a_pass_can_be_killed_torn_or_fail_with_harm(disksteps, work, kind, mode):
    # "tear": half of one write reaches the disk and the process ends; "fault": one call fails with EIO.
    assert steps_tried(disksteps, work, kind, mode, "each")["wrong"] == []


@FORKS
def test_a_commit_names_only_parts_that_are_on_the_disk_with_their_names(disksteps, work):
    # POSIX: data outlasts a power cut after fsync of the file, its name after fsync of the folder.
    steps = steps_tried(disksteps, work, "first pass", "count", "none")["steps"]
    begun = [n for n, step in enumerate(steps) if step == "sql BEGIN IMMEDIATE"][-1]
    renames = [(n, step.split()[1:]) for n, step in enumerate(steps) if step.startswith("rename ")]
    assert len(renames) == 3  # two months of cells, one of figures
    for n, (draft, part) in renames:
        assert n < begun
        assert f"sync {draft}" in steps[:n]
        assert f"sync {Path(part).parent}" in steps[n:begun]
        assert f"sync {Path(part).parent.parent}" in steps[n:begun]
    committed = steps.index("sql COMMIT", begun)
    assert any(re.fullmatch(r"sync \S+-wal", step) for step in steps[committed:])


@FORKS
@pytest.mark.parametrize(
    ("days", "kills"), [(3, 25), pytest.param(20, 100, marks=pytest.mark.long)], ids=["25", "100"]
)
def test_a_pass_over_a_plant_killed_at_random_moments_harms_neither_the_store_nor_its_readers(
    work, days, kills
):
    answer = told("tests.kills_made", work, days, kills)
    assert [wrong for trial in answer["trials"] for wrong in trial["wrong"]] == []
    assert len(answer["trials"]) == kills
    assert sum(not trial["ended"] for trial in answer["trials"]) >= 0.8 * kills
    assert min(trial["looks"] for trial in answer["trials"]) >= 1
