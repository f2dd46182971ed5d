"""In which encoding is an export written? Told by its first bytes."""

from __future__ import annotations

import codecs

from ingest.errors import ExportError

_NO_TEXT = (
    (b"PK\3\4", "a spreadsheet or zip file", "Export as CSV text (or .csv.gz) or as Parquet."),
    (b"\x1f\x8b", "a gz file without .gz in its name", "Rename it so that it ends in .csv.gz."),
    (b"\x28\xb5\x2f\xfd", "a zst file without .zst in its name", "Rename it so that it ends in .csv.zst."),
)


def decide_encoding(export: str, head: bytes) -> tuple[str, str]:
    """Find the encoding of a text export.

    Parameters
    ----------
    export : str
        Name of the export, for the error.
    head : bytes
        The file's beginning.

    Returns
    -------
    str
        Python's codec.
    str
        Its name for people.
    """
    if not head.strip():
        raise ExportError(f"{export}: is empty", remedy="Export it again; an empty file holds no reading.")
    for begins, what, remedy in _NO_TEXT:
        if head.startswith(begins):
            raise ExportError(f"{export}: is {what}", remedy=remedy)
    if head.startswith(codecs.BOM_UTF8):
        return "utf-8-sig", "UTF-8 with byte order mark"
    if head.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)) and not head.startswith(
        codecs.BOM_UTF32_LE
    ):
        return "utf-16", "UTF-16"
    if b"\0" in head:
        return _without_mark(export, head)
    try:
        codecs.getincrementaldecoder("utf-8")().decode(head)
    except UnicodeDecodeError as error:
        return _latin(export, head, error.start)
    return "utf-8", "UTF-8"


def _without_mark(export: str, head: bytes) -> tuple[str, str]:
    """UTF-16 shows by NUL in every second byte; anything else with NUL is no text."""
    even, odd = head[0::2].count(0), head[1::2].count(0)
    if not even and odd > len(head) // 5:
        return "utf-16-le", "UTF-16 without byte order mark"
    if not odd and even > len(head) // 5:
        return "utf-16-be", "UTF-16 without byte order mark"
    row = head.count(b"\n", 0, head.index(0)) + 1
    raise ExportError(
        f"{export}:{row}: holds NUL bytes, it is not text", remedy="Export as CSV text or as Parquet."
    )


def _latin(export: str, head: bytes, at: int) -> tuple[str, str]:
    """Latin-1 has no printing character at 0x80 to 0x9F."""
    if any(0x80 <= byte <= 0x9F for byte in head):
        row = head.count(b"\n", 0, at) + 1
        raise ExportError(
            f"{export}:{row}: byte 0x{head[at]:02X} is neither UTF-8, UTF-16 nor Latin-1",
            remedy="Save the export as UTF-8.",
        )
    return "latin-1", "Latin-1"
