"""Points made ready for searching a line: sorted, and on a scale that nothing overflows on."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_sorting import sort_with
from midspread.udfs.arithmetic.quickselect import put_in_place
from midspread.udfs.declaring import Values, compiled

_LARGEST: Final = -100
_INFINITE_X: Final = 2.0**-50
_INFINITE_Y: Final = 1.0
_FLAT: Final = 2.0**-48
_STEEP: Final = 2.0**48


@compiled
def points_by_x(y: Values, x: Values) -> tuple[Values, Values, int]:
    """Points sorted by x, then y, in units that are powers of two; and the unit of a slope.

    The largest finite values become 2^-100 or so. Infinite ones become a fixed number far beyond
    them, y farther than x: a line of one such point and an ordinary one is nearly flat or
    upright, and `slope_in_units` makes it wholly so.

    Parameters
    ----------
    y, x : array of float
        Points sorted by y.

    Returns
    -------
    tuple of array, array, int
        y, x, and the power of two that a slope is to be multiplied by.
    """
    by_x, along = x.copy(), y.copy()
    sort_with(by_x, along)
    unit_y = _rescale(along, _INFINITE_Y)
    unit_x = _rescale(by_x, _INFINITE_X)
    return along, by_x, unit_y - unit_x


@compiled
def _rescale(v: Values, infinite: float) -> int:
    largest = 0.0
    for i in range(v.size):
        if largest < abs(v[i]) < math.inf:
            largest = abs(v[i])
    power = math.frexp(largest)[1] - _LARGEST
    for i in range(v.size):
        if math.isinf(v[i]):
            v[i] = math.copysign(infinite, v[i])
        else:
            v[i] = math.ldexp(v[i], -power)
    return power


@compiled
def slope_in_units(slope: float, unit: int, infinite_y: bool, infinite_x: bool) -> float:
    """A slope between rescaled points as the caller knows it."""
    if infinite_x and abs(slope) < _FLAT:
        return 0.0
    if infinite_y and abs(slope) > _STEEP:
        return math.copysign(math.inf, slope)
    return math.ldexp(slope, unit)


@compiled
def has_infinite(v: Values) -> bool:
    """Whether any value is infinite."""
    for i in range(v.size):  # noqa: SIM110 - numba has no any() over a generator
        if math.isinf(v[i]):
            return True
    return False


@compiled
def median_in_place(v: Values) -> float:
    """Median of unsorted values, which are rearranged; n ≥ 1."""
    half = v.size // 2
    high = put_in_place(v, half)
    if v.size % 2 == 1:
        return high
    low = v[0]
    for i in range(1, half):
        low = max(low, v[i])
    return midpoint(low, high)


@compiled
def median_above_line(y: Values, x: Values, slope: float) -> float:
    """Median of y − slope · x; NaN for a slope that is no number."""
    if not math.isfinite(slope):
        return math.nan
    heights = np.empty(y.size)
    for i in range(y.size):
        height = y[i] if slope == 0.0 else y[i] - slope * x[i]
        heights[i] = y[i] if math.isnan(height) else height
    return median_in_place(heights)
