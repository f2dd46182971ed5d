"""Progress within one long file: bytes of bytes, pace and time left, on a terminal only."""

from __future__ import annotations

import gzip
import os
import pty
import re
import subprocess
import sys
from datetime import timedelta
from pathlib import Path

import pyarrow as pa
import pyarrow.csv as pcsv
import pyarrow.parquet as pq
import pytest

from ingest.intake import take_in
from ingest.ledger import Store
from monitor.progress import line_of_bytes
from tests.broken_made import HEADER, rows, unit_made
from tests.source import ROOT

LARGE = HEADER + rows(100_000)  # about 3.3 MB: several blocks


def _written(folder: Path, name: str) -> Path:
    path = folder / name
    if name.endswith(".parquet"):
        pq.write_table(pcsv.read_csv(pa.BufferReader(LARGE.encode())), path)
    elif name.endswith(".zst"):
        path.write_bytes(pa.compress(LARGE.encode(), "zstd", asbytes=True))
    else:
        path.write_bytes(gzip.compress(LARGE.encode()) if name.endswith(".gz") else LARGE.encode())
    return path


@pytest.mark.parametrize("name", ["x.csv", "x.csv.gz", "x.csv.zst", "x.parquet"])
def test_progress_moves_within_a_file_and_ends_at_its_bytes_on_disk(tmp_path: Path, name: str):
    path, told = _written(tmp_path, name), []
    with Store(tmp_path / "store").begin() as pass_:
        take_in(
            pass_,
            [unit_made()],
            [path],
            settle=timedelta(0),
            progress=lambda done, total: told.append((done, total)),
        )
    assert {total for _, total in told} == {path.stat().st_size}
    done = [count for count, _ in told]
    assert (done[0], done[-1]) == (0, path.stat().st_size)
    assert done == sorted(done)
    assert len({count for count in done if 0 < count < done[-1]}) >= 1, "seen somewhere inside"


def test_what_is_told_of_files_that_are_refused_and_taken_adds_up(tmp_path: Path):
    (tmp_path / "a.csv").write_text("nothing of use\n")
    _written(tmp_path, "b.csv")
    (tmp_path / "c.csv").write_text(HEADER + "\0\n")
    told: list[tuple[int, int]] = []
    with Store(tmp_path / "store").begin() as pass_:
        take_in(pass_, [unit_made()], [tmp_path], settle=timedelta(0), progress=lambda *at: told.append(at))
    size = sum(path.stat().st_size for path in tmp_path.glob("*.csv"))
    assert told[-1] == (size, size)
    assert [done for done, _ in told] == sorted(done for done, _ in told)


def test_a_line_of_bytes_tells_how_much_of_how_much_how_fast_and_how_long_still():
    # 400 MB in 4 s: 100 MB/s, and 200 MB more take 2 s; two thirds of 24 marks are 16.
    marks = "#" * 16 + "." * 8
    assert (
        line_of_bytes("exports", 400_000_000, 600_000_000, passed_s=4.0)
        == f"exports  {marks}  400 of 600 MB, 100 MB/s, 0:02 left"
    )
    assert line_of_bytes("exports", 0, 12_500_000_000, passed_s=0.0) == f"exports  {'.' * 24}  0.0 of 12.5 GB"
    assert line_of_bytes("exports", 0, 0, passed_s=1.0) == f"exports  {'.' * 24}  0 of 0 kB"


def test_the_bar_is_shown_on_a_terminal_and_gone_at_the_end(tmp_path: Path):
    _written(tmp_path, "x.csv")
    script = (
        "import sys; from pathlib import Path; from datetime import timedelta\n"
        "from ingest.intake import take_in; from ingest.ledger import Store\n"
        "from monitor.progress import Bar\n"
        "from tests.broken_made import unit_made\n"
        "folder = Path(sys.argv[1])\n"
        "with Bar() as bar, Store(folder / 'store').begin() as pass_:\n"
        "    take_in(pass_, [unit_made()], [folder / 'x.csv'], settle=timedelta(0),\n"
        "            progress=lambda *at: bar('exports', *at))\n"
    )
    ours, theirs = pty.openpty()
    with subprocess.Popen(
        [sys.executable, "-c", script, os.fspath(tmp_path)], cwd=ROOT, stderr=theirs
    ) as child:
        os.close(theirs)
        shown = b""
        while piece := _from(ours):
            shown += piece
    assert child.returncode == 0, shown
    assert re.search(rb"exports  [#.]{24}  \d+ of 3 MB, \d+ MB/s, \d+:\d\d left", shown)
    assert shown.endswith(b"\r\x1b[K"), "the line is left clean"


def _from(terminal: int) -> bytes:
    """What came; nothing once the other side is closed, which Linux tells as an error."""
    try:
        return os.read(terminal, 65_536)
    except OSError:
        return b""
