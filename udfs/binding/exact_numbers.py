"""Numbers of any type as doubles that never merge two of them.

A double holds every whole number up to 2^53 and every decimal of 15 digits. Where a column holds
more, its values are replaced by their ranks, which are small whole numbers again.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt
import pyarrow as pa

from midspread.udfs.declaring import Values

_EXACT_WHOLE: Final = 2**53
_EXACT_DECIMAL: Final = 10**15
_WORD: Final = 2.0**64

Words = npt.NDArray[np.int64] | npt.NDArray[np.uint64]


@dataclass(frozen=True)
class ExactNumbers:
    """A column of numbers made ready for kernels.

    Attributes
    ----------
    values : ndarray of float64
        The numbers, or their ranks among all numbers of the column.
    points : ndarray of float64
        The number behind each rank, rounded to a double; empty where values are the numbers.
    text : callable
        The exact number behind one of the values, as SQL prints it.
    """

    values: Values
    text: Callable[[float], str]
    points: Values = field(default_factory=lambda: np.empty(0))


def exact_numbers(array: Any, unsigned: bool = False) -> ExactNumbers:
    """Make an Arrow array of numbers ready; `unsigned` says how to read 128-bit words."""
    kind = array.type
    if pa.types.is_null(kind) or len(array) == 0:
        return ExactNumbers(np.empty(0), repr)
    if pa.types.is_float64(kind):
        return ExactNumbers(array.to_numpy(zero_copy_only=True), _float_text)
    if pa.types.is_floating(kind):
        single = array.to_numpy(zero_copy_only=True)
        return ExactNumbers(single.astype(np.float64), _single_text)
    if pa.types.is_integer(kind):
        return _whole_numbers(array.to_numpy(zero_copy_only=True), 0)
    return _decimals(array, unsigned)


def _whole_numbers(numbers: Words, scale: int) -> ExactNumbers:
    """Whole numbers of up to 64 bits, which count units of 10^−scale."""
    limit = _EXACT_DECIMAL if scale else _EXACT_WHOLE
    if -limit <= int(numbers.min()) and int(numbers.max()) <= limit:
        doubles = numbers.astype(np.float64)
        if scale:
            doubles /= 10.0**scale
        return ExactNumbers(doubles, lambda value: _text(round(value * 10**scale), scale))
    return _ranked((numbers,), numbers.astype(np.float64) / 10.0**scale, scale)


def _decimals(array: Any, unsigned: bool) -> ExactNumbers:
    """DECIMAL and the 128-bit integers."""
    precision, scale = array.type.precision, array.type.scale
    if not pa.types.is_decimal128(array.type):
        array = array.cast(pa.decimal128(precision, scale))
    words = np.frombuffer(array.buffers()[1], dtype=np.int64)
    words = words[2 * array.offset : 2 * (array.offset + len(array))].reshape(-1, 2)
    low, high = words[:, 0], words[:, 1]
    if (high == (low >> 63)).all() and not (unsigned and low.min() < 0):
        return _whole_numbers(np.ascontiguousarray(low), scale)
    below = np.ascontiguousarray(low).view(np.uint64)
    if unsigned:
        above = np.ascontiguousarray(high).view(np.uint64)
        points = above.astype(np.float64) * _WORD + below.astype(np.float64)
        return _ranked((below, above), points / 10.0**scale, scale)
    negative = high < 0
    size_below = np.where(negative, ~below + np.uint64(1), below)
    size_above = np.where(negative, ~high + (size_below == 0), high).view(np.uint64)
    points = size_above.astype(np.float64) * _WORD + size_below.astype(np.float64)
    points[negative] *= -1.0
    return _ranked((below, high), points / 10.0**scale, scale)


def _ranked(words: tuple[Any, ...], points: Values, scale: int) -> ExactNumbers:
    """Ranks of numbers made of 64-bit words, the last word the most significant."""
    order = np.lexsort(words)
    new = np.zeros(order.size, dtype=np.bool_)
    for word in words:
        ordered = word[order]
        new[1:] |= ordered[1:] != ordered[:-1]
    ranks = np.cumsum(new)
    values = np.empty(order.size)
    values[order] = ranks
    first = order[np.flatnonzero(np.concatenate(([True], new[1:])))]

    def text(value: float) -> str:
        at = first[int(value)]
        whole = 0
        for place, word in enumerate(words):
            whole += int(word[at]) << (64 * place)
        return _text(whole, scale)

    return ExactNumbers(values, text, points[first])


def _text(units: int, scale: int) -> str:
    if scale == 0:
        return str(units)
    whole, part = divmod(abs(units), 10**scale)
    return f"{'-' if units < 0 else ''}{whole}.{part:0{scale}d}"


def _float_text(value: float) -> str:
    return repr(float(value))


def _single_text(value: float) -> str:
    """The shortest form that reads back to the same FLOAT."""
    return repr(float(str(np.float32(value))))
