"""What the commands print about summaries and what people leave out of them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import asdict
from typing import Any

from monitor.summary.batch import Done


def as_table(done: Sequence[Done]) -> dict[str, Any]:
    """Give what became of each unit as JSON knows it.

    Parameters
    ----------
    done : sequence of Done

    Returns
    -------
    dict
    """
    rows = [asdict(one) for one in done]
    return {
        "summaries": [
            {**row, "unit_file": str(row["unit_file"]), "files": [str(path) for path in row["files"]]}
            for row in rows
        ]
    }


def made(done: Sequence[Done]) -> Iterable[str]:
    """Tell what became of each unit; faults are told on the error stream.

    Parameters
    ----------
    done : sequence of Done

    Returns
    -------
    iterable of str
    """
    for one in done:
        if one.fault:
            continue
        yield f"{one.unit_file.stem}: {one.span}, {_standing(one)}"
        if one.no_data_h > 0:
            yield f"  {one.no_data_h:g} h of it are without data: what comes in later makes another revision"
        singles = [path for path in one.files if path.suffix in (".xlsx", ".html")]
        yield from (f"  {path}" for path in singles)
        folders = sorted({path.parent for path in one.files if path not in singles})
        yield from (
            f"  {folder}: {sum(path.parent == folder for path in one.files)} tables" for folder in folders
        )


def _standing(one: Done) -> str:
    """Say which revision it is and whether it is new."""
    if not one.revision:
        return "draft, nothing is kept in the store"
    if not one.is_new:
        return f"revision {one.revision}, as it was issued"
    changed = f"; it changes {one.changed} entries of the one before" if one.revision > 1 else ""
    return f"revision {one.revision}, issued now{changed}"
