"""Scales from the differences of pairs of values: Qn, Sn and the mean difference."""

import math
from typing import Final

import numpy as np

from midspread.udfs.arithmetic.order_statistics import distance
from midspread.udfs.arithmetic.pair_selection import ordered_differences
from midspread.udfs.arithmetic.quickselect import put_in_place
from midspread.udfs.declaring import Values, aggregate, compiled

# Consistency at the normal distribution and corrections for small samples as in the R package
# robustbase 0.95-0, after Croux & Rousseeuw 1992 (and, for Qn, Maechler's later simulations).
_QN_CONSISTENCY: Final = 2.21914
_QN_SMALL: Final = (
    0.399356,
    0.99365,
    0.51321,
    0.84401,
    0.6122,
    0.85877,
    0.66993,
    0.87344,
    0.72014,
    0.88906,
    0.75743,
)
"""Factors for n = 2 … 12."""
_SN_CONSISTENCY: Final = 1.1926
_SN_SMALL: Final = (0.743, 1.851, 0.954, 1.351, 0.993, 1.198, 1.005, 1.131)
"""Factors for n = 2 … 9."""
_SHRINK: Final = 2.0**-80


@aggregate(
    family="scale",
    formula=(
        "2.21914 · c(n) · k-th smallest of abs(x_i − x_j), i < j, k = h (h − 1)/2, h = ⌊n/2⌋ + 1"
    ),
    source=(
        "Rousseeuw & Croux 1993, J. Amer. Statist. Assoc. 88, 1273–1283; "
        "c(n): Croux & Rousseeuw 1992 as in robustbase 0.95-0"
    ),
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="qn_scale(dwell_s)",
    linear=False,
)
def qn_scale(x: Values) -> float:
    """Qn: about the lower quartile of all pairwise differences, on the scale of the normal sd.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x; 0 when more than half of the values are equal.

    Notes
    -----
    Needs no centre, so it suits skewed data; at the normal distribution 82 % efficient, where
    the MAD has 37 %. Equal infinite values differ by 0, all others from them by Inf.

    References
    ----------
    Rousseeuw, P. J. & Croux, C. (1993). J. Amer. Statist. Assoc. 88, 1273–1283.
    Croux, C. & Rousseeuw, P. J. (1992). In Computational Statistics 1, Physica, 411–428.
    """
    n = x.size
    h = n // 2 + 1
    k = h * (h - 1) // 2
    return _qn_corrected(_QN_CONSISTENCY * _ordered_difference(x, k), n)


@compiled
def _qn_corrected(scale: float, n: int) -> float:
    """Qn corrected for a small sample, n ≥ 2."""
    if n <= 12:
        return scale * _QN_SMALL[n - 2]
    if n % 2 == 1:
        excess = 1.60188 + (-2.1284 - 5.172 / n) / n
    else:
        excess = 3.67561 + (1.9654 + (6.987 - 77 / n) / n) / n
    return scale / (1.0 + excess / n)


@compiled
def _ordered_difference(x: Values, k: int) -> float:
    """The k-th smallest of abs(x_i − x_j), i < j, counted from 1; infinite values allowed."""
    n = x.size
    low = 0
    while low < n and x[low] == -math.inf:
        low += 1
    stop = n
    while stop > low and x[stop - 1] == math.inf:
        stop -= 1
    high = n - stop
    zeros = low * (low - 1) // 2 + high * (high - 1) // 2
    finite = stop - low
    if k <= zeros:
        return 0.0
    if k - zeros > finite * (finite - 1) // 2:
        return math.inf
    inner = x[low:stop]
    return ordered_differences(inner, k - zeros, k - zeros)[0]


@aggregate(
    family="scale",
    formula=(
        "1.1926 · c(n) · low median over i of the high median over j of abs(x_i − x_j): "
        "ranks ⌊(n+1)/2⌋ and ⌊n/2⌋ + 1"
    ),
    source=(
        "Rousseeuw & Croux 1993, J. Amer. Statist. Assoc. 88, 1273–1283; "
        "c(n): Croux & Rousseeuw 1992 as in robustbase 0.95-0"
    ),
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="sn_scale(dwell_s)",
    linear=False,
)
def sn_scale(x: Values) -> float:
    """Sn: how far values typically lie from one another, on the scale of the normal sd.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x; 0 when more than half of the values are equal.

    Notes
    -----
    Needs no centre, so it suits skewed data; at the normal distribution 58 % efficient. Equal
    infinite values differ by 0, all others from them by Inf.

    References
    ----------
    Rousseeuw, P. J. & Croux, C. (1993). J. Amer. Statist. Assoc. 88, 1273–1283.
    Croux, C. & Rousseeuw, P. J. (1992). In Computational Statistics 1, Physica, 411–428.
    """
    n = x.size
    reach = n // 2
    typical = np.empty(n)
    start = 0
    for i in range(n):
        # The reach + 1 values nearest to x[i], itself included, are a window of the sorted
        # values, which only ever moves upwards as i does.
        start = max(start, i - reach)
        while start + reach + 1 < n and distance(x[i], x[start]) > distance(
            x[start + reach + 1], x[i]
        ):
            start += 1
        typical[i] = max(distance(x[i], x[start]), distance(x[start + reach], x[i]))
    scale = _SN_CONSISTENCY * put_in_place(typical, (n + 1) // 2 - 1)
    if n <= 9:
        return _SN_SMALL[n - 2] * scale
    if n % 2 == 1:
        return n / (n - 0.9) * scale
    return scale


@aggregate(
    family="scale",
    formula="mean of abs(x_i − x_j) over all pairs i < j",
    source="Gini 1912, Variabilità e mutabilità; David 1968, Biometrika 55, 573–575",
    breakdown="0",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="gini_mean_difference(dwell_s)",
)
def gini_mean_difference(x: Values) -> float:
    """How far two values drawn at random lie apart on average.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x; 2/√π times the standard deviation on normal data.

    Notes
    -----
    One wild value moves it as far as it likes, though less than it moves the standard
    deviation. Infinite unless all values are finite, or all equal.

    References
    ----------
    David, H. A. (1968). Biometrika 55, 573–575.
    """
    n = x.size
    if x[0] == x[n - 1]:
        return 0.0
    if math.isinf(x[0]) or math.isinf(x[n - 1]):
        return math.inf
    pairs = n * (n - 1) / 2
    total = _weighted_spacing(x, 1.0)
    if math.isinf(total):
        return _weighted_spacing(x, _SHRINK) / pairs / _SHRINK
    return total / pairs


@compiled
def _weighted_spacing(x: Values, unit: float) -> float:
    """Σ (n + 1 − 2i) (x_(n+1−i) − x_(i)) over the lower half, times unit; compensated.

    Equal to the sum of all pairwise differences; no term is negative, so nothing cancels.
    """
    n = x.size
    total = 0.0
    lost = 0.0
    for i in range(n // 2):
        term = (n - 1 - 2 * i) * (x[n - 1 - i] * unit - x[i] * unit)
        raised = total + term
        back = raised - total
        lost += (total - (raised - back)) + (term - back)
        total = raised
    return total + lost if math.isfinite(total) else total
