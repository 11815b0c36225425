"""What `value_profile` counts among one group's sorted values, and the codes it suspects."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import distance, fourth_depth, midpoint
from midspread.udfs.declaring import Values, compiled

MOST_SUSPECTS: Final = 8
"""At most so many suspected sentinels are listed for one column and group."""

COUNTS: Final = (
    "n_nan",
    "n_infinite",
    "n_zero",
    "n_negative",
    "n_distinct",
    "most_frequent",
    "most_frequent_count",
)
"""What `count_values` writes first; pairs of a suspect and its count follow."""

_FAR: Final = 3.0
_REPEATED: Final = 3
_REPEATED_CODE: Final = 2
_DISTINCT_OTHERS: Final = 5
_DISTINCT_OTHERS_CODE: Final = 3
_CODE_SHARE: Final = 4
_NEIGHBOURS: Final = 3
_SUSPECTS_AT: Final = len(COUNTS)


@compiled
def count_values(x: Values, points: Values, out: Values) -> None:
    """Fill COUNTS and the suspects from sorted values, NaN last.

    Parameters
    ----------
    x : ndarray
        The values, or their ranks where doubles cannot tell them apart.
    points : ndarray
        The value of each rank, to 16 digits; empty where x holds the values themselves.
    out : ndarray
        Prefilled with NULL.
    """
    n = x.size
    while n > 0 and math.isnan(x[n - 1]):
        n -= 1
    n_nan = x.size - n
    exact = x[:n]
    numbers = exact
    if points.size > 0:
        numbers = np.empty(n)
        for i in range(n):
            numbers[i] = points[int(exact[i])]
    start = 0
    while start < n and numbers[start] == -math.inf:
        start += 1
    stop = n
    while stop > start and numbers[stop - 1] == math.inf:
        stop -= 1
    n_negative = _first_above(numbers, 0, n, 0.0, False)
    out[0] = n_nan
    out[1] = start + n - stop
    out[2] = _first_above(numbers, n_negative, n, 0.0, True) - n_negative
    out[3] = n_negative
    distinct, most, most_at = 0, 0, 0
    i = 0
    while i < n:
        end = i + 1
        while end < n and exact[end] == exact[i]:
            end += 1
        distinct += 1
        if end - i > most:
            most, most_at = end - i, i
        i = end
    if n_nan > 0:
        distinct += 1
    out[4] = distinct
    out[5] = math.nan if n_nan > most else exact[most_at]
    out[6] = max(n_nan, most)
    find_suspects(exact[start:stop], numbers[start:stop], out[_SUSPECTS_AT:])


@compiled
def find_suspects(exact: Values, numbers: Values, out: Values) -> None:
    """Write suspects and their counts alternately; `numbers` are finite and ascending.

    Suspects hide one another, so those found are taken away and the search is repeated.
    """
    found = 0
    while 2 * found < out.size:
        n = exact.size
        kept = np.ones(n, dtype=np.bool_)
        distinct = 0
        for i in range(n):
            if i == 0 or exact[i] != exact[i - 1]:
                distinct += 1
        before = found
        i = 0
        while i < n and 2 * found < out.size:
            end = i + 1
            while end < n and exact[end] == exact[i]:
                end += 1
            if is_suspect(numbers, i, end, distinct - 1):
                out[2 * found] = exact[i]
                out[2 * found + 1] = end - i
                found += 1
                kept[i:end] = False
            i = end
        if found == before:
            return
        exact, numbers = exact[kept], numbers[kept]


@compiled
def is_suspect(x: Values, start: int, stop: int, distinct_others: int) -> bool:
    """Whether x[start:stop], all the values equal to one, look like a code among sorted values.

    Judged by the others alone: beyond their far fences, and holding the ground out there
    nearly alone. The rule is given in words in the notes of `value_profile`.
    """
    count = stop - start
    value = x[start]
    code = looks_like_a_code(value)
    if count < (_REPEATED_CODE if code else _REPEATED):
        return False
    if distinct_others < (_DISTINCT_OTHERS_CODE if code else _DISTINCT_OTHERS):
        return False
    if (
        code
        and value < 0.0
        and start == 0
        and x[stop] >= 0.0
        and count >= _REPEATED
        and distinct_others >= _DISTINCT_OTHERS
    ):
        return True
    n = x.size - count
    depth = fourth_depth(n)
    low = _other_at_depth(x, start, count, depth, False)
    high = _other_at_depth(x, start, count, depth, True)
    if low <= value <= high:
        return False
    # Where the fourths coincide, go outwards to eighths, sixteenths, … that do not.
    while low == high and depth > 1.0:
        depth = (math.floor(depth) + 1.0) / 2.0
        low = _other_at_depth(x, start, count, depth, False)
        high = _other_at_depth(x, start, count, depth, True)
    reach = _FAR * distance(high, low)
    if low - reach <= value <= high + reach:
        return False
    middle = _other_at_depth(x, start, count, (n + 1) / 2.0, False)
    halfway = midpoint(middle, value)
    if value > middle:
        out_there = x.size - _first_above(x, 0, x.size, halfway, True)
    else:
        out_there = _first_above(x, 0, x.size, halfway, False)
    others = out_there - count
    if code:
        return _CODE_SHARE * count >= others
    first = _first_above(x, 0, x.size, value - reach, False)
    near = _first_above(x, first, x.size, value + reach, True) - first - count
    return count > others and count >= _NEIGHBOURS * near


@compiled
def looks_like_a_code(value: float) -> bool:
    """−1, −9, a row of nines such as 99, −999 or 99.9, or a limit of a computer's integers."""
    size = abs(value)
    if value == -1.0 or value == -9.0 or size >= 1e30:
        return True
    if size in (32767.0, 32768.0, 65535.0, 2147483647.0, 2147483648.0, 4294967295.0):
        return True
    if size in (9223372036854775808.0, 18446744073709551616.0):
        return True
    for decimals in range(3):
        whole = np.rint(size * 10.0**decimals)
        if whole < 10.0 ** (decimals + 2) - 1.0 or whole > 1e15:
            continue
        # 99.9 kept as a FLOAT is off by 2e-8 of itself.
        if abs(size * 10.0**decimals - whole) <= 1e-7 * whole:
            power = 100.0
            while power < whole:
                power *= 10.0
            if power - 1.0 == whole:
                return True
    return False


@compiled
def longest_run(x: Values, out: Values) -> None:
    """The longest run, from the sorted starts of all runs in one sequence.

    A run that starts at row r is given as 2r, a gap of NULLs as 2r + 1, the end of the sequence
    as the start of one more.
    """
    longest = 0.0
    for i in range(x.size - 1):
        if x[i] % 2.0 == 0.0:
            longest = max(longest, math.floor(x[i + 1] / 2.0) - x[i] / 2.0)
    out[0] = longest


@compiled
def _other_at_depth(x: Values, start: int, count: int, depth: float, from_above: bool) -> float:
    """The value at a depth among the values that are left without x[start:start + count]."""
    n = x.size - count
    low = int(math.floor(depth)) - 1
    high = low if depth == math.floor(depth) else low + 1
    if from_above:
        low, high = n - 1 - high, n - 1 - low
    if low >= start:
        low += count
    if high >= start:
        high += count
    return midpoint(x[low], x[high])


@compiled
def _first_above(x: Values, start: int, stop: int, bound: float, strictly: bool) -> int:
    """The first index of sorted x[start:stop] whose value is at least, or above, the bound."""
    while start < stop:
        middle = (start + stop) // 2
        if x[middle] < bound or (strictly and x[middle] == bound):
            start = middle + 1
        else:
            stop = middle
    return start
