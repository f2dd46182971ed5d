"""A bar of progress with the time left, on the error stream and only where a person watches it."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Self

EXPORTS = "exports"  # the work that is counted in bytes; that on a unit is counted in steps
WIDTH = 24
CLEAR = "\r\x1b[K"
OFTEN_S = 0.1  # no eye follows more
_SIZES = ((1e9, "GB", 1), (1e6, "MB", 0), (1e3, "kB", 0))  # bytes in one, and decimals


class Bar:
    """Shows how far the work is; does nothing where the error stream is no terminal."""

    def __init__(self) -> None:
        """Start the clock."""
        self._shown = sys.stderr.isatty()
        self._what = ""
        self._begun = time.monotonic()
        self._written = 0.0

    def __enter__(self) -> Self:
        """Give the bar itself."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Leave a clean line behind."""
        if self._shown:
            sys.stderr.write(CLEAR)
            sys.stderr.flush()

    def __call__(self, what: str, done: int, total: int) -> None:
        """Show how far the work is, some times a second at most.

        Parameters
        ----------
        what : str
            What is being worked on; the time left counts from its first step.
        done, total : int
            Steps done, and steps in all as far as is known; of exports bytes.
        """
        if not self._shown:
            return
        now = time.monotonic()
        if what == self._what and done < total and now - self._written < OFTEN_S:
            return
        if what != self._what:
            self._what, self._begun = what, now
        told = line_of_bytes if what == EXPORTS else line
        sys.stderr.write(CLEAR + told(what, done, total, passed_s=now - self._begun))
        sys.stderr.flush()
        self._written = now


def line(what: str, done: int, total: int, *, passed_s: float) -> str:
    """Write one line of progress.

    Parameters
    ----------
    what : str
        What is being worked on.
    done, total : int
        Steps.
    passed_s : float
        Time since the first step [s].

    Returns
    -------
    str
        `line3  ######..................  3 of 12, 0:09 left`; without the time left before the first step.
    """
    left = f", {_left(done, total, passed_s)}" if done else ""
    return f"{what}  {_marks(done, total)}  {done} of {total}{left}"


def line_of_bytes(what: str, done: int, total: int, *, passed_s: float) -> str:
    """Write one line of progress of work that is counted in bytes.

    Parameters
    ----------
    what : str
        What is being read.
    done, total : int
        Bytes, as they are on disk.
    passed_s : float
        Time since the first byte [s].

    Returns
    -------
    str
        `exports  ###############.........  412 of 655 MB, 93 MB/s, 0:03 left`; without pace and time left
        before the first bytes.
    """
    per, unit, places = next((size for size in _SIZES if total >= size[0]), _SIZES[-1])
    counted = f"{what}  {_marks(done, total)}  {done / per:.{places}f} of {total / per:.{places}f} {unit}"
    if not done or passed_s <= 0:
        return counted
    return f"{counted}, {done / passed_s / 1e6:.0f} MB/s, {_left(done, total, passed_s)}"


def _marks(done: int, total: int) -> str:
    filled = WIDTH * done // max(total, 1)
    return "#" * filled + "." * (WIDTH - filled)


def _left(done: int, total: int, passed_s: float) -> str:
    left_s = round(passed_s * (total - done) / done)
    return f"{left_s // 60}:{left_s % 60:02d} left"
