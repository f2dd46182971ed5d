"""Values as exports write them: numbers, marks between thousands, words for "no value".

Which decimal mark an export uses is found from what has one meaning only, and refused where nothing tells.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, NoReturn

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ingest.account import INFINITE, NUMBER
from ingest.columns import Look, first_match, flags, floats, is_text, matches, present, single
from ingest.errors import ExportError
from ingest.unit import ExportRules

MISSING_WORDS = ("bad", "no data", "-", "#n/a", "err", "nan", "")  # whatever their capitals; common practice

MARKS = {".": "point", ",": "comma"}
_OTHER = {".": ",", ",": "."}
NUMBERS = {
    ".": r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$",
    ",": r"^[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?$",
}
_NOT_FINITE = r"^[+-]?(inf|infinity|nan)$"
_MINUS = "\u2212"
_SPACES = r"[\x{a0}\x{2009}\x{202f}]"  # no-break, thin, and narrow no-break

# With the decimal mark known, three digits apart can only be thousands; one mark throughout a number.
_GROUPED = {
    mark: rf"^[+-]?[1-9]\d{{0,2}}(([{other}]\d{{3}})+|( \d{{3}})+|('\d{{3}})+)([{mark}]\d*)?$"
    for mark, other in _OTHER.items()
}
_SIGN, _GROUP = r"^\s*[+\-\x{2212}]?", r"[1-9]\d{0,2}"
_DECIMALS = {mark: rf"{_SIGN}\d*[{mark}]\d+([eE][+-]?\d+)?\s*$" for mark in MARKS}
_EITHER = {mark: rf"{_SIGN}{_GROUP}[{mark}]\d{{3}}\s*$" for mark in MARKS}  # 1,234: 1.234 or 1234
_THOUSANDS = {
    mark: rf"{_SIGN}{_GROUP}(([{other} '\x{{2019}}\x{{a0}}\x{{2009}}\x{{202f}}]\d{{3}})+[{mark}]\d+"
    rf"|([{other}]\d{{3}}){{2,}})\s*$"
    for mark, other in _OTHER.items()
}

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

    @property
    def parts(self) -> str:
        """Give the mark that may part thousands since it is not the decimal mark."""
        return _OTHER[self.decimal]

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
        fits = flags(pc.match_substring_regex(text, NUMBERS[self.decimal])) & ~missing
        text, fits = self._ungrouped(text, fits, ~fits & ~missing)
        number = pc.if_else(pa.array(fits), text, pa.scalar(None, text.type))
        value = floats(single(pc.replace_substring(number, self.decimal, ".").cast(pa.float64())))
        odd = flags(pc.match_substring_regex(small, _NOT_FINITE)) | np.isinf(value)
        reason = np.where(missing | fits & ~odd, 0, np.where(odd, INFINITE, NUMBER)).astype(np.int8)
        return Values(self._emptied(value), np.where(missing, np.int8(0), reason), blank)

    def _ungrouped(
        self, text: Any, fits: NDArray[np.bool_], unclear: NDArray[np.bool_]
    ) -> tuple[Any, NDArray[np.bool_]]:
        """Leave the marks between thousands out of the numbers that have them."""
        if not unclear.any():
            return text, fits
        plainer = pc.replace_substring(pc.replace_substring_regex(text, _SPACES, " "), "\u2019", "'")
        grouped = flags(pc.match_substring_regex(plainer, _GROUPED[self.decimal])) & unclear
        if not grouped.any():
            return text, fits
        bare = pc.replace_substring_regex(plainer, f"[ '{_OTHER[self.decimal]}]", "")
        return pc.if_else(pa.array(grouped), bare, text), fits | grouped


def _is_number(text: str) -> bool:
    return re.fullmatch(NUMBERS["."], text) is not None


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
        mark = _mark(written)
        if mark is not None and rules.decimal in (None, mark):
            return Numbers(mark, missing, rules.state_words)
        if mark is not None:
            _refuse_mark(export, *_shown(rows, written, mark), mark)
        unclear = unclear or [shown for one in MARKS if (shown := _first(rows, written, _EITHER[one]))]
    if unclear and rules.decimal is None:
        _refuse_either_mark(export, *min(unclear))
    return Numbers(rules.decimal or ".", missing, rules.state_words)


def _mark(columns: Sequence[Any]) -> str | None:
    """The decimal mark that most numbers show which can be read in one way only."""
    point, comma = (
        sum(
            matches(c, _DECIMALS[mark]) - matches(c, _EITHER[mark]) + matches(c, _THOUSANDS[mark])
            for c in columns
        )
        for mark in MARKS
    )
    return None if point == comma else "." if point > comma else ","


def _first(rows: NDArray[np.int64], columns: Sequence[Any], pattern: str) -> tuple[int, str] | None:
    """Row and text of the topmost cell that matches a pattern."""
    found = (first_match(column, pattern) for column in columns)
    return min(((int(rows[match[0]]), match[1]) for match in found if match), default=None)


def _shown(rows: NDArray[np.int64], columns: Sequence[Any], mark: str) -> tuple[int, str]:
    """Row and text of the topmost cell with a decimal mark that can be read in one way only."""
    sure = [pc.if_else(pc.match_substring_regex(c, _EITHER[mark]), None, c) for c in columns]
    found = [_first(rows, sure, patterns[mark]) for patterns in (_DECIMALS, _THOUSANDS)]
    return min(one for one in found if one)


def _refuse_mark(export: str, row: int, text: str, mark: str) -> NoReturn:
    raise ExportError(
        f"{export}:{row}: {text!r} has a decimal {MARKS[mark]}, but decimal = {_OTHER[mark]!r} is stated",
        remedy="Mend or remove decimal under [exports] in the unit file.",
    )


def _refuse_either_mark(export: str, row: int, text: str) -> NoReturn:
    mark = "," if "," in text else "."
    meant, grouped = text.replace(",", "."), text.replace(mark, "")
    raise ExportError(
        f"{export}:{row}: {text!r} is {meant} with a decimal {MARKS[mark]} but"
        f" {grouped} with marks between thousands, and no number tells which",
        remedy=f"If {meant} is meant, write decimal = {mark!r} under [exports] in the unit file;"
        f" if {grouped} is, decimal = {_OTHER[mark]!r}.",
    )
