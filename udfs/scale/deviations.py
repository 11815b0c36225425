"""Normal-consistent scales from the middle of the data: MAD and interquartile range."""

from midspread.udfs.arithmetic.order_statistics import (
    NORMAL_QUARTILE,
    distance,
    median_absolute_deviation,
    median_sorted,
    quantile_7,
)
from midspread.udfs.declaring import Values, aggregate


@aggregate(
    family="scale",
    formula="median of abs(x_i − median) / Φ⁻¹(3/4)",
    source="Hampel 1974, J. Amer. Statist. Assoc. 69, 383–393",
    breakdown="0.5",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="mad_scale(dwell_s)",
)
def mad_scale(x: Values) -> float:
    """Median absolute deviation from the median, scaled to the standard deviation of normal data.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x; 0 when more than half of the values are equal.

    References
    ----------
    Hampel, F. R. (1974). J. Amer. Statist. Assoc. 69, 383–393.
    """
    return median_absolute_deviation(x, median_sorted(x)) / NORMAL_QUARTILE


@aggregate(
    family="scale",
    formula="(Q(3/4) − Q(1/4)) / (2 Φ⁻¹(3/4)), Q of Hyndman & Fan's type 7",
    source=(
        "Tukey 1977, Exploratory Data Analysis; quantiles: Hyndman & Fan 1996, "
        "Amer. Statist. 50, 361–365"
    ),
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=1,
    example="iqr_scale(dwell_s)",
)
def iqr_scale(x: Values) -> float:
    """Interquartile range, scaled to the standard deviation of normal data.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        In the unit of x.

    References
    ----------
    Hyndman, R. J. & Fan, Y. (1996). The American Statistician 50, 361–365.
    """
    return distance(quantile_7(x, 0.75), quantile_7(x, 0.25)) / (2 * NORMAL_QUARTILE)
