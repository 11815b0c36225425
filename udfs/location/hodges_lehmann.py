"""The Hodges-Lehmann estimate of location."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_selection import ordered_sums
from midspread.udfs.declaring import Values, aggregate

_LARGEST_TO_ADD: Final = 8.9e307


@aggregate(
    family="location",
    formula="median of all (x_i + x_j) / 2 with i ≤ j",
    source=(
        "Hodges & Lehmann 1963, Ann. Math. Statist. 34, 598–611; "
        "computing: Monahan 1984, ACM Trans. Math. Software 10, 265–270"
    ),
    breakdown="0.29",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="hodges_lehmann(dwell_s)",
    linear=False,
)
def hodges_lehmann(x: Values) -> float:
    """Median of the means of all pairs of values, each value paired with itself as well.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x; the mean of the two middle pairs where their number is even.

    Notes
    -----
    On skewed data it lies between the median and the mean and estimates neither. Where +Inf
    and −Inf both occur, pairs of the two have no mean and are left out.

    References
    ----------
    Hodges, J. L. & Lehmann, E. L. (1963). Ann. Math. Statist. 34, 598–611.
    Monahan, J. F. (1984). ACM Trans. Math. Software 10, 265–270.
    """
    n = x.size
    low = 0
    while low < n and x[low] == -math.inf:
        low += 1
    stop = n
    while stop > low and x[stop - 1] == math.inf:
        stop -= 1
    finite = stop - low
    inner = finite * (finite + 1) // 2
    lowest = low * (low + 1) // 2 + low * finite
    high = n - stop
    pairs = lowest + inner + high * (high + 1) // 2 + high * finite
    first = (pairs + 1) // 2 - lowest
    last = pairs // 2 + 1 - lowest
    lower = -math.inf if first < 1 else math.inf
    upper = -math.inf if last < 1 else math.inf
    if last >= 1 and first <= inner:
        addends, unit = x[low:stop], 0.5
        if max(abs(x[low]), abs(x[stop - 1])) > _LARGEST_TO_ADD:
            # So that no sum overflows; this costs a bit of numbers below 1e-307, and only here.
            addends, unit = addends / 2, 1.0
        v, w = ordered_sums(addends, max(first, 1), min(last, inner))
        lower = v * unit if first >= 1 else lower
        upper = w * unit if last <= inner else upper
    return midpoint(lower, upper)
