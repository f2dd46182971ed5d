"""Arrow columns as numpy arrays and back, straight from their buffers.

Arrow's own conversions import pandas on first use (0.3 s, 45 MB), which a pass over exports never needs.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import DTypeLike, NDArray

Look = Callable[[Sequence[int]], Iterator[tuple[NDArray[np.int64], list[Any]]]]
"""Given places of columns, one block after another until the export ends: its rows' numbers, its columns."""

# One column of a file without blocks; pa.array would import pandas here, which a look at a store need not.
NOTHING = (np.zeros(0, np.int64), [pa.nulls(0, pa.string())])


def single(column: Any) -> Any:
    """Hold a column's values in one array.

    Parameters
    ----------
    column : pyarrow.Array or pyarrow.ChunkedArray
        Any type.

    Returns
    -------
    pyarrow.Array
        The same values in the same order.
    """
    return column.combine_chunks() if isinstance(column, pa.ChunkedArray) else column


def plain(array: Any, dtype: DTypeLike) -> NDArray[Any]:
    """Show the values of a fixed-width Arrow array without a copy; where it is null the value is arbitrary.

    Parameters
    ----------
    array : pyarrow.Array (n,)
        Numbers or timestamps; dictionaries go through their `indices`.
    dtype : numpy dtype
        The dtype of the same width as the Arrow type.

    Returns
    -------
    numpy.ndarray (n,)
        Read-only view.
    """
    if len(array) == 0:
        return np.zeros(0, dtype)
    whole = np.frombuffer(array.buffers()[1], dtype, count=array.offset + len(array))
    return whole[array.offset :]


def present(array: Any) -> NDArray[np.bool_]:
    """Tell where an Arrow array is not null.

    Parameters
    ----------
    array : pyarrow.Array (n,)
        Any type with a validity bitmap.

    Returns
    -------
    numpy.ndarray of bool (n,)
        True where there is a value.
    """
    bits = array.buffers()[0]
    if bits is None or array.null_count == 0:
        return np.ones(len(array), np.bool_)
    raw = np.unpackbits(np.frombuffer(bits, np.uint8), bitorder="little", count=array.offset + len(array))
    return raw[array.offset :].astype(np.bool_)


def floats(array: Any) -> NDArray[np.float64]:
    """Turn a float64 column into an array with NaN where it is null.

    Parameters
    ----------
    array : pyarrow.DoubleArray (n,)
        Numbers.

    Returns
    -------
    numpy.ndarray of float64 (n,)
        A view where nothing is null, else a copy; NaN means null.
    """
    values = plain(array, np.float64)
    return np.where(present(array), values, np.nan) if array.null_count else values


def flags(array: Any) -> NDArray[np.bool_]:
    """Turn a boolean column into an array; null counts as False.

    Parameters
    ----------
    array : pyarrow.BooleanArray or pyarrow.ChunkedArray (n,)
        Answers of a test.

    Returns
    -------
    numpy.ndarray of bool (n,)
        True where the test said yes.
    """
    array = single(array)
    if len(array) == 0:
        return np.zeros(0, np.bool_)
    raw = np.frombuffer(array.buffers()[1], np.uint8)
    said = np.unpackbits(raw, bitorder="little", count=array.offset + len(array))[array.offset :]
    return said.astype(np.bool_) & present(array)


def coded(array: Any) -> tuple[NDArray[np.int32], Any]:
    """Split a column into codes and the distinct values they stand for.

    Parameters
    ----------
    array : pyarrow.Array or pyarrow.ChunkedArray (n,)
        Any type, dictionary-encoded or not.

    Returns
    -------
    codes : numpy.ndarray of int32 (n,)
        Places in `words`; -1 means null.
    words : pyarrow.Array
        The distinct values.
    """
    array = single(array)
    if not pa.types.is_dictionary(array.type):
        array = array.dictionary_encode()
    where = array.indices.cast(pa.int32())
    codes = plain(where, np.int32)
    return (np.where(present(where), codes, np.int32(-1)) if where.null_count else codes), array.dictionary


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


def said(column: Any, place: int) -> object:
    """Give what stands in one place of a column.

    Parameters
    ----------
    column : pyarrow.Array (n,)
        Any type.
    place : int
        0 to n - 1.

    Returns
    -------
    object
        Text for a time, since Arrow's times reach further than Python's; None for null.
    """
    one = column.slice(place, 1)
    if pa.types.is_timestamp(one.type):
        one = one.cast(pa.timestamp(one.type.unit)).cast(pa.string())
    return one[0].as_py()


def first_match(texts: Any, pattern: str) -> tuple[int, str] | None:
    """Find the first text that matches a pattern.

    Parameters
    ----------
    texts : pyarrow.StringArray
        Null matches nothing.
    pattern : str
        Regular expression of RE2.

    Returns
    -------
    tuple of int and str, or None
        Its place, and the text without the blanks around it.
    """
    found = flags(pc.match_substring_regex(texts, pattern))
    at = int(np.argmax(found)) if found.any() else -1
    return None if at < 0 else (at, texts[at].as_py().strip())


def matches(texts: Any, pattern: str) -> int:
    """Count the texts that match a pattern.

    Parameters
    ----------
    texts : pyarrow.StringArray
        Null matches nothing.
    pattern : str
        Regular expression of RE2.

    Returns
    -------
    int
        0 to n.
    """
    return int(np.count_nonzero(flags(pc.match_substring_regex(texts, pattern))))
