"""Sample L-moments."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import distance, median_sorted
from midspread.udfs.arithmetic.running import add
from midspread.udfs.arithmetic.sums import compensated_mean
from midspread.udfs.declaring import Values, aggregate

_BLOCK: Final = 64
"""So many pairs are added plainly before their sum joins a compensated total."""


@aggregate(
    family="shape",
    fields=("l1", "l2", "t3", "t4"),
    formula="unbiased sample L-moments l1, l2, l3, l4; t3 = l3 / l2, t4 = l4 / l2",
    source="Hosking 1990, Journal of the Royal Statistical Society B 52, 105-124",
    breakdown="0; l1 is the mean and l2 half the mean difference, but none needs squares",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="l_moments(dwell_s)",
)
def l_moments(x: Values, out: Values) -> None:
    """Mean, spread, skewness and tail weight from linear combinations of the sorted values.

    Parameters
    ----------
    x : array
        Sorted values.
    out : array
        Takes l1 (the mean), l2 (the L-scale, half of Gini's mean difference), t3 (the
        L-skewness, between -1 and 1) and t4 (the L-kurtosis, at most 1). l2 needs 2 values, t3
        needs 3 and t4 needs 4, else they are NULL, as are t3 and t4 where l2 is 0.

    Notes
    -----
    Normal data have t3 = 0 and t4 = 0.1226, uniform data 0 and 0, exponential data 1/3 and 1/6.
    Far values count less than in the classic moments, but they count: one can carry l1 and l2
    anywhere. With infinite values l1 is infinite or NaN, l2 infinite, and t3 and t4 are NaN,
    unless all values are equal.

    References
    ----------
    Hosking, J. R. M. (1990). L-moments: analysis and estimation of distributions using linear
    combinations of order statistics. Journal of the Royal Statistical Society B 52, 105-124.
    """
    n = x.size
    if math.isinf(x[0]) or math.isinf(x[n - 1]):
        out[0] = x[0] + x[n - 1]
        if n > 1:
            out[1] = distance(x[n - 1], x[0])
        if x[0] == x[n - 1]:
            return
        if n > 2:
            out[2] = math.nan
        if n > 3:
            out[3] = math.nan
        return
    out[0] = compensated_mean(x, 0, n)
    if n == 1:
        return

    # The weights are the discrete Legendre polynomials in s = 2i − n − 1, here in v = s/n. They
    # are odd for l2 and l4 and even for l3, so values are taken in pairs from the ends inwards:
    # by difference, or by sum around the median.
    centre = median_sorted(x)
    second = second_lost = third = third_lost = fourth = fourth_lost = 0.0
    even = 1.0 - 1.0 / n / n
    odd = 3.0 - 7.0 / n / n
    pairs = n // 2
    for first in range(0, pairs, _BLOCK):
        a = b = c = 0.0
        for i in range(first, min(first + _BLOCK, pairs)):
            low, high = x[i], x[n - 1 - i]
            v = (n - 1 - 2 * i) / n
            square = v * v
            a += v * (high - low)
            b += (3.0 * square - even) * ((high - centre) + (low - centre))
            c += v * (5.0 * square - odd) * (high - low)
        second, second_lost = add(second, second_lost, a)
        third, third_lost = add(third, third_lost, b)
        fourth, fourth_lost = add(fourth, fourth_lost, c)
    l2 = (second + second_lost) / (n - 1)
    out[1] = l2
    if l2 == 0.0:
        return
    if n > 2:
        t3 = (third + third_lost) * (n / (n - 1)) / (2.0 * (n - 2)) / l2
        out[2] = max(min(t3, 1.0), -1.0)  # rounding must not carry it past its bounds
    if n > 3:
        factor = (n / (n - 1)) * (n / (n - 2))
        out[3] = min((fourth + fourth_lost) * factor / (2.0 * (n - 3)) / l2, 1.0)
