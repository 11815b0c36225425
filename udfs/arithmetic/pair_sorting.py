"""Merge sorts of pairs: one column by another, and the count of inversions."""

from typing import Final

import numpy as np

from midspread.udfs.arithmetic.copying import copy_into
from midspread.udfs.declaring import Values, compiled

_RUN: Final = 16


@compiled
def sort_with(keys: Values, others: Values) -> int:
    """Sort keys in place, others along with them; return the number of inversions.

    An inversion is a pair of places whose keys stand in strictly descending order. Equal keys
    stay in the order they arrive in (Knight 1966: a merge sort counts what it mends).
    """
    n = keys.size
    inversions = 0
    for start in range(0, n, _RUN):
        inversions += _sort_run(keys, others, start, min(start + _RUN, n))
    if n <= _RUN:
        return inversions
    from_keys, from_others = keys, others
    to_keys, to_others = np.empty(n), np.empty(n)
    width = _RUN
    while width < n:
        for start in range(0, n, 2 * width):
            middle = min(start + width, n)
            inversions += _merge(
                from_keys, from_others, to_keys, to_others, start, middle, min(middle + width, n)
            )
        from_keys, to_keys = to_keys, from_keys
        from_others, to_others = to_others, from_others
        width *= 2
    if from_keys is not keys:
        copy_into(keys, from_keys)
        copy_into(others, from_others)
    return inversions


@compiled
def _sort_run(keys: Values, others: Values, start: int, stop: int) -> int:
    """Sort a few places by insertion; every step of a value past another mends an inversion."""
    inversions = 0
    for i in range(start + 1, stop):
        key, other = keys[i], others[i]
        j = i
        while j > start and keys[j - 1] > key:
            keys[j] = keys[j - 1]
            others[j] = others[j - 1]
            j -= 1
        keys[j] = key
        others[j] = other
        inversions += i - j
    return inversions


@compiled
def _merge(
    from_keys: Values,
    from_others: Values,
    to_keys: Values,
    to_others: Values,
    start: int,
    middle: int,
    stop: int,
) -> int:
    """Merge two sorted neighbours into the other arrays."""
    inversions = 0
    left, right = start, middle
    for place in range(start, stop):
        if right >= stop or (left < middle and from_keys[left] <= from_keys[right]):
            to_keys[place] = from_keys[left]
            to_others[place] = from_others[left]
            left += 1
        else:
            to_keys[place] = from_keys[right]
            to_others[place] = from_others[right]
            right += 1
            inversions += middle - left
    return inversions


@compiled
def end_of_tie(x: Values, start: int) -> int:
    """Where the values equal to x[start] end, in sorted values."""
    stop = start + 1
    while stop < x.size and x[stop] == x[start]:
        stop += 1
    return stop


@compiled
def tied_pairs(x: Values) -> int:
    """Number of pairs of equal values among sorted ones."""
    pairs = 0
    start = 0
    while start < x.size:
        stop = end_of_tie(x, start)
        pairs += (stop - start) * (stop - start - 1) // 2
        start = stop
    return pairs


@compiled
def pairs_tied_in_both(y: Values, x: Values) -> int:
    """Number of pairs of equal pairs, where these are sorted by one column, then the other."""
    pairs = 0
    start = 0
    while start < x.size:
        stop = start + 1
        while stop < x.size and x[stop] == x[start] and y[stop] == y[start]:
            stop += 1
        pairs += (stop - start) * (stop - start - 1) // 2
        start = stop
    return pairs
