"""What several test files share: a Chromium that is really there."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest

BROWSER_WORDS = ("CI", "OUTLET_NEED_BROWSER")


def _chromium() -> str | None:
    """Where Chromium is: OUTLET_CHROMIUM, Debian's place, or the search path."""
    named = os.environ.get("OUTLET_CHROMIUM")
    for candidate in (named, "/usr/bin/chromium", shutil.which("chromium"), shutil.which("chromium-browser")):
        if candidate and Path(candidate).exists():
            return candidate
    return None


def pytest_runtest_setup(item: pytest.Item) -> None:
    """Leave out what takes minutes, unless it is asked for."""
    if item.get_closest_marker("long") and not os.environ.get("OUTLET_LONG"):
        pytest.skip("takes minutes: set OUTLET_LONG=1 to run it")


@pytest.fixture(scope="session")
def chromium() -> str:
    """Path of a Chromium; a machine that must have one fails, any other skips with the reason."""
    path = _chromium()
    if path is None:
        reason = "no Chromium found: install Debian's package chromium, or set OUTLET_CHROMIUM to its path"
        if any(os.environ.get(word, "").lower() in ("1", "true") for word in BROWSER_WORDS):
            pytest.fail(reason)
        pytest.skip(reason)
    return path
