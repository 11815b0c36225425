"""Resamples of sorted values, drawn as counts or as sums; n values drawn n times.

A resample is multinomial: how often each value is drawn. Over long runs of values the number of
draws that fall in each block is drawn first, by binomial splitting, which is exact; what is drawn
within a block then stays in the processor's cache. Nearly all blocks hold a power of 2 of values,
so that each sixteen bits of a random word are a number within them; in the others whole numbers
below a bound are exactly uniform (Lemire 2019).
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.resampling.randomness import mixed
from midspread.udfs.resampling.variates import GOLDEN, HALF, LOW_HALF, binomial

Counts = npt.NDArray[np.int32]
Words = npt.NDArray[np.uint64]

BLOCK: Final = 4096
SMALLEST: Final = 256
"""Values in the largest and the smallest block that is a power of 2."""
WORDS: Final = 512
"""Random words made at once: a processor makes many side by side faster than one by one."""
SPARE: Final = 3
"""Room that a written resample needs behind its end."""
_SIXTEEN: Final = np.uint64(16)
_ONE: Final = np.uint64(1)
_EIGHT: Final = np.uint64(8)


@compiled
def clear(counts: Counts) -> None:
    """Set all to 0."""
    for i in range(counts.size):
        counts[i] = 0


@compiled
def block_size(values: int) -> int:
    """How many of the values still to come make up the next block."""
    size = BLOCK
    while size > values and size > SMALLEST:
        size //= 2
    return min(size, values)


@compiled
def _fill(state: np.uint64, words: Words, size: int) -> np.uint64:
    """Make words of four numbers below a power of 2 each."""
    mask = np.uint64(size) - _ONE
    mask |= mask << _SIXTEEN
    mask |= mask << HALF
    for i in range(words.size):
        state = state + GOLDEN
        words[i] = mixed(state) & mask
    return state


@compiled
def count_draws(state: np.uint64, counts: Counts, draws: int, words: Words) -> np.uint64:
    """Draw so many times from as many values as there are counts, and count."""
    size = counts.size
    if size < SMALLEST or size & (size - 1) != 0:
        return count_few_draws(state, counts, draws)
    numbers = words.view(np.uint16)
    left = draws
    while left > 0:
        now = min(left, numbers.size)
        state = _fill(state, words[: (now + 3) // 4], size)
        for k in range(np.uint64(now)):
            counts[numbers[k]] += 1
        left -= now
    return state


@compiled
def count_few_draws(state: np.uint64, counts: Counts, draws: int) -> np.uint64:
    """As `count_draws`, from any number of values."""
    size = counts.size
    if size == 1:
        counts[0] += draws
        return state
    span = np.uint64(size)
    unfair = np.uint64((1 << 32) % size)
    left = draws
    while left >= 2:
        state = state + GOLDEN
        bits = mixed(state)
        low = (bits & LOW_HALF) * span
        high = (bits >> HALF) * span
        if (low & LOW_HALF) >= unfair:
            counts[low >> HALF] += 1
            left -= 1
        if (high & LOW_HALF) >= unfair:
            counts[high >> HALF] += 1
            left -= 1
    while left >= 1:
        state = state + GOLDEN
        low = (mixed(state) & LOW_HALF) * span
        if (low & LOW_HALF) >= unfair:
            counts[low >> HALF] += 1
            left -= 1
    return state


@compiled
def resample_into(
    state: np.uint64, counts: Counts, words: Words, x: Values, y: Values
) -> np.uint64:
    """Write a resample of sorted x into y, sorted; counts and words are scratch.

    y holds SPARE more than x: a value is written three times and then overwritten, as guessing
    how often it was drawn costs more.
    """
    n = x.size
    left = n
    at = 0
    start = 0
    while start < n:
        stop = start + block_size(n - start)
        own = left
        if stop < n:
            own, state = binomial(state, left, (stop - start) / (n - start))
        left -= own
        block = counts[: stop - start]
        clear(block)
        state = count_draws(state, block, own, words)
        for i in range(stop - start):
            value = x[start + i]
            y[at] = value
            y[at + 1] = value
            y[at + 2] = value
            end = at + block[i]
            for place in range(at + SPARE, end):
                y[place] = value
            at = end
        start = stop
    return state


@compiled
def resample_rows(
    state: np.uint64, counts: Counts, words: Words, rows: npt.NDArray[np.int64]
) -> np.uint64:
    """Write the row numbers of a resample, ascending, as `resample_into` does."""
    n = rows.size - SPARE
    left = n
    at = 0
    start = 0
    while start < n:
        stop = start + block_size(n - start)
        own = left
        if stop < n:
            own, state = binomial(state, left, (stop - start) / (n - start))
        left -= own
        block = counts[: stop - start]
        clear(block)
        state = count_draws(state, block, own, words)
        for i in range(stop - start):
            rows[at] = start + i
            rows[at + 1] = start + i
            rows[at + 2] = start + i
            end = at + block[i]
            for place in range(at + SPARE, end):
                rows[place] = start + i
            at = end
        start = stop
    return state


@compiled
def sum_draws(
    state: np.uint64, v: Values, draws: int, words: Words, with_squares: bool
) -> tuple[float, float, np.uint64]:
    """Draw so many times from v: the sum and, if wanted, the sum of squares of what is drawn."""
    n = v.size
    total = squares = 0.0
    left = draws
    start = 0
    while start < n and left > 0:
        size = block_size(n - start)
        own = left
        if start + size < n:
            own, state = binomial(state, left, size / (n - start))
        left -= own
        part, square, state = sum_of_block(state, v[start : start + size], own, words, with_squares)
        total += part
        squares += square
        start += size
    return total, squares, state


@compiled
def sum_of_block(
    state: np.uint64, v: Values, draws: int, words: Words, with_squares: bool
) -> tuple[float, float, np.uint64]:
    """As `sum_draws`, all from one block."""
    if v.size < SMALLEST:
        return _sums_of_any_block(state, v, draws)
    if with_squares:
        return _sums_of_block(state, v, draws, words)
    total, state = _sum_of_block(state, v, draws, words)
    return total, 0.0, state


@compiled
def _sum_of_block(state: np.uint64, v: Values, draws: int, words: Words) -> tuple[float, np.uint64]:
    """Of a power of 2 of values; numbers without a sign, which need no look at negative places."""
    numbers = words.view(np.uint16)
    s0 = s1 = 0.0
    left = draws
    while left > 0:
        now = min(left, numbers.size)
        state = _fill(state, words[: (now + 3) // 4], v.size)
        for eighth in range(np.uint64(now // 8)):
            k = eighth * _EIGHT
            a, b = v[numbers[k]], v[numbers[k + np.uint64(1)]]
            c, d = v[numbers[k + np.uint64(2)]], v[numbers[k + np.uint64(3)]]
            s0 += (a + b) + (c + d)
            a, b = v[numbers[k + np.uint64(4)]], v[numbers[k + np.uint64(5)]]
            c, d = v[numbers[k + np.uint64(6)]], v[numbers[k + np.uint64(7)]]
            s1 += (a + b) + (c + d)
        for rest in range(np.uint64(now // 8 * 8), np.uint64(now)):
            s0 += v[numbers[rest]]
        left -= now
    return s0 + s1, state


@compiled
def _sums_of_block(
    state: np.uint64, v: Values, draws: int, words: Words
) -> tuple[float, float, np.uint64]:
    """As `_sum_of_block`, with squares."""
    numbers = words.view(np.uint16)
    total = squares = 0.0
    left = draws
    while left > 0:
        now = min(left, numbers.size)
        state = _fill(state, words[: (now + 3) // 4], v.size)
        for quarter in range(np.uint64(now // 4)):
            k = quarter * np.uint64(4)
            a, b = v[numbers[k]], v[numbers[k + np.uint64(1)]]
            c, d = v[numbers[k + np.uint64(2)]], v[numbers[k + np.uint64(3)]]
            total += (a + b) + (c + d)
            squares += (a * a + b * b) + (c * c + d * d)
        for rest in range(np.uint64(now // 4 * 4), np.uint64(now)):
            a = v[numbers[rest]]
            total += a
            squares += a * a
        left -= now
    return total, squares, state


@compiled
def _sums_of_any_block(state: np.uint64, v: Values, draws: int) -> tuple[float, float, np.uint64]:
    """Two numbers below any bound from each word."""
    span = np.uint64(v.size)
    unfair = np.uint64((1 << 32) % v.size)
    s0 = s1 = q0 = q1 = 0.0
    left = draws
    while left >= 2:
        state = state + GOLDEN
        bits = mixed(state)
        low = (bits & LOW_HALF) * span
        high = (bits >> HALF) * span
        if (low & LOW_HALF) >= unfair:
            a = v[low >> HALF]
            s0 += a
            q0 += a * a
            left -= 1
        if (high & LOW_HALF) >= unfair:
            b = v[high >> HALF]
            s1 += b
            q1 += b * b
            left -= 1
    while left >= 1:
        state = state + GOLDEN
        low = (mixed(state) & LOW_HALF) * span
        if (low & LOW_HALF) >= unfair:
            a = v[low >> HALF]
            s0 += a
            q0 += a * a
            left -= 1
    return s0 + s1, q0 + q1, state
