"""A summary as one parcel of bytes that a browser can save; made when it is asked for.

The report is made in a process of its own: drawing its charts takes some 200 MB, which a server that runs
for months should not keep.
"""

from __future__ import annotations

import io
import json
import subprocess
import sys
import zipfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory

from ingest.errors import OutletError
from monitor.summary.files import stem, write
from monitor.summary.report import report
from monitor.summary.table import Summary, body_of, from_body
from monitor.summary.workbook import workbook

LONGEST_S = 120.0
FIXED = (1980, 1, 1, 0, 0, 0)  # the earliest date that a ZIP file can state; a clock would give other bytes


@dataclass(frozen=True, slots=True)
class Form:
    """One way to save a summary: what people call it, how its file ends, its media type, how it is made."""

    label: str
    ending: str
    media: str
    make: Callable[[Summary], bytes]


def name_of(summary: Summary, form: Form) -> str:
    """Name the file that a browser saves.

    Parameters
    ----------
    summary : Summary
    form : Form

    Returns
    -------
    str
        `demo-2026-04.xlsx`, `demo-2026-04-draft-csv.zip`.
    """
    return f"{stem(summary)}{form.ending}"


def _report(summary: Summary) -> bytes:
    """The report, from a process that ends when it is made."""
    done = subprocess.run(
        [sys.executable, "-m", "monitor.summary.parcel"],
        input=json.dumps(body_of(summary)).encode(),
        capture_output=True,
        cwd=Path(__file__).parents[2],
        timeout=LONGEST_S,
        check=False,
    )
    if done.returncode:
        said = done.stderr.decode(errors="replace").strip().rpartition("\n")[2]
        raise OutletError(
            f"{stem(summary)}.html: could not be made ({said})",
            remedy="Make it by command instead: outlet month with --form html.",
        )
    return done.stdout


def _zipped(summary: Summary, form: str) -> bytes:
    """Every table as a file of its own, in one archive with fixed dates."""
    room = io.BytesIO()
    with TemporaryDirectory() as folder, zipfile.ZipFile(room, "w", zipfile.ZIP_DEFLATED) as archive:
        for path in write(summary, Path(folder), (form,)):
            entry = zipfile.ZipInfo(path.relative_to(folder).as_posix(), FIXED)
            archive.writestr(entry, path.read_bytes(), zipfile.ZIP_DEFLATED)
    return room.getvalue()


def _csv(summary: Summary) -> bytes:
    return _zipped(summary, "csv")


def _parquet(summary: Summary) -> bytes:
    return _zipped(summary, "parquet")


SHEETS = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
FORMS: Mapping[str, Form] = {
    "xlsx": Form("Workbook (XLSX)", ".xlsx", SHEETS, workbook),
    "html": Form("Report to print (HTML)", ".html", "text/html", _report),
    "csv": Form("Tables (CSV)", "-csv.zip", "application/zip", _csv),
    "parquet": Form("Tables (Parquet)", "-parquet.zip", "application/zip", _parquet),
}


if __name__ == "__main__":
    sys.stdout.buffer.write(report(from_body(json.load(sys.stdin.buffer))).encode())
