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


# N2 + 3 H2 = 2 NH3 with methane that takes no part: a unit file up to its species; streams follow.
AMMONIA = """
[unit]
name = "made for the test"
time_zone = "UTC"
reactor = "packed bed"
windows = ["1h"]

[chemistry]
key_reactant = "nitrogen"
wanted = "ammonia"
unwanted = []
inert = ["methane"]
key_element = "N"

[chemistry.species]
nitrogen = "N2"
hydrogen = "H2"
ammonia = "NH3"
methane = "CH4"
"""
