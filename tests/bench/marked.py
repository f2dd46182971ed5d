"""Tables of measurements in Markdown: printed, or put between two marks of DEVELOPERS.md."""

from __future__ import annotations

import re
import sys
from collections.abc import Sequence
from pathlib import Path

DOCUMENT = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"


def table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table."""
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def show(name: str, text: str) -> None:
    """Print a table; `--write` puts it between the lines `<!-- NAME -->` and `<!-- end NAME -->`."""
    sys.stdout.write(f"{text}\n")
    if "--write" in sys.argv:
        first, last = f"<!-- {name} -->", f"<!-- end {name} -->"
        between = re.compile(f"{re.escape(first)}.*?{re.escape(last)}", re.DOTALL)
        whole, count = between.subn(lambda _: f"{first}\n{text}\n{last}", DOCUMENT.read_text("utf-8"))
        if count != 1:
            sys.exit(f"{DOCUMENT.name}: write {first} and {last} on two lines where the table shall stand")
        DOCUMENT.write_text(whole, "utf-8")
