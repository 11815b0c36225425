"""Order statistics of one group's sorted values."""

import math
from typing import Final

from midspread.udfs.declaring import Values, compiled

NORMAL_QUARTILE: Final = 0.6744897501960817
"""Φ⁻¹(3/4), the median absolute deviation of the standard normal."""


@compiled
def midpoint(low: float, high: float) -> float:
    """Halfway between two ordered values, equal infinities and huge values included."""
    if low == high:
        return low
    middle = (low + high) / 2
    if math.isinf(middle) and not math.isinf(low) and not math.isinf(high):
        return low / 2 + high / 2
    return middle


@compiled
def median_of_sorted(x: Values, start: int, stop: int) -> float:
    """Median of x[start:stop], a non-empty slice of sorted values."""
    n = stop - start
    half = start + n // 2
    if n % 2 == 1:
        return x[half]
    return midpoint(x[half - 1], x[half])


@compiled
def median_sorted(x: Values) -> float:
    """Median of sorted values, n ≥ 1."""
    return median_of_sorted(x, 0, x.size)


@compiled
def at_depth(x: Values, depth: float, from_above: bool) -> float:
    """The value at a depth counted from one end; a half depth is midway between its neighbours."""
    whole = int(math.floor(depth))
    low = whole - 1
    high = low if depth == whole else whole
    if from_above:
        return midpoint(x[x.size - 1 - high], x[x.size - 1 - low])
    return midpoint(x[low], x[high])


@compiled
def fourth_depth(n: int) -> float:
    """Depth of the fourths, (⌊(n+1)/2⌋ + 1)/2 (Tukey 1977)."""
    return ((n + 1) // 2 + 1) / 2


@compiled
def lower_fourth(x: Values) -> float:
    """The lower fourth of sorted values, n ≥ 1."""
    return at_depth(x, fourth_depth(x.size), False)


@compiled
def upper_fourth(x: Values) -> float:
    """The upper fourth of sorted values, n ≥ 1."""
    return at_depth(x, fourth_depth(x.size), True)


@compiled
def quantile_7(x: Values, prob: float) -> float:
    """Hyndman & Fan's type 7 quantile of sorted values, n ≥ 1."""
    position = (x.size - 1) * prob
    low = int(math.floor(position))
    part = position - low
    if part == 0.0 or low + 1 >= x.size:
        return x[low]
    return between(x[low], x[low + 1], part)


@compiled
def between(low: float, high: float, part: float) -> float:
    """low + part · (high − low) for 0 < part < 1, infinities and huge values included."""
    if low == high:
        return low
    gap = high - low
    if math.isinf(gap):
        return (1.0 - part) * low + part * high
    return low + part * gap


@compiled
def distance(a: float, b: float) -> float:
    """abs(a − b), 0 for equal infinities."""
    return 0.0 if a == b else abs(a - b)


@compiled
def median_absolute_deviation(x: Values, centre: float) -> float:
    """Median of abs(x − centre) for sorted x, without the factor that makes it a normal scale.

    The distances below and above the centre are two sorted sequences, so the middle ones are
    found by walking inwards from a binary search: O(log n).
    """
    n = x.size
    if n % 2 == 1:
        return nearest_distance(x, centre, n // 2)
    return midpoint(nearest_distance(x, centre, n // 2 - 1), nearest_distance(x, centre, n // 2))


@compiled
def nearest_distance(x: Values, centre: float, k: int) -> float:
    """The k-th smallest (from 0) of abs(x − centre) for sorted x.

    The k + 1 values nearest to the centre are a window of the sorted values; its start is
    found by bisection.
    """
    low, high = 0, x.size - (k + 1)
    while low < high:
        start = (low + high) // 2
        # The window moves up while its lower end is farther away than the value above it;
        # signed, so that a window of ties on one side still moves towards the centre.
        if _signed(centre, x[start]) > _signed(x[start + k + 1], centre):
            low = start + 1
        else:
            high = start
    return max(distance(centre, x[low]), distance(x[low + k], centre))


@compiled
def _signed(a: float, b: float) -> float:
    """a − b, 0 for equal infinities."""
    return 0.0 if a == b else a - b
