"""Exact order statistics of the slopes between all pairs of points, in O(n log n).

The slopes that may still be the answer lie between two bounds whose orders of the points are
known (see `slope_orders`). Of the pairs between them an evenly spread sample is taken; two of
its order statistics are expected to bracket the answer (Floyd & Rivest 1975), exact counts say
what is left, and a round leaves about one pair in √n. The last n or so are written out. The
sample decides how long the search takes and never what it finds.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.copying import copy_into
from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_sorting import tied_pairs
from midspread.udfs.arithmetic.quickselect import GOLDEN, put_in_place
from midspread.udfs.arithmetic.slope_orders import (
    Counts,
    Order,
    flattest_order,
    order_at,
    slope_of,
    slopes_between,
    steepest_order,
)
from midspread.udfs.declaring import Values, compiled

_ALL_PAIRS_UP_TO: Final = 128
_ROOM: Final = 4
_BRACKET: Final = 1.0  # in √(size of the sample)
_NONE: Final = 2.0**-900  # slopes nearer to 0 than this are told from 0 only by their sign
_STEPS: Final = 16
_STOP: Final = 0


@compiled
def ordered_slopes(y: Values, x: Values, ranks: Counts, found: Values, control: Counts) -> None:
    """Slopes at some ranks among those of all pairs with different x.

    Parameters
    ----------
    y, x : array of float
        Points with abs(y) and abs(x) at most 1, sorted by x, then y.
    ranks : array of int64
        Ascending, counted from 1.
    found : array of float
        Takes the slopes.
    control : array of int64
        Watched for a request to stop; the result is then of no use.
    """
    n = x.size
    if n <= _ALL_PAIRS_UP_TO:
        slopes = _all_slopes(y, x)
        for i in range(ranks.size):
            found[i] = put_in_place(slopes, ranks[i] - 1)
        return
    total = n * (n - 1) // 2 - tied_pairs(x)
    low_order, high_order = flattest_order(n), steepest_order(x)
    low, high, up_to_low, up_to_high = _narrow(
        y, x, ranks[0], ranks[ranks.size - 1], -math.inf, math.inf, 0, total,
        low_order, high_order, 0.0, control,
    )  # fmt: skip
    known_from, known_to = 1, 0
    known = np.empty(0)
    for i in range(ranks.size):
        if known_from <= ranks[i] <= known_to:
            found[i] = put_in_place(known, min(ranks[i] - known_from, known.size - 1))
            continue
        known, known_from, known_to = _around(
            y, x, ranks[i], low, high, up_to_low, up_to_high,
            low_order.copy(), high_order.copy(), control,
        )  # fmt: skip
        if control[_STOP] != 0:
            return
        found[i] = put_in_place(known, min(ranks[i] - known_from, known.size - 1))


@compiled
def _all_slopes(y: Values, x: Values) -> Values:
    n = x.size
    slopes = np.empty(n * (n - 1) // 2)
    count = 0
    for i in range(n):
        for j in range(i + 1, n):
            if x[i] != x[j]:
                slopes[count] = slope_of(y, x, i, j)
                count += 1
    return slopes[:count]


@compiled
def _narrow(
    y: Values, x: Values, rank: int, last: int, low: float, high: float,
    up_to_low: int, up_to_high: int, low_order: Order, high_order: Order, shift: float,
    control: Counts,
) -> tuple[float, float, int, int]:  # fmt: skip
    """Bounds that lie closer about the slopes of two ranks; their orders replace those given.

    Returns the bounds and how many slopes each is not exceeded by. Where they cannot be brought
    closer they come back as they were.
    """
    n = x.size
    left = max(up_to_high - up_to_low, 1)
    sample = np.empty(min(n, left))
    slopes_between(y, x, low_order, high_order, left, sample, shift, control)
    if control[_STOP] != 0:
        return low, high, up_to_low, up_to_high
    margin = _BRACKET * math.sqrt(sample.size)
    first = int((rank - up_to_low) / left * sample.size - margin)
    second = int((last - up_to_low) / left * sample.size + margin)
    from_value = put_in_place(sample, max(first, 0))
    to_value = put_in_place(sample, min(second, sample.size - 1))
    below, above = step_beyond(from_value, -math.inf), step_beyond(to_value, math.inf)
    if below <= low and above >= high:
        below = above = midpoint(from_value, to_value)
    order = np.empty(n, np.int32)
    no_counts = np.empty(0, np.int64)
    if low < below < high:
        up_to = up_to_low + order_at(y, x, below, 0.0, False, low_order, order, no_counts, control)
        if up_to < rank:
            low, up_to_low = below, up_to
            copy_into(low_order, order)
        elif up_to >= last:
            high, up_to_high = below, up_to
            copy_into(high_order, order)
    if low < above < high and above != below:
        up_to = up_to_low + order_at(y, x, above, 0.0, False, low_order, order, no_counts, control)
        if up_to < rank:
            low, up_to_low = above, up_to
            copy_into(low_order, order)
        elif up_to >= last:
            high, up_to_high = above, up_to
            copy_into(high_order, order)
    return low, high, up_to_low, up_to_high


@compiled
def half_step(slope: float, towards: float) -> float:
    """Half the way to the next number; 0 about 0, where it would not show."""
    return 0.0 if abs(slope) < 2.0 * _NONE else (np.nextafter(slope, towards) - slope) / 2


@compiled
def step_beyond(slope: float, towards: float) -> float:
    """A little beyond a slope, by more than its computing may have rounded it."""
    if abs(slope) < 2.0 * _NONE:
        return math.copysign(2.0 * _NONE, towards)
    return np.nextafter(np.nextafter(slope, towards), towards)


@compiled
def _around(
    y: Values, x: Values, rank: int, low: float, high: float, up_to_low: int, up_to_high: int,
    low_order: Order, high_order: Order, control: Counts,
) -> tuple[Values, int, int]:  # fmt: skip
    """The slopes about a rank, and the first and the last rank they stand for.

    One slope alone stands for all of these ranks.
    """
    shift = 0.0
    while up_to_high - up_to_low > _ROOM * x.size and control[_STOP] == 0:
        shift += GOLDEN
        shift -= int(shift >= 1.0)
        before, after = low, high
        low, high, up_to_low, up_to_high = _narrow(
            y, x, rank, rank, low, high, up_to_low, up_to_high, low_order, high_order, shift,
            control,
        )  # fmt: skip
        if low == before and high == after and control[_STOP] == 0:
            return _tie(y, x, rank, low_order, high_order, control)
    if control[_STOP] != 0:
        return np.zeros(1), rank, rank
    slopes = np.empty(up_to_high - up_to_low)
    slopes_between(y, x, low_order, high_order, slopes.size, slopes, 0.0, control)
    return slopes, up_to_low + 1, up_to_high


@compiled
def _tie(
    y: Values, x: Values, rank: int, low_order: Order, high_order: Order, control: Counts
) -> tuple[Values, int, int]:
    """The number that the slope at a rank is nearest to, where very many lie about it.

    Slopes such as 1/3 lie beside the number they are rounded to, so the counts are taken half a
    step to either side of it.
    """
    one = np.empty(1)
    slopes_between(y, x, low_order, high_order, 1, one, 0.0, control)
    start = flattest_order(x.size)
    order = np.empty(x.size, np.int32)
    no_counts = np.empty(0, np.int64)
    for _ in range(_STEPS):
        number = one[0]
        up = half_step(number, math.inf)
        down = half_step(number, -math.inf)
        up_to = order_at(y, x, number, up, False, start, order, no_counts, control)
        below = order_at(y, x, number, down, down == 0.0, start, order, no_counts, control)
        if below < rank <= up_to or control[_STOP] != 0:
            return one, below + 1, up_to
        if down == 0.0:
            break
        one[0] = np.nextafter(number, math.inf if up_to < rank else -math.inf)
    return one, rank, rank
