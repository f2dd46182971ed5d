"""Qualities as exports write them: words, OPC UA status codes, OPC DA qualities.

Which of the three an export uses is found from what has one meaning only, and refused where nothing tells.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ingest.account import QUALITY
from ingest.columns import Look, coded, single
from ingest.errors import ExportError
from ingest.readings import BAD, GOOD, UNCERTAIN, UNKNOWN
from ingest.unit import ExportRules

Codes = NDArray[np.int8]


def quality_of_word(text: str) -> int | None:
    """Give the quality that a word states; the symbolic names of OPC UA begin with one of the three.

    Parameters
    ----------
    text : str
        As it stands in the file.

    Returns
    -------
    int or None
        A place in readings.QUALITIES; None where the word says none.
    """
    word = text.strip().casefold()
    for start, quality in (("good", GOOD), ("uncertain", UNCERTAIN), ("bad", BAD)):
        if word.startswith(start):
            return quality
    return {"": UNKNOWN, "unknown": UNKNOWN, "ok": GOOD}.get(word)


def quality_of_opc_ua(text: str) -> int | None:
    """Give the quality of an OPC UA status code, by its top two bits alone.

    Source: OPC UA Part 4 (IEC 62541-4): 00 good, 01 uncertain, 10 bad, 11 reserved.

    Parameters
    ----------
    text : str
        Decimal (signed or not) or hexadecimal with 0x.

    Returns
    -------
    int or None
        A place in readings.QUALITIES; None where it is no code.
    """
    code = whole(text)
    if code is None:
        return None if text.strip() else UNKNOWN
    if not -(2**31) <= code < 2**32:
        return None
    return {0: GOOD, 1: UNCERTAIN, 2: BAD}.get((code & 0xFFFFFFFF) >> 30)


def quality_of_opc_da(text: str) -> int | None:
    """Give the quality of an OPC Data Access quality word, by the mask 0xC0.

    Source: layout QQSSSSLL of its low byte as in OPC UA Part 8, A.3.2.3; QQ = 10 is not in use.

    Parameters
    ----------
    text : str
        Decimal or hexadecimal with 0x.

    Returns
    -------
    int or None
        A place in readings.QUALITIES; None where it is no code.
    """
    code = whole(text)
    if code is None:
        return None if text.strip() else UNKNOWN
    if not 0 <= code < 2**16:
        return None
    return {0xC0: GOOD, 0x40: UNCERTAIN, 0x00: BAD}.get(code & 0xC0)


QUALITY_FORMS: dict[str, Callable[[str], int | None]] = {
    "words": quality_of_word,
    "opc ua": quality_of_opc_ua,
    "opc da": quality_of_opc_da,
}


def whole(text: str) -> int | None:
    """Read a whole number, decimal or hexadecimal with 0x.

    Parameters
    ----------
    text : str
        '192', '0xC0', '192.0', '-2147483648'.

    Returns
    -------
    int or None
        None where the text is no whole number.
    """
    text = text.strip().casefold().removesuffix(".0")
    try:
        return int(text, 16) if text.startswith("0x") else int(text)
    except ValueError:
        return None


def read_qualities(column: Any, form: str) -> tuple[Codes, Codes]:
    """Read a column of qualities; each distinct text is looked up once.

    Parameters
    ----------
    column : pyarrow.Array (n,)
        Text or whole numbers.
    form : str
        A key of QUALITY_FORMS.

    Returns
    -------
    quality : numpy.ndarray of int8 (n,)
        Places in readings.QUALITIES; unknown where the cell is empty.
    reason : numpy.ndarray of int8 (n,)
        Places in account.REASONS.
    """
    codes, words = coded(column)
    found = [QUALITY_FORMS[form](text) for text in texts(words)]
    table = np.array([UNKNOWN if q is None else q for q in found] + [UNKNOWN], np.int8)
    wrong = np.array([QUALITY if q is None else 0 for q in found] + [0], np.int8)
    return table[codes], wrong[codes]


def texts(words: Any) -> Iterable[str]:
    """Give distinct values of a column as text.

    Parameters
    ----------
    words : pyarrow.Array
        Text or numbers.

    Returns
    -------
    iterable of str
        Nothing in place of null.
    """
    return ("" if word is None else str(word) for word in words.to_pylist())


def decide_quality(place: str, column: int | None, look: Look, rules: ExportRules) -> str | None:
    """Find how the export writes quality, unless the unit file says it.

    Parameters
    ----------
    place : str
        `file` or `file:row`, for the error.
    column : int or None
        The quality column.
    look : callable
        Gives columns.
    rules : ExportRules
        Its `quality` stands above what is found.

    Returns
    -------
    str or None
        A key of QUALITY_FORMS; None without a quality column.
    """
    if column is None:
        return None
    if rules.quality is not None:
        return rules.quality
    seen: set[str] = set()
    for _, (qualities,) in look([column]):
        seen |= {text.strip() for text in texts(single(qualities).unique())} - {""}
        forms = _quality_forms(seen)
        if len(forms) == 1:
            return forms[0]
        if forms:
            break
    if not seen:
        return "words"
    sample = ", ".join(repr(text) for text in sorted(seen)[:4])
    raise ExportError(
        f"{place}: nothing tells whether qualities such as {sample} are words, OPC UA status codes"
        " (0 is good) or OPC DA qualities (0 is bad)",
        remedy="Set quality under [exports] in the unit file to 'words', 'opc ua' or 'opc da'.",
    )


def _quality_forms(seen: Collection[str]) -> list[str]:
    """The forms for which there is something that no other form could mean.

    OPC UA codes keep their meaning in the upper 16 of 32 bits, OPC DA qualities have 16 bits in all with good
    and uncertain in 0xC0. Small numbers without those bits mean something else in each house.
    """
    codes = [code for code in map(whole, seen) if code is not None]
    forms = []
    if any(quality_of_word(text) is not None for text in seen):
        forms.append("words")
    if any(code < 0 or code >= 2**16 for code in codes):
        forms.append("opc ua")
    if any(0 < code < 2**16 and code & 0xC0 in (0x40, 0xC0) for code in codes):
        forms.append("opc da")
    return forms
