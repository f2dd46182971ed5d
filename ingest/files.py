"""Regular files opened for reading, and nothing else: no link, pipe, socket, device or folder."""

from __future__ import annotations

import os
import stat
from collections.abc import Callable
from io import BufferedReader, FileIO
from pathlib import Path
from typing import TYPE_CHECKING

from ingest.errors import ExportError
from ingest.shown import shown

if TYPE_CHECKING:
    from _typeshed import WriteableBuffer

Told = Callable[[int], None]  # bytes of the file read so far

# A link is not followed and a pipe not waited for, even where one takes a file's place at the last moment.
_FLAGS = (
    os.O_RDONLY | getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)
)
_NO_FILES: tuple[tuple[Callable[[int], bool], str, str], ...] = (
    (stat.S_ISLNK, "is a link, not a file", "Name the file or folder that it leads to."),
    (stat.S_ISDIR, "is a folder, not an export", "Name the files inside it."),
    (stat.S_ISFIFO, "is a pipe, not a file", "Write the export to a file and give that."),
    (stat.S_ISSOCK, "is a socket, not a file", "Write the export to a file and give that."),
    (stat.S_ISCHR, "is a device, not a file", "Write the export to a file and give that."),
    (stat.S_ISBLK, "is a device, not a file", "Write the export to a file and give that."),
)


def refusal(name: str, mode: int) -> ExportError | None:
    """Say why something that stands where an export could is none.

    Parameters
    ----------
    name : str
        As it is called.
    mode : int
        From `lstat`, a link not followed.

    Returns
    -------
    ExportError or None
        None for a regular file.
    """
    for fits, what, remedy in _NO_FILES:
        if fits(mode):
            return ExportError(f"{shown(name)}: {what}", remedy=remedy)
    return None


def opened(path: Path, told: Told | None = None) -> BufferedReader:
    """Open a regular file; anything else is refused without being read, waited for or followed.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    told : callable or None
        Told the bytes read so far, after each read from the disk.

    Returns
    -------
    binary file
        To be closed. ExportError where it is no regular file, OSError where the system refuses it.
    """
    return BufferedReader(_Raw(path, told))


class _Raw(FileIO):
    """A regular file that tells how much of it was read."""

    def __init__(self, path: Path, told: Told | None) -> None:
        super().__init__(path, "rb", opener=_descriptor)
        self._told = told
        self._count = 0

    def readinto(self, buffer: WriteableBuffer, /) -> int | None:
        """Read as the system does, and tell."""
        count = super().readinto(buffer)
        if self._told is not None and count:
            self._count += count
            self._told(self._count)
        return count


def _descriptor(path: str, _: int) -> int:
    """Open without following and without waiting, and look at what was opened, not at its name."""
    fault = refusal(Path(path).name, os.lstat(path).st_mode)
    if fault is not None:
        raise fault
    descriptor = os.open(path, _FLAGS)
    fault = refusal(Path(path).name, os.fstat(descriptor).st_mode)
    if fault is not None:
        os.close(descriptor)
        raise fault
    return descriptor
