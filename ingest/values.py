"""Values and qualities as exports write them: numbers, words for "no value", quality words and codes.

Which of the ways an export uses is found from what has one meaning only, and refused where nothing tells.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Collection, Iterable, Sequence
from dataclasses import dataclass
from typing import Any, NoReturn

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest.account import INFINITE, NUMBER, QUALITY
from ingest.columns import Look, coded, first_match, flags, floats, matches, present, single
from ingest.errors import ExportError
from ingest.readings import BAD, GOOD, UNCERTAIN, UNKNOWN
from ingest.unit import ExportRules

MISSING_WORDS = ("bad", "no data", "-", "#n/a", "err", "")  # whatever their capitals; common practice

MARKS = {".": "point", ",": "comma"}
NUMBERS = {
    ".": r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$",
    ",": r"^[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?$",
}
_NOT_FINITE = r"^[+-]?(inf|infinity|nan)$"
_MINUS = "\u2212"

_GROUPED = r"^\s*[+\-\x{2212}]?[1-9]\d{0,2},\d{3}\s*$"  # 1,234: a decimal comma, or a mark between thousands
_POINT = r"^\s*[+\-\x{2212}]?\d*\.\d+([eE][+-]?\d+)?\s*$"
_COMMA = r"^\s*[+\-\x{2212}]?\d*,\d+([eE][+-]?\d+)?\s*$"

Codes = NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class Values:
    """(n,) values, NaN where there is none; a place in account.REASONS for each; which cells are blank."""

    value: NDArray[np.float64]
    reason: Codes
    blank: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Numbers:
    """How an export writes numbers: its decimal mark, and the words (small letters) for "no value"."""

    decimal: str
    missing: frozenset[str]
    states: tuple[tuple[str, float], ...] = ()  # words that stand for a number, whatever their capitals

    def read(self, column: Any) -> Values:
        """Read a column of values.

        Parameters
        ----------
        column : pyarrow.Array (n,)
            Text, or numbers where the reader could make them.

        Returns
        -------
        Values
            NaN without a reason means that the export has no value there.
        """
        column = single(column)
        if pa.types.is_dictionary(column.type):
            column = column.dictionary_decode()
        if is_text(column.type):
            return self._from_text(column)
        if pa.types.is_decimal(column.type):
            column = column.cast(
                pa.string()
            )  # Arrow's own way from decimal to float is off in the last digit
        value = self._emptied(floats(single(column.cast(pa.float64()))))
        reason = np.where(np.isinf(value), INFINITE, 0).astype(np.int8)
        return Values(value, reason, ~present(column))

    def _emptied(self, value: NDArray[np.float64]) -> NDArray[np.float64]:
        """Nothing in place of a number that stands for "no value", however many zeros follow its point."""
        codes = [float(w) for w in (word.replace(",", ".") for word in self.missing) if _is_number(w)]
        return np.where(np.isin(value, codes), np.nan, value) if codes else value

    def _from_text(self, column: Any) -> Values:
        text = pc.replace_substring(pc.utf8_trim_whitespace(column), _MINUS, "-")
        for word, number in self.states:
            written = pa.scalar(f"{number:.17g}".replace(".", self.decimal), text.type)
            text = pc.if_else(pc.equal(pc.utf8_lower(text), word.strip().lower()), written, text)
        small = pc.utf8_lower(text)
        blank = flags(pc.equal(small, "")) | ~present(text)
        missing = flags(pc.is_in(small, pa.array(sorted(self.missing), small.type))) | blank
        fits = pc.match_substring_regex(text, NUMBERS[self.decimal])
        number = pc.if_else(pc.and_(fits, pa.array(~missing)), text, pa.scalar(None, text.type))
        value = floats(single(pc.replace_substring(number, self.decimal, ".").cast(pa.float64())))
        odd = flags(pc.match_substring_regex(small, _NOT_FINITE)) | np.isinf(value)
        reason = np.where(missing | flags(fits) & ~odd, 0, np.where(odd, INFINITE, NUMBER)).astype(np.int8)
        return Values(self._emptied(value), np.where(missing, np.int8(0), reason), blank)


def _is_number(text: str) -> bool:
    return re.fullmatch(NUMBERS["."], text) is not None


def is_text(kind: Any) -> bool:
    """Tell whether an Arrow type holds text.

    Parameters
    ----------
    kind : pyarrow.DataType
        Any type.

    Returns
    -------
    bool
        True for every width of string.
    """
    return bool(pa.types.is_string(kind) or pa.types.is_large_string(kind) or pa.types.is_string_view(kind))


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


def decide_numbers(export: str, columns: Sequence[int], look: Look, rules: ExportRules) -> Numbers:
    """Find the decimal mark: the first block with numbers that can be read in one way only tells.

    Parameters
    ----------
    export : str
        Its name, for the error.
    columns : sequence of int
        Columns of values.
    look : callable
        Gives columns.
    rules : ExportRules
        Further words for "no value", and the mark of a file that does not tell.

    Returns
    -------
    Numbers
        Whole numbers only: with the mark of the rules, else with a decimal point.
    """
    missing = frozenset(word.strip().casefold() for word in (*MISSING_WORDS, *rules.missing_words))
    unclear: list[tuple[int, str]] = []
    for rows, block in look(columns) if columns else ():
        written = [column for column in block if is_text(column.type)]
        if not written:
            return Numbers(".", missing, rules.state_words)
        mark = _mark(written, settled=rules.decimal is not None)
        if mark is not None and rules.decimal in (None, mark):
            return Numbers(mark, missing, rules.state_words)
        if mark is not None:
            _refuse_mark(export, *_shown(rows, written, _COMMA if mark == "," else _POINT)[0], mark)
        unclear = unclear or _shown(rows, written, _GROUPED)
    if unclear and rules.decimal is None:
        _refuse_either_mark(export, *unclear[0])
    return Numbers(rules.decimal or ".", missing, rules.state_words)


def _mark(columns: Sequence[Any], *, settled: bool) -> str | None:
    """The decimal mark that most numbers show; `settled`: a comma is no mark between thousands."""
    point, comma = (sum(matches(c, pattern) for c in columns) for pattern in (_POINT, _COMMA))
    if not settled:
        comma -= sum(matches(c, _GROUPED) for c in columns)
    return None if point == comma else "." if point > comma else ","


def _shown(rows: NDArray[np.int64], columns: Sequence[Any], pattern: str) -> list[tuple[int, str]]:
    """Row and text of the first cell of each column that matches a pattern, the topmost first."""
    found = (first_match(column, pattern) for column in columns)
    return sorted((int(rows[match[0]]), match[1]) for match in found if match)


def _refuse_mark(export: str, row: int, text: str, mark: str) -> NoReturn:
    stated = "." if mark == "," else ","
    raise ExportError(
        f"{export}:{row}: {text!r} has a {MARKS[mark]}, which no number has with decimal = {stated!r}",
        remedy="Mend or remove decimal under [exports] in the unit file,"
        " or export without marks between thousands.",
    )


def _refuse_either_mark(export: str, row: int, text: str) -> NoReturn:
    meant = text.replace(",", ".")
    raise ExportError(
        f"{export}:{row}: {text!r} is {meant} with a decimal comma but"
        f" {text.replace(',', '')} with marks between thousands, and no number tells which",
        remedy=f"If {meant} is meant, write decimal = ',' under [exports] in the unit file;"
        " else export without marks between thousands.",
    )


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
        A key of values.QUALITY_FORMS; None without a quality column.
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
