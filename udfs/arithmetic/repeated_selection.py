"""Order statistics of each point's median slope to all others, in about O(n log n) a round.

Bounds close in on the answer. At each bound a merge sort counts, for every point, the slopes to
other points that do not exceed it (see `slope_orders`); the counts tell on which side of the
bound the point's median slope lies. The counts at two bounds also foretell where between them
it lies, which picks the points whose own median slopes are the next bounds (after Matoušek,
Mount & Netanyahu 1998, with interpolation in place of sampling). The last few points are looked
at one by one, O(n) each. The bounds decide how long the search takes and never what it finds.
"""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.copying import copy_into
from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_sorting import end_of_tie
from midspread.udfs.arithmetic.quickselect import GOLDEN, put_in_place
from midspread.udfs.arithmetic.slope_orders import (
    Counts,
    flattest_order,
    order_at,
    slope_of,
)
from midspread.udfs.arithmetic.slope_selection import half_step, step_beyond
from midspread.udfs.declaring import Values, compiled

_ONE_BY_ONE: Final = 24
_FIRST_LOOK: Final = 25
_FIRST_MARGIN: Final = 5
_LEAST_MARGIN: Final = 0.01
_ROUNDS: Final = 100
_STOP: Final = 0


@compiled
def ordered_median_slopes(
    y: Values, x: Values, rank: int, last: int, control: Counts
) -> tuple[float, float]:
    """The rank-th and the last-th smallest of the points' median slopes, counted from 1.

    Parameters
    ----------
    y, x : array of float
        Points with abs(y) and abs(x) at most 1, sorted by x, then y, not all of one x.
    rank, last : int
        Ranks, where last is rank or rank + 1.
    control : array of int64
        Watched for a request to stop; the result is then of no use.
    """
    others = _others(x)
    found = _search(y, x, others, rank, last, control)
    if found[2]:
        return found[0], found[1]
    low = _search(y, x, others, rank, rank, control)
    high = _search(y, x, others, last, last, control)
    return low[0], high[0]


@compiled
def _others(x: Values) -> Counts:
    """For each point the number of points of another x."""
    others = np.empty(x.size, np.int64)
    start = 0
    while start < x.size:
        stop = end_of_tie(x, start)
        others[start:stop] = x.size - (stop - start)
        start = stop
    return others


@compiled
def median_slope(y: Values, x: Values, i: int, room: Values) -> float:
    """Median of the slopes from one point to all others of different x."""
    count = 0
    for j in range(x.size):
        if x[j] != x[i]:
            room[count] = slope_of(y, x, i, j)
            count += 1
    slopes = room[:count]
    high = put_in_place(slopes, count // 2)
    if count % 2 == 1:
        return high
    low = slopes[0]
    for j in range(1, count // 2):
        low = max(low, slopes[j])
    return midpoint(low, high)


@compiled
def _search(
    y: Values, x: Values, others: Counts, rank: int, last: int, control: Counts
) -> tuple[float, float, bool]:
    """As `ordered_median_slopes`; False where a bound fell between the two ranks."""
    n = x.size
    room = np.empty(n)
    low, high = -math.inf, math.inf
    low_counts, high_counts, counts = np.zeros(n, np.int64), others.copy(), others.copy()
    low_order, order = flattest_order(n), np.empty(n, np.int32)
    left = np.arange(n)
    before = 0
    tie = False
    shift = 0.5
    for _ in range(_ROUNDS):
        if left.size <= _ONE_BY_ONE or control[_STOP] != 0:
            break
        shift += GOLDEN
        shift -= int(shift >= 1.0)
        if tie or math.isinf(low) or math.isinf(high):
            first, middle, second = _look(y, x, left, rank - before, shift, room)
        else:
            first, second = _foretold(
                y, x, left, low_counts, high_counts, others, rank - before, last - before, room
            )
            middle = first
        tie = tie or first == second
        first = middle if tie else step_beyond(first, -math.inf)
        second = middle if tie else step_beyond(second, math.inf)
        from_below = False
        if low < first < high:
            half = half_step(first, -math.inf) if tie else 0.0
            strictly = tie and half == 0.0
            copy_into(counts, low_counts)
            order_at(y, x, first, half, strictly, low_order, order, counts, control)
            up_to = _up_to(y, x, counts, others, rank, last, first, tie, room, control)
            if up_to < rank:
                low = np.nextafter(first, -math.inf) if tie else first
                copy_into(low_order, order)
                copy_into(low_counts, counts)
                from_below = True
            elif up_to >= last:
                high = first
                copy_into(high_counts, counts)
            else:
                return 0.0, 0.0, False
        if low < second < high:
            half = half_step(second, math.inf) if tie else 0.0
            copy_into(counts, low_counts)
            order_at(y, x, second, half, False, low_order, order, counts, control)
            up_to = _up_to(y, x, counts, others, rank, last, second, False, room, control)
            if up_to < rank:
                low = second
                copy_into(low_order, order)
                copy_into(low_counts, counts)
            elif up_to >= last:
                if tie and from_below:
                    return second, second, True
                high = np.nextafter(second, math.inf) if tie else second
                copy_into(high_counts, counts)
            else:
                return 0.0, 0.0, False
        size = left.size
        left, before = _undecided(left, low_counts, high_counts, others)
        tie = left.size == size
    medians = np.empty(left.size)
    for i in range(left.size):
        if control[_STOP] != 0:
            break
        medians[i] = median_slope(y, x, left[i], room)
    if control[_STOP] != 0:
        return 0.0, 0.0, True
    medians.sort()
    return medians[rank - before - 1], medians[last - before - 1], True


@compiled
def _undecided(
    left: Counts, low_counts: Counts, high_counts: Counts, others: Counts
) -> tuple[Counts, int]:
    """The points whose median slope may lie between the bounds, and how many lie below for sure."""
    before = 0
    for i in range(others.size):
        before += int(low_counts[i] >= others[i] // 2 + 1)
    kept = np.empty(left.size, np.int64)
    count = 0
    for i in left:
        if low_counts[i] < others[i] // 2 + 1 and high_counts[i] >= (others[i] + 1) // 2:
            kept[count] = i
            count += 1
    return kept[:count].copy(), before


@compiled
def _up_to(
    y: Values, x: Values, counts: Counts, others: Counts, rank: int, last: int, bound: float,
    below: bool, room: Values, control: Counts,
) -> int:  # fmt: skip
    """How many points have a median slope up to a bound, or below it.

    Where the bound parts the two middle slopes of a point, that point is looked at by itself,
    unless the others settle the matter.
    """
    surely = possibly = 0
    for i in range(counts.size):
        surely += int(counts[i] >= others[i] // 2 + 1)
        possibly += int(counts[i] >= (others[i] + 1) // 2)
    if possibly < rank:
        return possibly
    if surely >= last:
        return surely
    for i in range(counts.size):
        if (others[i] + 1) // 2 <= counts[i] < others[i] // 2 + 1 and control[_STOP] == 0:
            median = median_slope(y, x, i, room)
            surely += int(median < bound or (median == bound and not below))
    return surely


@compiled
def _look(
    y: Values, x: Values, left: Counts, rank: int, shift: float, room: Values
) -> tuple[float, float, float]:
    """Three median slopes: that of a few points about a rank among them, and to either side."""
    size = min(_FIRST_LOOK, left.size)
    medians = np.empty(size)
    for taken in range(size):
        place = int((taken + shift) * left.size / size)
        medians[taken] = median_slope(y, x, left[min(place, left.size - 1)], room)
    medians.sort()
    middle = int((rank - 0.5) / left.size * size)
    middle = min(max(middle, 0), size - 1)
    return (
        medians[max(middle - _FIRST_MARGIN, 0)],
        medians[middle],
        medians[min(middle + _FIRST_MARGIN, size - 1)],
    )


@compiled
def _foretold(
    y: Values, x: Values, left: Counts, low_counts: Counts, high_counts: Counts, others: Counts,
    rank: int, last: int, room: Values,
) -> tuple[float, float]:  # fmt: skip
    """Median slopes of two points that are expected to lie a little to either side of the ranks."""
    size = left.size
    places = np.empty(size)
    between = 0.0
    for k in range(size):
        i = left[k]
        within = max(high_counts[i] - low_counts[i], 1)
        places[k] = (others[i] / 2 - low_counts[i]) / within
        between += within
    share = min(_LEAST_MARGIN + 1.0 / math.sqrt(between / size), 0.25)
    margin = int(share * size) + 1
    wanted_low = put_in_place(places.copy(), max(rank - 1 - margin, 0))
    wanted_high = put_in_place(places.copy(), min(last - 1 + margin, size - 1))
    low = high = left[0]
    for k in range(size):
        if places[k] == wanted_low:
            low = left[k]
        if places[k] == wanted_high:
            high = left[k]
    first, second = median_slope(y, x, low, room), median_slope(y, x, high, room)
    return min(first, second), max(first, second)
