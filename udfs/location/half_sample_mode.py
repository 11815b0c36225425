"""The half-sample mode."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import distance, midpoint
from midspread.udfs.declaring import Values, aggregate, compiled

_ROUNDING: Final = 4 * 2.220446049250313e-16
"""Widths that differ by less than this part of the values they lie between are equal."""


@aggregate(
    family="location",
    formula="keep the narrowest ceil(n/2) neighbouring values, again and again; the mean of the "
    "last two",
    source="Robertson & Cryer 1974, Journal of the American Statistical Association 69, "
    "1012-1016; Bickel & Fruehwirth 2006, Computational Statistics & Data Analysis 50, 3500-3530",
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="half_sample_mode(dwell_s)",
)
def half_sample_mode(x: Values) -> float:
    """Mode found by closing in on the densest half, then on the densest half of that.

    Parameters
    ----------
    x : array
        Sorted values.

    Returns
    -------
    float
        The mean of the last two values left, or the last one.

    Notes
    -----
    Where several halves are equally narrow the middle one of them is kept; where their number
    is even, the span from the half just below to the half just above the place midway between
    the two middle ones. If three values stand at equal distances the middle one is the answer.
    So mirrored data give the mirrored answer and no side is preferred, whereas a sample of two
    equal clusters gives a point between them. Widths that differ only by rounding are equal.

    Follows the densest part whatever lies far away, but varies much more from sample to sample
    than the median does, and leans on how the values were rounded.

    References
    ----------
    Bickel, D. R. and Fruehwirth, R. (2006). On a fast, robust estimator of the mode:
    comparisons to other robust estimators with applications. Computational Statistics & Data
    Analysis 50, 3500-3530.
    """
    start, stop = 0, x.size
    while stop - start > 2:
        half = (stop - start + 1) // 2
        lower, upper = _narrowest(x, start, stop, half)
        if stop - start == 3 and lower != upper:
            return x[start + 1]
        start, stop = lower, upper + half
    return midpoint(x[start], x[stop - 1])


@compiled
def _narrowest(x: Values, start: int, stop: int, half: int) -> tuple[int, int]:
    """Where the narrowest run of `half` values starts; two neighbouring starts to span both."""
    reach = half - 1
    ends = stop - reach
    smallest = math.inf
    for i in range(start, ends):
        width = distance(x[i], x[i + reach])
        if width < smallest:
            smallest = width
    ties = 0
    first = start
    for i in range(start, ends):
        if _as_narrow(x[i], x[i + reach], smallest):
            if ties == 0:
                first = i
            ties += 1
    if ties == 1:
        return first, first
    below = above = first
    seen = 0
    for i in range(first, ends):
        if _as_narrow(x[i], x[i + reach], smallest):
            if seen == (ties - 1) // 2:
                below = i
            if seen == ties // 2:
                above = i
                break
            seen += 1
    return (below + above) // 2, (below + above + 1) // 2


@compiled
def _as_narrow(low: float, high: float, smallest: float) -> bool:
    """Whether a width equals the smallest one but for rounding."""
    width = distance(low, high)
    if width <= smallest:
        return True
    return width < math.inf and width - smallest <= _ROUNDING * max(abs(low), abs(high))
