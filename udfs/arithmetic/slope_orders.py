"""The order of points along a direction, which tells the slopes of all pairs apart.

Points are sorted by what is left of y above a line of slope s, r = y − s · x. Of two points the
one with the larger x has the smaller r exactly where the slope between them exceeds … is below
s; so the pairs that two orders, at s and at a larger t, put in opposite order are those whose
slope lies above s and not above t. Merge sorts count such pairs, or list them, in O(n log n)
(Cole, Salowe, Steiger & Szemerédi 1989; Dillencourt, Mount & Netanyahu 1992).

r is kept as the sum of two doubles, about 106 bits, so that near parallels are told apart.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from midspread.udfs.arithmetic.copying import copy_into
from midspread.udfs.declaring import Values, compiled

Order = npt.NDArray[np.int32]
"""Numbers of points, first to last."""
Counts = npt.NDArray[np.int64]

_STOP: Final = 0
_RUN: Final = 8
_SPLIT: Final = 134217729.0
_SPLITS_UP_TO: Final = 1e290


@compiled
def _height(y: float, x: float, slope: float, more: float) -> tuple[float, float]:
    """y − (slope + more) · x as the sum of two doubles."""
    product = slope * x
    error = 0.0
    if abs(slope) < _SPLITS_UP_TO:
        # The exact error of the product (Dekker 1971); abs(x) is at most 1.
        wide = _SPLIT * slope
        slope_high = wide - (wide - slope)
        slope_low = slope - slope_high
        wide = _SPLIT * x
        x_high = wide - (wide - x)
        x_low = x - x_high
        error = ((slope_high * x_high - product) + slope_high * x_low + slope_low * x_high) + (
            slope_low * x_low
        )
    total = y - product
    back = total - y
    lost = (y - (total - back)) - (product + back)
    lost -= error + more * x
    high = total + lost
    return high, lost - (high - total)


@compiled
def order_at(
    y: Values,
    x: Values,
    slope: float,
    more: float,
    strictly: bool,
    start: Order,
    order: Order,
    counts: Counts,
    control: Counts,
) -> int:
    """Order the points by their height above a line; count the pairs that change places.

    Parameters
    ----------
    y, x : array of float
        The points, with abs(y) and abs(x) at most 1, sorted by x, then y.
    slope, more : float
        The slope of the line is their sum.
    strictly : bool
        Whether a pair whose slope is that of the line counts as steeper than it.
    start : array of int32
        The order to start from: that at a smaller slope.
    order : array of int32
        Takes the result.
    counts : array of int64
        Where it is not empty, in how many changes each point takes part is added to it.
    control : array of int64
        Watched for a request to stop.

    Returns
    -------
    int
        Number of pairs that stand in another order than in start.
    """
    n = x.size
    highs, lows = np.empty(n), np.empty(n)
    for i in range(n):
        highs[i], lows[i] = _height(y[start[i]], x[start[i]], slope, more)
    copy_into(order, start)
    # The changes of each point travel with it, which is faster than to look its cell up each time.
    moves = np.zeros(n if counts.size > 0 else 0, np.int64)
    changes = 0
    for first in range(0, n, _RUN):
        changes += _order_run(x, highs, lows, order, moves, first, min(first + _RUN, n), strictly)
    to_highs, to_lows, to_order = np.empty(n), np.empty(n), np.empty(n, np.int32)
    to_moves = np.empty_like(moves)
    from_order = order
    width = _RUN
    while width < n and control[_STOP] == 0:
        for first in range(0, n, 2 * width):
            middle = min(first + width, n)
            stop = min(middle + width, n)
            changes += _merge_orders(
                x, highs, lows, from_order, moves, to_highs, to_lows, to_order, to_moves,
                first, middle, stop, strictly,
            )  # fmt: skip
        highs, to_highs = to_highs, highs
        lows, to_lows = to_lows, lows
        from_order, to_order = to_order, from_order
        moves, to_moves = to_moves, moves
        width *= 2
    if from_order is not order:
        copy_into(order, from_order)
    for i in range(moves.size):
        counts[order[i]] += moves[i]
    return changes


@compiled
def _goes_first(
    high: float, low: float, x: float, other_high: float, other_low: float, other_x: float,
    strictly: bool,
) -> bool:  # fmt: skip
    """Whether a point goes before another that now stands before it."""
    if high != other_high:
        return high < other_high
    if low != other_low:
        return low < other_low
    return x < other_x if strictly else x > other_x


@compiled
def _order_run(
    x: Values, highs: Values, lows: Values, order: Order, moves: Counts, first: int, stop: int,
    strictly: bool,
) -> int:  # fmt: skip
    changes = 0
    for i in range(first + 1, stop):
        high, low, point = highs[i], lows[i], order[i]
        j = i
        while j > first and _goes_first(
            high, low, x[point], highs[j - 1], lows[j - 1], x[order[j - 1]], strictly
        ):
            highs[j], lows[j], order[j] = highs[j - 1], lows[j - 1], order[j - 1]
            if moves.size > 0:
                moves[j] = moves[j - 1] + 1
            j -= 1
        highs[j], lows[j], order[j] = high, low, point
        changes += i - j
        if moves.size > 0:
            # It is the last of the run so far, and has not moved before.
            moves[j] = i - j
    return changes


@compiled
def _merge_orders(
    x: Values, highs: Values, lows: Values, order: Order, moves: Counts, to_highs: Values,
    to_lows: Values, to_order: Order, to_moves: Counts, first: int, middle: int, stop: int,
    strictly: bool,
) -> int:  # fmt: skip
    changes = 0
    left, right = first, middle
    for place in range(first, stop):
        if left >= middle:
            take_right = True
        elif right >= stop:
            take_right = False
        elif highs[left] != highs[right]:
            take_right = highs[right] < highs[left]
        else:
            take_right = _goes_first(
                highs[right], lows[right], x[order[right]],
                highs[left], lows[left], x[order[left]], strictly,
            )  # fmt: skip
        if take_right:
            taken = right
            passed = middle - left
            changes += passed
            right += 1
        else:
            taken = left
            passed = right - middle
            left += 1
        to_highs[place], to_lows[place], to_order[place] = highs[taken], lows[taken], order[taken]
        if moves.size > 0:
            to_moves[place] = moves[taken] + passed
    return changes


@compiled
def flattest_order(n: int) -> Order:
    """The order below all slopes: that of x itself."""
    return np.arange(n).astype(np.int32)


@compiled
def steepest_order(x: Values) -> Order:
    """The order above all slopes: x from the largest down, points of equal x as they stand."""
    n = x.size
    order = np.empty(n, np.int32)
    place = n
    start = 0
    while start < n:
        stop = start + 1
        while stop < n and x[stop] == x[start]:
            stop += 1
        place -= stop - start
        for i in range(start, stop):
            order[place + i - start] = i
        start = stop
    return order


@compiled
def slope_of(y: Values, x: Values, i: int, j: int) -> float:
    """The slope between two points of different x, kept to finite numbers."""
    slope = (y[j] - y[i]) / (x[j] - x[i])
    # Adding 0.0 turns −0.0 into 0.0.
    return min(max(slope, -1.7976931348623157e308), 1.7976931348623157e308) + 0.0


@compiled
def slopes_between(
    y: Values, x: Values, low_order: Order, high_order: Order, total: int, found: Values,
    shift: float, control: Counts,
) -> None:  # fmt: skip
    """Slopes of pairs that two orders put in opposite order, evenly spread over all of them.

    Parameters
    ----------
    y, x : array of float
        The points.
    low_order, high_order : array of int32
        Orders at two slopes.
    total : int
        How many such pairs there are.
    found : array of float
        Takes the slopes: of every pair when it is as long as their number.
    shift : float
        From 0 to 1: where the even steps start.
    control : array of int64
        Watched for a request to stop.
    """
    n = x.size
    ranks, to_ranks = np.empty(n, np.int32), np.empty(n, np.int32)
    places = np.empty(n, np.int32)
    for i in range(n):
        places[high_order[i]] = i
    for i in range(n):
        ranks[i] = places[low_order[i]]
    step = total / found.size
    if total == found.size:
        shift = 0.0
    seen = 0
    taken = 0
    wanted = int(shift * step)
    width = 1
    while width < n and control[_STOP] == 0:
        for first in range(0, n, 2 * width):
            middle = min(first + width, n)
            stop = min(middle + width, n)
            left, right = first, middle
            for place in range(first, stop):
                if right >= stop or (left < middle and ranks[left] < ranks[right]):
                    to_ranks[place] = ranks[left]
                    left += 1
                    continue
                while wanted < seen + middle - left and taken < found.size:
                    before, after = ranks[left + wanted - seen], ranks[right]
                    found[taken] = slope_of(y, x, high_order[before], high_order[after])
                    taken += 1
                    wanted = int((taken + shift) * step)
                seen += middle - left
                to_ranks[place] = ranks[right]
                right += 1
        ranks, to_ranks = to_ranks, ranks
        width *= 2
    # Rounding of the step may leave the last place without a pair of its own.
    for i in range(taken, found.size):
        found[i] = found[taken - 1] if taken > 0 else math.nan
