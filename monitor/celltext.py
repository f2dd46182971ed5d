"""Text that a spreadsheet shows as text: nothing from an export becomes a formula on its way out."""

from __future__ import annotations

import re

# OWASP, "CSV Injection": = + - @ tab and carriage return, also line feed and the full-width forms; NUL by its
# verification standard. `{=` begins a formula over a range where XLSX is written.
BEGINNINGS = ("=", "+", "-", "@", "\t", "\r", "\n", "\0", "＝", "＋", "－", "＠", "{=")  # noqa: RUF001
APOSTROPHE = "'"
_NUMBER = re.compile(r"[+-]?\d+([.,]\d+)?([eE][+-]?\d+)?")


def neutral(text: str) -> str:
    """Write an apostrophe before text that a spreadsheet would take for a formula.

    Every writer of CSV, XLSX or HTML tables sends each text of a tag, a file or a person through this;
    numbers are written as numbers and need it not. In CSV the field is quoted besides (RFC 4180).

    Parameters
    ----------
    text : str
        One cell.

    Returns
    -------
    str
        The same where it is harmless: a plain number such as -12.5 stays one.
    """
    if _NUMBER.fullmatch(text):
        return text
    risky = text.startswith(BEGINNINGS) or text.lstrip().startswith(BEGINNINGS)
    return APOSTROPHE + text if risky else text
