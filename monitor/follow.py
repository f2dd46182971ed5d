"""Stay and take in what arrives: look at folders, wait until files are at rest, run a pass when one is new.

Folders are listed every few seconds rather than watched: a listing also tells what other computers write
into a network share, of which this one is sent no notice. What was taken in is known from the store alone.
"""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from types import FrameType, TracebackType
from typing import Any, Self

from ingest.database import LEDGER
from ingest.errors import OutletError, StoreError
from ingest.intake import SUFFIXES
from ingest.shown import shown
from ingest.unit import Unit
from ingest.unitfile import load
from monitor.posting import post
from monitor.progress import Bar
from monitor.run import PassResult, run_pass
from monitor.tellnotices import troubles

LONGEST_S = 300.0  # between two tries of what does not succeed
LEFT = "left for the next pass"

Identity = tuple[int, int, int]  # size, times of the last change of content and of rights


@dataclass(slots=True)
class _Seen:
    """A file as it is since `since_s`; `pause_s` doubles with each try that left it where it was."""

    identity: Identity
    since_s: float
    is_done: bool = False
    not_before_s: float = 0.0
    pause_s: float = 0.0


@dataclass(slots=True)
class Arrivals:
    """The files of one place, and which of them are at rest and still to be taken in.

    A file is at rest when it was the same for so long at every look, by the clock of this process: the
    clock of a share and the time in a copied file say nothing about that.
    """

    settle_s: float
    _files: dict[Path, _Seen] = field(default_factory=dict)

    def see(self, listed: Mapping[Path, Identity], now_s: float) -> None:
        """Remember how the files look now; those that are gone are forgotten.

        Parameters
        ----------
        listed : mapping of Path to tuple of int
            From `listing`.
        now_s : float
            Of a clock that only goes forward [s].
        """
        known = self._files
        fresh = {path: _Seen(identity, now_s) for path, identity in listed.items()}
        same = {path for path, one in fresh.items() if path in known and known[path].identity == one.identity}
        self._files = {path: known[path] if path in same else one for path, one in fresh.items()}

    def new(self, now_s: float) -> list[Path]:
        """Give the files at rest that are to be taken in.

        Parameters
        ----------
        now_s : float
            As in `see`.

        Returns
        -------
        list of Path
        """
        waiting = ((path, one) for path, one in self._files.items() if not one.is_done)
        return [path for path, one in waiting if now_s >= max(one.since_s + self.settle_s, one.not_before_s)]

    def ask_again(self) -> None:
        """Have every file taken in anew, as when a unit file names other tags."""
        for one in self._files.values():
            one.is_done, one.not_before_s = False, 0.0

    def settle(self, paths: Sequence[Path], left: set[str], now_s: float) -> None:
        """Remember what became of files in a pass.

        Parameters
        ----------
        paths : sequence of Path
            That were given to it, also of other places.
        left : set of str
            Names, as they are shown, of those that it left; they are tried again later and later.
        now_s : float
            As in `see`.
        """
        for path in paths:
            one = self._files.get(path)
            if one is None:
                continue
            one.is_done = shown(path.name) not in left
            one.pause_s = min(max(2 * one.pause_s, self.settle_s, 1.0), LONGEST_S)
            one.not_before_s = now_s + one.pause_s


def listing(folder: Path) -> dict[Path, Identity]:
    """List the exports in a folder with what changes when they do; none is opened.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    dict of Path to tuple of int
        By name. A link or a pipe is listed too: a pass tells what is wrong with it. Folders inside are left
        alone.
    """
    with os.scandir(folder) as found:
        named = sorted(
            (one for one in found if one.name.lower().endswith(SUFFIXES)), key=lambda one: one.name
        )
        return {
            Path(one.path): _identity(one.stat(follow_symlinks=False)) for one in named if not _is_folder(one)
        }


def _is_folder(entry: os.DirEntry[str]) -> bool:
    return entry.is_dir(follow_symlinks=False)


def _identity(stat: os.stat_result) -> Identity:
    return stat.st_size, stat.st_mtime_ns, stat.st_ctime_ns


class Stop:
    """Turns SIGTERM into the interrupt that Ctrl+C is, so that a pass in its middle is given up whole."""

    def __init__(self) -> None:
        """Know that nobody has asked."""
        self.is_asked = False
        self._before: Any = None

    def __enter__(self) -> Self:
        """Listen to the signal."""
        self._before = signal.signal(signal.SIGTERM, self._ask)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Leave the signal to whoever had it before."""
        signal.signal(signal.SIGTERM, self._before)

    def _ask(self, number: int, frame: FrameType | None) -> None:
        if not self.is_asked:  # a second one does not disturb the clearing up
            self.is_asked = True
            raise KeyboardInterrupt

    def check(self) -> None:
        """Interrupt where the first interrupt was lost, as in a callback of a library."""
        if self.is_asked:
            raise KeyboardInterrupt


class Follower:
    """Takes in what arrives, look by look.

    Parameters
    ----------
    unit_files : sequence of Path
        Read again when they change; one with faults is told, and the unit as it was stays in use.
    store : Path
        Folder; made if it is not there.
    folders : sequence of Path
        Where exports arrive; one that is not there is told once and looked for again.
    settle : timedelta
        How long a file must be at rest.
    tell : callable
        Given each finished pass and the time zone of the plant.
    warn : callable
        Given what went wrong, in two lines, once.
    check : callable
        Called often during a pass; may interrupt it.
    """

    def __init__(
        self,
        unit_files: Sequence[Path],
        store: Path,
        folders: Sequence[Path],
        *,
        settle: timedelta,
        tell: Callable[[PassResult, str], None],
        warn: Callable[[str], None],
        check: Callable[[], None] = lambda: None,
    ) -> None:
        """Read the unit files; one that is faulty already now is an error."""
        self._units = {path: load(path) for path in unit_files}
        self._store = store
        settle_s = settle.total_seconds()
        self._unit_files = Arrivals(settle_s)
        self._folders = {folder: Arrivals(settle_s) for folder in folders}
        self._tell, self._warn, self._check = tell, warn, check
        self._told: dict[str, str] = {}
        self._is_due = False  # whether a pass is to be run even if no file is new
        self._pause_s = self._not_before_s = 0.0

    def look(self, now_s: float) -> None:
        """Look once, run a pass if there is something new, and send the notices that are due.

        Parameters
        ----------
        now_s : float
            Of a clock that only goes forward [s].
        """
        self._look_at_units(now_s)
        there = [place for folder, place in self._folders.items() if self._is_there(folder, place, now_s)]
        if now_s >= self._not_before_s:
            new = [path for place in there for path in place.new(now_s)]
            if new or self._is_due:
                self._run(new, now_s)
        if (self._store / LEDGER).exists():
            self._notify()

    def _look_at_units(self, now_s: float) -> None:
        """Read unit files that have changed, once they are at rest."""
        listed = dict(self._stats())
        self._unit_files.see(listed, now_s)
        changed = self._unit_files.new(now_s)
        self._unit_files.settle(changed, set(), now_s)
        for path in changed:
            try:
                self._units[path] = load(path)
            except OutletError as fault:
                self._warn(f"{fault}\n  Until then the unit is used as it was last read.")
            else:
                self._is_due, self._not_before_s = True, 0.0
                for place in self._folders.values():
                    place.ask_again()

    def _stats(self) -> Iterator[tuple[Path, Identity]]:
        """How the unit files look; one that is gone is told once."""
        for path in self._units:
            try:
                yield path, _identity(path.stat())
            except OSError as fault:
                self._once(str(path), f"{path}: {fault.strerror}\n  The unit is used as it was last read.")
            else:
                self._told.pop(str(path), None)

    def _is_there(self, folder: Path, place: Arrivals, now_s: float) -> bool:
        """List a folder; while it is away what is known of it stays."""
        try:
            listed = listing(folder)
        except OSError as fault:
            words = (
                f"{folder}: {fault.strerror or fault}\n  It is looked for again; check the name or the share."
            )
            self._once(str(folder), words)
            return False
        if self._told.pop(str(folder), None):
            self._warn(f"{folder}: is there again")
        place.see(listed, now_s)
        return True

    def _run(self, paths: Sequence[Path], now_s: float) -> None:
        """Run a pass; what fails for reasons outside is told once and tried again later and later."""
        try:
            result = self._pass(paths)
        except (OutletError, OSError) as fault:
            self._pause_s = min(max(2 * self._pause_s, 5.0), LONGEST_S)
            self._not_before_s = now_s + self._pause_s
            self._once("pass", str(fault))
            return
        self._told.pop("pass", None)
        self._pause_s, self._is_due = 0.0, False
        left = {one.name for one in result.exports if one.status == LEFT}
        for place in self._folders.values():
            place.settle(paths, left, now_s)
        self._say(result)

    def _pass(self, paths: Sequence[Path]) -> PassResult:
        with Bar() as bar:

            def progress(what: str, done: int, total: int) -> None:
                self._check()
                bar(what, done, total)

            units: list[Unit] = list(self._units.values())
            return run_pass(units, self._store, paths, progress=progress, settle=timedelta(0))

    def _say(self, result: PassResult) -> None:
        """Tell a pass, and what it set aside or could not read."""
        self._tell(result, next(iter(self._units.values())).time_zone)
        for one in result.set_aside:
            self._warn(one.words)
        for one in result.exports:
            if one.status == LEFT:
                self._once(one.name, f"{one.name}: {one.words}\n  It is tried again later.")
            else:
                self._told.pop(one.name, None)

    def _notify(self) -> None:
        """Send notices that are due; a target that takes none is told once, and again when it takes them."""
        try:
            results = post(self._units.values(), self._store, datetime.now(UTC))
        except StoreError as fault:
            self._once("notices", str(fault))
            return
        self._told.pop("notices", None)
        for one in results:
            what = f"notices to {one.unit}/{one.target}"
            for words in troubles([one]):
                self._once(what, words)
            if not one.trouble and self._told.pop(what, ""):
                self._warn(f"{what}: arrive again")

    def _once(self, what: str, words: str) -> None:
        """Tell a fault when it begins or becomes another one."""
        if self._told.get(what) != words:
            self._told[what] = words
            self._warn(words)


def keep_looking(follower: Follower, *, every: timedelta) -> None:
    """Look again and again, until interrupted.

    Parameters
    ----------
    follower : Follower
    every : timedelta
        From the end of one look to the next.
    """
    while True:
        follower.look(time.monotonic())
        time.sleep(every.total_seconds())
