"""Winsorized standard deviation, and the standard error of a trimmed mean that rests on it."""

import math
from typing import Final

from midspread.udfs.arithmetic.sums import winsorized_sum_of_squares
from midspread.udfs.declaring import NULL, Values, aggregate, compiled
from midspread.udfs.location.trimming import SHARE, cut_from_each_tail

_LARGE: Final = 2.0**400
_SMALL: Final = 2.0**-400
_RESCALING: Final = 2.0**700


@compiled
def winsorized_deviation(x: Values, g: int, divisor: float) -> float:
    """√(Σ (w_i − mean(w))² / divisor), w being x with the g lowest and g highest pulled in."""
    spread = x[x.size - g - 1] - x[g]
    # Squares leave the range of a double long before the values do.
    if spread > _LARGE:
        return math.sqrt(winsorized_sum_of_squares(x / _RESCALING, g) / divisor) * _RESCALING
    if 0.0 < spread < _SMALL:
        return math.sqrt(winsorized_sum_of_squares(x * _RESCALING, g) / divisor) / _RESCALING
    return math.sqrt(winsorized_sum_of_squares(x, g) / divisor)


@aggregate(
    family="scale",
    parameters=(SHARE,),
    formula=(
        "sample standard deviation (n − 1) after the g lowest values become x_(g+1) and the "
        "g highest x_(n−g), g = ⌊share · n⌋; at share 0.5 every value is the median and it is 0"
    ),
    source=(
        "Wilcox 2017, Introduction to Robust Estimation and Hypothesis Testing, 4th ed., "
        "Academic Press"
    ),
    breakdown="share",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="winsorized_sd(dwell_s, 0.1)",
)
def winsorized_sd(x: Values, share: float) -> float:
    """Standard deviation after the values in each tail are pulled in to the nearest kept value.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.
    share : float
        Share pulled in at each end, 0 to 0.5.

    Returns
    -------
    float
        In the unit of x. Smaller than the standard deviation of the data, on purpose.

    References
    ----------
    Wilcox, R. R. (2017). Introduction to Robust Estimation and Hypothesis Testing, 4th ed.
    """
    n = x.size
    if share == 0.5:
        return 0.0
    g = cut_from_each_tail(n, share)
    return winsorized_deviation(x, g, n - 1.0)


@aggregate(
    family="scale",
    parameters=(SHARE,),
    formula="winsorized_sd(x, share) · √((n − 1) / (h (h − 1))), h = n − 2g; NULL for h < 2",
    source="Yuen 1974, Biometrika 61, 165–170; Tukey & McLaughlin 1963",
    breakdown="share",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="trimmed_mean_se(dwell_s, 0.1)",
)
def trimmed_mean_se(x: Values, share: float) -> float:
    """Standard error of the trimmed mean.

    Parameters
    ----------
    x : array of float
        Sorted values of one group; independent observations are assumed.
    share : float
        Share cut from each tail, 0 to 0.5; NULL at 0.5, where it says nothing.

    Returns
    -------
    float
        In the unit of x.

    References
    ----------
    Yuen, K. K. (1974). Biometrika 61, 165–170.
    """
    n = x.size
    g = cut_from_each_tail(n, share)
    h = n - 2 * g
    if share == 0.5 or h < 2:
        return NULL
    # (n − 1) of the standard deviation cancels against the (n − 1) of the factor.
    return winsorized_deviation(x, g, h * (h - 1.0))
