"""The median of the slopes of all pairs of points."""

import math

import numpy as np

from midspread.udfs.arithmetic.normal_quantile import two_sided_quantile
from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.pair_sorting import end_of_tie, tied_pairs
from midspread.udfs.arithmetic.points import (
    has_infinite,
    median_above_line,
    points_by_x,
    slope_in_units,
)
from midspread.udfs.arithmetic.slope_orders import Counts
from midspread.udfs.arithmetic.slope_selection import ordered_slopes
from midspread.udfs.declaring import Parameter, Values, aggregate, compiled


@aggregate(
    family="association",
    columns=("y", "x"),
    parameters=(
        Parameter(
            "confidence",
            "how likely the slope lies within the bounds",
            default=0.95,
            low=0.0,
            low_open=True,
            high=1.0,
            high_open=True,
        ),
    ),
    fields=("slope", "intercept", "lower", "upper"),
    formula="slope: median of (y_j − y_i) / (x_j − x_i) over the N pairs with x_i ≠ x_j; "
    "intercept: median of y − slope · x; bounds: the slopes of rank r = (N − z · √V) / 2, rounded, "
    "from below and from above, V Kendall's variance of C − D with ties in y and x",
    source="Theil 1950, Proc. Kon. Ned. Akad. Wetensch. 53; Sen 1968, J. Amer. Statist. Assoc. 63, "
    "1379–1389",
    breakdown="0.29",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="theil_sen(dwell_s, boardings)",
    linear=False,
    watches=True,
)
def theil_sen(y: Values, x: Values, confidence: float, out: Values, control: Counts) -> None:
    """Line through two columns by the median of the slopes of all pairs of rows.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y, then x.
    confidence : float
        How likely the slope lies within the bounds, between 0 and 1.

    Returns
    -------
    struct
        slope in units of y per unit of x, intercept in the unit of y, and the bounds of the
        slope. All are NULL where all x are equal; the bounds are NULL where there are too few
        pairs for this confidence.

    Notes
    -----
    Exact: the slope that sorting those of all pairs would find, without forming them. The bounds
    take the rows to be independent, and errors to be alike at all x; rows that follow one another
    in time seldom are, and the bounds are then too narrow. Infinite values act as values far
    beyond all others. A line that fits is no proof of a cause.

    References
    ----------
    Theil, H. (1950). A rank-invariant method of linear and polynomial regression analysis.
    Proceedings of the Koninklijke Nederlandse Akademie van Wetenschappen 53.
    Sen, P. K. (1968). Estimates of the regression coefficient based on Kendall's tau. Journal of
    the American Statistical Association 63, 1379–1389.
    """
    points_y, points_x, unit = points_by_x(y, x)
    n = x.size
    pairs = n * (n - 1) // 2 - tied_pairs(points_x)
    if pairs == 0:
        return
    reach = two_sided_quantile(confidence) * math.sqrt(kendall_variance(y, points_x))
    bound = int(round((pairs - reach) / 2))
    bounded = bound >= 1
    middle = (pairs + 1) // 2
    bound = bound if bounded else middle
    ranks = np.array([bound, middle, pairs // 2 + 1, pairs + 1 - bound])
    slopes = np.empty(4)
    ordered_slopes(points_y, points_x, ranks, slopes, control)
    infinite_y, infinite_x = has_infinite(y), has_infinite(x)
    slope = slope_in_units(midpoint(slopes[1], slopes[2]), unit, infinite_y, infinite_x)
    out[0] = slope
    out[1] = median_above_line(y, x, slope)
    if bounded:
        out[2] = slope_in_units(slopes[0], unit, infinite_y, infinite_x)
        out[3] = slope_in_units(slopes[3], unit, infinite_y, infinite_x)


@compiled
def kendall_variance(y: Values, x: Values) -> float:
    """Variance of C − D, concordant less discordant pairs, of unrelated columns, each sorted.

    Kendall 1970, Rank Correlation Methods, with ties in both columns.
    """
    n = float(x.size)
    two_y, three_y, weighted_y = _tie_sums(y)
    two_x, three_x, weighted_x = _tie_sums(x)
    variance = (n * (n - 1) * (2 * n + 5) - weighted_y - weighted_x) / 18
    variance += two_y * two_x / (2 * n * (n - 1))
    if n > 2:
        variance += three_y * three_x / (9 * n * (n - 1) * (n - 2))
    return max(variance, 0.0)


@compiled
def _tie_sums(v: Values) -> tuple[float, float, float]:
    """Over ties of t values: Σ t (t−1), Σ t (t−1) (t−2) and Σ t (t−1) (2t+5)."""
    two = three = weighted = 0.0
    start = 0
    while start < v.size:
        stop = end_of_tie(v, start)
        t = float(stop - start)
        two += t * (t - 1)
        three += t * (t - 1) * (t - 2)
        weighted += t * (t - 1) * (2 * t + 5)
        start = stop
    return two, three, weighted
