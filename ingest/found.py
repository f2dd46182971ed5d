"""The exports that files and folders stand for: each once, by name; what is no file is told, not opened."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from ingest.errors import ExportError
from ingest.files import refusal


@dataclass(frozen=True, slots=True)
class Found:
    """Files to be read, and what stands where one could: its path with what is wrong with it."""

    files: tuple[Path, ...]
    refused: tuple[tuple[Path, ExportError], ...]


def found(paths: Iterable[Path], suffixes: tuple[str, ...]) -> Found:
    """Find the files that are meant.

    Parameters
    ----------
    paths : iterable of Path
        Files, whatever their names, and folders of which all exports are meant. One that is not there, or a
        folder that cannot be listed, raises an ExportError.
    suffixes : tuple of str
        How the names of exports end, in small letters.

    Returns
    -------
    Found
        By name; a file that is meant twice comes once.
    """
    files: dict[Path, Path] = {}
    refused: dict[Path, tuple[Path, ExportError]] = {}
    for path in paths:
        for one, mode in _meant(path, suffixes):
            place = one.parent.resolve() / one.name  # the name itself may be a link, which nobody follows
            fault = None if mode is None else refusal(one.name, mode)
            if fault is None:
                files[place] = one
            else:
                refused[place] = (one, fault)
    return Found(tuple(sorted(files.values(), key=_by_name)), tuple(refused.values()))


def _meant(path: Path, suffixes: tuple[str, ...]) -> Iterator[tuple[Path, int | None]]:
    """What a path stands for, with its mode; none where it vanished in the meantime."""
    try:
        mode = path.lstat().st_mode
        inside = _listed(path, suffixes) if path.is_dir() and not path.is_symlink() else None
    except (FileNotFoundError, NotADirectoryError) as error:
        raise ExportError(f"{path}: there is no such file or folder", remedy="Check the name.") from error
    except OSError as error:
        raise ExportError(
            f"{path}: cannot be opened ({error.strerror})", remedy="Check the name and the permissions."
        ) from error
    if inside is None:
        yield path, mode
    else:
        yield from ((one, _mode(one)) for one in inside)


def _listed(folder: Path, suffixes: tuple[str, ...]) -> list[Path]:
    return [one for one in folder.iterdir() if one.name.lower().endswith(suffixes)]


def _mode(path: Path) -> int | None:
    try:
        return path.lstat().st_mode
    except OSError:
        return None


def _by_name(path: Path) -> tuple[str, str]:
    return path.name, str(path)
