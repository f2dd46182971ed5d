"""A bar of progress with the time left, on the error stream and only where a person watches it."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import Self

WIDTH = 24
CLEAR = "\r\x1b[K"


class Bar:
    """Shows how far the work is; does nothing where the error stream is no terminal."""

    def __init__(self) -> None:
        """Start the clock."""
        self._shown = sys.stderr.isatty()
        self._what = ""
        self._begun = time.monotonic()

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
        """Show one step.

        Parameters
        ----------
        what : str
            What is being worked on; the time left counts from its first step.
        done, total : int
            Steps done, and steps in all as far as is known.
        """
        if not self._shown:
            return
        if what != self._what:
            self._what, self._begun = what, time.monotonic()
        sys.stderr.write(CLEAR + line(what, done, total, passed_s=time.monotonic() - self._begun))
        sys.stderr.flush()


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
    filled = WIDTH * done // max(total, 1)
    left_s = round(passed_s * (total - done) / done) if done else None
    left = f", {left_s // 60}:{left_s % 60:02d} left" if left_s is not None else ""
    return f"{what}  {'#' * filled}{'.' * (WIDTH - filled)}  {done} of {total}{left}"
