"""The exact command line that serves the page: this machine only, nothing sent anywhere, both themes."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from pathlib import Path

SERVER = Path(__file__).with_name("server.py")
HOSTS = ("localhost", "127.0.0.1")
DEFAULT_PORT = 8640

# Each setting with the reason why the default is not good enough here.
SETTINGS: Mapping[str, str | tuple[str, ...]] = {
    "server.address": "127.0.0.1",  # the default is every interface
    "server.allowedHosts": HOSTS,  # else a rebound DNS name gets a websocket
    "server.headless": "true",  # opens no browser, asks for no e-mail address
    "server.fileWatcherType": "none",  # a plant's page does not reload with its source
    "server.enableStaticServing": "false",
    "server.enableCORS": "true",
    "server.enableXsrfProtection": "true",
    "server.xsrfCookieSameSite": "strict",
    "server.maxUploadSize": "1",  # nothing is uploaded
    "server.maxMessageSize": "50",
    "server.maxCacheDataSize": "256mb",
    "browser.gatherUsageStats": "false",
    "browser.serverAddress": "localhost",
    "client.toolbarMode": "minimal",
    "client.showErrorDetails": "none",  # a traceback names paths of the server
    "client.showErrorLinks": "false",  # links to other hosts
    "runner.magicEnabled": "false",
    "logger.level": "warning",
}

# Text and accent reach 4.5:1 on both of their theme's backgrounds (WCAG 2.2, 1.4.3).
THEMES: Mapping[str, Mapping[str, str]] = {
    "light": {
        "primaryColor": "#00607f",
        "backgroundColor": "#fcfdfc",
        "secondaryBackgroundColor": "#eef2f1",
        "textColor": "#1c2a33",
        "linkColor": "#00607f",
        "borderColor": "#ccd5d4",
    },
    "dark": {
        "primaryColor": "#58b4d1",
        "backgroundColor": "#131b20",
        "secondaryBackgroundColor": "#1d282e",
        "textColor": "#e4eaec",
        "linkColor": "#7cc6de",
        "borderColor": "#3a484f",
    },
}
SHAPE = {"baseRadius": "4px", "baseFontSize": "16", "showWidgetBorder": "true"}


def command(store: Path, units: Sequence[Path], port: int = DEFAULT_PORT) -> list[str]:
    """Give the command line that serves the page; run it with exec or subprocess, in any folder.

    The page reads the store and the unit files from the arguments behind `--`; no environment variable
    and no configuration file is needed.

    Parameters
    ----------
    store : Path
        Folder of the store; it may not exist yet.
    units : sequence of Path
        Unit files; at least one.
    port : int
        On 127.0.0.1.

    Returns
    -------
    list of str
        Begins with this Python.
    """
    flags = [
        part for key, value in {**SETTINGS, "server.port": str(port)}.items() for part in _flag(key, value)
    ]
    themes = [
        part
        for theme, colours in THEMES.items()
        for key, value in colours.items()
        for part in _flag(f"theme.{theme}.{key}", value)
    ]
    shape = [part for key, value in SHAPE.items() for part in _flag(f"theme.{key}", value)]
    ours = [str(store.resolve()), *(str(path.resolve()) for path in units)]
    return [sys.executable, "-m", "streamlit", "run", str(SERVER), *flags, *themes, *shape, "--", *ours]


def _flag(key: str, value: str | tuple[str, ...]) -> list[str]:
    """One flag; a list is given flag by flag."""
    values = (value,) if isinstance(value, str) else value
    return [f"--{key}={one}" for one in values]
