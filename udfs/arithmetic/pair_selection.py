"""Exact order statistics of all pairs of one group's values, without forming the pairs.

The table of pairs (see `pair_tables`) is narrowed down round by round. Among the entries that
may still be the answer an evenly spread sample is taken; two of its order statistics are
expected to bracket the answer (Floyd & Rivest 1975); the exact counts of the entries up to each
of them say what is left. A round costs O(n) and leaves about one entry in √n, so that two or
three rounds lead to n entries, which are then written out. The sample decides how long the
search takes and never what it finds.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.copying import copy_into
from midspread.udfs.arithmetic.pair_tables import (
    DIFFERENCES,
    RATIOS,
    SHIFTS,
    SUMS,
    Places,
    count_differences,
    count_ratios,
    count_shifts,
    count_sums,
    entry,
    first_column,
    neighbours,
)
from midspread.udfs.arithmetic.quickselect import GOLDEN, put_in_place
from midspread.udfs.declaring import Values, compiled
from midspread.udfs.drivers import STOP, Indices

_FEW: Final = 64
_ROWS_PER_DRAW: Final = 3
_WORTH_THINNING: Final = 512
_THINNING: Final = 8.0
_THINNED_REACH: Final = 0.7  # entries of the whole table for each row of it, either way
_ROOM_FOR_BRACKET: Final = 2.5  # entries for each row
_BRACKET: Final = 0.7  # in standard deviations of a random sample; an even one strays less
_NEXT_START: Final = 0.7548776662466927  # shifts the sample of the next round


@compiled
def ordered_sums(x: Values, k: int, last: int) -> tuple[float, float]:
    """The k-th and the last-th smallest of x_i + x_j, i ≤ j; ranks count from 1.

    Parameters
    ----------
    x : array of float
        Finite and ascending.
    k, last : int
        Ranks, where last is k or k + 1.

    Returns
    -------
    tuple of float
        Exactly the numbers that sorting all pairs would put at these ranks.

    References
    ----------
    Floyd, R. W. & Rivest, R. L. (1975). Comm. ACM 18, 165–172.
    """
    places, room, left, before = _start(SUMS, x, x)
    rounds = 0
    while left > room.size:
        rounds += 1
        low, high = _bracket(SUMS, x, x, places, room, k - before, left, rounds)
        up_to_low, up_to_high = count_sums(x, low, high, places[2], places[3])
        if _met(SUMS, x, x, places, room, k, last, low, high, up_to_low, up_to_high):
            return room[0], room[1]
        left, before = _narrow(places, k, last, up_to_low, up_to_high, left, before)
    return _finish(SUMS, x, x, places, room, k - before, last - before)


@compiled
def ordered_differences(x: Values, k: int, last: int) -> tuple[float, float]:
    """Do for x_j − x_i, i < j, what `ordered_sums` does for the sums."""
    places, room, left, before = _start(DIFFERENCES, x, x)
    rounds = 0
    while left > room.size:
        rounds += 1
        low, high = _bracket(DIFFERENCES, x, x, places, room, k - before, left, rounds)
        up_to_low, up_to_high = count_differences(x, low, high, places[2], places[3])
        if _met(DIFFERENCES, x, x, places, room, k, last, low, high, up_to_low, up_to_high):
            return room[0], room[1]
        left, before = _narrow(places, k, last, up_to_low, up_to_high, left, before)
    return _finish(DIFFERENCES, x, x, places, room, k - before, last - before)


@compiled
def ordered_ratios(a: Values, b: Values, k: int, last: int) -> tuple[float, float]:
    """Do for b_j / a_i, all i and j, what `ordered_sums` does for the sums; a and b positive."""
    low = high = math.nan
    if min(a.size, b.size) >= _WORTH_THINNING:
        low, high = _bracket_of_thinned(a, b, (k - 0.5) / (a.size * b.size))
    return _ratios_from(a, b, k, last, low, high)


@compiled
def _ratios_from(
    a: Values, b: Values, k: int, last: int, low: float, high: float
) -> tuple[float, float]:
    """Search from a first bracket, NaN for none; the upper end is an entry."""
    places, room, left, before = _start(RATIOS, a, b)
    if not math.isnan(low):
        room = np.empty(int(_ROOM_FOR_BRACKET * max(a.size, b.size)))
    rounds = 0
    while left > room.size:
        rounds += 1
        if rounds > 1 or math.isnan(low):
            low, high = _bracket(RATIOS, a, b, places, room, k - before, left, rounds)
        up_to_low, up_to_high = count_ratios(a, b, low, high, places[2], places[3])
        if _met(RATIOS, a, b, places, room, k, last, low, high, up_to_low, up_to_high):
            return room[0], room[1]
        left, before = _narrow(places, k, last, up_to_low, up_to_high, left, before)
    return _finish(RATIOS, a, b, places, room, k - before, last - before)


@compiled
def _bracket_of_thinned(a: Values, b: Values, share: float) -> tuple[float, float]:
    """Ratios that should enclose the one with this share of all below it, from evenly thinned rows.

    Of n sorted values about √n, evenly spread, have a table that is off by less than one entry in
    n: a first round that does the work of two.
    """
    few_a, few_b = _thinned(a), _thinned(b)
    total = few_a.size * few_b.size
    reach = _THINNED_REACH / max(a.size, b.size)
    lower = min(max(int((share - reach) * total), 1), total)
    upper = min(max(int((share + reach) * total) + 1, 1), total)
    low, _ = _ratios_from(few_a, few_b, lower, lower, math.nan, math.nan)
    high, _ = _ratios_from(few_a, few_b, upper, upper, math.nan, math.nan)
    if low == high:
        return np.nextafter(high, -np.inf), high
    return low, high


@compiled
def _thinned(x: Values) -> Values:
    """Evenly spread values of those given, about _THINNING times their root in number."""
    few = np.empty(int(_THINNING * math.sqrt(x.size)))
    for i in range(few.size):
        few[i] = x[(2 * i + 1) * x.size // (2 * few.size)]
    return few


@compiled
def ordered_shifts(
    a: Values, b: Values, k: int, last: int, control: Indices
) -> tuple[float, float]:
    """Do for b_j − a_i, all i and j, what `ordered_sums` does for the sums.

    Two samples may be the whole of a table: it looks for the request to stop, and then gives NaN.
    """
    places, room, left, before = _start(SHIFTS, a, b)
    rounds = 0
    while left > room.size:
        if control[STOP] != 0:
            return math.nan, math.nan
        rounds += 1
        low, high = _bracket(SHIFTS, a, b, places, room, k - before, left, rounds)
        up_to_low, up_to_high = count_shifts(a, b, low, high, places[2], places[3])
        if _met(SHIFTS, a, b, places, room, k, last, low, high, up_to_low, up_to_high):
            return room[0], room[1]
        left, before = _narrow(places, k, last, up_to_low, up_to_high, left, before)
    return _finish(SHIFTS, a, b, places, room, k - before, last - before)


@compiled
def _start(kind: int, a: Values, b: Values) -> tuple[Places, Values, int, int]:
    """Four staircases, the first two around the whole table; room; entries in and before them."""
    places = np.empty((4, a.size), np.int32)
    left = 0
    for i in range(a.size):
        first = first_column(kind, i)
        places[0, i] = first
        places[1, i] = b.size
        left += b.size - first
    return places, np.empty(max(a.size, b.size) + 2 * _FEW), left, 0


@compiled
def _bracket(
    kind: int, a: Values, b: Values, places: Places, room: Values, k: int, left: int, rounds: int
) -> tuple[float, float]:
    """Two numbers that should enclose the k-th of the entries left: low < k-th ≤ high.

    The upper one is an entry left, so that whatever the counts are fewer entries stay.
    """
    wanted = max(max(a.size, b.size) // _ROWS_PER_DRAW, _FEW // 2)
    drawn = _draw(kind, a, b, places[0], places[1], left, wanted, rounds, room)
    share = (k - 0.5) / left
    reach = _BRACKET * math.sqrt(drawn * share * (1.0 - share)) + 0.5
    lower = max(0, min(drawn - 1, int(share * drawn - reach)))
    upper = max(0, min(drawn - 1, int(share * drawn + reach)))
    low = put_in_place(room[:drawn], lower)
    high = put_in_place(room[lower:drawn], upper - lower)
    if low == high:  # then ask for this very number: between it and its predecessor is no other
        return np.nextafter(high, -np.inf), high
    return low, high


@compiled
def _draw(
    kind: int,
    a: Values,
    b: Values,
    starts: Places,
    ends: Places,
    left: int,
    wanted: int,
    rounds: int,
    sample: Values,
) -> int:
    """Take one entry from each of `wanted` equal stretches of those left; return how many."""
    stretch = left / wanted
    taken = 0
    within = (rounds * _NEXT_START) % 1.0  # the place in its stretch
    target = int(within * stretch)
    passed = 0
    for i in range(a.size):
        start = starts[i]
        up_to_here = passed + ends[i] - start
        while target < up_to_here:
            sample[taken] = entry(kind, a, b, i, start + target - passed)
            taken += 1
            if taken == wanted:
                return taken
            within += GOLDEN
            within -= int(within >= 1.0)
            target = int((taken + within) * stretch)
        passed = up_to_here
    return taken


@compiled
def _met(
    kind: int,
    a: Values,
    b: Values,
    places: Places,
    room: Values,
    k: int,
    last: int,
    low: float,
    high: float,
    up_to_low: int,
    up_to_high: int,
) -> bool:
    """Whether these counts settle the answer; it is then in room[0] and room[1]."""
    if k == up_to_low and last > up_to_low:
        room[0], room[1] = neighbours(kind, a, b, places[2])
        return True
    if k == up_to_high and last > up_to_high:
        room[0], room[1] = neighbours(kind, a, b, places[3])
        return True
    if k > up_to_low and last <= up_to_high and low == np.nextafter(high, -np.inf):
        room[0] = room[1] = high
        return True
    return False


@compiled
def _narrow(
    places: Places, k: int, last: int, up_to_low: int, up_to_high: int, left: int, before: int
) -> tuple[int, int]:
    """Move the staircases around what is left; return how much that is and how much lies before."""
    if last <= up_to_low:
        copy_into(places[1], places[2])
        return up_to_low - before, before
    if k > up_to_high:
        copy_into(places[0], places[3])
        return left + before - up_to_high, up_to_high
    copy_into(places[0], places[2])
    copy_into(places[1], places[3])
    return up_to_high - up_to_low, up_to_low


@compiled
def _finish(
    kind: int, a: Values, b: Values, places: Places, room: Values, k: int, last: int
) -> tuple[float, float]:
    """Write out the entries left and order them as far as needed; ranks among them, from 1."""
    written = 0
    for i in range(a.size):
        start = places[0, i]
        for step in range(places[1, i] - start):
            room[written] = entry(kind, a, b, i, start + step)
            written += 1
    first = put_in_place(room[:written], k - 1)
    if last == k:
        return first, first
    second = room[k]
    for i in range(k + 1, written):
        second = min(second, room[i])
    return first, second
