"""The command line as a person meets it: exit codes, two-line errors, JSON, real files."""

from __future__ import annotations

import json
import os
import re
import signal
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from datetime import timedelta
from pathlib import Path

import pytest

from demo_data.exports import UNIT_FILE
from ingest.ledger import Store
from monitor.layout import figure_stage
from monitor.progress import line
from tests.source import ROOT

ENVIRONMENT = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1", "NO_COLOR": "1"}


def outlet(*words: str | Path, folder: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "monitor", *(str(word) for word in words)]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False, env=ENVIRONMENT)


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, object]]:
    """A folder in which `outlet demo` was run, and what it said."""
    folder = tmp_path_factory.mktemp("plant")
    done = outlet("demo", "--no-page", "--days", "21", "--json", folder=folder)
    assert done.returncode == 0, done.stderr
    return folder, json.loads(done.stdout)


def test_the_demo_tells_in_json_what_became_of_every_export_and_unit(plant: tuple[Path, dict[str, object]]):
    _, said = plant
    assert set(said) == {"number", "exports", "units", "notes", "processor_s"}
    assert [one["status"] for one in said["exports"]] == ["taken"] * 3
    (unit,) = said["units"]
    assert unit["unit"] == "demo"
    assert unit["cells"] == 21 * 144


def test_the_demo_again_finds_everything_taken_already(plant: tuple[Path, dict[str, object]]):
    folder, _ = plant
    done = outlet("demo", "--no-page", "--days", "21", folder=folder)
    assert done.returncode == 0
    assert done.stdout.count("taken already") == 3
    assert "demo: nothing new" in done.stdout


# Of one day and of ten, no date of the long export lies after the 12th: the unit file tells their order.
@pytest.mark.parametrize(("days", "files"), [(1, 1), (10, 3), (25, 3)])
def test_a_demo_of_any_length_is_taken_in_to_the_last_reading(days: int, files: int, tmp_path: Path):
    done = outlet("demo", "--no-page", "--days", str(days), "--json", folder=tmp_path)
    assert done.returncode == 0, done.stderr
    said = json.loads(done.stdout)
    assert [one["status"] for one in said["exports"]] == ["taken"] * files
    assert [one["account"]["rejections"] for one in said["exports"]] == [[]] * files
    (unit,) = said["units"]
    assert unit["cells"] == days * 144


def test_no_bar_is_drawn_where_nobody_watches(plant: tuple[Path, dict[str, object]]):
    folder, _ = plant
    done = outlet("demo", "--no-page", "--days", "21", folder=folder)
    assert done.stderr == "Making 21 days of an invented plant in demo-plant ...\n"


def test_a_good_unit_file_is_judged(tmp_path: Path):
    done = outlet("check", UNIT_FILE, "--json", folder=tmp_path)
    said = json.loads(done.stdout)
    assert done.returncode == 0
    # By hand: 2 + 2 + 1 flows in, 11 out; balances C, H, O and the inerts nitrogen and isobutane; readings
    # are 4 flow meters, 2 declared contents and 10 channels; 16 - 5 = 11 unknowns, 5 readings left over.
    assert (said["flows"], said["balances"], said["readings"], said["freedom"]) == (16, 5, 16, 5)
    assert said["unseen"] == []


def test_half_widths_need_a_store_and_are_then_those_that_the_store_shows(
    plant: tuple[Path, dict[str, object]],
):
    without = outlet("check", UNIT_FILE, folder=plant[0])
    assert "half-widths    need the usual readings: give --store, nothing is guessed\n" in without.stdout
    store = plant[0] / "demo-plant/store"
    done = outlet("check", UNIT_FILE, "--store", store, "--json", folder=plant[0])
    assert (done.returncode, done.stderr) == (0, "")
    said = json.loads(done.stdout, parse_constant=pytest.fail)
    # law: a window of usual cells has the half-width of a usual window; the demo ends on 22 March, local time
    assert said["usual"]["to"] == "2026-03-21T22:50:00.000000Z"
    figures = {one["figure"]: one["half_width"] for one in said["usual"]["figures"]}
    names = ("conversion", "selectivity on converted", "yield on feed", "carbon closure")
    for place, window in ((1, 8), (2, 24)):
        stage = Store(store).read("demo", figure_stage(timedelta(hours=window)))
        shown = stage.to_pandas(ignore_metadata=True).tail(1008).median(numeric_only=True)
        for name in names:
            expected = shown[f"{name} | as operated | half_width"]
            assert figures[name][place] == pytest.approx(expected, rel=0.05)
    told = outlet("check", UNIT_FILE, "--store", store, folder=plant[0]).stdout
    assert "% narrower with a channel on water in outlet\n" in told


def test_a_balance_that_fits_suspects_nothing(plant: tuple[Path, dict[str, object]]):
    words = ["suspects", "--unit", UNIT_FILE, "--store", "demo-plant/store"]
    days = ["--from", "2026-03-18", "--to", "2026-03-20"]
    healthy = ["--baseline-from", "2026-03-12", "--baseline-to", "2026-03-17"]
    done = outlet(*words, *days, *healthy, folder=plant[0])
    assert (done.returncode, done.stderr) == (0, "")
    assert "24 h      3 of 3 fit       3 of 3 fit\n" in done.stdout
    assert done.stdout.endswith("fits: no reading is suspected\n")
    said = json.loads(outlet(*words, *days, "--json", folder=plant[0]).stdout, parse_constant=pytest.fail)
    # plant time is an hour ahead of UTC
    assert said["span"] == ["2026-03-17T23:00:00.000000Z", "2026-03-20T23:00:00.000000Z"]
    assert (said["baseline"], said["findings"]) == (None, [])


def test_what_goes_unseen_without_two_meters_is_told(tmp_path: Path):
    text = UNIT_FILE.read_text(encoding="utf-8")
    # Votes name these meters too; up to the next bracket, that is the next section, is one vote.
    text = re.sub(r"\[\[operating\.vote\]\]\n[^\[]*", "", text)
    kept = text.replace(', "FI-203"]', "]").split("[[instrument]]")  # nor is it part of the operating point
    # The analyzer is dry: without the meters of steam and of the wet outlet nothing tells the water that
    # passes through. 14 readings then fix 10 of the 11 unknowns.
    fewer = [part for part in kept if not re.match(r'\s*name = "FI-2(03|10)"', part)]
    assert len(fewer) == len(kept) - 2
    file = tmp_path / "fewer.toml"
    file.write_text("[[instrument]]".join(fewer), encoding="utf-8")
    done = outlet("check", file, "--json", folder=tmp_path)
    said = json.loads(done.stdout)
    assert said["freedom"] == 4
    assert "steam: water" in said["unseen"]


def test_a_bad_unit_file_tells_all_its_faults_and_exits_with_2(tmp_path: Path):
    file = tmp_path / "line3.toml"
    text = UNIT_FILE.read_text(encoding="utf-8")
    file.write_text(
        text.replace("deadband", "deadbnd", 1).replace('"8h"', '"8 hours long"', 1), encoding="utf-8"
    )
    done = outlet("check", file, folder=tmp_path)
    assert done.returncode == 2
    first, *rest = done.stderr.splitlines()
    assert first == f"{file}: 2 problems"
    assert any("did you mean 'deadband'?" in text for text in rest)
    assert done.stdout == ""


@pytest.mark.parametrize(
    ("words", "what"),
    [
        (("run", "--unit", "no.toml", "x.csv"), "no.toml"),
        (("run", "--unit", UNIT_FILE, "x.csv"), "x.csv: there is no such file or folder"),
        (("describe", "x.csv", "--unit", UNIT_FILE), "x.csv: there is no such file"),
        (("verify", "--store", "nowhere"), "nowhere: there is no store here"),
        (("check", UNIT_FILE, "--store", "nowhere"), "nowhere: there is no store here"),
        (("suspects", "--unit", UNIT_FILE, "--store", "nowhere"), "nowhere: there is no store here"),
        (
            ("suspects", "--unit", UNIT_FILE, "--baseline-to", "2026-03-04"),
            "outlet suspects: --baseline-from and --baseline-to go together",
        ),
        (
            ("suspects", "--unit", UNIT_FILE, "--from", "2026-03-04", "--to", "2026-03-03"),
            "outlet suspects: the first day 2026-03-04 lies after the last",
        ),
        (
            ("suspects", "--unit", UNIT_FILE, "--from", "2025-03-04", "--to", "2026-03-03"),
            "outlet suspects: more than 138 days at once",
        ),
        (("lag", "--unit", UNIT_FILE, "--store", "nowhere"), "nowhere: there is no store here"),
        (("verify", "--stroe", "nowhere"), "outlet verify: No such option"),
        (("vrify",), "outlet: No such command 'vrify'"),
        (("demo", "--days", "0"), "outlet demo: Invalid value for '--days'"),
    ],
    ids=lambda value: " ".join(map(str, value)) if isinstance(value, tuple) else None,
)
def test_what_the_user_can_mend_is_told_in_two_lines_and_exits_with_2(
    words: tuple[str | Path, ...], what: str, tmp_path: Path
):
    done = outlet(*words, folder=tmp_path)
    assert done.returncode == 2
    told = done.stderr.splitlines()
    assert told[0].startswith(what)
    assert told[-1].startswith("  ")
    assert "Traceback" not in done.stderr
    assert len(told) == 2 or told[0].endswith("problem")


def test_a_fault_of_ours_shows_its_traceback_and_exits_with_1(tmp_path: Path):
    script = (
        "import sys, click, monitor.cli as cli\n"
        "cli.outlet.add_command(click.command('boom')(lambda: 1 / 0))\n"
        "sys.argv = ['outlet', 'boom']\n"
        "cli.main()\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
        env=ENVIRONMENT,
    )
    assert done.returncode == 1
    assert done.stderr.splitlines()[-1] == "ZeroDivisionError: division by zero"


def test_an_export_set_aside_makes_the_exit_code_2_and_the_others_are_taken(
    plant: tuple[Path, dict[str, object]], tmp_path: Path
):
    good = sorted(plant[0].glob("demo-plant/larkmoor-1*"))[0]
    broken = tmp_path / "broken.csv"
    broken.write_text("no time here\n1\n", encoding="utf-8")
    os.utime(broken, (1, 1))  # long since at rest
    done = outlet("run", "--unit", UNIT_FILE, broken, good, folder=tmp_path)
    assert done.returncode == 2
    assert f"{good.name}: taken;" in done.stdout
    assert done.stderr.startswith("broken.csv")
    assert len(done.stderr.splitlines()) == 2


def test_describe_shows_dialect_rows_and_account_and_stores_nothing(
    plant: tuple[Path, dict[str, object]], tmp_path: Path
):
    export = sorted(plant[0].glob("demo-plant/larkmoor-2*"))[0]
    done = outlet("describe", export, "--unit", UNIT_FILE, folder=tmp_path)
    assert done.returncode == 0, done.stderr
    for words in ("semicolon", "Decimal mark: comma", "day first", "FI-201.PV", "accepted"):
        assert words in done.stdout
    assert list(tmp_path.iterdir()) == []
    said = json.loads(outlet("describe", export, "--unit", UNIT_FILE, "--json", folder=tmp_path).stdout)
    assert said["account"]["accepted"] > 0


def test_verify_names_the_part_that_was_changed(plant: tuple[Path, dict[str, object]], tmp_path: Path):
    good = sorted(plant[0].glob("demo-plant/larkmoor-1*"))[0]
    assert outlet("run", "--unit", UNIT_FILE, good, folder=tmp_path).returncode == 0
    assert outlet("verify", folder=tmp_path).returncode == 0
    part = sorted((tmp_path / "outlet-store/demo").glob("cells-*.parquet"))[-1]
    whole = bytearray(part.read_bytes())
    whole[len(whole) // 2] ^= 1
    part.write_bytes(whole)
    done = outlet("verify", "--json", folder=tmp_path)
    assert done.returncode == 2
    assert [one["file"] for one in json.loads(done.stdout)["findings"]] == [f"demo/{part.name}"]


def test_the_dead_time_is_told_from_the_data_day_by_day(plant: tuple[Path, dict[str, object]]):
    done = outlet("lag", "--unit", UNIT_FILE, "--store", "demo-plant/store", "--days", "3", folder=plant[0])
    assert (done.returncode, done.stderr) == (0, "")
    # The demo begins on 1 March 2026 and its analyzer is 4 min late (demo_data/README.md).
    days = [line.split("  ")[1] for line in done.stdout.splitlines() if "analyses)" in line]
    assert days == ["19 Mar 2026", "20 Mar 2026", "21 Mar 2026"]
    assert "AI-220: 4 ± 1 min since 19 Mar 2026 or before, as declared\n" in done.stdout


def test_a_dead_time_that_the_data_contradict_is_a_finding_and_changes_nothing(
    plant: tuple[Path, dict[str, object]], tmp_path: Path
):
    store = plant[0] / "demo-plant/store"
    held = {path: path.read_bytes() for path in store.rglob("*.parquet")}
    text = UNIT_FILE.read_text(encoding="utf-8")
    file = tmp_path / "demo.toml"
    file.write_text(text.replace('dead_time = "4min"', 'dead_time = "15min"'), encoding="utf-8")
    done = outlet("lag", "--unit", file, "--store", store, folder=tmp_path)
    assert done.returncode == 2
    assert "declared 15 min, the data say 4 ± 1 min since 15 Mar 2026 or before: check the" in done.stdout
    assert done.stdout.endswith("Nothing was changed: figures are worked out with the declared dead time.\n")
    said = json.loads(outlet("lag", "--unit", file, "--store", store, "--json", folder=tmp_path).stdout)
    (analyzer,) = said["analyzers"]
    assert [one["answer"] for one in analyzer["days"]] == ["differs"] * 7
    assert analyzer["stretches"][0]["estimate_min"] == pytest.approx(4, abs=1)
    assert {path: path.read_bytes() for path in store.rglob("*.parquet")} == held


def test_a_store_that_holds_nothing_of_the_unit_says_how_to_fill_it(
    plant: tuple[Path, dict[str, object]], tmp_path: Path
):
    file = tmp_path / "other.toml"
    file.write_text(
        re.sub(r'"(.I-2\d\d\.)', r'"X\1', UNIT_FILE.read_text(encoding="utf-8")), encoding="utf-8"
    )
    done = outlet("lag", "--unit", file, "--store", plant[0] / "demo-plant/store", folder=tmp_path)
    assert done.returncode == 2
    assert "holds no readings of other\n  Take exports in: outlet run --unit other.toml" in done.stderr


@pytest.fixture
def port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@pytest.fixture
def page(plant: tuple[Path, dict[str, object]], port: int) -> Iterator[subprocess.Popen[bytes]]:
    command = [sys.executable, "-m", "monitor", "page", "--unit", str(UNIT_FILE)]
    command += ["--store", "demo-plant/store", "--port", str(port)]
    with subprocess.Popen(
        command, cwd=plant[0], env=ENVIRONMENT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    ) as server:
        yield server
        server.kill()


def test_the_page_is_served_to_this_computer_until_it_is_interrupted(
    page: subprocess.Popen[bytes], port: int
):
    answer = None
    for _ in range(300):
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{port}/", timeout=5) as reply:
                answer = reply.status
                break
        except OSError:
            assert page.poll() is None, "the server ended by itself"
            time.sleep(0.1)
    assert answer == 200
    page.send_signal(signal.SIGINT)
    page.wait(timeout=20)


def test_a_folder_that_cannot_be_written_is_told(tmp_path: Path):
    (tmp_path / "file").write_text("in the way", encoding="utf-8")
    done = outlet("demo", "--no-page", "--folder", "file/plant", folder=tmp_path)
    assert done.returncode == 2
    assert done.stderr.splitlines()[1:] == ["file/plant: Not a directory", "  Give another --folder."]


def test_a_reader_that_has_seen_enough_causes_no_traceback(tmp_path: Path):
    command = f"'{sys.executable}' -m monitor check '{UNIT_FILE}' | true"
    done = subprocess.run(
        ["bash", "-c", command], cwd=tmp_path, capture_output=True, text=True, check=False, env=ENVIRONMENT
    )
    assert done.stderr == ""


def test_the_version_is_shown_whether_installed_or_not(tmp_path: Path):
    done = outlet("--version", folder=tmp_path)
    assert done.returncode == 0
    assert done.stdout.startswith("outlet ")


def test_a_port_in_use_is_told_before_any_work(tmp_path: Path):
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        done = outlet("demo", "--port", str(taken.getsockname()[1]), folder=tmp_path)
    assert done.returncode == 2
    assert "Address already in use" in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_a_line_of_progress_tells_the_time_left_from_the_pace_so_far():
    # 3 of 12 in 3 s: 9 s for the other 9; 3 of 12 of 24 marks are 6.
    assert line("line3", 3, 12, passed_s=3.0) == f"line3  {'#' * 6}{'.' * 18}  3 of 12, 0:09 left"
    assert line("line3", 0, 12, passed_s=0.0) == f"line3  {'.' * 24}  0 of 12"
    assert line("line3", 0, 0, passed_s=0.0) == f"line3  {'.' * 24}  0 of 0"
