"""A summary as files: workbook, page, and each table as CSV and Parquet; every file whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Mapping
from functools import partial
from pathlib import Path

import pandas as pd
import pyarrow as pa

from ingest.errors import OutletError
from ingest.parts import write_table
from monitor.celltext import neutral
from monitor.summary.report import report
from monitor.summary.table import Summary, names, rows, told
from monitor.summary.workbook import workbook


def write(summary: Summary, folder: Path, forms: Iterable[str]) -> list[Path]:
    """Write a summary in some forms.

    Parameters
    ----------
    summary : Summary
    folder : Path
        Made if it is not there.
    forms : iterable of str
        Of `FORMS`.

    Returns
    -------
    list of Path
        What was written; tables in a folder of their own.

    Raises
    ------
    OutletError
        The folder cannot be written to.
    """
    try:
        return [path for form in forms for path in FORMS[form](summary, folder / stem(summary))]
    except OSError as fault:
        raise OutletError(
            f"{fault.filename or folder}: {fault.strerror}", remedy="Give another folder with --out."
        ) from fault


def stem(summary: Summary) -> str:
    """Name the files of a summary: unit, span, and the revision after the first.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        `demo-2026-04`, `demo-2026-04-revision-2`, `demo-2026-04-draft`.
    """
    tail = {0: "-draft", 1: ""}.get(summary.revision, f"-revision-{summary.revision}")
    return f"{summary.unit}-{summary.span}{tail}"


def csv_text(frame: pd.DataFrame) -> str:
    """Write one table as CSV (RFC 4180): texts in quotes and harmless, missing numbers empty.

    Parameters
    ----------
    frame : DataFrame

    Returns
    -------
    str
    """
    head = ",".join(_quoted(name) for name in names(frame))
    body = (",".join(_field(value) for value in row.values()) for row in rows(frame))
    return "".join(f"{line}\r\n" for line in (head, *body))


def _field(value: str | float) -> str:
    return _quoted(value) if isinstance(value, str) else told(value)


def _quoted(text: str) -> str:
    escaped = neutral(text).replace('"', '""')
    return f'"{escaped}"'


def _xlsx(summary: Summary, path: Path) -> list[Path]:
    return [_whole(path.with_name(f"{path.name}.xlsx"), partial(_bytes, workbook(summary)))]


def _html(summary: Summary, path: Path) -> list[Path]:
    page = report(summary).encode()
    return [_whole(path.with_name(f"{path.name}.html"), partial(_bytes, page))]


def _csv(summary: Summary, path: Path) -> list[Path]:
    # A spreadsheet takes a CSV for UTF-8 by its byte order mark alone.
    texts = {name: csv_text(frame).encode("utf-8-sig") for name, frame in summary.tables.items()}
    return [_whole(_file(path, name, "csv"), partial(_bytes, text)) for name, text in texts.items()]


def _parquet(summary: Summary, path: Path) -> list[Path]:
    return [
        _whole(_file(path, name, "parquet"), partial(write_table, table=_arrow(frame)))
        for name, frame in summary.tables.items()
    ]


def _bytes(content: bytes, at: Path) -> None:
    at.write_bytes(content)


def _arrow(frame: pd.DataFrame) -> pa.Table:
    """A table of texts and numbers; a missing number is null."""
    kinds = {name: pa.float64() if frame[name].dtype.kind == "f" else pa.string() for name in frame}
    return pa.table(
        {name: pa.array(frame[name].to_numpy(object), kind, from_pandas=True) for name, kind in kinds.items()}
    )


def _file(path: Path, name: str, ending: str) -> Path:
    return path / f"{name.replace(' ', '-')}.{ending}"


def _whole(path: Path, write_to: Callable[[Path], object]) -> Path:
    """Write a file beside its place and move it there once it is on the disk."""
    path.parent.mkdir(parents=True, exist_ok=True)
    draft = path.with_name(f"{path.name}.tmp")
    write_to(draft)
    with draft.open("rb+") as file:
        os.fsync(file.fileno())
    draft.replace(path)
    return path


FORMS: Mapping[str, Callable[[Summary, Path], list[Path]]] = {
    "xlsx": _xlsx,
    "html": _html,
    "csv": _csv,
    "parquet": _parquet,
}
