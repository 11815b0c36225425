"""Resamples of sorted values, drawn as counts or as sums; n values drawn n times.

A resample is multinomial: how often each value is drawn. Over long runs of values the number of
draws that fall in each block is drawn first, by binomial splitting, which is exact; what is drawn
within a block then stays in the processor's cache. Whole numbers below a bound are exactly uniform
(Lemire 2019).
"""

from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.declaring import Values, compiled
from midspread.udfs.resampling.randomness import mixed
from midspread.udfs.resampling.variates import GOLDEN, HALF, LOW_HALF, binomial

Counts = npt.NDArray[np.int32]

BLOCK: Final = 4096
SMALLEST: Final = 256
"""Values in the largest and the smallest block that is a power of 2: bits of a word are numbers
within it."""
SPARE: Final = 3
"""Room that a written resample needs behind its end."""
_BITS: Final = np.uint64(12)
_TWICE: Final = np.uint64(24)
_THRICE: Final = np.uint64(36)
_FOURFOLD: Final = np.uint64(48)


@compiled
def clear(counts: Counts) -> None:
    """Set all to 0."""
    for i in range(counts.size):
        counts[i] = 0


@compiled
def count_draws(state: np.uint64, counts: Counts, draws: int) -> np.uint64:
    """Draw so many times from as many values as there are counts, and count."""
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
def resample_into(state: np.uint64, counts: Counts, x: Values, y: Values) -> np.uint64:
    """Write a resample of sorted x into y, sorted; counts is scratch for a block.

    y holds SPARE more than x: a value is written three times and then overwritten, as guessing
    how often it was drawn costs more.
    """
    n = x.size
    left = n
    at = 0
    start = 0
    while start < n:
        stop = min(start + BLOCK, n)
        own = left
        if stop < n:
            own, state = binomial(state, left, (stop - start) / (n - start))
        left -= own
        block = counts[: stop - start]
        clear(block)
        state = count_draws(state, block, own)
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
def resample_rows(state: np.uint64, counts: Counts, rows: npt.NDArray[np.int64]) -> np.uint64:
    """Write the row numbers of a resample, ascending, as `resample_into` does."""
    n = rows.size - SPARE
    left = n
    at = 0
    start = 0
    while start < n:
        stop = min(start + BLOCK, n)
        own = left
        if stop < n:
            own, state = binomial(state, left, (stop - start) / (n - start))
        left -= own
        block = counts[: stop - start]
        clear(block)
        state = count_draws(state, block, own)
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
    state: np.uint64, v: Values, draws: int, with_squares: bool
) -> tuple[float, float, np.uint64]:
    """Draw so many times from v: the sum and, if wanted, the sum of squares of what is drawn."""
    n = v.size
    total = squares = 0.0
    left = draws
    start = 0
    while start < n and left > 0:
        size = BLOCK
        while size > n - start and size > SMALLEST:
            size //= 2
        size = min(size, n - start)
        own = left
        if start + size < n:
            own, state = binomial(state, left, size / (n - start))
        left -= own
        block = v[start : start + size]
        if with_squares or size < SMALLEST:
            part, square, state = _sums_of_any_block(state, block, own)
            squares += square
        else:
            part, state = _sum_of_block(state, block, own)
        total += part
        start += size
    return total, squares, state


@compiled
def _sum_of_block(state: np.uint64, v: Values, draws: int) -> tuple[float, np.uint64]:
    """Five numbers from each word, below a size that is a power of 2 up to 4096."""
    mask = np.uint64(v.size - 1)
    s0 = s1 = 0.0
    for _ in range(draws // 5):
        state = state + GOLDEN
        bits = mixed(state)
        s0 += v[bits & mask] + v[(bits >> _BITS) & mask]
        s1 += v[(bits >> _TWICE) & mask] + v[(bits >> _THRICE) & mask]
        s0 += v[(bits >> _FOURFOLD) & mask]
    state = state + GOLDEN
    bits = mixed(state)
    for _ in range(draws % 5):
        s1 += v[bits & mask]
        bits >>= _BITS
    return s0 + s1, state


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
