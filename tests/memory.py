"""How much memory a process held at most."""

from __future__ import annotations

from pathlib import Path


def peak_mb() -> float:
    """The most that this process held [MiB]; ru_maxrss would count its parent's at the fork as well."""
    status = Path("/proc/self/status").read_text(encoding="utf-8")
    return int(status.split("VmHWM:")[1].split()[0]) / 1024
