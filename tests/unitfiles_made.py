"""Unit files made from the demo file by a small edit."""

from __future__ import annotations

from pathlib import Path

from ingest import unitfile
from ingest.unit import Unit
from tests.source import ROOT

DEMO = (ROOT / "config/demo.toml").read_text(encoding="utf-8")


def with_edit(old: str, new: str, text: str = DEMO) -> str:
    """The text with the first place of some words changed; the words have to be there."""
    assert old in text, f"the demo file no longer holds {old!r}"
    return text.replace(old, new, 1)


def loaded(folder: Path, text: str) -> Unit:
    """The unit that a text describes."""
    path = folder / "made.toml"
    path.write_text(text, encoding="utf-8")
    return unitfile.load(path)
