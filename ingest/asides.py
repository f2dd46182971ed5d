"""Lines of a text export that hold no readings: the head but for the header, and sums below the rows."""

from __future__ import annotations

import re
from collections.abc import Collection

import numpy as np
from numpy.typing import NDArray

from ingest.account import Aside
from ingest.headings import TIME_LIKE, Heading, fields
from ingest.lines import Lines

_LF, _QUOTE = b'\n"'
# What a line of sums or of an end is called; common practice, no source.
_NAMES = re.compile(
    r"(min(imum)?|max(imum)?|avg|average|mean|sum|totals?|count|median|std(\.? ?dev(iation)?)?"
    r"|standard deviation|mittelwert|summe|anzahl|ende|eof|end"
    r"|end of (the )?(report|data|file|export|list|table)"
    r"|((total |number of )?rows|records|readings|lines)\W+\d+|\d+ (rows|records|readings|lines)\b.*)"
    r"( values?| rows?)?",
    re.IGNORECASE,
)
# Their first three letters, and marks that a line of readings does not begin with.
_WORDS = b"min max avg ave mea sum tot cou med std sta mit anz end eof row rec rea lin num".split()
_BEGINNINGS = [int.from_bytes(word) for word in _WORDS]
_MARKS = np.isin(np.arange(256), np.frombuffer(b"#*-=_(<[", np.uint8))
_NUMERIC = np.isin(np.arange(256), np.frombuffer(b"0123456789.,", np.uint8))


def without_sums(lines: Lines, separator: str, wanted: Collection[str]) -> Lines:
    """Move lines of sums and ends from the rows of readings to the lines that hold none.

    Parameters
    ----------
    lines : Lines
        Some lines of an export, none of its head.
    separator : str
        The character between fields.
    wanted : collection of str
        Tags somebody asked for; no line that begins with one is moved.

    Returns
    -------
    Lines
        The same object where there is nothing to move.
    """
    raw = np.frombuffer(lines.data, np.uint8)
    if len(raw) == 0:
        return lines
    ends = np.flatnonzero(raw == _LF)
    starts = np.append(0, ends[:-1] + 1)
    perhaps = _like_sums(raw, starts)
    texts = {int(i): lines.data[starts[i] : ends[i]].decode("utf-8", "replace") for i in perhaps}
    found = [i for i, text in texts.items() if _is_sum(fields(text.rstrip("\r"), separator), wanted)]
    if not found:
        return lines
    keep = np.ones(len(starts), np.bool_)
    keep[found] = False
    kept = raw[np.repeat(keep, np.diff(starts, append=len(raw)))].tobytes()
    asides = tuple(Aside(int(lines.rows[i]), "sums", texts[i].rstrip("\r")) for i in found)
    return Lines(kept, lines.rows[keep], lines.faults, (*lines.asides, *asides))


def _like_sums(raw: NDArray[np.uint8], starts: NDArray[np.int64]) -> NDArray[np.intp]:
    """Lines that begin, after a quote, like a word for a sum, or with a mark and no number."""
    last = len(raw) - 1
    worded = np.flatnonzero(~_NUMERIC[raw[starts]])
    at = starts[worded] + (raw[starts[worded]] == _QUOTE)
    first, second, third = (raw[np.minimum(at + i, last)] for i in range(3))
    small = [byte.astype(np.int64) | 0x20 for byte in (first, second, third)]
    word = np.isin((small[0] << 16) | (small[1] << 8) | small[2], _BEGINNINGS)
    found: NDArray[np.intp] = worded[word | (_MARKS[first] & ~_NUMERIC[second])]
    return found


def _is_sum(cells: Collection[str], wanted: Collection[str]) -> bool:
    """Whether a line is called a sum or an end, and has no time that a reading could be of."""
    name, *rest = cells
    if name in wanted or any(TIME_LIKE.fullmatch(cell) for cell in rest):
        return False
    return _NAMES.fullmatch(name.strip(" #*-=_()<>[]:.")) is not None


def of_heading(heading: Heading) -> tuple[Aside, ...]:
    """Give the lines of an export's head, its header left out.

    Parameters
    ----------
    heading : Heading
        Of a text export.

    Returns
    -------
    tuple of Aside
        In the order of the file.
    """
    above = (Aside(row, "above", text) for row, text in heading.above)
    below = (Aside(one.row, one.kind, heading.separator.join(one.cells)) for one in heading.below)
    return (*above, *below)
