"""A text export as blocks of whole lines in UTF-8, each line with its number in the file."""

from __future__ import annotations

import codecs
import gzip
import zlib
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager, nullcontext
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, cast

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from ingest import files
from ingest.account import COLUMNS, KEPT, QUOTES, RETURN, Aside
from ingest.errors import ExportError
from ingest.files import Told

BLOCK = 1 << 20  # bytes read at a time: sets the peak memory, not the speed
LONGEST_LINE = 1 << 20  # bytes
LONGEST_NAME = 1 << 10  # characters of a tag
LARGEST_EXPANDED = 8 << 30  # bytes; a reactor-year of one-minute readings in long form has 0.6 GB

_LF, _CR, _QUOTE, _SPACE = b'\n\r" '


@dataclass(frozen=True, slots=True)
class Fault:
    """Lines that cannot be split into fields: reason, how many, and the first few with their numbers."""

    reason: int
    count: int
    first: tuple[tuple[int, str], ...]


@dataclass(frozen=True, slots=True)
class Lines:
    """Whole lines, none blank: UTF-8 bytes, the number of each line in the file, and lines left out."""

    data: bytes
    rows: NDArray[np.int64]
    faults: tuple[Fault, ...] = ()
    asides: tuple[Aside, ...] = ()  # lines that hold no readings and are left out, too


@dataclass(frozen=True, slots=True)
class Block:
    """Some rows of an export: their numbers in the file, the columns read, and the lines left out."""

    rows: NDArray[np.int64]
    columns: dict[int, Any]
    faults: tuple[Fault, ...] = ()
    asides: tuple[Aside, ...] = ()


@contextmanager
def opened(path: Path, told: Told | None = None) -> Iterator[BinaryIO]:
    """Open an export for reading; what the system refuses becomes an ExportError.

    Parameters
    ----------
    path : pathlib.Path
        A regular file; names ending in .gz or .zst are expanded.
    told : callable or None
        Told the bytes of the file, as it is on disk, that were read so far.

    Yields
    ------
    binary file
        Expanded bytes.
    """
    try:
        with files.opened(path, told) as raw, _expanded(raw, path.suffix.lower()) as file:
            yield file
    except FileNotFoundError as error:
        raise ExportError(f"{path.name}: there is no such file", remedy="Check the name.") from error
    except (EOFError, zlib.error, gzip.BadGzipFile) as error:
        raise ExportError(
            f"{path.name}: the gz file is damaged or cut short ({error})",
            remedy="Export or copy the file again.",
        ) from error
    except OSError as error:
        if error.errno is None and path.suffix.lower() == ".zst":  # what Arrow's codec says has no number
            raise ExportError(
                f"{path.name}: the zst file is damaged or cut short ({error})",
                remedy="Export or copy the file again.",
            ) from error
        raise ExportError(
            f"{path.name}: cannot be read ({error.strerror or error})",
            remedy="Check the file's permissions and the disk.",
        ) from error


def _expanded(raw: BinaryIO, suffix: str) -> AbstractContextManager[BinaryIO]:
    """The bytes of a file as they were before it was compressed, if it was."""
    if suffix == ".gz":
        return cast(AbstractContextManager[BinaryIO], gzip.open(raw))
    if suffix == ".zst":
        return cast(AbstractContextManager[BinaryIO], pa.CompressedInputStream(raw, "zstd"))
    return nullcontext(raw)


def blocks(
    path: Path, codec: str, told: Told | None = None, *, size: int | None = None
) -> Iterator[tuple[int, bytes]]:
    """Read a text file as blocks of whole lines.

    Parameters
    ----------
    path : pathlib.Path
        The export.
    codec : str
        Python's name of the encoding; 'utf-8' passes bytes through once they are known to be UTF-8.
    told : callable or None
        As in `opened`.
    size : int or None
        Bytes read at a time; None for BLOCK.

    Yields
    ------
    int
        Number of the block's first line in the file, from 1.
    bytes
        UTF-8, ending with a line feed.
    """
    row, rest = 1, b""
    for chunk in _decoded(path, codec, told, size or BLOCK):
        data = rest + chunk
        cut = data.rfind(b"\n") + 1
        # A chunk is no longer than a line may be, so that only the first line can be longer.
        if len(data) > LONGEST_LINE and data.find(b"\n", 0, LONGEST_LINE + 1) < 0:
            _refuse_long_line(path, row)
        rest = data[cut:]
        if cut:
            yield row, _checked(path, row, data[:cut])
            row += int(np.count_nonzero(np.frombuffer(data, np.uint8, cut) == _LF))
    if rest:
        yield row, _checked(path, row, rest + b"\n")


def screened(row: int, data: bytes, separator: str) -> Lines:
    """Leave out blank lines, and lines whose quotes or line ends make their fields doubtful.

    Parameters
    ----------
    row : int
        Number of the first line in the file.
    data : bytes
        Whole lines, UTF-8.
    separator : str
        The character between fields.

    Returns
    -------
    Lines
        Blank lines are no rows and go without mention; the others are told as faults.
    """
    raw = np.frombuffer(data, np.uint8)
    ends = np.flatnonzero(raw == _LF)
    rows = np.arange(row, row + len(ends))
    starts = np.append(0, ends[:-1] + 1)
    blank = bool(np.any(raw[starts] <= _SPACE))  # perhaps: a closer look follows
    if not blank and _whole_line_ends(data, raw, ends) and _well_quoted(data, raw, ord(separator)):
        return Lines(data, rows)
    return _sifted(data, raw, starts, rows, ord(separator))


def _sifted(
    data: bytes, raw: NDArray[np.uint8], starts: NDArray[np.int64], rows: NDArray[np.int64], separator: int
) -> Lines:
    """A block without its blank and doubtful lines."""
    stray = np.zeros(len(raw), np.int32)
    stray[:-1] = (raw[:-1] == _CR) & (raw[1:] != _LF)
    broken = np.add.reduceat(stray, starts) > 0
    misquoted = _misquoted(raw, starts, separator) & ~broken
    blank = np.add.reduceat((raw > _SPACE).astype(np.int32), starts) == 0
    leave = broken | misquoted | blank
    lengths = np.diff(starts, append=len(raw))
    faults = [(QUOTES, misquoted), (RETURN, broken)]
    return Lines(
        raw[np.repeat(~leave, lengths)].tobytes(),
        rows[~leave],
        tuple(fault(reason, data, starts[bad], rows[bad]) for reason, bad in faults if bad.any()),
    )


def fault(reason: int, data: bytes, starts: NDArray[np.int64], rows: NDArray[np.int64]) -> Fault:
    """Tell of lines that are left out, with the text of the first few.

    Parameters
    ----------
    reason : int
        Place in account.REASONS.
    data : bytes
        The block.
    starts, rows : numpy.ndarray of int64 (n,)
        Where each line begins in the block, and its number in the file.

    Returns
    -------
    Fault
        Its count is n.
    """
    first = [
        (int(number), data[start : data.index(b"\n", start)].decode("utf-8", "replace").rstrip("\r"))
        for start, number in zip(starts[:KEPT].tolist(), rows[:KEPT].tolist(), strict=True)
    ]
    return Fault(reason, len(rows), tuple(first))


def wrong_columns(lines: Lines, bad: NDArray[np.int64]) -> Fault:
    """Tell of lines that do not have as many fields as the header.

    Parameters
    ----------
    lines : Lines
        The block they stand in.
    bad : numpy.ndarray of int64 (n,)
        Their places in the block, from 0, ascending.

    Returns
    -------
    Fault
        Its count is n.
    """
    ends = np.flatnonzero(np.frombuffer(lines.data, np.uint8) == _LF)
    starts = np.append(0, ends[:-1] + 1)
    return fault(COLUMNS, lines.data, starts[bad], lines.rows[bad])


def _misquoted(raw: NDArray[np.uint8], starts: NDArray[np.int64], separator: int) -> NDArray[np.bool_]:
    """Lines with a quote that opens inside a field, closes before its end, or does not close at all."""
    quote = raw == _QUOTE
    counts = np.add.reduceat(quote.astype(np.int32), starts)
    at = np.flatnonzero(quote)
    line = np.searchsorted(starts, at, side="right") - 1
    nth = np.arange(len(at)) - (np.cumsum(counts) - counts)[line]
    beside = np.where(nth % 2 == 0, np.where(at > 0, raw[at - 1], _LF), raw[at + 1])
    fits = _ends_field(beside, separator)
    wrong: NDArray[np.bool_] = counts % 2 == 1
    wrong[line[~fits]] = True
    return wrong


def _well_quoted(data: bytes, raw: NDArray[np.uint8], separator: int) -> bool:
    """Whether all quotes of a block open and close with their field, on their line."""
    if b'"' not in data:
        return True
    at = np.flatnonzero((raw == _QUOTE) | (raw == _LF))
    quote = raw[at] == _QUOTE
    line_end = np.flatnonzero(~quote)
    if np.any((line_end - np.arange(len(line_end))) % 2):  # quotes before each line end
        return False
    at = at[quote]
    before = np.where(at[0::2] > 0, raw[at[0::2] - 1], _LF)
    return bool(np.all(_ends_field(before, separator)) and np.all(_ends_field(raw[at[1::2] + 1], separator)))


def _ends_field(byte: NDArray[np.uint8], separator: int) -> NDArray[np.bool_]:
    """Whether a quote beside this byte is at the edge of a field, or one of a pair that means a quote."""
    table = np.zeros(256, np.bool_)
    table[[separator, _LF, _CR, _QUOTE]] = True
    return table[byte]


def _whole_line_ends(data: bytes, raw: NDArray[np.uint8], ends: NDArray[np.int64]) -> bool:
    """Whether carriage returns stand before line feeds only."""
    if b"\r" not in data:
        return True
    return bool(np.count_nonzero(raw == _CR) == np.count_nonzero(raw[np.maximum(ends - 1, 0)] == _CR))


def _decoded(path: Path, codec: str, told: Told | None, at_once: int) -> Iterator[bytes]:
    """The file's bytes as UTF-8, a block at a time, without byte order mark."""
    decoder = codecs.getincrementaldecoder(codec)()
    size = 0
    with opened(path, told) as file:
        while chunk := file.read(at_once if codec == "utf-8" else at_once // 2):  # as UTF-8 it may be longer
            size += len(chunk)
            if size > LARGEST_EXPANDED:
                raise ExportError(
                    f"{path.name}: expands to more than {LARGEST_EXPANDED >> 20} MiB",
                    remedy="Export shorter spans of time into several files.",
                )
            yield chunk if codec == "utf-8" else _transcoded(path, decoder, chunk)
    if codec != "utf-8":
        yield _transcoded(path, decoder, b"", final=True)


def _transcoded(
    path: Path, decoder: codecs.IncrementalDecoder, chunk: bytes, *, final: bool = False
) -> bytes:
    try:
        return decoder.decode(chunk, final).encode()
    except UnicodeError as error:
        raise ExportError(
            f"{path.name}: does not stay the text that it begins as ({error})",
            remedy="Export it again, as UTF-8.",
        ) from error


def _checked(path: Path, row: int, data: bytes) -> bytes:
    """The block if it is text."""
    if b"\0" in data:
        at = row + data.count(b"\n", 0, data.index(b"\0"))
        raise ExportError(
            f"{path.name}:{at}: holds NUL bytes, it is not text", remedy="Export as CSV text or as Parquet."
        )
    try:
        if not data.isascii():
            data.decode()
    except UnicodeDecodeError as error:
        at = row + data.count(b"\n", 0, error.start)
        raise ExportError(
            f"{path.name}:{at}: byte 0x{data[error.start]:02X} is not UTF-8, which the file begins as",
            remedy="Save the export as UTF-8.",
        ) from error
    return data


def _refuse_long_line(path: Path, row: int) -> None:
    raise ExportError(
        f"{path.name}:{row}: a line longer than {LONGEST_LINE >> 10} KiB",
        remedy="Export one row per time or per reading, with line ends.",
    )
