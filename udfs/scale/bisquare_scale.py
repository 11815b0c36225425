"""The bisquare scale, root of the biweight midvariance."""

import math
from typing import Final

from midspread.udfs.arithmetic.order_statistics import median_absolute_deviation, median_sorted
from midspread.udfs.arithmetic.running import add
from midspread.udfs.arithmetic.windows import first_above, first_from
from midspread.udfs.declaring import NULL, Parameter, Values, aggregate

_BLOCK: Final = 128
"""So many terms are added plainly before their sum joins a compensated total."""


@aggregate(
    family="scale",
    parameters=(
        Parameter(
            "c",
            default=9,
            low=0.0,
            low_open=True,
            meaning="how many median absolute deviations from the median a value stops counting",
        ),
    ),
    formula="sqrt(n * sum (x - M)^2 (1 - u^2)^4) / abs(sum (1 - u^2) (1 - 5 u^2)) over "
    "abs(u) < 1, u = (x - M) / (c * MAD), M the median, MAD not scaled, n all values",
    source="Mosteller & Tukey 1977, Data Analysis and Regression; Lax 1985, Journal of the "
    "American Statistical Association 80, 736-741",
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="bisquare_scale(dwell_s)",
)
def bisquare_scale(x: Values, c: float) -> float:
    """Spread in the units of the standard deviation, values counting less the farther out.

    Parameters
    ----------
    x : array
        Sorted values.
    c : float
        Where the weight reaches 0, in median absolute deviations: any number above 0. 9 is
        about 6 standard deviations on normal data.

    Returns
    -------
    float
        The scale; NULL where the median absolute deviation is 0, as when more than half of the
        values are equal, and where the denominator of the formula is 0.

    Notes
    -----
    Infinite values lie past c and do no harm but by their number. Where the median absolute
    deviation itself is infinite so is the scale.

    References
    ----------
    Lax, D. A. (1985). Robust estimators of scale: finite-sample performance in long-tailed
    symmetric distributions. Journal of the American Statistical Association 80, 736-741.
    """
    n = x.size
    centre = median_sorted(x)
    unit = c * median_absolute_deviation(x, centre)
    if unit == 0.0:
        return NULL
    if not math.isfinite(unit):
        return unit
    above = above_lost = below = below_lost = 0.0
    low = first_above(x, centre, -unit)
    high = first_from(x, centre, unit)
    for first in range(low, high, _BLOCK):
        squares = weights = 0.0
        for i in range(first, min(first + _BLOCK, high)):
            u = (x[i] - centre) / unit
            square = u * u
            rest = 1.0 - square
            squares += square * ((rest * rest) * (rest * rest))
            weights += rest * (1.0 - 5.0 * square)
        above, above_lost = add(above, above_lost, squares)
        below, below_lost = add(below, below_lost, weights)
    denominator = abs(below + below_lost)
    if denominator == 0.0:
        return NULL
    return unit * math.sqrt(n * (above + above_lost)) / denominator
