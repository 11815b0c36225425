"""Skewness and tail weight from quantiles."""

from typing import Final

from midspread.udfs.arithmetic.order_statistics import distance, median_sorted, quantile_7
from midspread.udfs.declaring import NULL, Values, aggregate, compiled

_QUANTILES: Final = "Q of Hyndman & Fan's type 7; NULL when the denominator is 0"


@compiled
def quantile_skew(x: Values, prob: float) -> float:
    """(Q(1−p) + Q(p) − 2 Q(1/2)) / (Q(1−p) − Q(p)), written as a difference of two distances."""
    low, high = quantile_7(x, prob), quantile_7(x, 1 - prob)
    if low == high:
        return NULL
    middle = median_sorted(x)
    return (distance(high, middle) - distance(middle, low)) / (high - low)


@aggregate(
    family="shape",
    formula=f"(Q(3/4) + Q(1/4) − 2 Q(1/2)) / (Q(3/4) − Q(1/4)), {_QUANTILES}",
    source="Bowley 1920, Elements of Statistics, 4th ed., King & Son",
    breakdown="0.25",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="bowley_skew(dwell_s)",
)
def bowley_skew(x: Values) -> float:
    """Skewness of the middle half, from −1 to 1; 0 where the quartiles lie evenly.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        Without unit, −1 to 1.

    References
    ----------
    Bowley, A. L. (1920). Elements of Statistics, 4th ed.
    """
    return quantile_skew(x, 0.25)


@aggregate(
    family="shape",
    formula=f"(Q(7/8) + Q(1/8) − 2 Q(1/2)) / (Q(7/8) − Q(1/8)), {_QUANTILES}",
    source="Hinkley 1975, Biometrika 62, 101–111",
    breakdown="0.125",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="octile_skew(dwell_s)",
)
def octile_skew(x: Values) -> float:
    """Skewness between the outer octiles, from −1 to 1; sees farther into the tails than Bowley's.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        Without unit, −1 to 1.

    References
    ----------
    Hinkley, D. V. (1975). Biometrika 62, 101–111.
    """
    return quantile_skew(x, 0.125)


@aggregate(
    family="shape",
    formula=(
        "((Q(7/8) − Q(5/8)) + (Q(3/8) − Q(1/8))) / (Q(6/8) − Q(2/8)), "
        f"{_QUANTILES}; 1.233 on normal data"
    ),
    source="Moors 1988, The Statistician 37, 25–32",
    breakdown="0.125",
    cost="O(n log n) time, O(n) memory",
    smallest_n=2,
    example="moors_kurtosis(dwell_s)",
)
def moors_kurtosis(x: Values) -> float:
    """Weight of the shoulders and tails from octiles; 1.233 on normal data, larger for long tails.

    Parameters
    ----------
    x : array of float
        Sorted values of one group.

    Returns
    -------
    float
        Without unit, 0 or more.

    References
    ----------
    Moors, J. J. A. (1988). The Statistician 37, 25–32.
    """
    width = distance(quantile_7(x, 0.75), quantile_7(x, 0.25))
    if width == 0.0:
        return NULL
    upper = distance(quantile_7(x, 0.875), quantile_7(x, 0.625))
    lower = distance(quantile_7(x, 0.375), quantile_7(x, 0.125))
    return (upper + lower) / width
