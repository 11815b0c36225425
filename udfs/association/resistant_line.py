"""The line through the medians of the outer thirds."""

import math

from midspread.udfs.arithmetic.order_statistics import median_of_sorted, midpoint
from midspread.udfs.arithmetic.pair_sorting import sort_with
from midspread.udfs.arithmetic.points import median_above_line, median_in_place
from midspread.udfs.declaring import NULL, Values, aggregate, compiled


@aggregate(
    family="association",
    columns=("y", "x"),
    fields=("slope", "intercept", "half_slope_ratio"),
    formula="slope (Y_R − Y_L) / (X_R − X_L) of the medians of the left third, x up to the "
    "quantile 1/3, and of the right third, x from the quantile 2/3; intercept: median of "
    "y − slope · x; half_slope_ratio: (Y_R − Y_M) / (X_R − X_M) over (Y_M − Y_L) / (X_M − X_L)",
    source="Tukey 1977, Exploratory Data Analysis; Velleman & Hoaglin 1981, Applications, Basics "
    "and Computing of Exploratory Data Analysis; thirds and the single iteration as R's line()",
    breakdown="about 1/6",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="resistant_line(dwell_s, boardings)",
    linear=False,
)
def resistant_line(y: Values, x: Values, out: Values) -> None:
    """Line through the medians of the left and the right third of the rows.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y.

    Returns
    -------
    struct
        slope in units of y per unit of x, intercept in the unit of y, and half_slope_ratio, the
        slope from the middle third to the right one divided by that from the left to the middle:
        near 1 on a straight line, NULL where a third is empty or a half slope is undefined or 0.
        All are NULL where the outer thirds have the same median x.

    Notes
    -----
    One iteration, as R's line() does unless told otherwise; the residuals may keep a little
    tilt. The quantiles are midway between the two values about (n − 1) / 3 and 2 (n − 1) / 3,
    and rows tied there belong to the outer third, so that thirds may overlap. A ratio far from
    1 calls for re-expressing a column; a negative one for another kind of curve.

    References
    ----------
    Tukey, J. W. (1977). Exploratory Data Analysis. Addison-Wesley.
    Velleman, P. F. & Hoaglin, D. C. (1981). Applications, Basics, and Computing of Exploratory
    Data Analysis. Duxbury Press.
    """
    by_x, along = x.copy(), y.copy()
    sort_with(by_x, along)
    n = x.size
    left_edge = _between_places(by_x, (n - 1) * (1.0 / 3.0))
    right_edge = _between_places(by_x, (n - 1) * (2.0 / 3.0))
    left_stop = 0
    while left_stop < n and by_x[left_stop] <= left_edge:
        left_stop += 1
    right_start = n
    while right_start > 0 and by_x[right_start - 1] >= right_edge:
        right_start -= 1
    left_x = median_of_sorted(by_x, 0, left_stop)
    right_x = median_of_sorted(by_x, right_start, n)
    if left_x == right_x:
        return
    left_y = median_in_place(along[:left_stop].copy())
    right_y = median_in_place(along[right_start:].copy())
    slope = slope_between(left_x, left_y, right_x, right_y)
    out[0] = slope
    out[1] = median_above_line(y, x, slope)
    if left_stop >= right_start:
        return
    middle_x = median_of_sorted(by_x, left_stop, right_start)
    middle_y = median_in_place(along[left_stop:right_start].copy())
    left_slope = slope_between(left_x, left_y, middle_x, middle_y)
    right_slope = slope_between(middle_x, middle_y, right_x, right_y)
    out[2] = NULL if left_slope == 0.0 else right_slope / left_slope


@compiled
def _between_places(x: Values, place: float) -> float:
    """Midway between the values at the places about a fractional one, from 0."""
    return midpoint(x[int(math.floor(place))], x[int(math.ceil(place))])


@compiled
def slope_between(from_x: float, from_y: float, to_x: float, to_y: float) -> float:
    """Slope from one point to another, which lies to its right; huge values halved first."""
    rise = 0.0 if to_y == from_y else to_y - from_y
    run = to_x - from_x
    if math.isinf(rise) or math.isinf(run):
        return (to_y / 2 - from_y / 2) / (to_x / 2 - from_x / 2)
    return rise / run
