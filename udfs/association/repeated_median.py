"""The median over the points of each one's median slope to all others."""

from midspread.udfs.arithmetic.order_statistics import midpoint
from midspread.udfs.arithmetic.points import (
    has_infinite,
    median_above_line,
    points_by_x,
    slope_in_units,
)
from midspread.udfs.arithmetic.repeated_selection import ordered_median_slopes
from midspread.udfs.arithmetic.slope_orders import Counts
from midspread.udfs.declaring import Values, aggregate


@aggregate(
    family="association",
    columns=("y", "x"),
    fields=("slope", "intercept"),
    formula="slope: median over i of the median over j with x_j ≠ x_i of "
    "(y_j − y_i) / (x_j − x_i); intercept: median of y − slope · x",
    source="Siegel 1982, Biometrika 69, 242–244; computing after Matoušek, Mount & Netanyahu 1998, "
    "Algorithmica 20, 136–150",
    breakdown="0.5",
    cost="O(n log n) expected time, O(n) memory",
    smallest_n=2,
    example="repeated_median(dwell_s, boardings)",
    linear=False,
    watches=True,
)
def repeated_median(y: Values, x: Values, out: Values, control: Counts) -> None:
    """Line through two columns that holds though nearly half of the rows are wild.

    Parameters
    ----------
    y, x : array of float
        Pairs sorted by y, then x.

    Returns
    -------
    struct
        slope in units of y per unit of x, and intercept in the unit of y; both NULL where all x
        are equal.

    Notes
    -----
    Exact: what forming the slopes of all pairs would give. With many ties in both columns the
    search may slow down to O(n²) time. Infinite values act as values far beyond all others. A
    line that fits is no proof of a cause.

    References
    ----------
    Siegel, A. F. (1982). Robust regression using repeated medians. Biometrika 69, 242–244.
    Matoušek, J., Mount, D. M. & Netanyahu, N. S. (1998). Efficient randomized algorithms for the
    repeated median line estimator. Algorithmica 20, 136–150.
    """
    points_y, points_x, unit = points_by_x(y, x)
    n = x.size
    if points_x[0] == points_x[n - 1]:
        return
    low, high = ordered_median_slopes(points_y, points_x, (n + 1) // 2, n // 2 + 1, control)
    slope = slope_in_units(midpoint(low, high), unit, has_infinite(y), has_infinite(x))
    out[0] = slope
    out[1] = median_above_line(y, x, slope)
