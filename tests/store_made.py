"""A small pass made by hand, and a child process that dies in the middle of one."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa

from ingest import passes, records
from ingest.ledger import Store
from ingest.parts import instant_us
from ingest.passes import Pass
from ingest.records import Export

ROOT = Path(__file__).resolve().parent.parent
HOUR = 3_600_000_000  # microseconds
JANUARY = instant_us(pd.Timestamp("2026-01-01T00:00Z"))
FEBRUARY = instant_us(pd.Timestamp("2026-02-01T00:00Z"))


def cells(first_us: int, values: list[float]) -> pa.Table:
    """One row an hour from `first_us`: start, value, condition."""
    start = first_us + HOUR * np.arange(len(values))
    columns = {"start": pa.array(start).cast(pa.timestamp("us", "UTC")), "value": pa.array(values)}
    return pa.table({**columns, "condition": pa.array(np.zeros(len(values), np.int8))})


def export(number: int, content: str, **changes: Any) -> Export:
    """An entry of the ledger for a file of so many times the letter `content`."""
    entry = {
        "number": number,
        "sha256": content * 64,
        "name": f"{content}.csv",
        "size": 64,
        "taken_at": "2026-03-01T00:00:00+00:00",
        "status": "taken",
        "error": "",
        "asked": {"tags": ["FI-1.PV"]},
        "account": {"readings": 3, "accepted": 3},
        "made_by": 1,
    }
    return Export(**{**entry, **changes})


def episodes_made() -> pd.DataFrame:
    """One episode that has ended and one that has not."""
    raised = pd.to_datetime(["2026-01-03T04:10:00Z", "2026-01-09T00:00:00Z"]).astype("datetime64[us, UTC]")
    cleared = pd.Series([pd.Timestamp("2026-01-03T09:00:00Z"), pd.NaT]).astype("datetime64[us, UTC]")
    return pd.DataFrame(
        {
            "watch": ["yield low", "closure high"],
            "window": pd.to_timedelta([8, 1], unit="h").astype("timedelta64[us]"),
            "raised": raised,
            "cleared": cleared,
            "worst": [71.25, np.nan],
            "steady": [True, False],
            "priority": np.array([0, 2], np.int8),
        }
    )


def fill(pass_: Pass) -> None:
    """Write two stages, one of them across two months, one export and two episodes."""
    pass_.splice("north", "cells", cells(FEBRUARY - 2 * HOUR, [1.0, 2.0, 3.0, 4.0]))
    pass_.write("north", "figures-1h", "2026-02", cells(FEBRUARY, [5.0]))
    pass_.record_export(export(1, "a", made_by=pass_.number))
    pass_.replace_episodes("north", episodes_made())


def die() -> None:
    """End as `kill -9` does: no handler, no clean-up."""
    os.kill(os.getpid(), signal.SIGKILL)


def _die_at(event: str, count: int) -> None:
    """Die just before the `count`-th call into the system of one kind."""
    left = [count]

    def hook(name: str, _: Any) -> None:
        if name == event:
            left[0] -= 1
            if left[0] == 0:
                die()

    sys.addaudithook(hook)


def _die_after(module: Any, name: str) -> None:
    """Die just after one function of the program has done its work."""
    real: Callable[..., Any] = getattr(module, name)

    def last(*args: Any, **kwargs: Any) -> None:
        real(*args, **kwargs)
        die()

    setattr(module, name, last)


# Where a pass can be killed: before a draft becomes a part, with everything on disk but no commit, inside
# the transaction, and after it with the clean-up undone.
DEATHS: dict[str, Callable[[], None]] = {
    "before the ledger is made": lambda: _die_at("sqlite3.connect", 2),
    "before the first part has its name": lambda: _die_at("os.rename", 1),
    "before the second part has its name": lambda: _die_at("os.rename", 2),
    "with all parts on disk": lambda: _die_after(passes.parts, "sync_folders"),
    "inside the transaction, parts named": lambda: _die_after(records, "write_parts"),
    "inside the transaction, all but the commit": lambda: _die_after(records, "write_episodes"),
    "after the commit": lambda: _die_after(passes.Pass, "_commit"),
}


def killed(folder: Path, death: str, body: str = "fill(pass_)") -> int:
    """Run a pass in a child that dies as told; give its exit code."""
    script = (
        f"from pathlib import Path\nfrom tests.store_made import *\n"
        f"DEATHS[{death!r}]()\nwith Store(Path({str(folder)!r})).begin() as pass_:\n    {body}\n"
    )
    return subprocess.run([sys.executable, "-c", script], cwd=ROOT, check=False).returncode


def undisturbed(folder: Path) -> Store:
    """A store after one pass that nothing disturbed."""
    store = Store(folder)
    with store.begin() as pass_:
        fill(pass_)
    return store
